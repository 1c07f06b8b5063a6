"""Path for control problems without a quadratic cost of the control (alpha = 0), ended by the duality gap.

g* has kinks: bang-bang and multi-bang controls, measures. Point k of the path minimises f(u) + g(u) + a_k/2
||u - c||^2, the Moreau-Yosida form of g*, by the dual equation, roughly and from the point before, with a_k falling by
a factor and the centre c at the control before (a proximal point step, which errs less than c = 0). The path is for
the pieces: after each point a few plain Newton steps on the problem itself, a = 0, start from the pieces of the
point (`SettledEquation`). They end the solve where the duality gap is within the tolerance, which happens while a_k is
still moderate; where the active sets do not settle quickly they are given up, and the path goes on.

Source: C. Clason and K. Kunisch, ESAIM COCV 20 (2014) 1-40, for the path; R. T. Rockafellar, SIAM J. Control Optim. 14
(1976) 877-898, for the centre (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .duality import FORGIVEN
from .equations.dual import DualEquation
from .equations.settled import SettledEquation, SettledPoint, SettledSolver
from .errors import StopSolve
from .globalization import FullStep
from .linear import SubspaceSolver
from .newton import Limits, LoopResult, NewtonLoop, run
from .protocols import FloatArray, Globalization
from .proximal_point import POINT_STEPS, operator_size
from .records import Certificate, StepRecord
from .status import Outcome

# point of the path from which on a sparse system is factorised for many coefficients: before, pieces still change
EARLY = 3
# a gap beyond this is no better: both are rounding
ROUNDING = 1e-13


@dataclass(frozen=True)
class GapPath:
    """How the path goes.

    Parameters
    ----------
    first : float
        First weight a as a fraction of ||S||^2.
    factor : float
        Of a from point to point; its square root after a point of more than 15 steps.
    least : float
        Fraction of ||S||^2 below which a does not fall: rounding takes over.
    point_tolerance : float
        Accuracy asked for at the points.
    settling : int
        Plain steps at most after a point.
    max_points : int
    patience : int
        Points in a row that do not halve the gap before the path is given up.
    """

    first: float = 1e-2
    factor: float = 0.1
    least: float = 1e-12
    point_tolerance: float = 1e-1
    settling: int = 6
    max_points: int = 30
    patience: int = 10


@dataclass
class GapResult:
    """The loop result with the steps of all points, its best point one of the equation; and how many points."""

    loop: LoopResult
    equation: SettledEquation
    points: int


def follow_gap(
    problem: Any,
    start: FloatArray | None,
    make_search: Callable[[], Globalization],
    limits: Limits,
    path: GapPath,
    callback: Callable[[StepRecord], None] | None,
) -> GapResult:
    """Run the path from a control, zero within the bounds by default."""
    size = operator_size(problem)
    target = problem.reduced_target()
    centre = problem.cost.prox(np.zeros(problem.unknowns) if start is None else start, 1e-300)
    step = 1.0 / size
    equation = SettledEquation(problem, step)
    solver = SettledSolver(equation)
    at = equation.evaluate(_iterate_of(problem, centre, step))
    result = LoopResult(at, at, Outcome.STEP_LIMIT, "", start_norm=at.norm, start_accuracy=at.accuracy)
    if not at.finite:
        result.outcome, result.message = Outcome.NOT_FINITE, "the residual at the start is NaN or infinite"
        return GapResult(result, equation, 0)
    alpha, x, subspace, point = path.first * size, None, None, 0
    least, tolerance, idle = path.least * size, path.point_tolerance, 0
    while True:
        if result.best.accuracy <= limits.tolerance:
            result.outcome = Outcome.CONVERGED
            break
        left = limits.max_steps - len(result.steps)
        if left <= 0:
            result.message = f"{limits.max_steps} steps taken; {_told(result)}"
            break
        if point >= path.max_points or idle >= path.patience:
            result.outcome = Outcome.INACCURATE
            result.message = f"{_told(result)}; further points of the path do not lower it"
            break
        point += 1
        dual = DualEquation(problem, target, alpha, problem.cost, alpha * centre)
        following = SubspaceSolver(dual)
        if subspace is not None:
            following.carry_over(subspace)
        subspace = following
        part = run(
            dual, subspace, make_search(), dual.start(centre) if x is None else x,
            replace(limits, tolerance=tolerance, max_steps=min(left, POINT_STEPS)),
            callback=callback, first_index=len(result.steps) + 1, stage=f"Moreau-Yosida weight {alpha:.1e}",
        )  # fmt: skip
        result.steps.extend(part.steps)
        if part.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED, Outcome.NOT_FINITE, Outcome.SINGULAR):
            result.outcome, result.message = part.outcome, part.message
            break
        x, centre = part.last.x, part.last.data.corrected
        before = result.best.accuracy
        equation = SettledEquation(problem, 1.0 / alpha)
        solver.equation, solver.sparse_allowed = equation, point >= EARLY
        ended = _settle(equation, solver, part.last.data.v, limits, result, path, callback)
        if ended is not None:
            result.outcome, result.message = ended
            break
        idle = idle + 1 if result.best.accuracy > 0.5 * before else 0
        if part.outcome is not Outcome.CONVERGED:  # rounding: v = c + p/a loses its digits
            alpha /= path.factor
            least = alpha
        else:
            alpha = max(alpha * (float(np.sqrt(path.factor)) if len(part.steps) > 15 else path.factor), least)
        tolerance = max(0.3 * tolerance, 1e-6) if point > 3 else tolerance
    return GapResult(result, SettledEquation(problem, step), point)


def _iterate_of(problem: Any, u: FloatArray, step: float) -> FloatArray:
    """v of a control that is a solution, where the control is the proximal map of v."""
    return u + step * problem.adjoint(problem.reduced_target() - problem.forward(u))


def _told(result: LoopResult) -> str:
    return f"the duality gap is {result.best.accuracy:.1e} of the scale of the objective"


def _settle(
    equation: SettledEquation,
    solver: SettledSolver,
    v: FloatArray,
    limits: Limits,
    result: LoopResult,
    path: GapPath,
    callback: Callable[[StepRecord], None] | None,
) -> tuple[Outcome, str] | None:
    """Plain steps on the problem itself while its active sets settle; the best point and all steps go to `result`.

    They are given up where a step changes more than half as many pieces as the step before (the first: as there are
    coefficients off the kinks). Once the tolerance is met a step that does not halve the gap is the last.
    """
    least = replace(limits, tolerance=min(limits.tolerance, ROUNDING), max_steps=path.settling)
    loop = NewtonLoop(
        equation, solver, FullStep(), v, least,
        first_index=len(result.steps) + 1, stage="active sets of the problem itself",
    )  # fmt: skip
    allowed = solver.size(loop.at)
    ended: tuple[Outcome, str] | None = None
    try:
        while allowed is not None and not loop.finished() and len(result.steps) < limits.max_steps:
            gap = loop.at.accuracy
            record = loop.step()
            if record is None:
                break
            result.steps.append(record)
            if callback is not None:
                callback(record)
            changes = record.piece_changes or 0
            met = min(gap, record.accuracy) <= limits.tolerance
            if changes > max(0.5 * allowed, 2) or (met and record.accuracy > 0.5 * gap):
                break
            if solver.size(loop.at) is None:
                break
            allowed = changes
    except StopSolve as stop:
        ended = Outcome.STOPPED, str(stop)
    except KeyboardInterrupt:
        ended = Outcome.INTERRUPTED, ""
    result.last = loop.at
    if loop.result.best.accuracy < result.best.accuracy:
        result.best = loop.result.best
    return ended


def collect_gap(equation: SettledEquation, result: LoopResult) -> tuple[FloatArray, float, dict[str, Any]]:
    """Control, relative duality gap computed afresh, and the fields of `Solution` at the best point of the path."""
    problem = equation.problem
    if not isinstance(result.best.data, SettledPoint):
        return np.zeros(problem.unknowns), float("inf"), {}
    u = result.best.data.control
    response = problem.response(u)
    misfit = problem.reduced_target() - problem.observe(response)
    adjoint = problem.adjoint_of(misfit)
    p = problem.pull_back(adjoint)
    state = response + problem.offset()
    gap = problem.duality_gap(u, misfit, p)
    error = problem.gradient_error(u, state, adjoint)
    value = problem.cost.value(u, problem.weights)
    rounding = error * problem.controls.norm(u) + FORGIVEN * abs(value)
    bound = max(gap.value, 0.0) + rounding
    v = u + equation.step * p
    return u, gap.relative, {
        "pieces": problem.cost.pieces(v, equation.step),
        "margins": problem.cost.margins(v, equation.step),
        "multipliers": problem.cost.multipliers(u, p),
        "objective": 0.5 * problem.observations.dot(misfit, misfit) + value,
        "certificate": Certificate(
            bound, bound / gap.scale if gap.scale > 0.0 else float(bound > 0.0), "duality gap", rounding, kind="gap"
        ),
        "state": state,
        "adjoint": adjoint,
        "images": (
            problem.observations.dot(misfit, problem.observe(response)),
            problem.controls.dot(p, u),
            problem.controls.norm(p) * problem.controls.norm(u),
        ),
        "rounding": rounding / gap.scale if gap.scale > 0.0 else 0.0,
    }  # fmt: skip
