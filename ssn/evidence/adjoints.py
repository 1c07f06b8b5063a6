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
from ..protocols import FloatArray
from .check import Check

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
    state = problem.state
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
            "adjoint", problem.forward, problem.adjoint, problem.observations, problem.controls, rng,
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
