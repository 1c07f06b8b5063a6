"""Extragradient with backtracking: the reference for complementarity where F is not a gradient."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.linalg as sla

from .complementarity import ComplementarityProblem
from .errors import InputError
from .inner import relative
from .protocols import FloatArray
from .reference import ReferenceResult
from .validate import count, float_array, scalar

DENSE = 2000
# relative size of x - y from which on differences of F are rounding
NOISE = 1e-14


def extragradient(
    problem: ComplementarityProblem,
    start: Any = None,
    *,
    tolerance: float = 1e-7,
    budget: float | None = None,
    max_iterations: int = 100_000,
    callback: Callable[[int, float], None] | None = None,
) -> ReferenceResult:
    """Solve a monotone complementarity problem by projections and values of F only.

    Parameters
    ----------
    problem : ComplementarityProblem
        With a monotone F; for others it may not converge, and says so.
    start : array, optional
        Zero, projected, by default.
    tolerance : float
        Stops when the bound on ||x - x*|| is within tolerance ||x|| where F is affine, strongly monotone and of at
        most 2000 unknowns, else when ||x - P(x - t F(x))|| <= tolerance^1.5 ||x|| / max(1, 1/t') with t' the step
        relative to the diagonal of F'.
    budget : float, optional
        Seconds.
    max_iterations : int
    callback : callable, optional
        Gets the iteration number and the figure that the stopping rule looks at.

    Returns
    -------
    ReferenceResult
        With the bound where there is one.

    Raises
    ------
    InputError
        For another kind of problem.

    Notes
    -----
    y = P(x - t F(x)), x <- P(x - t F(y)), t shortened until t ||F(x) - F(y)|| <= 0.9 ||x - y||: G. M. Korpelevich,
    Matekon 13 (1977) 35-49, and E. N. Khobotov, USSR Comput. Math. Math. Phys. 27 (1987) 120-127. Error bound
    ||x - x*|| <= (1 + t L) / (t mu) ||x - y||: J.-S. Pang, Math. Program. 79 (1997) 299-332. All from memory.
    """
    if not isinstance(problem, ComplementarityProblem):
        raise InputError(f"extragradient needs a ComplementarityProblem, got {type(problem).__name__}")
    tolerance = scalar(tolerance, "tolerance", positive=True)
    max_iterations = count(max_iterations, "max_iterations")
    low, high = problem.lower, problem.upper
    before = problem.work.copy()
    began = time.monotonic()
    x = problem.start() if start is None else float_array(start, "start", shape=(problem.unknowns,))
    x = np.clip(x, low, high)

    def force_at(point: FloatArray) -> FloatArray:
        problem.work.operator_products += 1
        return problem.value(point)

    mu, lipschitz = _monotonicity(problem)
    row_step = problem.row_step(x)
    unit = float(np.median(row_step))
    magnitude = problem.magnitude(x, row_step)
    t = unit
    outcome, bound, converged, iteration = "iteration limit", None, False, 0
    force = force_at(x)
    with np.errstate(over="ignore", invalid="ignore"):
        for iteration in range(1, max_iterations + 1):
            while True:  # shorten t
                y = np.clip(x - t * force, low, high)
                force_y = force_at(y)
                gap = float(np.linalg.norm(x - y))
                change = float(np.linalg.norm(force - force_y))
                noise = NOISE * max(float(np.linalg.norm(x)), magnitude)
                if gap <= noise or (np.isfinite(change) and t * change <= 0.9 * gap) or t < 1e-300:
                    break
                t = max(0.1 * t, min(0.7 * t, 0.8 * gap / change if np.isfinite(change) else 0.0))
            if not (np.isfinite(gap) and np.isfinite(force_y).all()):
                outcome = "not finite"
                break
            size = max(float(np.linalg.norm(x)), magnitude)
            if mu > 0.0:
                bound = (1.0 + t * lipschitz) / (t * mu) * gap
                figure = relative(bound, size)
                converged = figure <= tolerance
            else:
                figure = relative(gap * max(1.0, unit / t), size)
                converged = figure <= tolerance**1.5 or (gap <= NOISE * size and t >= unit)
            if callback is not None:
                callback(iteration, figure)
            if converged:
                outcome = "converged"
                break
            if budget is not None and time.monotonic() - began > budget:
                outcome = "budget used up"
                break
            generous = t * change <= 0.4 * gap
            x = np.clip(x - t * force_y, low, high)
            force = force_at(x)
            if not np.isfinite(force).all():
                outcome = "not finite"
                break
            if generous:
                t *= 1.5
    objective = float("nan")
    if problem.symmetric and outcome != "not finite":
        with np.errstate(over="ignore", invalid="ignore"):
            objective = problem.objective(x)
    return ReferenceResult(x, converged, outcome, iteration, objective, bound, problem.work.since(before))


def _monotonicity(problem: ComplementarityProblem) -> tuple[float, float]:
    """Modulus mu of strong monotonicity and Lipschitz constant of an affine F; (0, inf) where not known."""
    if not problem.affine or problem.unknowns > DENSE:
        return 0.0, float("inf")
    matrix = problem.derivative(problem.start())
    dense = matrix.toarray() if hasattr(matrix, "toarray") else np.asarray(matrix)
    values = sla.eigvalsh(0.5 * (dense + dense.T))
    norm = float(sla.norm(dense, 2))
    mu = float(values[0])
    return (mu, norm) if mu > 10.0 * problem.unknowns * np.finfo(float).eps * norm else (0.0, norm)
