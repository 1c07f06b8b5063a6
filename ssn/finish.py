"""The end of a solve: accuracy recomputed at the returned point, certificate, and all that belongs to the point."""

from __future__ import annotations

from typing import Any

import numpy as np

from .complementarity import ComplementarityProblem
from .composite import CompositeProblem
from .control import ControlProblem
from .equations.dual import DualEquation
from .inner import relative
from .newton import Limits, LoopResult
from .prepare import Plan
from .protocols import FloatArray
from .solution import Solution
from .status import Outcome


def finish(plan: Plan, result: LoopResult, limits: Limits, before: Any) -> Solution:
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
