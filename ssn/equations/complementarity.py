"""The mid equation of a complementarity problem, with the Fischer-Burmeister merit behind it."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..inner import InnerProduct
from ..protocols import Evaluation, FallbackStep
from .general import least_squares_step
from .natural import NaturalEquation

FloatArray = npt.NDArray[np.float64]


class MidEquation(NaturalEquation):
    """mid(x - upper, x - lower, s F(x)) = 0 with residual search.

    Where no length along the Newton direction serves, a regularised least-squares step on the Fischer-Burmeister
    form is taken, whose squared norm is continuously differentiable and has the same roots.
    Source: A. Fischer, Optimization 24 (1992) 269-284 (from memory).
    """

    def __init__(self, problem: Any, step: FloatArray, magnitude: float) -> None:
        potential = problem.potential if problem.symmetric else None
        super().__init__(
            problem,
            problem.cost,
            step,
            problem.weights,
            potential=potential,
            magnitude=magnitude,
            work=problem.work,
        )
        self.preferred_search = "residual"
        self.lower, self.upper = problem.lower, problem.upper
        self.problem = problem

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """Projected gradient with a step below 1/L where F is a gradient, else Fischer-Burmeister."""
        if self.potential is not None:
            projected = self._projected_gradient(at)
            if projected is not None:
                return projected
        smooth = FischerBurmeister(self)
        point = smooth.evaluate(at.x)
        derivative = smooth.derivative(at.x)
        if isinstance(derivative, LinearOperator):
            return None
        return least_squares_step(smooth, point, derivative, np.ones(at.x.size))

    def _projected_gradient(self, at: Evaluation) -> FallbackStep | None:
        assert self.potential is not None
        here = (
            self.potential(at.x)
            if not (at.x < self.lower).any() and not (at.x > self.upper).any()
            else np.inf
        )
        t = 1.0
        for _ in range(40):
            x = np.clip(at.x - t * self.step * at.data.force, self.lower, self.upper)
            self.work.operator_products += 1
            value = self.potential(x)
            gap = x - at.x
            if value <= here - 0.1 * float((gap / self.step) @ gap) / (2 * t) and value < here:
                return FallbackStep(x, "projected gradient", here - value)
            t *= 0.5
        return None


class FischerBurmeister:
    """phi(a, b) = sqrt(a^2 + b^2) - a - b applied to (x - lower, s F) and, at the upper bound, (upper - x, -s F)."""

    def __init__(self, mid: MidEquation) -> None:
        self.mid = mid
        self.work = mid.work
        self.inner = InnerProduct(mid.weights)

    def _parts(self, x: FloatArray, force: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """phi, and its derivatives with respect to x_i and s F_i."""
        f = self.mid.step * force
        low, high = self.mid.lower, self.mid.upper
        value, dx, df = f.copy(), np.zeros_like(f), np.ones_like(f)
        has_high = np.isfinite(high)
        if has_high.any():  # inner function at the upper bound: -phi(upper - x, -f) plays the role of f
            a, b = (high - x)[has_high], -f[has_high]
            root = np.hypot(a, b)
            safe = np.where(root > 0, root, 1.0)
            pa, pb = (
                np.where(root > 0, a / safe, np.sqrt(0.5)) - 1,
                np.where(root > 0, b / safe, np.sqrt(0.5)) - 1,
            )
            value[has_high] = root - a - b
            dx[has_high], df[has_high] = -pa, -pb
        has_low = np.isfinite(low)
        if has_low.any():
            a, b = (x - low)[has_low], value[has_low]
            root = np.hypot(a, b)
            safe = np.where(root > 0, root, 1.0)
            pa, pb = (
                1 - np.where(root > 0, a / safe, np.sqrt(0.5)),
                1 - np.where(root > 0, b / safe, np.sqrt(0.5)),
            )
            value[has_low] = a + b - root
            dx[has_low] = pa + pb * dx[has_low]
            df[has_low] = pb * df[has_low]
        return value, dx, df

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The Fischer-Burmeister residual at x."""
        self.work.operator_products += 1
        force = self.mid.map.value(x)
        if not np.isfinite(force).all():
            return Evaluation(x, force, np.inf, np.inf, self.mid.cost.pieces(x, 1.0))
        residual, _, _ = self._parts(x, force)
        norm = self.inner.norm(residual)
        return Evaluation(x, residual, norm, norm, self.mid.cost.pieces(x, 1.0))

    def derivative(self, x: FloatArray) -> Any:
        """A generalised derivative at x."""
        jacobian = self.mid.jacobian(x)
        _, dx, df = self._parts(x, self.mid.map.value(x))
        if isinstance(jacobian, LinearOperator):
            return jacobian
        rows = df * self.mid.step
        if sp.issparse(jacobian):
            return sp.csr_array(sp.diags_array(dx) + sp.diags_array(rows) @ jacobian)
        return np.diag(dx) + rows[:, None] * np.asarray(jacobian)
