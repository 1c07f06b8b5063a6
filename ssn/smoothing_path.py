"""Smoothing path: follow the roots of the smoothed equation as eps falls, and end with plain steps at eps = 0.

At each point one plain Newton step at eps = 0 is tried; while plain steps contract they go on, and their point is
taken when they converge. Otherwise the smoothed equation is solved roughly at eps, eps falls by a factor (a smaller
one after a hard point), and so on. The path is guaranteed for monotone-like (P0) maps with bounded level sets; where it
does not work it stops and says so.

Source: B. Chen and P. T. Harker, SIAM J. Matrix Anal. Appl. 14 (1993) 1168-1190; C. Kanzow, SIAM J. Matrix Anal.
Appl. 17 (1996) 851-868 (both from memory), for the smoothed minimum.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from .globalization import FullStep, ResidualSearch
from .newton import Limits, LoopResult, run
from .protocols import FloatArray
from .records import StepRecord
from .status import Outcome


@dataclass(frozen=True)
class SmoothingPath:
    """How eps falls.

    Parameters
    ----------
    factor : float
        eps is multiplied by it after a point.
    point_steps : int
        Newton steps at most at one point.
    contraction : float
        Plain steps go on while each cuts the residual norm to this fraction.
    least : float
        eps at which the path is given up, as a fraction of the first one.
    """

    factor: float = 0.1
    point_steps: int = 12
    contraction: float = 0.3
    least: float = 1e-12


def follow_smoothing(
    equation: Any,
    make_solver: Callable[[Any], Any],
    start: FloatArray,
    limits: Limits,
    path: SmoothingPath,
    callback: Callable[[StepRecord], None] | None,
    first_index: int = 1,
) -> LoopResult:
    """Run the path for an equation with ``smoothed(eps)``; the best plain evaluation is returned."""
    best = equation.evaluate(start)
    result = LoopResult(best, best, Outcome.STALLED, "", start_norm=best.norm, start_accuracy=best.accuracy)
    if not best.finite:
        result.outcome, result.message = Outcome.NOT_FINITE, "the residual at the start is NaN or infinite"
        return result
    plain_solver = make_solver(equation)
    smoothed_solver: Any = None
    x = start
    first = eps = equation.smoothing_scale(best)
    hard = 0

    def left() -> int:
        return limits.max_steps - len(result.steps)

    def stage(
        eq: Any, solver: Any, globalization: Any, at: FloatArray, stage_limits: Limits, name: str
    ) -> LoopResult:
        part = run(
            eq, solver, globalization, at, stage_limits,
            callback=callback, first_index=first_index + len(result.steps), stage=name,
        )  # fmt: skip
        result.steps.extend(part.steps)
        return part

    while True:
        at, previous = x, equation.evaluate(x).norm
        while True:  # plain steps, as long as they contract
            part = stage(
                equation, plain_solver, FullStep(), at, replace(limits, max_steps=min(1, left())), "eps = 0"
            )
            if part.best.accuracy < result.best.accuracy:
                result.best = part.best
            if _ended(part, result, left()):
                return result
            contracted = bool(part.steps) and part.last.norm <= path.contraction * previous
            if not contracted:
                break
            at, previous = part.last.x, part.last.norm
        smoothed = equation.smoothed(eps)
        if smoothed_solver is None:
            smoothed_solver = make_solver(smoothed)
        smoothed_solver.equation = smoothed  # the pattern stays, and with it the symbolic factorisation
        search = ResidualSearch(memory=1).fresh()
        point = Limits(tolerance=0.5, max_steps=min(path.point_steps, left()))
        part = stage(smoothed, smoothed_solver, search, x, point, f"eps = {eps:.1e}")
        if part.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED, Outcome.NOT_FINITE, Outcome.SINGULAR):
            result.outcome, result.message = part.outcome, part.message
            return result
        if left() <= 0:
            result.outcome, result.message = Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken"
            return result
        x = part.last.x
        hard = 0 if part.outcome is Outcome.CONVERGED else hard + 1
        if hard >= 3 or eps < path.least * first:
            result.outcome = Outcome.STALLED
            result.message = f"the smoothing path makes no progress at eps = {eps:.1e}"
            return result
        if hard == 0:
            eps *= path.factor


def _ended(part: LoopResult, result: LoopResult, left: int) -> bool:
    if part.outcome in (Outcome.CONVERGED, Outcome.STOPPED, Outcome.INTERRUPTED):
        result.outcome, result.message, result.last = part.outcome, part.message, part.last
        return True
    if left <= 0:
        result.outcome, result.message = Outcome.STEP_LIMIT, "no steps left"
        return True
    return False
