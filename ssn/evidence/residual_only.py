"""The reference for a user's equation: a root finder that sees the residual and no derivative of ours or theirs."""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from scipy.optimize import NoConvergence, newton_krylov, root
from scipy.sparse.linalg import LinearOperator

from ..errors import InputError
from ..linear.boundary import as_square
from ..linear.direct import Factorization, SingularMatrixError
from ..protocols import FloatArray
from ..reference import ReferenceResult
from ..work import WorkCounts
from .local import smooth_sequence

DENSE = 200
# how far from the point under test it starts, relative to its norm
AWAY = 1e-2


class _OutOfTimeError(Exception):
    """The budget is used up."""


def start_near(point: FloatArray, *, seed: int = 0) -> FloatArray:
    """A seeded point one percent away."""
    n = point.size
    rng = np.random.default_rng(seed)
    direction = rng.standard_normal(n) if n <= DENSE else smooth_sequence(rng, n)
    length = float(np.linalg.norm(point)) or float(np.sqrt(n))
    return point + AWAY * length * direction / max(float(np.linalg.norm(direction)), 1e-300)


def _preconditioner(problem: Any, x: FloatArray) -> LinearOperator | None:
    """The inverse of the derivative at x, where it is explicit and regular."""
    if not hasattr(problem, "linearize"):
        return None
    derivative = problem.linearize(x.copy()).derivative
    scale = np.asarray(getattr(problem, "scale", 1.0), dtype=np.float64)
    if isinstance(derivative, LinearOperator):
        return None
    try:
        factor = Factorization(as_square(derivative, "the derivative"))
    except (InputError, SingularMatrixError):
        return None
    return LinearOperator(
        (x.size, x.size), matvec=lambda r: factor.solve(scale * np.ravel(r)), dtype=np.float64
    )


def residual_only(
    problem: Any, start: FloatArray, *, tolerance: float = 1e-10, budget: float | None = None, seed: int = 0
) -> ReferenceResult:
    """Find the root near `start` from values of the residual only.

    Up to 200 unknowns by Powell's hybrid method with a differenced Jacobian, beyond by a differenced Newton-Krylov
    method (both from SciPy), from a point one percent away. There the equation's own derivative at `start`
    preconditions the inner iteration: it decides about the speed, not about where the residual vanishes. What the
    method can tell is whether `start` is a root and the only one this near; it does not search from afar.

    Parameters
    ----------
    problem : object with a member residual, or a function
    start : array, shape (n,)
    tolerance : float
        On the root mean square of F / scale.
    budget : float, optional
        Seconds.
    seed : int
        Of the direction in which it starts.

    Returns
    -------
    ReferenceResult
    """
    n = start.size
    first = start_near(start, seed=seed)
    function = getattr(problem, "residual", problem)
    scale = np.asarray(getattr(problem, "scale", 1.0), dtype=np.float64)
    work = WorkCounts()
    began = time.monotonic()
    best, best_norm = first, float("inf")

    def residual(x: FloatArray) -> FloatArray:
        nonlocal best, best_norm
        if budget is not None and time.monotonic() - began > budget:
            raise _OutOfTimeError
        work.operator_products += 1
        scaled: FloatArray = np.asarray(function(x.copy()), dtype=np.float64) / scale
        norm = float(np.sqrt(np.mean(scaled**2)))
        if norm < best_norm:
            best, best_norm = x.copy(), norm
        return scaled

    outcome = "iteration limit"
    try:
        with np.errstate(all="ignore"):
            if n <= DENSE:
                root(residual, first, method="hybr", options={"xtol": 1e-14, "maxfev": 400 * (n + 1)})
            else:
                newton_krylov(
                    residual, first, f_tol=1e-2 * tolerance, maxiter=40, method="gmres",
                    inner_M=_preconditioner(problem, start),
                )  # fmt: skip
    except _OutOfTimeError:
        outcome = "budget used up"
    except (NoConvergence, ValueError, ArithmeticError, np.linalg.LinAlgError):
        outcome = "iteration limit"
    converged = bool(best_norm <= tolerance)
    outcome = "converged" if converged else outcome
    iterations = work.operator_products
    return ReferenceResult(best, converged, outcome, iterations, float("nan"), None, work)
