"""Method of multipliers with semismooth Newton steps, for several nonsmooth terms with linear operators.

Point k minimises the augmented Lagrangian in u (convex, smooth; `AugmentedEquation`) to a falling tolerance, then
replaces the multipliers; the penalty sigma grows while the terms' own error is the larger one. With a proximal term in
u whose weight is small, the iteration is a proximal point method in (u, y) and converges for any f and sigma.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from .equations.augmented import AugmentedEquation
from .globalization import DualSearch
from .newton import Limits, LoopResult, run
from .protocols import FloatArray
from .records import StepRecord
from .status import Outcome


@dataclass(frozen=True)
class MultiplierPath:
    """How the penalty moves.

    Parameters
    ----------
    growth : float
        Factor of sigma after a point whose terms are less accurate than its stationarity.
    largest : float
        sigma at most, as a multiple of the first.
    proximal : float
        Weight of the proximal term relative to the curvature of the augmented Lagrangian.
    max_points, point_steps : int
        Points at most, and Newton steps at most at one of them.
    """

    growth: float = 3.0
    largest: float = 1e8
    proximal: float = 1e-8
    max_points: int = 200
    point_steps: int = 60


@dataclass
class MultiplierResult:
    """The last loop result with the steps of all points, the multipliers, and the two relative errors."""

    loop: LoopResult
    equation: AugmentedEquation
    u: FloatArray
    multipliers: FloatArray
    accuracy: float


def follow_multipliers(
    problem: Any,
    make_solver: Callable[[AugmentedEquation], Any],
    start: FloatArray,
    limits: Limits,
    path: MultiplierPath,
    callback: Callable[[StepRecord], None] | None,
) -> MultiplierResult:
    """Run the path from u = start and zero multipliers."""
    norm = problem.operator_norm()
    curvature = problem.curvature()
    first = sigma = (curvature if curvature > 0 else 1.0) / norm**2
    u, y = start, np.zeros(int(problem.splits[-1]))
    steps: list[StepRecord] = []
    start_norm = float("nan")
    tolerance = 1e-2
    best: MultiplierResult | None = None
    worst_terms = np.inf
    for point in range(1, path.max_points + 1):
        nu = path.proximal * (curvature + sigma * norm**2)
        equation = AugmentedEquation(problem, y, sigma, u, nu)
        left = limits.max_steps - len(steps)
        inner = Limits(
            tolerance=max(tolerance, 0.1 * limits.tolerance), max_steps=min(left, path.point_steps)
        )
        loop = run(
            equation, make_solver(equation), DualSearch(), u, inner,
            callback=callback, first_index=len(steps) + 1, stage=f"point {point}, penalty {sigma:.1e}",
        )  # fmt: skip
        steps = steps + loop.steps
        start_norm = loop.start_norm if point == 1 else start_norm
        loop.steps, loop.start_norm = steps, start_norm
        if loop.best.data is None:
            return best or MultiplierResult(loop, equation, u, y, np.inf)
        u, y = loop.last.x, loop.last.data.multipliers
        stationarity, terms = problem.accuracy_of(u, y)
        accuracy = max(stationarity, terms)
        result = MultiplierResult(loop, equation, u, y, accuracy)
        best = result if best is None or accuracy <= best.accuracy else best
        best.loop.steps, best.loop.start_norm = steps, start_norm
        if loop.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED, Outcome.NOT_FINITE, Outcome.SINGULAR):
            best.loop.outcome, best.loop.message = loop.outcome, loop.message
            return best
        if accuracy <= limits.tolerance:
            loop.outcome, loop.message = Outcome.CONVERGED, ""
            return result
        if len(steps) >= limits.max_steps:
            best.loop.outcome, best.loop.message = Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken"
            return best
        tolerance = min(0.1 * tolerance, 0.1 * accuracy)
        if terms > stationarity and sigma * path.growth <= path.largest * first:
            sigma *= path.growth
        elif sigma * path.growth > path.largest * first and terms > 1e-3 and terms > 0.9 * worst_terms:
            best.loop.outcome = Outcome.INFEASIBLE
            best.loop.message = f"the terms cannot hold together: error {terms:.1e} at penalty {sigma:.1e}"
            return best
        worst_terms = terms
    assert best is not None
    best.loop.outcome, best.loop.message = Outcome.STALLED, f"{path.max_points} points of the path taken"
    return best
