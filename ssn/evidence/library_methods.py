"""Methods of general libraries, where the class of the problem fits and the library is installed.

Each runs by its own stopping rule and is then judged by our accuracy figure. The interior-point and coordinate-descent
libraries are optional; a problem they cannot state is simply not theirs.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.optimize import minimize
from scipy.sparse.linalg import LinearOperator

from ..complementarity import ComplementarityProblem
from ..composite import CompositeProblem
from ..control import ControlProblem
from ..costs import SparseCost
from ..protocols import FloatArray
from ..smooth import LeastSquares, Quadratic
from ..states import SteadyState
from ..sum_problem import SumProblem
from .conic_program import ConicProgram, can_state, solve_conic

# variables from which on an interior-point factorisation is too much for a comparison in passing
LARGEST = 20_000
GAP = 1e-11


@dataclass(frozen=True)
class LibraryResult:
    """A point with what the library says of it."""

    x: FloatArray
    converged: bool
    outcome: str
    iterations: int | None


def library_methods(problem: Any) -> dict[str, Callable[..., LibraryResult]]:
    """The library methods that can state the problem, by name; none for equations and other statements."""
    found: dict[str, Callable[..., LibraryResult]] = {}
    if isinstance(problem, SumProblem):
        if conic_program(problem) is not None and _installed("clarabel"):
            found["interior point"] = conic_interior_point
        return found
    cost = getattr(problem, "cost", None)
    convex = isinstance(problem, ControlProblem | CompositeProblem) or (
        isinstance(problem, ComplementarityProblem) and problem.symmetric
    )
    if not isinstance(cost, SparseCost) or not convex:
        return found
    if not getattr(problem, "state_bounded", False):
        found["L-BFGS-B"] = lbfgsb
    if quadratic_program(problem) is not None and _installed("clarabel"):
        found["interior point"] = interior_point
    if _is_lasso(problem) and _installed("sklearn"):
        found["coordinate descent"] = coordinate_descent
    return found


def conic_program(problem: SumProblem) -> ConicProgram | None:
    """Several terms as a conic program, or None where there are no matrices, other costs, or too many variables."""
    if not can_state(problem):
        return None
    smooth = (
        _part_blocks(problem.part, problem.unknowns)
        if problem.control is None
        else _control_blocks(problem.control)
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
    """SciPy's L-BFGS-B; where there is an L1 cost the unknown is split into its positive and negative part.

    The unknown is scaled by the square roots of the weights, so that the method works in the problem's inner product.
    """
    cost = problem.cost
    n = problem.unknowns
    weights = getattr(problem, "weights", np.ones(n))
    root = np.sqrt(weights)
    beta = np.broadcast_to(cost.beta, (n,))
    lower, upper = (np.broadcast_to(b, (n,)) for b in (cost.lower, cost.upper))
    split = bool(beta.any())
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
        price = beta * root
        value += float(price @ (v[:n] + v[n:]))
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


@dataclass(frozen=True)
class QuadraticProgram:
    """1/2 v'Pv + q'v with rows A v = b (the first `equalities`) and A v <= b; u are the first n entries of v."""

    p: Any
    q: FloatArray
    a: Any
    b: FloatArray
    equalities: int
    unknowns: int


def quadratic_program(problem: Any) -> QuadraticProgram | None:
    """The problem as a sparse quadratic program with the state as a variable, or None where it has no matrices."""
    n = problem.unknowns
    cost: SparseCost = problem.cost
    weights = np.asarray(getattr(problem, "weights", np.ones(n)))
    blocks = _smooth_blocks(problem)
    if blocks is None:
        return None
    hessian, linear, rows, right = blocks
    size = hessian.shape[0]
    price = np.broadcast_to(cost.beta, (n,)) * weights
    lower, upper = (np.broadcast_to(b, (n,)) for b in (cost.lower, cost.upper))
    extra = n if price.any() else 0
    if size + extra > LARGEST:
        return None
    total = size + extra
    p = (
        sp.block_diag([hessian, sp.csc_array((extra, extra))], format="csc")
        if extra
        else sp.csc_array(hessian)
    )
    q = np.concatenate([linear, price]) if extra else linear
    pick = sp.eye_array(n, total, format="csr")
    equal = sp.hstack([rows, sp.csr_array((rows.shape[0], extra))]) if extra else rows
    above, below = np.isfinite(upper), np.isfinite(lower)
    unequal = [pick[above], -pick[below]]
    limits = [upper[above], -lower[below]]
    if extra:
        slack = sp.eye_array(n, total, k=size, format="csr")
        unequal += [pick - slack, -pick - slack]
        limits += [np.zeros(n), np.zeros(n)]
    if getattr(problem, "state_bounded", False):
        state = sp.eye_array(problem.state.size, total, k=n, format="csr")
        for bound, sign in ((problem.state_upper, 1.0), (problem.state_lower, -1.0)):
            if bound is not None:
                full = np.broadcast_to(bound, (problem.state.size,))
                finite = np.isfinite(full)
                unequal.append(sign * state[finite])
                limits.append(sign * full[finite])
    a = sp.csc_array(sp.vstack([equal, *unequal]))
    return QuadraticProgram(p, q, a, np.concatenate([right, *limits]), rows.shape[0], n)


def _smooth_blocks(problem: Any) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    """Hessian, linear part, equality rows and right side of the smooth part, in v = (u, auxiliary variables)."""
    n = problem.unknowns
    none = sp.csr_array((0, n))
    if isinstance(problem, ComplementarityProblem):
        matrix = problem.derivative(problem.start())
        if isinstance(matrix, LinearOperator):
            return None
        return sp.csc_array(matrix), problem.value(np.zeros(n)), none, np.zeros(0)
    if isinstance(problem, CompositeProblem):
        return _part_blocks(problem.part, n)
    return _control_blocks(problem)


def _part_blocks(part: Any, n: int) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    if isinstance(part, Quadratic) and not isinstance(part.H, LinearOperator):
        return sp.csc_array(part.H), -part.b, sp.csr_array((0, n)), np.zeros(0)
    if isinstance(part, LeastSquares) and not isinstance(part.A, LinearOperator):
        m = part.b.size
        hessian = sp.block_diag([sp.csc_array((n, n)), sp.diags_array(part.weights)], format="csc")
        rows = sp.hstack([sp.csr_array(part.A), -sp.eye_array(m)])  # r = A u - b
        return hessian, np.zeros(n + m), rows, part.b
    return None


def _control_blocks(problem: ControlProblem) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    operators = (problem.control_operator, problem.observation)
    if not isinstance(problem.state, SteadyState) or any(isinstance(o, LinearOperator) for o in operators):
        return None
    size = problem.state.size
    observe = sp.eye_array(size) if problem.observation is None else sp.csr_array(problem.observation)
    product = problem.observations
    mass = product.matrix if product.matrix is not None else sp.diags_array(product.vector)
    tracking = observe.T @ mass @ observe
    hessian = sp.block_diag([sp.diags_array(problem.alpha * problem.weights), tracking], format="csc")
    linear = np.concatenate([np.zeros(problem.unknowns), -(observe.T @ product.apply(problem.target))])
    rows = sp.hstack([-sp.csr_array(problem.control_operator), problem.state.matrix])
    right = np.zeros(size) if problem.source is None else problem.source
    return hessian, linear, rows, right


def interior_point(problem: Any, *, budget: float) -> LibraryResult:
    """clarabel's primal-dual interior-point method on the sparse quadratic program."""
    import clarabel

    program = quadratic_program(problem)
    assert program is not None
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.time_limit = max(budget, 0.1)
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = GAP
    rest = program.b.size - program.equalities
    cones = [clarabel.ZeroConeT(program.equalities)] if program.equalities else []
    cones += [clarabel.NonnegativeConeT(rest)] if rest else []
    if not cones:  # clarabel wants a row: one that says 0 <= 1
        program = QuadraticProgram(
            program.p, program.q, sp.csc_array((1, program.q.size)), np.ones(1), 0, program.unknowns
        )
        cones = [clarabel.NonnegativeConeT(1)]
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(sp.triu(program.p)), program.q, sp.csc_matrix(program.a), program.b, cones, settings
    )
    result = solver.solve()
    x = np.array(result.x)[: program.unknowns]
    cost = problem.cost
    status = str(result.status)
    return LibraryResult(
        np.clip(x, cost.lower, cost.upper), "Solved" in status, status.lower(), int(result.iterations)
    )


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
