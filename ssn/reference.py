"""Independent first-order methods. They share gradient and proximal map with the kernel, and nothing else."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from .errors import InputError
from .inner import relative
from .protocols import FloatArray
from .validate import count, float_array, scalar
from .work import WorkCounts


@dataclass(frozen=True)
class ReferenceResult:
    """What a reference method returns.

    Attributes
    ----------
    x : array
    converged : bool
        Whether the method's own stopping rule holds.
    outcome : str
        "converged", "budget used up", "iteration limit" or "not finite".
    iterations : int
    objective : float
    bound : float or None
        The method's own bound on ||x - x*|| (strongly convex problems), else None.
    work : WorkCounts
    """

    x: FloatArray
    converged: bool
    outcome: str
    iterations: int
    objective: float
    bound: float | None
    work: WorkCounts


def proximal_gradient(
    problem: Any,
    start: Any = None,
    *,
    tolerance: float = 1e-7,
    budget: float | None = None,
    max_iterations: int = 100_000,
    callback: Callable[[int, float], None] | None = None,
) -> ReferenceResult:
    """Accelerated proximal gradient with backtracking and restart.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, or ComplementarityProblem with a symmetric affine map
    start : array, optional
        Zero, projected, by default.
    tolerance : float
        Stops when ||subgradient|| / mu <= tolerance ||x|| where the problem is strongly convex with known modulus mu,
        else when the proximal gradient step is below tolerance^1.5 ||x||.
    budget : float, optional
        Seconds.
    max_iterations : int
    callback : callable, optional
        Gets the iteration number and the figure that the stopping rule looks at.

    Returns
    -------
    ReferenceResult

    Raises
    ------
    InputError
        For a problem without an objective.

    Notes
    -----
    A. Beck and M. Teboulle, SIAM J. Imaging Sci. 2 (2009) 183-202; gradient restart: B. O'Donoghue and E. Candes,
    Found. Comput. Math. 15 (2015) 715-732. For an affine gradient one evaluation an iteration serves, since the
    gradient at the extrapolated point is a combination of known ones.
    """
    tolerance = scalar(tolerance, "tolerance", positive=True)
    max_iterations = count(max_iterations, "max_iterations")
    if not hasattr(problem, "smooth") or (hasattr(problem, "symmetric") and not problem.symmetric):
        raise InputError(
            "proximal_gradient needs an objective; use extragradient for complementarity without one"
        )
    controls, cost = problem.controls, problem.cost
    mu = float(problem.strong_convexity) if cost.convex else 0.0  # a modulus of f alone proves nothing then
    affine = bool(getattr(problem, "affine", True))
    before = problem.work.copy()
    began = time.monotonic()
    u = (
        np.zeros(problem.unknowns)
        if start is None
        else float_array(start, "start", shape=(problem.unknowns,))
    )
    u = cost.prox(u, 1e-300)
    _, gradient = problem.smooth(u)
    y, gradient_y = u, gradient
    lipschitz = _first_lipschitz(problem, u, gradient)
    momentum = 1.0
    outcome, bound, converged = "iteration limit", None, False
    iteration = 0
    for iteration in range(1, max_iterations + 1):
        if not affine and y is not u:
            _, gradient_y = problem.smooth(y)
        while True:
            z = cost.prox(y - gradient_y / lipschitz, 1.0 / lipschitz)
            _, gradient_z = problem.smooth(z)
            gap = z - y
            gap_norm = controls.norm(gap)
            curvature = controls.dot(gradient_z - gradient_y, gap)
            noise = 1e-14 * controls.norm(gradient_z) * gap_norm
            if (
                not np.isfinite(curvature)
                or curvature <= lipschitz * gap_norm**2 + noise
                or lipschitz > 1e300
            ):
                break
            lipschitz *= 2.0
        if not (np.isfinite(gap_norm) and np.isfinite(gradient_z).all()):
            outcome = "not finite"
            break
        subgradient = controls.norm(gradient_z - gradient_y - lipschitz * gap)
        size = controls.norm(z)
        if mu > 0.0:
            bound = subgradient / mu
            figure = relative(bound, size)
            converged = figure <= tolerance
        else:
            figure = relative(max(gap_norm, subgradient / lipschitz), size)
            converged = figure <= tolerance**1.5
        restart = controls.dot(y - z, z - u) > 0.0
        next_momentum = 1.0 if restart else 0.5 * (1.0 + np.sqrt(1.0 + 4.0 * momentum * momentum))
        beta = 0.0 if restart else (momentum - 1.0) / next_momentum
        y = z + beta * (z - u) if beta else z
        gradient_y = gradient_z + beta * (gradient_z - gradient) if beta else gradient_z
        u, gradient, momentum = z, gradient_z, next_momentum
        if callback is not None:
            callback(iteration, figure)
        if converged:
            outcome = "converged"
            break
        if budget is not None and time.monotonic() - began > budget:
            outcome = "budget used up"
            break
    work = problem.work.since(before)
    return ReferenceResult(u, converged, outcome, iteration, problem.objective(u), bound, work)


def _first_lipschitz(problem: Any, u: FloatArray, gradient: FloatArray) -> float:
    """The curvature of the smooth part along a fixed rough direction and once along its image: a lower bound."""
    probe = np.cos(np.arange(problem.unknowns) * 0.7) + 1.5
    probe *= (1e-3 + problem.controls.norm(u)) / problem.controls.norm(probe)
    size = 0.0
    for _ in range(3):
        _, there = problem.smooth(u + probe)
        change = there - gradient
        size = problem.controls.norm(change) / problem.controls.norm(probe)
        if not (np.isfinite(size) and size > 0.0):
            return 1.0
        probe = change * (problem.controls.norm(probe) / problem.controls.norm(change))
    return size
