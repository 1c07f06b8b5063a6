"""Path of primal-dual Newton solves for several terms: gamma falls, and the multipliers found become the centre.

Every point smooths the norms around the multipliers of the point before (`equations/primal_dual.py`) and is solved
roughly; its solution is that of the problem once the centre is right, so gamma stays where errors fall fast, stops
falling where its inverse would only cost digits, and rises again where only such rounding is left in the multipliers.
What ends the path are the optimality errors of the problem itself at gamma = 0, evaluated afresh with multipliers in
their balls.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from .duality_gap import duality_gap
from .equations.primal_dual import PrimalDualEquation
from .globalization import DualSearch
from .linear import PrimalDualSolver
from .newton import Limits, LoopResult, run
from .norm_terms import OTHER, NormRows
from .protocols import FloatArray
from .records import StepRecord
from .status import Outcome


@dataclass(frozen=True)
class PrimalDualPath:
    """How gamma falls.

    Parameters
    ----------
    factor : float
        gamma is multiplied by it after a point; by its square root after one of more than `many` steps.
    least : float
        gamma at least, relative to the first: the Newton matrix grows like its inverse.
    least_other : float
        The same for terms that are neither norms nor quadratics, whose multipliers are differences divided by gamma.
    inner : float
        Accuracy asked for at a point relative to that at its start.
    fast : float
        gamma stays where a point has lowered the errors by this factor.
    many, point_steps : int
        Steps from which on a point counts as hard, and at most at one point.
    near : float
        Accuracy from which on a point is solved to the end where stationarity is what is left.
    closing_steps : int
        At most at a point that is solved to the end, where rounding may not let it get there.
    patience : int
        Points at the least gamma without progress after which the path ends.
    sharp : float
        Relative duality gap from which on a solution within the tolerance is not sharpened further.
    sharpenings : int
        Points at most that are solved only to make the gap, and so the distance bound, smaller.
    max_points : int
    """

    factor: float = 0.1
    least: float = 1e-11
    least_other: float = 1e-4
    inner: float = 0.3
    fast: float = 0.1
    many: int = 8
    point_steps: int = 20
    near: float = 1e-4
    closing_steps: int = 4
    patience: int = 6
    sharp: float = 1e-15
    sharpenings: int = 2
    max_points: int = 100


@dataclass
class PrimalDualResult:
    """The last loop result with the steps of all points, the pair, and the larger of its errors."""

    loop: LoopResult
    equation: PrimalDualEquation
    u: FloatArray
    multipliers: FloatArray
    accuracy: float


def first_gammas(problem: Any) -> list[float]:
    """For each term the gamma at which its smoothed form is as stiff as f: ||K_i||^2 / ||f''||."""
    curvature = problem.curvature()
    if not curvature > 0.0:
        curvature = 1.0
    return [norm**2 / curvature for norm in problem.term_norms()]


def follow_primal_dual(
    problem: Any,
    start: FloatArray,
    limits: Limits,
    path: PrimalDualPath,
    callback: Callable[[StepRecord], None] | None,
) -> PrimalDualResult:
    """Run the path from u = start and zero multipliers."""
    rows = NormRows(problem)
    first = first_gammas(problem)
    floors = [path.least_other if kind == OTHER else path.least for kind in rows.kinds]
    share = 1.0
    y = np.zeros(int(problem.splits[-1]))
    x = np.concatenate([start, y])
    steps: list[StepRecord] = []
    start_norm = float("nan")
    best: PrimalDualResult | None = None
    solver: PrimalDualSolver | None = None
    good: PrimalDualResult | None = None  # within the tolerance, with the smallest gap
    lowest_gap, first_good = np.inf, path.max_points
    accuracy, terms, lowest, stale = np.inf, np.inf, np.inf, 0
    rough_point = False  # whether the last point was solved too roughly for its centre
    for point in range(1, path.max_points + 1):
        gammas = [max(share, floor) * g for g, floor in zip(first, floors, strict=True)]
        equation = PrimalDualEquation(problem, rows, gammas, y)
        if solver is None:
            solver = PrimalDualSolver(equation)
        solver.equation = equation
        at = equation.evaluate(x)
        # where the terms are accurate what is left is stationarity, and that a point solved to the end has
        closing = terms <= limits.tolerance or (rough_point and accuracy < path.near)
        rough = 0.1 * limits.tolerance
        if at.finite and not closing:
            rough = max(path.inner * at.accuracy, rough)
        most = path.closing_steps if closing else path.point_steps
        inner = Limits(tolerance=rough, max_steps=min(limits.max_steps - len(steps), most))
        loop = run(
            equation, solver, DualSearch(), x, inner,
            callback=callback, first_index=len(steps) + 1, stage=f"point {point}, gamma {share * first[0]:.1e}",
        )  # fmt: skip
        taken = len(loop.steps)
        steps = steps + loop.steps
        start_norm = loop.start_norm if point == 1 else start_norm
        loop.steps, loop.start_norm = steps, start_norm
        u = loop.last.x[: problem.unknowns]
        if loop.last.data is None:
            return best or PrimalDualResult(loop, equation, u, y, np.inf)
        y, (stationarity, terms) = _feasible(problem, rows, loop.last)
        accuracy = max(stationarity, terms)
        rough_point = stationarity > 10.0 * terms
        result = PrimalDualResult(loop, equation, u, y, accuracy)
        best = result if best is None or accuracy <= best.accuracy else best
        best.loop.steps, best.loop.start_norm = steps, start_norm
        if (
            good is not None
            and loop.outcome not in (Outcome.STOPPED, Outcome.INTERRUPTED)
            and accuracy > limits.tolerance
        ):
            good.loop.steps = steps
            return good
        if loop.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED, Outcome.NOT_FINITE, Outcome.SINGULAR):
            best.loop.outcome, best.loop.message = loop.outcome, loop.message
            return best
        if accuracy <= limits.tolerance:
            loop.outcome, loop.message = Outcome.CONVERGED, ""
            gap = duality_gap(problem, u, y).relative if problem.strong_convexity > 0.0 else np.inf
            good = result if good is None or gap < lowest_gap else good
            good.loop.steps = steps
            more = path.sharp < gap < 0.1 * lowest_gap and point - first_good < path.sharpenings
            lowest_gap, first_good = min(gap, lowest_gap), min(point, first_good)
            if not more or len(steps) >= limits.max_steps:
                return good
        if len(steps) >= limits.max_steps:
            best.loop.outcome, best.loop.message = Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken"
            return best
        x = np.concatenate([u, y])
        slow = accuracy > path.fast * lowest
        done = terms <= limits.tolerance
        stale = stale + 1 if (done or share <= path.least) and accuracy > 0.9 * lowest else 0
        if stale >= path.patience:
            kind = Outcome.INFEASIBLE if terms > 1e-3 else Outcome.STALLED
            best.loop.outcome = kind
            best.loop.message = (
                f"the terms cannot hold together: error {terms:.1e} at gamma {share * first[0]:.1e}"
                if kind is Outcome.INFEASIBLE
                else f"no more progress: errors {stationarity:.1e} of stationarity, {terms:.1e} of the terms"
            )
            return best
        if slow and done:
            share = min(share / path.factor, 1.0)
        elif slow:
            share = max(share * (path.factor if taken <= path.many else path.factor**0.5), path.least)
        lowest = min(accuracy, lowest)
    assert best is not None
    best.loop.outcome, best.loop.message = Outcome.STALLED, f"{path.max_points} points of the path taken"
    return best


def _feasible(problem: Any, rows: NormRows, at: Any) -> tuple[FloatArray, tuple[float, float]]:
    """Multipliers in their balls, and their errors: those of the iterate projected, or Y(w), whichever is better."""
    u, y = at.x[: problem.unknowns], at.x[problem.unknowns :]
    tried = [rows.into_balls(y), at.data.image]
    errors = [problem.accuracy_of(u, candidate) for candidate in tried]
    k = int(max(errors[1]) < max(errors[0]))
    return tried[k], errors[k]
