"""Methods of general libraries, where the class of the problem fits and the library is installed.

Each runs by its own stopping rule and is then judged by our accuracy figure. The interior-point and coordinate-descent
libraries are optional; a problem they cannot state is simply not theirs.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.optimize import minimize
from scipy.sparse.linalg import LinearOperator

from ..complementarity import ComplementarityProblem
from ..composite import CompositeProblem
from ..control import ControlProblem
from ..costs import SparseCost, SwitchingCost
from ..nonlinear_control import NonlinearControlProblem
from ..protocols import FloatArray
from ..smooth import LeastSquares
from ..sum_problem import SumProblem
from .conic_program import ConicProgram, can_state, solve_conic
from .quadratic_program import (
    LARGEST,
    LibraryResult,
    clarabel_solution,
    control_blocks,
    part_blocks,
    quadratic_program,
)
from .sequential_programming import applies, sequential_programming


def library_methods(problem: Any) -> dict[str, Callable[..., LibraryResult]]:
    """The library methods that can state the problem, by name; none for equations and other statements."""
    found: dict[str, Callable[..., LibraryResult]] = {}
    if isinstance(problem, SumProblem):
        if conic_program(problem) is not None and _installed("clarabel"):
            found["interior point"] = conic_interior_point
        return found
    cost = getattr(problem, "cost", None)
    stated = isinstance(problem, ControlProblem | NonlinearControlProblem | CompositeProblem) or (
        isinstance(problem, ComplementarityProblem) and problem.symmetric
    )
    if isinstance(cost, SwitchingCost) and stated:
        found["L-BFGS-B"] = lbfgsb
    if not isinstance(cost, SparseCost) or not stated:
        return found
    hard_bounds = getattr(problem, "state_bounded", False) and problem.state_penalty is None
    if not hard_bounds:
        found["L-BFGS-B"] = lbfgsb
    if quadratic_program(problem) is not None and _installed("clarabel"):
        found["interior point"] = interior_point
    if applies(problem) and _installed("clarabel"):
        found["sequential programming"] = sequential_programming
    if _is_lasso(problem) and _installed("sklearn"):
        found["coordinate descent"] = coordinate_descent
    return found


def conic_program(problem: SumProblem) -> ConicProgram | None:
    """Several terms as a conic program, or None where there are no matrices, other costs, or too many variables."""
    if not can_state(problem):
        return None
    smooth = (
        part_blocks(problem.part, problem.unknowns)
        if problem.control is None
        else control_blocks(problem.control)
    )
    if smooth is None or smooth[0].shape[0] + int(problem.splits[-1]) > 3 * LARGEST:
        return None
    return ConicProgram(problem, smooth)


def conic_interior_point(problem: SumProblem, *, budget: float) -> LibraryResult:
    """clarabel's primal-dual interior-point method on the conic program."""
    program = conic_program(problem)
    assert program is not None
    x, solved, status, iterations = solve_conic(program, budget)
    return LibraryResult(problem.inside(x), solved, status, iterations)


def _installed(name: str) -> bool:
    try:
        __import__(name)
    except ImportError:
        return False
    return True


class _OutOfTime(Exception):
    pass


def lbfgsb(problem: Any, *, budget: float) -> LibraryResult:
    """SciPy's L-BFGS-B; an L1 or switching cost is smooth in the positive and negative parts of the unknown.

    The unknown is scaled by the square roots of the weights, so that the method works in the problem's inner product.
    """
    cost = problem.cost
    n = problem.unknowns
    weights = getattr(problem, "weights", np.ones(n))
    root = np.sqrt(weights)
    lower, upper = (
        np.broadcast_to(getattr(cost, name, b), (n,)) for name, b in (("lower", -np.inf), ("upper", np.inf))
    )
    split = bool(np.any(cost.beta))
    price_of = _switching_price if isinstance(cost, SwitchingCost) else _sparse_price
    began = time.monotonic()
    best: dict[str, Any] = {"value": np.inf, "u": None}

    def unknown(v: FloatArray) -> FloatArray:
        return (v[:n] - v[n:]) / root if split else v / root

    def value_and_gradient(v: FloatArray) -> tuple[float, FloatArray]:
        if time.monotonic() - began > budget:
            raise _OutOfTime
        u = unknown(v)
        value, gradient = problem.smooth(u)
        scaled = root * gradient
        if not split:
            return value, scaled
        paid, price = price_of(cost, (v[:n] + v[n:]) / root, weights)
        price = price / root
        value += paid
        if value < best["value"]:
            best.update(value=value, u=u)
        return value, np.concatenate([scaled + price, -scaled + price])

    start = np.clip(np.zeros(n), lower, upper)
    if split:
        low = np.concatenate([np.maximum(lower, 0.0) * root, np.maximum(-upper, 0.0) * root])
        high = np.concatenate([np.maximum(upper, 0.0) * root, np.maximum(-lower, 0.0) * root])
        v = np.concatenate([np.maximum(start, 0.0) * root, np.maximum(-start, 0.0) * root])
    else:
        low, high, v = lower * root, upper * root, start * root
    options = {"maxiter": 20_000, "maxfun": 40_000, "maxcor": 20, "ftol": 1e-15, "gtol": 1e-12}
    try:
        box = list(zip(low, high, strict=True))
        result = minimize(value_and_gradient, v, jac=True, method="L-BFGS-B", bounds=box, options=options)
    except _OutOfTime:
        x = start if best["u"] is None else best["u"]
        return LibraryResult(np.clip(x, lower, upper), False, "budget used up", None)
    u = np.clip(unknown(result.x), lower, upper)
    outcome = "converged" if result.success else str(result.message).lower()[:40]
    return LibraryResult(u, bool(result.success), outcome, int(result.nit))


def _sparse_price(cost: SparseCost, size: FloatArray, weights: FloatArray) -> tuple[float, FloatArray]:
    """The L1 cost of |u| = size, and its derivatives."""
    price = np.broadcast_to(cost.beta, size.shape) * weights
    return float(price @ size), price


def _switching_price(cost: SwitchingCost, size: FloatArray, weights: FloatArray) -> tuple[float, FloatArray]:
    """The switching cost of |u| = size, and its derivatives."""
    inner, groups = cost.inner_weights, cost.groups
    strength = cost.beta * groups.outer(weights, inner)
    total = groups.sum(inner * size)
    return float(0.5 * np.sum(strength * total**2)), groups.spread(strength * total) * inner


def interior_point(problem: Any, *, budget: float) -> LibraryResult:
    """clarabel's primal-dual interior-point method on the sparse quadratic program."""
    program = quadratic_program(problem)
    assert program is not None
    x, _, status = clarabel_solution(program, budget)
    cost = problem.cost
    iterations = int(status.rpartition(" in ")[2]) if " in " in status else None
    outcome = status.partition(" in ")[0]
    u = np.clip(x[: program.unknowns], cost.lower, cost.upper)
    return LibraryResult(u, "solved" in outcome, outcome, iterations)


def _is_lasso(problem: Any) -> bool:
    """Whether scikit-learn can state it: least squares with one L1 weight, no other bounds than u >= 0."""
    if not isinstance(problem, CompositeProblem) or not isinstance(problem.part, LeastSquares):
        return False
    cost: SparseCost = problem.cost  # type: ignore[assignment]
    plain = cost.beta.ndim == 0 and cost.beta > 0 and np.isposinf(cost.upper).all()
    signs = np.isneginf(cost.lower).all() or (cost.lower == 0).all()
    return bool(
        plain and signs and (problem.weights == 1).all() and not isinstance(problem.part.A, LinearOperator)
    )


def coordinate_descent(problem: CompositeProblem, *, budget: float) -> LibraryResult:
    """scikit-learn's coordinate descent; its objective is ours divided by the number of rows."""
    from sklearn.linear_model import Lasso

    part: LeastSquares = problem.part  # type: ignore[assignment]
    cost: SparseCost = problem.cost  # type: ignore[assignment]
    root = np.sqrt(part.weights)
    sparse = sp.issparse(part.A)
    a = sp.csc_matrix(sp.diags_array(root) @ part.A) if sparse else np.asfortranarray(root[:, None] * part.A)
    model = Lasso(
        alpha=float(cost.beta) / part.b.size,
        fit_intercept=False,
        positive=bool((cost.lower == 0).all()),
        tol=1e-12,
        max_iter=int(max(1000, 1e9 * budget / (20.0 * a.shape[0] * a.shape[1]))),
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model.fit(a, root * part.b)
    done = bool(model.n_iter_ < model.max_iter)
    return LibraryResult(
        np.asarray(model.coef_, dtype=np.float64),
        done,
        "converged" if done else "iteration limit",
        int(model.n_iter_),
    )
