"""First-order primal-dual method: the independent reference for several nonsmooth terms with linear operators."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np

from .duality_gap import certify
from .errors import InputError
from .reference import ReferenceResult
from .sum_problem import SumProblem
from .validate import count, float_array, scalar


def primal_dual(
    problem: Any,
    start: Any = None,
    *,
    tolerance: float = 1e-7,
    budget: float | None = None,
    max_iterations: int = 200_000,
    callback: Callable[[int, float], None] | None = None,
) -> ReferenceResult:
    """Proximal steps in u and y by turns; needs products with K, gradients of f and proximal maps only.

    Parameters
    ----------
    problem : SumProblem
    start : array, optional
        Zero by default.
    tolerance : float
        Bound on both relative errors of `SumProblem.accuracy_of`, looked at every 25 iterations.
    budget : float, optional
        Seconds.
    max_iterations : int
    callback : callable, optional
        Gets the iteration number and the larger error.

    Returns
    -------
    ReferenceResult

    Raises
    ------
    InputError
        For another kind of problem.

    Notes
    -----
    Steps tau, s with 1/tau - s ||K||^2 >= L/2, balanced between primal and dual errors while they differ by more than a
    factor of ten. Sources: A. Chambolle and T. Pock, J. Math. Imaging Vision 40 (2011) 120-145; L. Condat, J. Optim.
    Theory Appl. 158 (2013) 460-479 (both from memory).
    """
    if not isinstance(problem, SumProblem):
        raise InputError(f"primal_dual is for SumProblem, got {type(problem).__name__}")
    tolerance = scalar(tolerance, "tolerance", positive=True)
    count(max_iterations, "max_iterations")
    before = problem.work.copy()
    began = time.monotonic()
    u = (
        np.zeros(problem.unknowns)
        if start is None
        else float_array(start, "start", shape=(problem.unknowns,))
    )
    y = np.zeros(int(problem.splits[-1]))
    norm, curvature = problem.operator_norm(), 1.05 * problem.curvature()
    ratio = 1.0
    outcome, converged, accuracy, iteration = "iteration limit", False, np.inf, 0
    for iteration in range(1, max_iterations + 1):
        s = ratio / norm
        tau = 0.99 / (s * norm**2 + 0.5 * curvature)
        new = u - tau * (problem.gradient(u) + problem.adjoint(y))
        w = y + s * problem.arguments(2.0 * new - u)
        y = w - s * problem.prox(w / s, 1.0 / s)
        u = new
        if not np.isfinite(u).all():
            outcome = "not finite"
            break
        if iteration % 25 == 0:
            stationarity, terms = problem.accuracy_of(u, y)
            accuracy = max(stationarity, terms)
            if callback is not None:
                callback(iteration, accuracy)
            if accuracy <= tolerance:
                outcome, converged = "converged", True
                break
            if iteration <= 5000 and iteration % 100 == 0:
                if terms > 10 * stationarity:
                    ratio *= 2.0
                elif stationarity > 10 * terms:
                    ratio *= 0.5
            if budget is not None and time.monotonic() - began > budget:
                outcome = "budget used up"
                break
    objective = problem.objective(u, slack=1e-4)
    _, certificate = certify(problem, u, y) if np.isfinite(u).all() else (None, None)
    bound = None if certificate is None else certificate.bound
    return ReferenceResult(u, converged, outcome, iteration, objective, bound, problem.work.since(before))
