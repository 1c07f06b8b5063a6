"""The front door: from a problem statement to an equation, a linear solver and a globalisation, and back."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .complementarity import ComplementarityProblem
from .composite import CompositeProblem, LeastSquaresMap
from .control import ControlProblem
from .equations.complementarity import MidEquation
from .equations.dual import DualEquation
from .equations.general import GeneralEquation
from .equations.natural import NaturalEquation, NaturalPoint
from .errors import InputError, SolveInterrupted
from .globalization import CATALOGUE, DualSearch, EnvelopeSearch, FullStep, ResidualSearch
from .inner import relative
from .linear import CATALOGUE as LINEAR
from .linear import GeneralSolver, ReducedSolver, SubspaceSolver
from .newton import Limits, LoopResult, run
from .protocols import FloatArray, Globalization, LinearSolver
from .proximal_point import ProximalPointPath, follow, operator_size
from .records import StepRecord
from .smooth import LeastSquares
from .solution import Solution
from .status import Outcome
from .validate import count, float_array, scalar

Callback = Callable[[StepRecord], None]

# plain Newton steps on the natural residual that end a proximal point path
POLISH_STEPS = 6
# continuations at most while the accuracy computed afresh is worse than the iteration's own figure
CONFIRMATIONS = 3

LINEAR_CHOICES = ("auto", *LINEAR)


@dataclass
class Plan:
    """A problem made ready for the loop: equation, linear solver, globalisation, start, and why."""

    problem: Any
    equation: Any
    solver: LinearSolver
    globalization: Globalization
    start: FloatArray
    choices: dict[str, str]
    path: ProximalPointPath | None = None
    polish: NaturalEquation | None = None


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
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, or object with the Equation protocol
    start : array, optional
        Start of the unknown (a control for control problems); by default zero, projected onto the bounds. It is not
        changed.
    tolerance : float
        Relative accuracy of the unknown: ||u - prox(...)|| / ||u|| in the problem's norm (see the `accuracy` method of
        each problem); for an Equation the root mean square of F / scale.
    max_steps : int
        Newton steps at most, over a whole path.
    globalization : {"auto", "full", "dual", "residual", "envelope"} or a Globalization
        "auto": dual search where the problem has a dual equation, envelope search for other composite problems,
        residual search otherwise.
    linear : {"auto", "subspace", "reduced", "general"}
        How Newton systems are solved; only the one that fits the equation is accepted beside "auto".
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
    if plan.path is not None:
        solution = _run_path(plan, limits, observer, before)
    else:
        solution = _run_until_confirmed(plan, limits, observer, before)
    if solution.outcome is Outcome.INTERRUPTED:
        raise SolveInterrupted("solve interrupted; the best iterate is attached as .solution", solution)
    return solution


def prepare(
    problem: Any, start: Any = None, *, globalization: str | Globalization = "auto", linear: str = "auto"
) -> Plan:
    """Choose equation, linear solver and globalisation for a problem, and check that the choices fit."""
    if linear not in LINEAR_CHOICES:
        raise InputError(f"linear must be one of {', '.join(LINEAR_CHOICES)}, got {linear!r}")
    if isinstance(globalization, str) and globalization != "auto" and globalization not in CATALOGUE:
        raise InputError(
            f"globalization must be 'auto', {', '.join(map(repr, CATALOGUE))}, got {globalization!r}"
        )
    if isinstance(problem, ControlProblem):
        plan = _prepare_control(problem, start)
    elif isinstance(problem, CompositeProblem):
        plan = _prepare_composite(problem, start, globalization)
    elif isinstance(problem, ComplementarityProblem):
        plan = _prepare_complementarity(problem, start)
    elif hasattr(problem, "residual") and hasattr(problem, "linearize"):
        plan = _prepare_equation(problem, start)
    elif callable(problem):
        raise InputError(
            "a plain function brings no derivative: give an object with residual(x) and "
            "linearize(x) -> ssn.Linearization"
        )
    else:
        raise InputError(
            f"cannot solve a {type(problem).__name__}: give a ControlProblem, CompositeProblem, "
            "ComplementarityProblem, "
            "or an object with residual(x) and linearize(x)"
        )
    if linear not in ("auto", plan.solver.name):
        raise InputError(f"linear={linear!r} does not fit this problem; it is solved by {plan.solver.name!r}")
    if globalization != "auto":
        plan.globalization = _forced(globalization, plan.equation)
        plan.choices["globalization"] = f"{plan.globalization.name}: asked for"
    return plan


def _forced(choice: str | Globalization, equation: Any) -> Globalization:
    made: Any = CATALOGUE[choice]() if isinstance(choice, str) else choice
    if not hasattr(made, "advance"):
        raise InputError(f"globalization must have an advance method, got {type(made).__name__}")
    if isinstance(made, DualSearch) and not isinstance(equation, DualEquation):
        raise InputError("globalization='dual' needs a control problem or least squares with a convex cost")
    if isinstance(made, EnvelopeSearch) and getattr(equation, "potential", None) is None:
        raise InputError(
            "globalization='envelope' needs an objective: a composite problem or symmetric complementarity"
        )
    return made.fresh() if isinstance(made, ResidualSearch) else made


def _start_array(start: Any, size: int, name: str = "start") -> FloatArray | None:
    return None if start is None else float_array(start, name, shape=(size,))


def _prepare_control(problem: ControlProblem, start: Any) -> Plan:
    if not problem.convex:
        raise InputError(f"{type(problem.cost).__name__} is not convex: control problems need a convex cost")
    control = _start_array(start, problem.unknowns)
    path = None if problem.alpha > 0 else ProximalPointPath()
    alpha = problem.alpha if problem.alpha > 0 else 1.0
    equation = DualEquation(problem, problem.reduced_target(), alpha, problem.cost)
    choices = {
        "equation": "dual equation: quadratic tracking, convex cost",
        "globalization": "dual: the dual function is convex, exact search costs no solve",
        "linear": "subspace: one factorisation of the state operator, basis kept between steps",
    }
    if path is not None:
        choices["path"] = "proximal point: control_weight is 0"
        x = np.zeros(problem.unknowns) if control is None else control
    else:
        x = equation.start(control)
    return Plan(problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, path)


def _prepare_composite(problem: CompositeProblem, start: Any, globalization: Any) -> Plan:
    u = _start_array(start, problem.unknowns)
    wants_dual = globalization in ("auto", "dual") or isinstance(globalization, DualSearch)
    if isinstance(problem.part, LeastSquares) and problem.cost.convex and wants_dual:
        tracking = LeastSquaresMap(problem.part, problem.weights, problem.work)
        equation: Any = DualEquation(tracking, problem.part.b, 1.0, problem.cost)
        choices = {
            "equation": "dual equation: least squares, convex cost",
            "globalization": "dual: the dual function is convex, exact search costs no product",
            "path": "proximal point: no strong convexity is assumed",
        }
        x = np.zeros(problem.unknowns) if u is None else u
        return Plan(
            problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, ProximalPointPath(),
            _natural_equation(problem),
        )  # fmt: skip
    equation = _natural_equation(problem)
    x = problem.cost.prox(np.zeros(problem.unknowns) if u is None else u, 1e-300)
    choices = {
        "equation": "natural residual",
        "globalization": "envelope: the forward-backward envelope falls at every step",
    }
    return Plan(problem, equation, ReducedSolver(equation), EnvelopeSearch(), x if u is None else u, choices)


def _natural_equation(problem: CompositeProblem) -> NaturalEquation:
    return NaturalEquation(
        problem,
        problem.cost,
        problem.natural_step(),
        problem.weights,
        potential=problem.potential,
        work=problem.work,
    )


def _prepare_complementarity(problem: ComplementarityProblem, start: Any) -> Plan:
    given = _start_array(start, problem.unknowns)
    x = problem.start() if given is None else given
    step = problem.row_step(x)
    equation = MidEquation(problem, step, problem.magnitude(x, step))
    choices = {
        "equation": "mid(x - upper, x - lower, F / |diagonal of F'|)",
        "globalization": "residual: nonmonotone, "
        + (
            "projected gradient behind it"
            if problem.symmetric
            else "Fischer-Burmeister least squares behind it"
        ),
    }
    return Plan(problem, equation, ReducedSolver(equation), ResidualSearch().fresh(), x, choices)


def _prepare_equation(problem: Any, start: Any) -> Plan:
    given = start if start is not None else getattr(problem, "start", None)
    if given is None:
        raise InputError("give start: an Equation does not tell its number of unknowns")
    x = float_array(given, "start", ndim=1)
    equation = GeneralEquation(problem, x.size)
    choices = {
        "equation": "given by the caller",
        "globalization": "residual: nonmonotone, least squares behind it",
    }
    return Plan(problem, equation, GeneralSolver(equation), ResidualSearch().fresh(), x, choices)


def _run_until_confirmed(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    """Iterate; go on with a tighter inner tolerance while the accuracy at the returned point is not confirmed."""
    result = run(plan.equation, plan.solver, plan.globalization, plan.start, limits, callback=callback)
    solution = _finish(plan, result, limits, before)
    inner = limits
    for _ in range(CONFIRMATIONS):
        if solution.outcome is not Outcome.INACCURATE or not np.isfinite(solution.accuracy):
            break
        left = limits.max_steps - len(result.steps)
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
        solution = _finish(plan, result, limits, before)
    return solution


def _run_path(plan: Plan, limits: Limits, callback: Callback | None, before: Any) -> Solution:
    assert plan.path is not None
    base: DualEquation = plan.equation

    def make_equation(alpha: float, linear: FloatArray) -> DualEquation:
        return DualEquation(base.tracking, base.target, alpha, base.cost, linear)

    def make_solver(equation: DualEquation, previous: Any) -> SubspaceSolver:
        solver = SubspaceSolver(equation)
        if previous is not None:
            solver.carry_over(previous)
        return solver

    natural = plan.polish

    def finish(control: FloatArray, first_index: int, left: int) -> LoopResult | None:
        assert natural is not None
        short = Limits(limits.tolerance, min(left, POLISH_STEPS))
        ended = run(
            natural, ReducedSolver(natural), EnvelopeSearch(), control, short,
            callback=callback, first_index=first_index, stage="natural residual",
        )  # fmt: skip
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
        finish if natural else None,
    )
    plan.equation = (
        natural
        if natural is not None
        and result.loop.best.data is not None
        and isinstance(result.loop.best.data, NaturalPoint)
        else result.equation
    )
    return _finish(plan, result.loop, limits, before)


def _finish(plan: Plan, result: LoopResult, limits: Limits, before: Any) -> Solution:
    """Recompute the accuracy at the returned point, certify it, and collect what belongs to it."""
    best = result.best
    fields: dict[str, Any] = {}
    if isinstance(plan.equation, DualEquation):
        x, accuracy, fields = _finish_dual(plan, result)
    elif isinstance(plan.problem, CompositeProblem):
        x, accuracy, fields = _finish_composite(plan, result)
    elif isinstance(plan.problem, ComplementarityProblem):
        x, accuracy, fields = _finish_complementarity(plan, result)
    else:
        x = best.x
        fresh = plan.equation.evaluate(x.copy())
        accuracy = fresh.accuracy
    outcome, message = result.outcome, result.message
    if outcome is Outcome.CONVERGED and not accuracy <= limits.tolerance:
        outcome = Outcome.INACCURATE
        message = f"accuracy {accuracy:.1e} when computed afresh, {best.accuracy:.1e} in the iteration"
    work = plan.equation.work
    return Solution(
        x=x,
        converged=outcome is Outcome.CONVERGED,
        outcome=outcome,
        message=message,
        residual_norm=best.norm,
        accuracy=accuracy,
        tolerance=limits.tolerance,
        steps=tuple(result.steps),
        start_norm=result.start_norm,
        pieces=fields.pop("pieces", best.pieces),
        work=work.since(before) if before is not None else work.copy(),
        choices=plan.choices,
        problem=plan.problem,
        iterate=best.x,
        **fields,
    )


def _finish_dual(plan: Plan, result: LoopResult) -> tuple[FloatArray, float, dict[str, Any]]:
    equation: DualEquation = plan.equation
    problem, best = plan.problem, result.best
    if plan.path is not None and result.last.data is not None:
        best = result.last
    if best.data is None:
        return np.zeros(problem.unknowns), float("inf"), {"pieces": best.pieces}
    tracking, alpha = equation.tracking, equation.alpha
    controls = tracking.controls
    z = best.data.corrected
    control = isinstance(problem, ControlProblem)
    if control:
        response = problem.response(z)
        observed = problem.observe(response)
        misfit = equation.target - observed
        p = problem.adjoint_of(misfit)
        gradient = -problem.pull_back(p)
        state = response + problem.offset()
    else:
        observed = tracking.forward(z)
        misfit = equation.target - observed
        gradient = -tracking.adjoint(misfit)
    step = 1.0 / alpha
    own_weight = problem.alpha if control else 0.0
    # the normal map of the problem itself; on a path the natural residual with its last step
    v = -step * gradient if own_weight > 0 else z - step * gradient
    moved = equation.prox(v)
    reference = controls.norm(z)
    accuracy = relative(controls.norm(z - moved), controls.norm(moved))
    subgradient = -gradient - own_weight * z
    smooth_value = 0.5 * tracking.observations.dot(misfit, misfit) + 0.5 * own_weight * controls.dot(z, z)
    fields: dict[str, Any] = {
        "pieces": equation.cost.pieces(v, step),
        "margins": equation.cost.margins(v, step),
        "multipliers": equation.cost.multipliers(z, subgradient),
        "objective": smooth_value + equation.cost.value(z, controls.vector),
    }
    if control:
        error = problem.gradient_error(z, state, p)
        fields["certificate"] = problem.certify(observed - best.data.observed, reference, error)
        fields["state"], fields["adjoint"] = state, p
    elif problem.strong_convexity > 0:
        z, fields["certificate"] = problem.certify(z)
    return z, accuracy, fields


def _finish_composite(plan: Plan, result: LoopResult) -> tuple[FloatArray, float, dict[str, Any]]:
    problem, best = plan.problem, result.best
    if best.data is None:
        return best.x, float("inf"), {}
    z, certificate = problem.certify(best.data.moved)
    accuracy = problem.accuracy(z)
    step = problem.natural_step()
    _, gradient = problem.smooth(z)
    v = z - step * gradient
    return z, accuracy, {
        "pieces": problem.cost.pieces(v, step),
        "margins": problem.cost.margins(v, step),
        "multipliers": problem.cost.multipliers(z, -gradient),
        "objective": problem.objective(z),
        "certificate": certificate,
    }  # fmt: skip


def _finish_complementarity(plan: Plan, result: LoopResult) -> tuple[FloatArray, float, dict[str, Any]]:
    problem, best = plan.problem, result.best
    if best.data is None:
        return best.x, float("inf"), {}
    x = np.clip(best.x, problem.lower, problem.upper)
    force = problem.value(x)
    step = plan.equation.step
    residual = x - np.clip(x - step * force, problem.lower, problem.upper)
    accuracy = relative(
        float(np.linalg.norm(residual)), max(float(np.linalg.norm(x)), plan.equation.magnitude)
    )
    v = x - step * force
    pieces = problem.cost.pieces(v, 1.0)
    on_bound = pieces["control"] != 1
    objective = problem.potential(x) if problem.symmetric else float("nan")
    return x, accuracy, {
        "pieces": pieces,
        "margins": problem.cost.margins(v, 1.0),
        "multipliers": {"contact": np.where(on_bound, force, 0.0)},
        "objective": objective,
    }  # fmt: skip


def _with_progress(callback: Callback | None) -> Callback:
    import sys

    def observer(record: StepRecord) -> None:
        changes = "" if record.piece_changes is None else f", {record.piece_changes} pieces changed"
        print(
            f"step {record.index}: accuracy {record.accuracy:.1e}, {record.action} {record.length:.3g}{changes}",
            file=sys.stderr,
        )
        if callback is not None:
            callback(record)

    return observer
