"""The front door: from a problem statement to an equation, a linear solver and a globalisation, and back."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from .augmented_lagrangian import follow_multipliers
from .easier_weight import run_with_detour
from .envelope_start import run_envelope_start
from .equations.dual import DualEquation
from .equations.natural import NaturalEquation, NaturalPoint
from .errors import InputError, SolveInterrupted
from .finish import finish, finish_sum
from .gap_path import GapPath, follow_gap
from .globalization import EnvelopeSearch, FullStep, ResidualSearch
from .linear import ReducedSolver, SubspaceSolver
from .linear.reduced import ROUNDS
from .moreau_yosida import first_penalty, follow_penalty
from .newton import Limits, LoopResult, run
from .prepare import Plan, prepare
from .primal_dual_path import follow_primal_dual
from .protocols import Evaluation, FloatArray, Globalization
from .proximal_point import ProximalPointPath, follow, operator_size
from .records import StepRecord
from .smoothing_path import SmoothingPath, follow_smoothing
from .solution import Solution
from .status import Outcome
from .validate import count, scalar

__all__ = ["Plan", "prepare", "solve"]

Callback = Callable[[StepRecord], None]

# plain Newton steps on the natural residual that end a proximal point path
POLISH_STEPS = 6
# relative change by a proximal point below which plain steps are tried on a singular system, too
AT_REST = 1e-6
# of the tolerance: what a last exact step is taken for
LAST_DIGITS = 1e-4
# continuations at most while the accuracy computed afresh is worse than the iteration's own figure
CONFIRMATIONS = 3

# outcomes after which no other globalisation is tried
SETTLED = (Outcome.CONVERGED, Outcome.STOPPED, Outcome.INTERRUPTED, Outcome.NOT_FINITE, Outcome.UNBOUNDED)


def solve(
    problem: Any,
    start: Any = None,
    *,
    tolerance: float = 1e-9,
    max_steps: int = 100,
    globalization: str | Globalization = "auto",
    linear: str = "auto",
    callback: Callback | None = None,
    progress: bool = False,
) -> Solution:
    """Solve a nonsmooth problem or equation by semismooth Newton steps.

    Parameters
    ----------
    problem : a statement, function, or object with the Equation protocol
        ControlProblem, NonlinearControlProblem, CompositeProblem, ComplementarityProblem, SumProblem.
        A plain function of NumPy arrays (or of a tuple or dict of arrays, like `start`) is traced: its Newton
        derivative and active sets follow from its operations.
    start : array, optional
        Start of the unknown (a control for control problems, or a pair (state, adjoint) as a tuple); by default zero,
        projected onto the bounds. It is not changed.
    tolerance : float
        Relative accuracy of the unknown: ||u - prox(...)|| / ||u|| in the problem's norm (see the `accuracy` method of
        each problem); for an Equation the root mean square of F / scale; for a control problem with control_weight 0
        the duality gap relative to the scale of the objective, where the conjugate of the cost is known; for a
        SumProblem the larger of its two optimality errors, see `SumProblem.accuracy_of`.
    max_steps : int
        Newton steps at most, over a whole path.
    globalization : {"auto", "full", "dual", "residual", "envelope", "smoothing"} or a Globalization
        "auto": dual search where the problem has a dual equation, a search on the objective where the state is
        nonlinear, envelope search for other composite problems, residual search and smoothing path for complementarity,
        dual search along a path of multipliers for several terms, residual search otherwise. What was decided, and
        why, stands in ``Solution.choices``.
    linear : {"auto", "subspace", "coupled", "schur", "reduced", "general", "full space", "augmented", "primal-dual"}
        How Newton systems are solved; only those that fit the problem are accepted beside "auto". Control problems with
        explicit operators have three: "subspace" factorises the state operator and keeps a basis, "coupled" (symmetric
        E) is multigrid on state and adjoint, "schur" factorises once an active set.
    callback : callable, optional
        Gets each `StepRecord`; may raise `StopSolve`.
    progress : bool
        Print one line a step to standard error.

    Returns
    -------
    Solution
        Also where the solve fails: then with `converged` False, the best iterate, an outcome and the history.

    Raises
    ------
    InputError
        For unusable input, at once.
    SolveInterrupted
        On Ctrl-C, with the best iterate attached.
    """
    limits = Limits(
        tolerance=scalar(tolerance, "tolerance", positive=True),
        max_steps=count(max_steps, "max_steps", least=0),
    )
    if callback is not None and not callable(callback):
        raise InputError(f"callback must be callable, got {type(callback).__name__}")
    observer = _with_progress(callback) if progress else callback
    before = problem.work.copy() if hasattr(problem, "work") else None
    plan = prepare(problem, start, globalization=globalization, linear=linear)
    if isinstance(plan.globalization, FullStep):
        limits = Limits(limits.tolerance, limits.max_steps, exact=True)
    if plan.multipliers is not None:
        path = follow_multipliers(
            plan.problem, type(plan.solver), plan.start, limits, plan.multipliers, observer
        )
        solution = finish_sum(plan, path, limits, before)
    elif isinstance(plan.path, GapPath):
        solution = _run_gap_path(plan, limits, observer, before)
    elif plan.primal_dual is not None:
        start_control = plan.start[: plan.problem.unknowns]
        pair = follow_primal_dual(plan.problem, start_control, limits, plan.primal_dual, observer)
        solution = finish_sum(plan, pair, limits, before)
    elif plan.path is not None:
        solution = _run_path(plan, limits, observer, before)
    elif plan.relaxation is not None:
        solution = _run_relaxed(plan, limits, observer, before)
    elif plan.penalty is not None:
        solution = _run_penalty(plan, limits, observer, before)
    else:
        solution = _run_until_confirmed(plan, limits, observer, before)
        left = limits.max_steps - len(solution.steps)
        if plan.otherwise is not None and solution.outcome not in SETTLED and left > 0:
            solution = _run_otherwise(plan, solution, replace(limits, max_steps=left), observer, before)
    if solution.outcome is Outcome.INTERRUPTED:
        raise SolveInterrupted("solve interrupted; the best iterate is attached as .solution", solution)
    return solution


def _run_otherwise(
    plan: Plan, first: Solution, limits: Limits, callback: Callback | None, before: Any
) -> Solution:
    """Go on from the best point of a failed solve with the plan kept for that case."""
    assert plan.otherwise is not None
    other = plan.otherwise(first.x)
    other.choices["linear"] += f"; taken after {plan.solver.name}: {first.outcome.value}, {first.message}"
    solution = _run_until_confirmed(other, limits, callback, before)
    return replace(solution, steps=first.steps + solution.steps, start_norm=first.start_norm)


def _run_until_confirmed(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    """Iterate; go on with a tighter inner tolerance while the accuracy at the returned point is not confirmed."""
    if plan.smoothing is not None:
        result = _run_smoothing(plan, limits, callback)
    elif plan.plain_steps:
        result = _run_plain_first(plan, limits, callback)
    elif plan.detour is not None and plan.globalization.name == "dual":
        result = run_with_detour(
            plan.detour, plan.equation, plan.solver, plan.globalization, plan.start, limits, callback
        )
    else:
        result = run(plan.equation, plan.solver, plan.globalization, plan.start, limits, callback=callback)
    if (
        result.outcome is Outcome.STALLED
        and isinstance(plan.equation, DualEquation)
        and result.best.data is not None
    ):
        # the pair [q, S* q] has drifted apart by rounding: bring it together at the best control and go on
        again = run(
            plan.equation, plan.solver, plan.globalization, plan.equation.start(result.best.data.corrected),
            replace(limits, max_steps=limits.max_steps - len(result.steps)),
            callback=callback, first_index=len(result.steps) + 1, stage="dual pair recomputed",
        )  # fmt: skip
        result = _joined(result, again)
    solution = finish(plan, result, limits, before)
    inner = limits
    for _ in range(CONFIRMATIONS):
        # where the accuracy is met and something else is in doubt, further steps do not help
        if solution.outcome is not Outcome.INACCURATE or not limits.tolerance < solution.accuracy < np.inf:
            break
        left = limits.max_steps - len(result.steps)
        result.best = _at_scale(plan.equation, result.best)
        inner = replace(
            inner, tolerance=0.1 * inner.tolerance * limits.tolerance / solution.accuracy, max_steps=left
        )
        more = run(
            plan.equation, plan.solver, plan.globalization, result.best.x, inner,
            callback=callback, first_index=len(result.steps) + 1,
        )  # fmt: skip
        if not more.steps and more.outcome is not Outcome.INTERRUPTED:
            break
        more.steps, more.start_norm = result.steps + more.steps, result.start_norm
        if more.outcome in (Outcome.STALLED, Outcome.STEP_LIMIT):
            more.outcome = Outcome.CONVERGED  # by the iteration's own figure; confirmed or not just below
        result = more
        solution = finish(plan, result, limits, before)
    return solution


def _run_smoothing(plan: Plan, limits: Limits, callback: Callback | None) -> LoopResult:
    """The smoothing path, then the plain search from its best point."""
    assert plan.smoothing is not None
    result = follow_smoothing(plan.equation, type(plan.solver), plan.start, limits, plan.smoothing, callback)
    left = limits.max_steps - len(result.steps)
    if result.outcome in SETTLED or left <= 0:
        return result
    result.best = _at_scale(plan.equation, result.best)
    ended = run(
        plan.equation, plan.solver, plan.globalization, result.best.x, replace(limits, max_steps=left),
        callback=callback, first_index=len(result.steps) + 1, stage="search from the best point",
    )  # fmt: skip
    return _joined(result, ended)


def _at_scale(equation: Any, at: Evaluation) -> Evaluation:
    """The evaluation with the equation scaled anew at its point, where the equation can."""
    rescale = getattr(equation, "rescale", None)
    return equation.evaluate(at.x) if rescale is not None and rescale(at.x) else at


def _run_plain_first(plan: Plan, limits: Limits, callback: Callback | None) -> LoopResult:
    """A few full steps, which settle most piecewise smooth equations; then the smoothing path where there is one;
    then the search from the best point.
    """
    first = min(plan.plain_steps, max(1, limits.max_steps // 2))
    result = run(
        plan.equation, plan.solver, FullStep(), plan.start, replace(limits, max_steps=first),
        callback=callback, stage="plain steps",
    )  # fmt: skip
    ended = (Outcome.CONVERGED, Outcome.STOPPED, Outcome.INTERRUPTED)
    left = limits.max_steps - len(result.steps)
    if result.outcome in ended or left <= 0 or not result.best.finite:
        return result
    if getattr(plan.equation, "can_be_smoothed", False) and result.last.pieces:
        path = follow_smoothing(
            plan.equation, type(plan.solver), plan.start, replace(limits, max_steps=max(1, left // 2)), SmoothingPath(),
            callback, first_index=len(result.steps) + 1,
        )  # fmt: skip
        result = _joined(result, path)
        left = limits.max_steps - len(result.steps)
        if result.outcome in ended or left <= 0:
            return result
    search = run(
        plan.equation, plan.solver, plan.globalization, result.best.x, replace(limits, max_steps=left),
        callback=callback, first_index=len(result.steps) + 1, stage="search from the best point",
    )  # fmt: skip
    return _joined(result, search)


def _joined(first: LoopResult, then: LoopResult) -> LoopResult:
    """The second result with the steps and start of the first, and the better of both points."""
    best = first.best if first.best.accuracy < then.best.accuracy else then.best
    return replace(
        then,
        best=best,
        steps=first.steps + then.steps,
        start_norm=first.start_norm,
        start_accuracy=first.start_accuracy,
    )


def _run_path(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    assert isinstance(plan.path, ProximalPointPath)
    base: DualEquation = plan.equation

    def make_equation(alpha: float, linear: FloatArray) -> DualEquation:
        return DualEquation(base.tracking, base.target, alpha, base.cost, linear)

    def make_solver(equation: DualEquation, previous: Any) -> SubspaceSolver:
        solver = SubspaceSolver(equation)
        if previous is not None:
            solver.carry_over(previous)
        return solver

    natural = plan.polish

    def end_plainly(control: FloatArray, first_index: int, left: int, change: float) -> LoopResult | None:
        assert natural is not None
        if change > AT_REST and _too_many_free(natural, control, base.size):
            return None
        short = Limits(limits.tolerance, min(left, POLISH_STEPS))
        solver = ReducedSolver(natural, max_inner=min(2000, ROUNDS * base.size + 20))
        ended = run(
            natural, solver, EnvelopeSearch(), control, short,
            callback=callback, first_index=first_index, stage="natural residual",
        )  # fmt: skip
        if ended.outcome is Outcome.CONVERGED and natural.piecewise_affine and left > len(ended.steps):
            ended = _one_more(natural, ended, limits, callback, first_index)
            near = ended.outcome is Outcome.CONVERGED and ended.best.accuracy > LAST_DIGITS * limits.tolerance
            if near and _too_many_free(natural, ended.best.x, base.size):
                return None  # not solved, only near: the residual is short where the step is
        return ended if ended.outcome in (Outcome.CONVERGED, Outcome.STOPPED, Outcome.INTERRUPTED) else None

    kind = type(plan.globalization)
    size = operator_size(base.tracking)
    result = follow(
        make_equation,
        make_solver,
        kind,
        plan.start,
        size,
        limits,
        plan.path,
        callback,
        end_plainly if natural else None,
    )
    plan.equation = (
        natural
        if natural is not None
        and result.loop.best.data is not None
        and isinstance(result.loop.best.data, NaturalPoint)
        else result.equation
    )
    return finish(plan, result.loop, limits, before)


def _run_relaxed(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    assert plan.relaxation is not None
    result = run_envelope_start(plan.problem, plan.equation, limits, plan.relaxation, callback)
    return replace(finish(plan, result.loop, limits, before), lower_bound=result.lower_bound)


def _run_gap_path(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    assert isinstance(plan.path, GapPath)
    kind = type(plan.globalization)
    result = follow_gap(plan.problem, plan.start, kind, limits, plan.path, callback)
    plan.equation = result.equation
    plan.choices["path"] += f"; {result.points} points"
    return finish(plan, result.loop, limits, before)


def _one_more(
    natural: NaturalEquation, ended: LoopResult, limits: Limits, callback: Callback | None, first_index: int
) -> LoopResult:
    """One exact step more, kept where it is better.

    A residual with the step 1/L says little about the distance where L is large, and where the pieces are right an
    exact step solves a piecewise affine equation.
    """
    more = run(
        natural, ReducedSolver(natural), EnvelopeSearch(), ended.best.x,
        replace(limits, tolerance=LAST_DIGITS * limits.tolerance, max_steps=1, exact=True),
        callback=callback, first_index=first_index + len(ended.steps), stage="natural residual",
    )  # fmt: skip
    if more.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED):
        return _joined(ended, more)
    return replace(_joined(ended, more), outcome=Outcome.CONVERGED, message="")


def _too_many_free(natural: NaturalEquation, control: FloatArray, rows: int) -> bool:
    """Whether more components move freely than A of 1/2 ||A u - b||^2 has rows, and g pulls on them.

    Then the plain Newton system is singular, and has no solution but by chance; for an indicator g it has one.
    """
    point = natural.evaluate(control).data
    slopes = None if point is None else point.derivative.diagonal
    if slopes is None or int(np.count_nonzero(slopes == 1.0)) <= rows:
        return False
    return natural.cost.value(control, natural.weights) != 0.0


def _run_penalty(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    assert plan.penalty is not None
    search = plan.globalization

    def make_search() -> Globalization:
        return search.fresh() if isinstance(search, ResidualSearch) else search

    result = follow_penalty(plan.equation, make_search, limits, plan.penalty, callback)
    plan.equation = result.equation
    plan.choices["path"] += f"; {result.points} points, the last at {result.equation.gamma:.3g}"
    plan.problem = plan.problem.penalised(result.equation.gamma or first_penalty(plan.problem))
    return finish(plan, result.loop, replace(limits, tolerance=result.tolerance), before)


def _with_progress(callback: Callback | None) -> Callback:
    def observer(record: StepRecord) -> None:
        changes = "" if record.piece_changes is None else f", {record.piece_changes} pieces changed"
        print(
            f"step {record.index}: accuracy {record.accuracy:.1e}, {record.action} {record.length:.3g}{changes}",
            file=sys.stderr,
        )
        if callback is not None:
            callback(record)

    return observer
