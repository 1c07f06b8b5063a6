"""Adjoint and solve tests of control problems and least squares."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from scipy.sparse.linalg import LinearOperator

from ..composite import LeastSquaresMap
from ..inner import InnerProduct
from ..linear.boundary import product, transpose_product
from ..nonlinear_control import LinearisedMap
from ..nonlinear_states import second_derivative
from ..protocols import FloatArray
from .check import Check
from .taylor import jacobian

ROUNDING = 1e-12
SOLVE = 1e-8

Map = Callable[[FloatArray], FloatArray]


def pair(
    name: str, forward: Map, adjoint: Map, left: InnerProduct, right: InnerProduct, rng: np.random.Generator,
    *, slack: float = 0.0, hint: str,
) -> Check:  # fmt: skip
    """<A u, q> = <u, A* q>, `left` the product of q and `right` that of u, relative to the norms involved."""
    worst = 0.0
    for _ in range(3):
        u, q = rng.standard_normal(right.size), rng.standard_normal(left.size)
        image, lifted = forward(u), adjoint(q)
        scale = left.norm(image) * left.norm(q) + right.norm(u) * right.norm(lifted)
        gap = abs(left.dot(image, q) - right.dot(u, lifted))
        worst = max(worst, gap / scale if scale > 0.0 else 0.0) if np.isfinite(scale) else float("inf")
    holds = bool(worst <= ROUNDING + slack)
    detail = f"<A u, q> and <u, A* q> differ by {worst:.1e}"
    return Check(name, holds, detail if holds else f"{detail}: {hint}")


def control(problem: Any, rng: np.random.Generator) -> list[Check]:
    """S and S* in their products, B and C where they are operators, the state model against its own residuals."""
    return _linear(problem, problem.state, problem.forward, problem.adjoint, rng)


def nonlinear(problem: Any, y: FloatArray, p: FloatArray, rng: np.random.Generator) -> list[Check]:
    """The derivatives of a nonlinear state equation at y, the second one along p, and the adjoints of the first."""
    state, zero = problem.state, np.zeros(problem.state.size)
    shape = (state.size, state.size)
    size = float(np.linalg.norm(y)) or float(np.sqrt(y.size))

    def step(h: FloatArray) -> FloatArray:
        return np.asarray(h * (0.3 * size / max(float(np.linalg.norm(h)), 1e-300)))

    def derivative(x: FloatArray) -> LinearOperator:
        at = state.linearize(x)
        return LinearOperator(shape, matvec=lambda d: -at.residual(np.ravel(d), zero), dtype=np.float64)

    def second(x: FloatArray) -> LinearOperator:
        at = second_derivative(state, x, p)
        return LinearOperator(shape, matvec=lambda d: product(at, np.ravel(d)), dtype=np.float64)

    made = [
        jacobian(
            "state derivative", lambda x: -state.residual(x, zero), derivative, y, step, rng,
            "linearize() is not the derivative of residual()",
        ),
        jacobian(
            "state second derivative", lambda x: -state.linearize(x).adjoint_residual(p, zero), second, y, step, rng,
            "second_derivative() is not the derivative of linearize()",
        ),
    ]  # fmt: skip
    tangent = LinearisedMap(problem, state.linearize(y))
    return made + _linear(problem, tangent.linear, tangent.forward, tangent.adjoint, rng)


def _linear(problem: Any, state: Any, forward: Map, adjoint: Map, rng: np.random.Generator) -> list[Check]:
    plain = InnerProduct(np.ones(state.size))
    checks = []
    for name, given in (("control operator", problem.control_operator), ("observation", problem.observation)):
        if isinstance(given, LinearOperator):
            rows, columns = (InnerProduct(np.ones(k)) for k in given.shape)
            checks.append(
                pair(
                    name + " adjoint", partial(product, given), partial(transpose_product, given),
                    rows, columns, rng, hint="rmatvec is not the transpose of matvec",
                )
            )  # fmt: skip
    zero = np.zeros(state.size)
    checks.append(
        pair(
            "state operator", lambda y: -state.residual(y, zero), lambda p: -state.adjoint_residual(p, zero),
            plain, plain, rng, hint="adjoint_residual does not use the transpose of the operator of residual",
        )
    )  # fmt: skip
    rhs = product(problem.control_operator, rng.standard_normal(problem.unknowns))
    solve, slack = _solved("state solve", state.solve, state.residual, rhs)
    dual = rng.standard_normal(state.size)
    adjoint_solve, adjoint_slack = _solved("adjoint solve", state.adjoint_solve, state.adjoint_residual, dual)
    checks += [solve, adjoint_solve]
    checks.append(
        pair(
            "adjoint", forward, adjoint, problem.observations, problem.controls, rng,
            slack=10.0 * (slack + adjoint_slack),
            hint="S* is not the adjoint of S in the weighted products: look at masses and transposes",
        )
    )  # fmt: skip
    return checks


def least_squares(problem: Any, rng: np.random.Generator) -> Check:
    """A and A* of a least-squares part."""
    a = LeastSquaresMap(problem.part, problem.weights, problem.work)
    return pair(
        "adjoint", a.forward, a.adjoint, a.observations, a.controls, rng, hint="A* is not the adjoint of A"
    )


def _solved(
    name: str, solve: Map, residual: Callable[[FloatArray, FloatArray], FloatArray], rhs: FloatArray
) -> tuple[Check, float]:
    """Whether the solve leaves a small residual; and the size of the error it left, by one refinement step."""
    y = solve(rhs)
    left = residual(y, rhs)
    size = float(np.linalg.norm(rhs))
    relative = float(np.linalg.norm(left)) / size if size > 0.0 else 0.0
    holds = bool(relative <= SOLVE)
    slack = 0.0
    if holds and np.linalg.norm(y) > 0.0:
        slack = float(np.linalg.norm(solve(left)) / np.linalg.norm(y))
    detail = f"relative residual {relative:.1e}"
    return Check(
        name, holds, detail if holds else f"{detail}: the solve does not belong to the residual"
    ), min(slack, 1e-7)
