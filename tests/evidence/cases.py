"""Equations and problems whose rate, roots and errors are known."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp

import ssn


class Given:
    """An equation from two functions."""

    def __init__(self, residual: Callable, derivative: Callable, start: Any, scale: Any = 1.0) -> None:
        self._residual, self._derivative = residual, derivative
        self.start, self.scale = np.asarray(start, dtype=float), scale

    def residual(self, x):
        return self._residual(x)

    def linearize(self, x):
        return ssn.Linearization(self._residual(x), self._derivative(x))


def laplacian(n: int) -> np.ndarray:
    return 2.0 * np.eye(n) - np.eye(n, k=1) - np.eye(n, k=-1)


def kinked(n: int = 20, *, change: Callable | None = None) -> Given:
    """K u + 5 max(0, u - 1) = 0.3: piecewise affine, the solution touches both pieces.

    `change` turns the right derivative function into a wrong one.
    """
    K = laplacian(n)

    def derivative(x):
        return K + np.diag(5.0 * (x > 1.0))

    return Given(
        lambda x: K @ x + 5.0 * np.maximum(0.0, x - 1.0) - 0.3,
        derivative if change is None else change(derivative),
        np.full(n, 3.0),
    )


def powers(order: float, n: int = 20) -> Given:
    """x - 1 + max(0, x - 1)^order = 0: full Newton steps converge with this order, and exactly from below."""
    return Given(
        lambda x: (x - 1.0) + np.maximum(0.0, x - 1.0) ** order,
        lambda x: np.diag(1.0 + order * np.maximum(0.0, x - 1.0) ** (order - 1.0)),
        np.full(n, 3.0),
    )


def fixed_slope(slope: float = 0.3, n: int = 20) -> Given:
    """x - 1 + slope sin(x - 1) = 0 with derivative I: contraction `slope`."""
    return Given(lambda x: x - 1.0 + slope * np.sin(x - 1.0), lambda x: np.eye(n), np.full(n, 3.0))


@dataclass(frozen=True)
class AlwaysHalved:
    """Half of every Newton step."""

    name: str = "halved"

    def advance(self, equation, at, direction):
        trial = equation.evaluate(at.x + 0.5 * direction.vector)
        return ssn.protocols.StepOutcome(trial, 0.5, 1, "halved")

    def tightened(self):
        return None


def control(
    n: int = 12, alpha: float = 1e-4, beta: float = 1e-3, bound: float = 20.0, *,
    kind: type = ssn.ControlProblem, state: type = ssn.SteadyState, cost: type = ssn.SparseCost,
    convection: float = 0.0, source: float = 0.0,
) -> Any:  # fmt: skip
    """Sparse control of a convection-diffusion equation on the square, with bounds, lumped masses h^2."""
    h = 1.0 / (n + 1)
    x = np.linspace(h, 1.0 - h, n)
    one = sp.eye_array(n)
    K = sp.csr_array(laplacian(n))
    drift = sp.diags_array([-np.ones(n - 1), np.ones(n - 1)], offsets=[-1, 1])
    E = sp.kron(K, one) + sp.kron(one, K) + convection * h * sp.kron(drift, one)
    x1, x2 = np.meshgrid(x, x, indexing="ij")
    target = (np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2) * np.exp(2 * x1) / 6).ravel()
    mass = np.full(n * n, h * h)
    return kind(
        state=state(E), target=target, cost=cost(beta, -bound, bound), control_weight=alpha,
        state_mass=mass, control_mass=mass, source=None if source == 0.0 else source * mass,
    )  # fmt: skip


def least_squares(
    m: int = 30,
    n: int = 20,
    beta: float = 2.0,
    *,
    kind: type = ssn.CompositeProblem,
    cost: type = ssn.SparseCost,
) -> Any:
    rng = np.random.default_rng(5)
    part = ssn.LeastSquares(rng.standard_normal((m, n)), rng.standard_normal(m))
    return kind(smooth=part, cost=cost(beta))


@dataclass(frozen=True)
class Curved:
    """f(u) = 1/2 ||tanh(u) - b||^2 + 1/20 ||u||^2: a nonlinear least-squares part with a large residual.

    `gauss_newton` leaves the second-order term out of the Hessian; `lost` changes a term of gradient and Hessian,
    but not of the value; `skew` makes the Hessian unsymmetric.
    """

    b: np.ndarray
    gauss_newton: bool = False
    lost: float = 0.0
    skew: float = 0.0
    affine_gradient = False

    @property
    def size(self) -> int:
        return self.b.size

    def value(self, u):
        misfit = np.tanh(u) - self.b
        return float(0.5 * misfit @ misfit + 0.05 * u @ u)

    def gradient(self, u):
        t = np.tanh(u)
        return (t - self.b) * (1.0 - t * t) + (0.1 - self.lost) * u

    def hessian(self, u):
        t = np.tanh(u)
        second = 0.0 if self.gauss_newton else -2.0 * t * (1.0 - t * t) * (t - self.b)
        matrix = np.diag((1.0 - t * t) ** 2 + second + 0.1 - self.lost)
        if self.skew:
            matrix[0, -1] += self.skew
        return matrix


def curved(n: int = 12, **options: Any) -> ssn.CompositeProblem:
    part = Curved(np.linspace(-0.9, 1.2, n), **options)
    return ssn.CompositeProblem(smooth=part, cost=ssn.SparseCost(0.05, -0.6, 1.0))


def complementarity(n: int = 15, *, cubic: float = 1.0, wrong: float = 0.0) -> ssn.ComplementarityProblem:
    """M x + cubic x^3 - q complementary to x >= 0.1, M not symmetric; `wrong` changes F' only."""
    M = laplacian(n) + 0.5 * np.eye(n, k=1) + 0.2 * np.eye(n)
    return ssn.ComplementarityProblem(
        ssn.SmoothMap(
            lambda x: M @ x + cubic * x**3 - np.linspace(-1.0, 2.0, n),
            lambda x: M + np.diag((3.0 - wrong) * cubic * x**2),
        ),
        lower=0.1,
        size=n,
    )


def linear_complementarity(n: int = 15) -> ssn.ComplementarityProblem:
    M = laplacian(n) + 0.5 * np.eye(n, k=1) + 0.2 * np.eye(n)
    return ssn.ComplementarityProblem(ssn.AffineMap(M, np.linspace(1.0, -2.0, n)))


def obstacle(n: int = 15) -> ssn.ComplementarityProblem:
    return ssn.ComplementarityProblem(ssn.AffineMap(laplacian(n), np.linspace(-0.4, 0.3, n)), 0.0, 1.5)


def names(checks: Any) -> set[str]:
    """Names of the checks that do not hold."""
    return {check.name for check in checks if not check.holds}
