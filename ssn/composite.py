"""Composite problems: minimise f(u) + g(u), f smooth, g a nonsmooth cost."""

from __future__ import annotations

import copy
from typing import Any, Self

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla
from scipy.sparse.linalg import LinearOperator

from .errors import InputError
from .inner import InnerProduct, relative
from .linear.boundary import product, transpose_product
from .protocols import Cost, SmoothPart
from .records import Certificate
from .smooth import LeastSquares
from .validate import weight_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


class CompositeProblem:
    """minimise f(u) + g(u).

    Parameters
    ----------
    smooth : SmoothPart
        `Quadratic`, `LeastSquares`, `Logistic`, or an object with value, gradient and hessian (Euclidean
        derivatives).
    cost : Cost
        g, weighted by `weights` where given.
    weights : array, shape (n,), optional
        Inner product of the unknown (a lumped mass); ones by default.
    size : int, optional
        Number of unknowns, for a user's smooth part without a ``size`` member.

    Raises
    ------
    InputError
        Naming what does not fit.
    """

    def __init__(
        self, *, smooth: SmoothPart, cost: Cost, weights: Any = None, size: int | None = None
    ) -> None:
        if not isinstance(smooth, SmoothPart):
            raise InputError(f"smooth must have value, gradient and hessian, got {type(smooth).__name__}")
        own = getattr(smooth, "size", None)
        if own is not None and size is not None and own != size:
            raise InputError(f"size is {size}, but the smooth part has {own} unknowns")
        n = own if own is not None else size
        if n is None:
            raise InputError(f"give size: {type(smooth).__name__} does not tell its number of unknowns")
        if not isinstance(cost, Cost):
            raise InputError(f"cost must have the members of ssn.Cost, got {type(cost).__name__}")
        self.unknowns = int(n)
        cost.check_size(self.unknowns)
        self.part, self.cost = smooth, cost
        self.weights = weight_array(weights, "weights", self.unknowns)
        if hasattr(cost, "check_weights"):
            cost.check_weights(self.weights)
        self.controls = InnerProduct(self.weights)
        self.work = WorkCounts()
        self.affine = bool(getattr(smooth, "affine_gradient", False))
        self.symmetric = True
        self._lipschitz: float | None = None
        self._strong: float | None = None

    def with_cost(self, cost: Cost) -> Self:
        """Return the same problem with another cost; operators, factors and work counters are shared."""
        if not isinstance(cost, Cost):
            raise InputError(f"cost must have the members of ssn.Cost, got {type(cost).__name__}")
        cost.check_size(self.unknowns)
        other = copy.copy(self)
        other.cost = cost
        return other

    @property
    def convex(self) -> bool:
        """Whether the problem is known to be convex: cost convex, f convex by its class or by its eigenvalues."""
        return bool(self.cost.convex) and (not self._quadratic_matrix_known() or self.strong_convexity >= 0.0)

    def _quadratic_matrix_known(self) -> bool:
        return self.affine and not isinstance(self.part, LeastSquares) and self.unknowns <= 2000

    # the natural map of the equation

    def value(self, u: FloatArray) -> FloatArray:
        """The Euclidean gradient of f, checked for shape."""
        gradient = np.asarray(self.part.gradient(u), dtype=np.float64)
        if gradient.shape != (self.unknowns,):
            raise InputError(f"the gradient has shape {gradient.shape}, expected ({self.unknowns},)")
        return gradient

    def derivative(self, u: FloatArray) -> Any:
        """The Hessian of f, checked for shape."""
        hessian = self.part.hessian(u)
        if getattr(hessian, "shape", None) != (self.unknowns, self.unknowns):
            raise InputError(
                f"the Hessian has shape {getattr(hessian, 'shape', None)}, expected n x n, n = {self.unknowns}"
            )
        return hessian

    @property
    def preconditioner(self) -> Any:
        """What the smooth part brings under this name for a Hessian that is a LinearOperator, else None."""
        return getattr(self.part, "preconditioner", None)

    def potential(self, u: FloatArray) -> float:
        """f(u)."""
        return float(self.part.value(u))

    # what the reference methods and the evidence see

    def smooth(self, u: FloatArray) -> tuple[float, FloatArray]:
        """Value and Riesz gradient of f."""
        self.work.operator_products += 2
        return self.potential(u), self.value(u) / self.weights

    def smooth_value(self, u: FloatArray) -> float:
        """f(u)."""
        self.work.operator_products += 1
        return self.potential(u)

    def objective(self, u: FloatArray) -> float:
        """f(u) + g(u)."""
        return self.smooth_value(u) + self.cost.value(u, self.weights)

    def lipschitz(self, u: FloatArray | None = None) -> float:
        """The largest eigenvalue of W^-1 f'' at u: exact up to 500 unknowns, else 30 power steps plus 5 percent."""
        if self._lipschitz is not None and self.affine:
            return self._lipschitz
        hessian = self.derivative(np.zeros(self.unknowns) if u is None else u)
        explicit = not isinstance(hessian, LinearOperator)
        if explicit and self.unknowns <= 500:
            dense = hessian.toarray() if hasattr(hessian, "toarray") else np.asarray(hessian)
            if not np.isfinite(dense).all():
                return 1.0
            root = np.sqrt(self.weights)
            bound = float(np.abs(sla.eigvalsh(dense / np.outer(root, root))).max())
        else:
            x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
            bound = 0.0
            for _ in range(30):
                size = self.controls.norm(x)
                if size == 0.0:
                    break
                x = product(hessian, x / size) / self.weights
                bound = self.controls.norm(x)
            bound *= 1.05
        self._lipschitz = bound if bound > 0.0 and np.isfinite(bound) else 1.0
        return self._lipschitz

    @property
    def strong_convexity(self) -> float:
        """The smallest eigenvalue of W^-1 f'' where it is constant, explicit and n <= 2000; 0 otherwise (unknown)."""
        if self._strong is None:
            self._strong = 0.0
            wide = isinstance(self.part, LeastSquares) and self.part.b.size < self.unknowns
            if self.affine and self.unknowns <= 2000 and not wide:  # fewer rows than columns: singular
                hessian = self.derivative(np.zeros(self.unknowns))
                if not isinstance(hessian, LinearOperator):
                    dense = hessian.toarray() if hasattr(hessian, "toarray") else np.asarray(hessian)
                    if not np.isfinite(dense).all():
                        return 0.0
                    root = np.sqrt(self.weights)
                    values = sla.eigvalsh(dense / np.outer(root, root))
                    rounding = (
                        10.0 * self.unknowns * np.finfo(float).eps * float(np.abs(values).max(initial=0.0))
                    )
                    least = float(values[0]) if values.size else 0.0
                    self._strong = least if abs(least) > rounding else 0.0
        return self._strong

    def natural_step(self) -> float:
        """A step just below 1/L."""
        return 0.95 / self.lipschitz()

    def accuracy(self, u: FloatArray) -> float:
        """||u - u'|| / ||u'||, u' the proximal gradient step of length 1/L from u."""
        step = self.natural_step()
        _, gradient = self.smooth(u)
        moved = self.cost.prox(u - step * gradient, step)
        return relative(self.controls.norm(u - moved), self.controls.norm(moved))

    def certify(self, u: FloatArray) -> tuple[FloatArray, Certificate | None]:
        """Return the certified point z = prox(u - s grad f(u)) and a distance bound where f is strongly convex.

        xi = (u - z)/s + grad f(z) - grad f(u) is a subgradient of f + g at z, so ||z - u*|| <= ||xi|| / mu.
        """
        mu = self.strong_convexity
        if mu <= 0.0 or not self.cost.convex:
            return u, None
        step = self.natural_step()
        _, here = self.smooth(u)
        z = self.cost.prox(u - step * here, step)
        _, there = self.smooth(z)
        xi = (u - z) / step + there - here
        rounding = 4.0 * np.finfo(float).eps * self.controls.norm(there) / mu
        bound = self.controls.norm(xi) / mu + rounding
        return z, Certificate(bound, relative(bound, self.controls.norm(z)), "||subgradient|| / mu", rounding)


class LeastSquaresMap:
    """A of a `LeastSquares` part as a tracking map, so that the dual equation serves."""

    def __init__(self, part: LeastSquares, weights: FloatArray, work: WorkCounts) -> None:
        self.part, self.work, self.weights = part, work, weights
        self.controls = InnerProduct(weights)
        self.observations = InnerProduct(part.weights)

    def forward(self, u: FloatArray) -> FloatArray:
        """A u."""
        self.work.operator_products += 1
        return product(self.part.A, u)

    def adjoint(self, q: FloatArray) -> FloatArray:
        """W^-1 A' Wy q."""
        self.work.operator_products += 1
        return transpose_product(self.part.A, self.part.weights * q) / self.weights
