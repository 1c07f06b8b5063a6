"""A detour by a larger control weight, where a small one makes the dual search creep.

Where bounds and a small alpha leave most controls at their bounds, the dual function has many kinks close together, and
exact searches along Newton directions take many short steps. The dual variable of a problem with a hundred times the
weight, solved roughly, lies past them. The detour is taken at once where alpha is tiny beside what is known of ||S||^2,
and after a few short steps otherwise. Measured on the sparse elliptic problem, alpha = 1e-6 .. 1e-8: 29 steps at most
in place of 42; where the direct way is short it is not taken.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from .newton import Limits, LoopResult, run
from .protocols import FloatArray, Globalization, LinearSolver
from .records import StepRecord
from .status import Outcome

# the larger weight, and the accuracy asked of its solution
FACTOR, ROUGH = 100.0, 0.1
# steps after which a search that creeps is given up for the detour: the last of them shorter than a quarter
TRIED, SHORT, CREEPING = 10, 0.25, 3
# alpha over ||S||^2 below which the detour comes first
TINY = 1e-4

Callback = Callable[[StepRecord], None]


@dataclass(frozen=True)
class Detour:
    """How to solve with another weight.

    Attributes
    ----------
    make : callable
        ``make(factor)`` returns equation and linear solver of the problem with `factor` times the weight; its iterates
        are those of the problem itself.
    at_once : bool
        Whether to begin with it.
    """

    make: Callable[[float], tuple[Any, LinearSolver]]
    at_once: bool = False


def run_with_detour(
    detour: Detour,
    equation: Any,
    solver: LinearSolver,
    globalization: Globalization,
    start: FloatArray,
    limits: Limits,
    callback: Callback | None,
) -> LoopResult:
    """Run the loop, by way of the larger weight where it helps."""
    steps: list[StepRecord] = []
    first: LoopResult | None = None
    if not detour.at_once:
        first = run(equation, solver, globalization, start, limits, callback=callback, pause=_creeps)
        steps = first.steps
        if first.outcome is not Outcome.STEP_LIMIT or len(steps) >= limits.max_steps:
            return first
    easier, easier_solver = detour.make(FACTOR)
    left = max(limits.max_steps - len(steps), 1)
    rough = run(
        easier, easier_solver, globalization, start,
        replace(limits, tolerance=max(ROUGH, limits.tolerance), max_steps=left), callback=callback,
        first_index=len(steps) + 1, stage=f"control weight {FACTOR:g} times larger",
    )  # fmt: skip
    carry_over = getattr(solver, "carry_over", None)
    if carry_over is not None:
        carry_over(easier_solver)
    first = first if first is not None else replace(rough, steps=[])
    steps = steps + rough.steps
    if rough.outcome in (Outcome.INTERRUPTED, Outcome.STOPPED):
        return replace(rough, steps=steps)
    start = rough.last.x if rough.last.finite else start
    left = limits.max_steps - len(steps)
    if left <= 0:
        last = equation.evaluate(start)
        return LoopResult(
            last, last, Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken", steps, first.start_norm,
            first.start_accuracy,
        )  # fmt: skip
    ended = run(
        equation, solver, globalization, start, replace(limits, max_steps=left), callback=callback,
        first_index=len(steps) + 1,
    )  # fmt: skip
    message = ended.message if ended.outcome is not Outcome.STEP_LIMIT else f"{limits.max_steps} steps taken"
    return replace(
        ended,
        steps=steps + ended.steps,
        start_norm=first.start_norm,
        start_accuracy=first.start_accuracy,
        message=message,
    )


def _creeps(result: LoopResult) -> bool:
    """Whether the last steps of the first few were short and the solution is still far."""
    recent = result.steps[-CREEPING:]
    return (
        len(result.steps) == TRIED
        and result.last.accuracy > ROUGH
        and all(step.length < SHORT for step in recent)
    )
