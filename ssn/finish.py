"""The end of a solve: accuracy recomputed at the returned point, certificate, and all that belongs to the point."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from .augmented_lagrangian import MultiplierResult
from .complementarity import ComplementarityProblem
from .composite import CompositeProblem
from .control import ControlProblem
from .duality_gap import certify
from .envelope_start import ControlMap
from .equations.complementarity import mid_residual
from .equations.coupled import CoupledEquation
from .equations.dual import DualEquation
from .equations.full_space import FullSpaceEquation
from .equations.settled import SettledEquation
from .gap_path import collect_gap
from .inner import relative
from .moreau_yosida import collect
from .newton import Limits, LoopResult
from .prepare import Plan
from .primal_dual_path import PrimalDualResult
from .protocols import FloatArray
from .proximal_newton import ControlEquation
from .proximal_newton import collect as collect_nonlinear
from .second_order import lowest_curvature
from .solution import Solution
from .status import Outcome

# relative disagreement of two evaluations of one inner product that no rounding explains
ADJOINT_ERROR = 1e-7
# error left by the linear solves, relative to the control, from which on a solution counts as inaccurate
SOLVE_ERROR = 1e-7
# residual of one component, relative to its size, from which on a point is no solution whatever the norm says
COMPONENT_ERROR = 1e-4


def finish(plan: Plan, result: LoopResult, limits: Limits, before: Any) -> Solution:
    """Recompute the accuracy at the returned point, certify it, and collect what belongs to it."""
    best = result.best
    fields: dict[str, Any] = {}
    if isinstance(plan.equation, DualEquation):
        x, accuracy, fields = _finish_dual(plan, result, limits.tolerance)
    elif isinstance(plan.equation, FullSpaceEquation):
        x, accuracy, fields = collect(plan.equation, best)
    elif isinstance(plan.equation, CoupledEquation):
        x, accuracy, fields = plan.equation.collect(best.x, limits.tolerance)
    elif isinstance(plan.equation, SettledEquation):
        x, accuracy, fields = collect_gap(plan.equation, result)
        fields["doubt"] = _gap_doubt(fields)
    elif isinstance(plan.problem, ControlProblem):
        x, accuracy, fields = _finish_local_control(plan.problem, result)
    elif isinstance(plan.equation, ControlEquation):
        x, accuracy, fields = collect_nonlinear(plan.equation, best)
    elif isinstance(plan.problem, CompositeProblem):
        x, accuracy, fields = _finish_composite(plan, result)
    elif isinstance(plan.problem, ComplementarityProblem):
        x, accuracy, fields = _finish_complementarity(plan, result)
    else:
        x = best.x
        fresh = plan.equation.evaluate(x.copy())
        accuracy = fresh.accuracy
        if plan.unpack is not None:
            x = plan.unpack(x)
    outcome, message = result.outcome, result.message
    if outcome is Outcome.CONVERGED and not accuracy <= limits.tolerance:
        outcome = Outcome.INACCURATE
        message = f"accuracy {accuracy:.1e} when computed afresh, {best.accuracy:.1e} in the iteration"
    if isinstance(plan.equation, ControlEquation):
        plan.choices["states"] = f"{plan.equation.states} nonlinear state solves"
        if outcome is Outcome.NOT_FINITE and plan.equation.failure:
            outcome, message = Outcome.NO_STATE, plan.equation.failure
    doubt = fields.pop("doubt", None)
    if outcome is Outcome.CONVERGED and doubt is not None:
        outcome, message = doubt
    work = plan.equation.work
    note = getattr(plan.equation, "linear_note", "")
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
        choices={**plan.choices, "linear": note} if note else plan.choices,
        problem=plan.problem,
        iterate=best.x,
        **fields,
    )


@dataclass(frozen=True)
class _ControlPoint:
    """A control with its state, adjoint and accuracy, all evaluated afresh."""

    x: FloatArray
    observed: FloatArray
    misfit: FloatArray
    gradient: FloatArray
    v: FloatArray
    accuracy: float
    state: FloatArray | None
    adjoint: FloatArray | None


def _evaluated(plan: Plan, x: FloatArray) -> _ControlPoint:
    equation: DualEquation = plan.equation
    problem, tracking = plan.problem, equation.tracking
    state = adjoint = None
    if isinstance(problem, ControlProblem):
        response = problem.response(x)
        observed = problem.observe(response)
        misfit = equation.target - observed
        adjoint = problem.adjoint_of(misfit)
        gradient = -problem.pull_back(adjoint)
        state = response + problem.offset()
    else:
        observed = tracking.forward(x)
        misfit = equation.target - observed
        gradient = -tracking.adjoint(misfit)
    step = 1.0 / equation.alpha
    # the normal map of the problem itself; on a path the natural residual with its last step
    v = -step * gradient if _own_weight(problem) > 0 else x - step * gradient
    moved = equation.prox(v)
    accuracy = relative(tracking.controls.norm(x - moved), tracking.controls.norm(moved))
    return _ControlPoint(x, observed, misfit, gradient, v, accuracy, state, adjoint)


def _own_weight(problem: Any) -> float:
    return float(problem.alpha) if isinstance(problem, ControlProblem) else 0.0


def _finish_dual(
    plan: Plan, result: LoopResult, tolerance: float
) -> tuple[FloatArray, float, dict[str, Any]]:
    equation: DualEquation = plan.equation
    problem, best = plan.problem, result.best
    if plan.path is not None and result.last.data is not None:
        best = result.last
    if best.data is None:
        return np.zeros(problem.unknowns), float("inf"), {"pieces": best.pieces}
    tracking, alpha = equation.tracking, equation.alpha
    controls = tracking.controls
    certified = at = _evaluated(plan, best.data.corrected)
    if at.accuracy > tolerance >= best.accuracy:
        # the proximal map of the normal map amplifies rounding by ||S||^2/alpha: the iterate itself may be better
        other = _evaluated(plan, best.data.control)
        at = other if other.accuracy < at.accuracy else at
    own_weight = _own_weight(problem)
    reference = controls.norm(at.x)
    step = 1.0 / alpha
    smooth_value = 0.5 * tracking.observations.dot(at.misfit, at.misfit) + 0.5 * own_weight * controls.dot(
        at.x, at.x
    )
    fields: dict[str, Any] = {
        "pieces": equation.cost.pieces(at.v, step),
        "margins": equation.cost.margins(at.v, step),
        "multipliers": equation.cost.multipliers(at.x, -at.gradient - own_weight * at.x),
        "objective": smooth_value + equation.cost.value(at.x, controls.vector),
    }
    image = tracking.observations.dot(at.misfit, at.observed)
    fields["doubt"] = _adjoint_doubt(
        image, -controls.dot(at.gradient, at.x), controls.norm(at.gradient) * reference
    )
    if isinstance(problem, ControlProblem):
        assert at.state is not None and at.adjoint is not None
        error = problem.gradient_error(at.x, at.state, at.adjoint)
        difference = certified.observed - best.data.observed
        moved = controls.norm(at.x - certified.x)
        fields["certificate"] = problem.certify(difference, reference, error, moved)
        fields["state"], fields["adjoint"] = at.state, at.adjoint
        if own_weight > 0 and error / own_weight > SOLVE_ERROR * reference > 0:
            fields["doubt"] = (
                Outcome.INACCURATE,
                f"the state and adjoint solves leave an error of {error / own_weight / reference:.1e} in the control",
            )
    elif problem.strong_convexity > 0:
        x, fields["certificate"] = problem.certify(at.x)
        return x, at.accuracy, fields
    return at.x, at.accuracy, fields


def _finish_local_control(
    problem: ControlProblem, result: LoopResult
) -> tuple[FloatArray, float, dict[str, Any]]:
    """A stationary point of a control problem whose cost is not convex."""
    best = result.best
    if best.data is None:
        return best.x, float("inf"), {}
    z: FloatArray = best.data.moved
    step = problem.natural_step()
    value, gradient = problem.smooth(z)
    v = z - step * gradient
    moved = problem.cost.prox(v, step)
    accuracy = relative(problem.controls.norm(z - moved), problem.controls.norm(moved))
    state, adjoint = problem.state_and_adjoint(z)
    misfit = problem.target - problem.observe(state)
    response = problem.observe(state - problem.offset())
    pulled = problem.pull_back(adjoint)
    doubt = _adjoint_doubt(
        problem.observations.dot(misfit, response),
        problem.controls.dot(pulled, z),
        problem.controls.norm(pulled) * problem.controls.norm(z),
    )
    return z, accuracy, {
        "doubt": doubt if doubt is not None else _control_saddle(problem, z, v, step),
        "pieces": problem.cost.pieces(v, step),
        "margins": problem.cost.margins(v, step),
        "multipliers": problem.cost.multipliers(z, -gradient),
        "objective": value + problem.cost.value(z, problem.weights),
        "state": state,
        "adjoint": adjoint,
    }  # fmt: skip


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
        "doubt": _composite_doubt(problem, z, v, step),
        "pieces": problem.cost.pieces(v, step),
        "margins": problem.cost.margins(v, step),
        "multipliers": problem.cost.multipliers(z, -gradient),
        "objective": problem.objective(z),
        "certificate": certificate,
    }  # fmt: skip


def _adjoint_doubt(one: float, other: float, scale: float) -> tuple[Outcome, str] | None:
    """Compare <r, S u> with <S* r, u>, which costs nothing where both images are known."""
    if abs(one - other) <= ADJOINT_ERROR * max(scale, abs(one)):
        return None
    return Outcome.INACCURATE, f"S* is not the adjoint of S: <r, S u> = {one:.10g}, <S* r, u> = {other:.10g}"


def _gap_doubt(fields: dict[str, Any]) -> tuple[Outcome, str] | None:
    """Whether the gap of a control problem says what it seems to say."""
    images, rounding = fields.pop("images", None), fields.pop("rounding", 0.0)
    doubt = None if images is None else _adjoint_doubt(*images)
    if doubt is None and rounding > SOLVE_ERROR:
        told = f"the state and adjoint solves leave an error of {rounding:.1e} in the objective"
        doubt = Outcome.INACCURATE, told
    return doubt


def _composite_doubt(
    problem: CompositeProblem, z: FloatArray, v: FloatArray, step: float
) -> tuple[Outcome, str] | None:
    """Whether value and gradient of a quadratic part disagree, or the point is no minimum."""
    if not problem.affine:
        return None
    zero = np.zeros(problem.unknowns)
    there, gradient = problem.smooth(z)
    here, first = problem.smooth(zero)
    change = 0.5 * problem.controls.dot(gradient + first, z)
    if abs(there - here - change) > ADJOINT_ERROR * (abs(there) + abs(here) + abs(change)):
        return Outcome.INACCURATE, (
            f"the gradient is not that of the value: f(u) - f(0) = {there - here:.10g}, the gradients say {change:.10g}"
        )
    if problem.convex:
        twice = problem.objective(2.0 * z)
        if np.isfinite(twice) and twice < there + problem.cost.value(z, problem.weights) - 1e-6 * abs(twice):
            return Outcome.UNBOUNDED, f"the objective is lower still at twice the point: {twice:.3g}"
        return None
    lowest = lowest_curvature(
        problem.derivative(z), problem.weights, problem.cost.prox_derivative(v, step), step
    )
    if lowest is None or not lowest.negative:
        return None
    far = z + 1e8 * (1.0 + problem.controls.norm(z)) * lowest.direction
    if problem.objective(far) < problem.objective(z):
        return (
            Outcome.UNBOUNDED,
            f"the objective falls without bound along negative curvature {lowest.value:.1e}",
        )
    return Outcome.SADDLE_POINT, f"negative curvature {lowest.value:.1e} among the free components"


def _control_saddle(
    problem: ControlProblem, z: FloatArray, v: FloatArray, step: float
) -> tuple[Outcome, str] | None:
    """Whether the point is no minimum; asked only where the cost is concave enough to outweigh alpha."""
    derivative = problem.cost.prox_derivative(v, step)
    free = derivative.diagonal
    if free is not None:
        bend = (1.0 / free[free > 0] - 1.0) / step
        if bend.min(initial=0.0) >= -problem.alpha:
            return None
    hessian = ControlMap(problem).derivative(z)
    lowest = lowest_curvature(hessian, problem.weights, derivative, step)
    if lowest is None or not lowest.negative:
        return None
    return Outcome.SADDLE_POINT, f"negative curvature {lowest.value:.1e} among the free components"


def finish_sum(
    plan: Plan, result: MultiplierResult | PrimalDualResult, limits: Limits, before: Any
) -> Solution:
    """Collect the end of a method of multipliers; both relative errors are computed afresh."""
    problem, loop = plan.problem, result.loop
    stationarity, terms = problem.accuracy_of(result.u, result.multipliers)
    accuracy = max(stationarity, terms)
    outcome, message = loop.outcome, loop.message
    if outcome is Outcome.CONVERGED and not accuracy <= limits.tolerance:
        outcome, message = Outcome.INACCURATE, f"accuracy {accuracy:.1e} when computed afresh"
    work = problem.work.since(before) if before is not None else problem.work.copy()
    gap, certificate = certify(problem, result.u, result.multipliers)
    if np.isfinite(gap.relative):
        plan.choices["gap"] = (
            f"relative duality gap {gap.relative:.1e} of the problem itself, evaluated afresh"
        )
    state = adjoint = None
    if problem.control is not None:
        state, adjoint = problem.control.state_and_adjoint(result.u)
    prices = {name: problem.part_of(result.multipliers, k) for k, name in enumerate(problem.names)}
    return Solution(
        x=result.u,
        converged=outcome is Outcome.CONVERGED,
        outcome=outcome,
        message=message,
        residual_norm=loop.best.norm,
        accuracy=accuracy,
        tolerance=limits.tolerance,
        steps=tuple(loop.steps),
        start_norm=loop.start_norm,
        pieces=loop.last.pieces,
        multipliers=prices,
        work=work,
        objective=problem.objective(result.u, slack=10 * limits.tolerance),
        choices=plan.choices,
        problem=problem,
        certificate=certificate,
        lower_bound=gap.objective - gap.value - gap.rounding if np.isfinite(gap.value) else None,
        state=state,
        adjoint=adjoint,
        iterate=np.concatenate([result.u, result.multipliers]),
    )


def _finish_complementarity(plan: Plan, result: LoopResult) -> tuple[FloatArray, float, dict[str, Any]]:
    problem, best = plan.problem, result.best
    if best.data is None:
        return best.x, float("inf"), {}
    x = np.clip(best.x, problem.lower, problem.upper)
    with np.errstate(all="ignore"):  # the point may lie where F is not defined; then the accuracy says so
        force = problem.value(x)
    step = problem.row_step(x)  # at the returned point: F' may have changed since the start
    residual = mid_residual(x, step * force, problem.lower, problem.upper)
    accuracy = relative(float(np.linalg.norm(residual)), plan.equation.size_of(x))
    v = x - step * force
    pieces = problem.cost.pieces(v, 1.0)
    on_bound = pieces["control"] != 1
    objective = problem.potential(x) if problem.symmetric else float("nan")
    return x, accuracy, {
        "doubt": _complementarity_doubt(x, residual, plan.equation.magnitude),
        "pieces": pieces,
        "margins": problem.cost.margins(v, 1.0),
        "multipliers": {"contact": np.where(on_bound, force, 0.0)},
        "objective": objective,
    }  # fmt: skip


def _complementarity_doubt(
    x: FloatArray, residual: FloatArray, magnitude: float
) -> tuple[Outcome, str] | None:
    """Whether a component is far off while a huge one makes the relative accuracy look small."""
    size = np.maximum(np.abs(x), magnitude / np.sqrt(x.size))
    off = np.abs(residual) > COMPONENT_ERROR * size
    if not off.any():
        return None
    worst = int(np.argmax(np.where(off, np.abs(residual), 0.0)))
    return Outcome.INACCURATE, (
        f"component {worst} is off by {abs(residual[worst]):.1e}; it looks small beside |x| = {np.linalg.norm(x):.1e}"
    )
