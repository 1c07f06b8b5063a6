"""The derivative check: everything a problem claims about its own derivatives, adjoints and proximal map."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from ..complementarity import ComplementarityProblem
from ..composite import CompositeProblem
from ..control import ControlProblem
from ..errors import StateSolveError
from ..inner import InnerProduct
from ..nonlinear_control import NonlinearControlProblem
from ..protocols import FloatArray
from ..smooth import LeastSquares
from ..sum_problem import SumProblem
from ..validate import float_array
from . import adjoints, proximal, quotient, taylor
from .check import Check
from .local import Local


def check_derivative(problem: Any, at: Any = None, *, seed: int = 0) -> tuple[Check, ...]:
    """Check derivatives, adjoints and proximal map of a problem or an equation, without solving it.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, SumProblem, or object with the Equation protocol
    at : array, optional
        Where; a control for control problems. By default the problem's own start; a second point is drawn near it,
        and a third on the nearest kink.
    seed : int
        Of all random directions.

    Returns
    -------
    tuple of Check
        "newton derivative": ||F(x+h) - F(x) - G(x+h) h|| / ||h|| -> 0 along random, smooth and kink-crossing
        directions; "newton step": the linear solver solves the system of that G; "pieces": the labels agree with
        the derivative; "proximal map": it minimises what it should; "gradient", "hessian", "hessian symmetry",
        "map derivative": Taylor tests; "adjoint" and, for control problems, "state operator", "state solve",
        "adjoint solve", "control operator adjoint", "observation adjoint"; for nonlinear states "state derivative" and
        "state second derivative". Those that apply.

    Raises
    ------
    InputError
        For a point of the wrong shape, or an Equation without ``start`` and without `at`.
    """
    return derivative_checks(problem, None if at is None else float_array(at, "at", ndim=1), None, seed)


def derivative_checks(
    problem: Any, point: FloatArray | None, iterate: FloatArray | None, seed: int
) -> tuple[Check, ...]:
    """`check_derivative` at a point and, for several terms, the multipliers of the iterate that led to it."""
    rng = np.random.default_rng(seed)
    local = Local(problem, point, iterate if isinstance(problem, SumProblem) else None)
    checks = [quotient.newton_derivative(local, rng)]
    step = quotient.newton_step(local)
    if step is not None:
        checks.append(step)
    labels = proximal.piece_labels(local)
    if labels is not None:
        checks.append(labels)
    if hasattr(problem, "cost"):
        checks.append(_proximal(local, rng))
    if isinstance(problem, SumProblem):
        checks += _several_terms(local, rng)
    if isinstance(problem, NonlinearControlProblem):
        return (*checks, *_nonlinear(problem, local, point, rng))
    if isinstance(problem, ControlProblem | CompositeProblem | ComplementarityProblem):
        own = not isinstance(problem, ControlProblem)  # whose iterate is the user's unknown
        u = local.x if own else np.zeros(problem.unknowns) if point is None else point
        checks += _smooth(problem, u, _size(local, u), rng)
    if isinstance(problem, ControlProblem):
        checks += adjoints.control(problem, rng)
    elif isinstance(problem, CompositeProblem) and isinstance(problem.part, LeastSquares):
        checks.append(adjoints.least_squares(problem, rng))
    return tuple(checks)


def _several_terms(local: Local, rng: np.random.Generator) -> list[Check]:
    """The proximal map and the operator of every term, and the smooth part."""
    problem: SumProblem = local.problem
    n = problem.unknowns
    u, at = local.x[:n], local.evaluate(local.x)
    made = []
    for k, cost in enumerate(problem.costs):
        weights = problem.part_of(problem.term_weights, k)
        gamma = local.equation.gammas[k] if hasattr(local.equation, "gammas") else 1.0 / local.equation.sigma
        made.append(proximal.proximal_map(cost, problem.part_of(at.data.w, k), gamma, weights, rng))
    terms = InnerProduct(problem.term_weights)
    plain = InnerProduct(np.ones(n))
    hint = "an operator and its transpose do not belong together"
    checks = [
        _worse(made),
        adjoints.pair("adjoint", problem.forward, problem.adjoint, terms, plain, rng, hint=hint),
    ]
    checks += _smooth(problem, u, float(problem.controls.norm(u)) or 1.0, rng)
    if problem.control is not None:
        checks += [c for c in adjoints.control(problem.control, rng) if c.name != "adjoint"]
    return checks


def _nonlinear(
    problem: NonlinearControlProblem, local: Local, point: FloatArray | None, rng: np.random.Generator
) -> list[Check]:
    """Gradient and Hessian at a control, and the derivatives of the state equation at its state."""
    u = np.zeros(problem.unknowns) if point is None else point
    try:
        y, p = problem.state_and_adjoint(u)
    except StateSolveError as error:
        y = rng.standard_normal(problem.state.size)
        failed = Check("state", False, f"the state equation was not solved for the control: {error}")
        return [failed, *adjoints.nonlinear(problem, y, rng.standard_normal(y.size), rng)]
    checks = _smooth(problem, u, _size(local, u), rng)
    # along a p that vanishes there would be nothing to see
    along = p if np.linalg.norm(p) > 0.0 else rng.standard_normal(p.size)
    return checks + adjoints.nonlinear(problem, y, along, rng)


def _size(local: Local, u: FloatArray) -> float:
    """Size of the perturbations of the user's unknown."""
    controls = local.problem.controls
    size = float(controls.norm(u))
    if size == 0.0 and local.dual:
        point = local.evaluate(local.x).data
        size = float(controls.norm(point.control)) if point is not None else 0.0
    if size == 0.0 and not local.dual:
        size = local.reference
    return size if size > 0.0 and np.isfinite(size) else float(controls.norm(np.ones(u.size)))


def _proximal(local: Local, rng: np.random.Generator) -> Check:
    at = local.evaluate(local.x)
    if at.data is None:
        return Check("proximal map", False, "the residual is not finite at the point")
    equation = local.equation
    if local.dual:
        step, weights = 1.0 / equation.alpha, equation.tracking.controls.vector
    else:
        step, weights = (float(at.data.step) if np.ndim(at.data.step) == 0 else 1.0), equation.weights
    return proximal.proximal_map(equation.cost, at.data.v, step, weights, rng)


def _smooth(problem: Any, u: FloatArray, size: float, rng: np.random.Generator) -> list[Check]:
    checks = []

    def step(h: FloatArray) -> FloatArray:
        return h * (size / max(float(problem.controls.norm(h)), 1e-300))

    nonlinear = isinstance(problem, NonlinearControlProblem)
    value: Any = problem.gradient if nonlinear else getattr(problem, "value", None)
    derivative: Any = problem.hessian if nonlinear else getattr(problem, "derivative", None)
    away = u + 0.3 * step(rng.standard_normal(u.size))
    points = [(u, False)] + ([(away, True)] if _finite(problem, away) else [])

    def jacobian(name: str, complaint: str) -> Check:
        return _worse(
            taylor.jacobian(name, value, derivative, x, step, rng, complaint, few=few) for x, few in points
        )

    if not isinstance(problem, ComplementarityProblem) or problem.symmetric:
        checks.append(_worse(taylor.gradient(problem, x, size, rng, few=few) for x, few in points))
    # with penalised state bounds the gradient is piecewise smooth, and its derivative that of the Newton systems
    if isinstance(problem, CompositeProblem | SumProblem) or (nonlinear and not problem.state_bounded):
        checks.append(jacobian("hessian", "hessian() is not the derivative of gradient()"))
        checks.append(_worse(taylor.symmetry(derivative(x), x.size, rng) for x, _ in points))
    if isinstance(problem, ComplementarityProblem):
        checks.append(jacobian("map derivative", "derivative() is not the derivative of value()"))
    return checks


def _worse(checks: Iterable[Check]) -> Check:
    """The first that does not hold, else the first."""
    made = list(checks)
    return next((check for check in made if not check.holds), made[0])


def _finite(problem: Any, u: FloatArray) -> bool:
    if isinstance(problem, ControlProblem):
        return True
    if isinstance(problem, NonlinearControlProblem):
        return bool(np.isfinite(problem.smooth_value(u)))
    with np.errstate(all="ignore"):
        return bool(np.isfinite(problem.value(u)).all())
