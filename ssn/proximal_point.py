"""Proximal point path for tracking problems without a quadratic cost of the control (alpha = 0).

Step k minimises f(u) + g(u) + a_k/2 ||u - u_k||^2 by the dual equation, warm-started, with a_k falling by a factor.
Stops when the natural residual with step 1/a_k is within the tolerance, which ||u_{k+1} - u_k|| bounds.

Source: R. T. Rockafellar, SIAM J. Control Optim. 14 (1976) 877-898; with semismooth Newton steps inside:
X. Li, D. Sun, K.-C. Toh, SIAM J. Optim. 28 (2018) 433-458 (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .equations.dual import DualEquation
from .inner import relative
from .newton import Limits, LoopResult, run
from .protocols import FloatArray, Globalization
from .records import StepRecord
from .status import Outcome

# relative error of S*(S u - z), with room for the condition of the state operator
ROUNDING = 1e-13


# Newton steps at most at one point: a hard point is given up and taken up again with a larger parameter
POINT_STEPS = 40


@dataclass(frozen=True)
class ProximalPointPath:
    """First parameter as a fraction of ||S||^2, factor, and how many points at most.

    A parameter so small that v = (h - S* q)/a would lose the digits that the tolerance asks for is not taken; the path
    then goes on with the last one.
    """

    first: float = 1e-2
    factor: float = 0.1
    max_points: int = 200

    def next_factor(self, steps: int) -> float:
        """The change of a after a point that took so many Newton steps: fall when easy, rise when hard."""
        if steps <= 8:
            return self.factor
        return (
            float(np.sqrt(self.factor))
            if steps <= 15
            else 1.0
            if steps <= 25
            else 1.0 / float(np.sqrt(self.factor))
        )


@dataclass
class PathResult:
    """The last loop result with the steps of all points, and the final control."""

    loop: LoopResult
    equation: DualEquation
    control: FloatArray
    points: int


def follow(
    make_equation: Callable[[float, FloatArray], DualEquation],
    make_solver: Callable[[DualEquation, Any], Any],
    globalization: Callable[[], Globalization],
    start: FloatArray,
    size: float,
    limits: Limits,
    path: ProximalPointPath,
    callback: Callable[[StepRecord], None] | None,
    finish: Callable[[FloatArray, int, int, float], LoopResult | None] | None = None,
) -> PathResult:
    """Run the path from the control `start`; `size` is ||S||^2.

    After every point ``finish(control, first_index, steps_left, change)``, with the relative change by the point, may
    try to end the solve by plain Newton steps on the natural residual; its result is taken where it converged.
    """
    alpha = path.first * size
    control = start
    solver = None
    steps: list[StepRecord] = []
    start_norm = start_accuracy = float("nan")
    x: FloatArray | None = None
    inner_tolerance = 1e-2
    for point in range(1, path.max_points + 1):
        equation = make_equation(alpha, alpha * control)
        solver = make_solver(equation, solver)
        if x is None:
            x = equation.start(control)
        left = max(limits.max_steps - len(steps), 1)
        inner = replace(
            limits,
            tolerance=max(inner_tolerance, 0.1 * limits.tolerance),
            max_steps=min(left, POINT_STEPS),
            settled=True,
        )
        loop = run(
            equation, solver, globalization(), x, inner,
            callback=callback, first_index=len(steps) + 1, stage=f"proximal weight {alpha:.1e}",
        )  # fmt: skip
        if point == 1:
            start_norm, start_accuracy = loop.start_norm, loop.start_accuracy
        taken = len(steps)
        steps.extend(loop.steps)
        new = loop.last.data.corrected if loop.last.data is not None else control
        controls = equation.tracking.controls
        change = relative(controls.norm(new - control), controls.norm(new))
        x, control = loop.last.x, new
        loop.steps, loop.start_norm, loop.start_accuracy = steps, start_norm, start_accuracy
        inner_limited = max(inner_tolerance, loop.last.accuracy) > 0.1 * limits.tolerance
        if loop.outcome not in (Outcome.CONVERGED, Outcome.STALLED, Outcome.STEP_LIMIT):
            break
        if finish is not None:
            ended = finish(control, len(steps) + 1, limits.max_steps - len(steps), change)
            if ended is not None:
                ended.steps = steps + ended.steps
                ended.start_norm, ended.start_accuracy = start_norm, start_accuracy
                return PathResult(ended, equation, ended.best.data.moved, point)
        if change <= limits.tolerance and not inner_limited and loop.outcome is Outcome.CONVERGED:
            loop.outcome = Outcome.CONVERGED
            break
        if len(steps) >= limits.max_steps:
            loop.outcome, loop.message = Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken"
            break
        inner_tolerance = min(0.1 * inner_tolerance, 0.1 * change)
        data_size = np.sqrt(size) * equation.tracking.observations.norm(equation.target)
        floor = ROUNDING * data_size / (limits.tolerance * max(controls.norm(control), 1e-300))
        if loop.outcome is Outcome.STALLED:  # rounding hides more the smaller a is: no smaller one
            floor = max(floor, alpha)
        alpha = max(alpha * path.next_factor(len(steps) - taken), min(alpha, floor))
        loop.outcome, loop.message = Outcome.STEP_LIMIT, f"{point} points of the proximal path taken"
    return PathResult(loop, equation, control, point)


def operator_size(tracking: Any) -> float:
    """||S||^2 by ten power steps; a scale for the path, not a bound."""
    x = np.cos(np.arange(tracking.controls.size) * 0.7) + 1.5
    size = 0.0
    for _ in range(10):
        norm = tracking.controls.norm(x)
        if norm == 0.0 or not np.isfinite(norm):
            break
        x = tracking.adjoint(tracking.forward(x / norm))
        size = tracking.controls.norm(x)
    return size if size > 0.0 and np.isfinite(size) else 1.0
