"""The natural residual R(x) = x - prox_{s g}(x - s F(x)), F a gradient or any smooth map.

With g = 0 within bounds it is the mid function of complementarity, mid(x - upper, x - lower, s F(x)). Its Newton
derivative I - D (I - s F'), D that of the proximal map, gives where D is diagonal the reduced system on the range
of D (bounds and L1: the inactive set)

    (F' + (1 - D)/(s D))_II d_I = -(R/(s D))_I - F'_IA d_A,   d_A = -R_A,

symmetric where F' is. Source: J.-S. Pang and L. Qi, SIAM J. Optim. 3 (1993) 443-465 (from memory).
"""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..inner import InnerProduct, relative
from ..pieces import Pieces
from ..protocols import Cost, Evaluation, FallbackStep, ProxDerivative
from ..work import WorkCounts

FloatArray = npt.NDArray[np.float64]

# relative error of an objective, with room for long sums
ROUNDING = 1e-14


class NaturalMap(Protocol):
    """F with its derivative, and the potential f where F = f'."""

    affine: bool
    symmetric: bool

    def value(self, x: FloatArray) -> FloatArray:
        """F(x), derivatives in the Euclidean sense."""
        ...

    def derivative(self, x: FloatArray) -> Any:
        """F'(x)."""
        ...


@dataclass(frozen=True)
class NaturalPoint:
    """What one evaluation knows."""

    force: FloatArray
    v: FloatArray
    moved: FloatArray
    derivative: ProxDerivative
    step: Any


class DiagonalSelection:
    """A diagonal derivative that comes from given pieces."""

    def __init__(self, diagonal: FloatArray) -> None:
        self.diagonal: FloatArray | None = diagonal

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        assert self.diagonal is not None
        return (self.diagonal * directions.T).T


class NaturalEquation:
    """R(x) = 0 for a map, a cost and a step.

    Parameters
    ----------
    natural_map : NaturalMap
    cost : Cost
    step : float or array
        s > 0; an array only where the proximal map does not depend on it (bounds).
    weights : array, shape (n,)
        Inner product of the unknown.
    potential : callable, optional
        f with F = f'; brings the envelope and the proximal gradient fallback.
    magnitude : float
        Size of the unknown below which accuracy is no longer relative; 0 keeps it relative.
    eps : float
        Smoothing parameter in the unit of the unknown; with eps > 0 the proximal map takes its smoothed form and the
        accuracy is the root mean square of the residual divided by eps.
    """

    def __init__(
        self,
        natural_map: NaturalMap,
        cost: Cost,
        step: Any,
        weights: FloatArray,
        *,
        potential: Callable[[FloatArray], float] | None = None,
        magnitude: float = 0.0,
        work: WorkCounts | None = None,
        eps: float = 0.0,
    ) -> None:
        self.map, self.cost, self.step = natural_map, cost, step
        self.inner = InnerProduct(weights)
        self.weights = weights
        self.potential = potential
        self.magnitude = magnitude
        self.eps = eps
        self.work = work if work is not None else WorkCounts()
        self.piecewise_affine = bool(natural_map.affine)
        self.symmetric = bool(natural_map.symmetric)
        self._best_norm = np.inf
        self._derivative_at: tuple[Any, Any] = (None, None)
        self.first_pieces: Pieces | None = None
        self.linear_note = ""  # what the linear solver has decided

    def evaluate(self, x: FloatArray) -> Evaluation:
        """One evaluation of F and one proximal map."""
        self.work.operator_products += 1
        force = self.map.value(x)
        if not np.isfinite(force).all():
            return Evaluation(x, force, np.inf, np.inf, Pieces())
        v = x - self.step * force / self.weights
        self.work.proximal_maps += 1
        if self.eps > 0.0:
            return self._smoothed_evaluation(x, force, v)
        moved = self.cost.prox(v, self._cost_step())
        residual = x - moved
        norm = self.inner.norm(residual)
        accuracy = relative(norm, max(self.inner.norm(moved), self.magnitude))
        if self.first_pieces is not None:
            return self._on_pieces(x, force, v, norm, accuracy)
        data = NaturalPoint(force, v, moved, self.cost.prox_derivative(v, self._cost_step()), self.step)
        return Evaluation(x, residual, norm, accuracy, self.cost.pieces(v, self._cost_step()), data)

    def _on_pieces(
        self, x: FloatArray, force: FloatArray, v: FloatArray, norm: float, accuracy: float
    ) -> Evaluation:
        """Residual and derivative of the given bound pieces (once), with norm and accuracy of the true residual."""
        assert self.first_pieces is not None
        pieces, self.first_pieces = self.first_pieces, None
        labels = pieces["control"]
        if labels.shape != x.shape:
            raise InputError(f"pieces have shape {labels.shape}, expected {x.shape}")
        bounds: Any = self.cost
        moved = np.where(labels == 0, bounds.lower, np.where(labels == 2, bounds.upper, v))
        if not np.isfinite(moved).all():
            index = int(np.argmin(np.isfinite(moved)))
            raise InputError(f"pieces put component {index} on a bound that is infinite")
        data = NaturalPoint(force, v, moved, DiagonalSelection((labels == 1).astype(np.float64)), self.step)
        return Evaluation(x, x - moved, norm, accuracy, pieces, data)

    def _smoothed_evaluation(self, x: FloatArray, force: FloatArray, v: FloatArray) -> Evaluation:
        moved = self.cost.smoothed_prox(v, self._cost_step(), self.eps)
        residual = x - moved
        norm = self.inner.norm(residual)
        derivative = self.cost.smoothed_prox_derivative(v, self._cost_step(), self.eps)
        accuracy = norm / (self.eps * float(np.sqrt(self.weights.sum())))
        return Evaluation(
            x, residual, norm, accuracy, Pieces(), NaturalPoint(force, v, moved, derivative, self.step)
        )

    def smoothed(self, eps: float) -> NaturalEquation:
        """The same equation with the smoothed proximal map; the unsmoothed one for eps = 0. Work is shared."""
        other = copy.copy(self)
        other.eps = eps
        return other

    def smoothing_scale(self, at: Evaluation) -> float:
        """A first smoothing parameter: the root mean square of the residual, or a thousandth of that of x."""
        size = float(np.sqrt(self.weights.sum()))
        return max(at.norm, 1e-3 * self.inner.norm(at.x), 1e-3 * self.magnitude) / size

    def _cost_step(self) -> float:
        return float(self.step) if np.ndim(self.step) == 0 else 1.0

    def jacobian(self, x: FloatArray) -> Any:
        """F'(x), evaluated once a point (once altogether for an affine F)."""
        known, derivative = self._derivative_at
        if derivative is None or not (self.map.affine or known is x):
            derivative = self.map.derivative(x)
            self._derivative_at = (x, derivative)
        return derivative

    def merit_line(self, at: Evaluation, direction: FloatArray) -> None:
        """None: no merit function that is cheap along a line."""
        return None

    # the forward-backward envelope, where there is a potential

    def envelope(self, at: Evaluation) -> float:
        """f(x) + <F, z - x> + ||z - x||^2 / (2 s) + g(z), z the proximal gradient point."""
        assert self.potential is not None
        point: NaturalPoint = at.data
        self.work.operator_products += 1
        gap = -at.residual
        value = self.potential(at.x) + float(point.force @ gap) + self.cost.value(point.moved, self.weights)
        return value + float((self.weights / self.step * gap) @ gap) / 2.0

    def envelope_decrease(self, at: Evaluation) -> float:
        """||x - z||^2 / (2 s)."""
        return float((self.weights / self.step * at.residual) @ at.residual) / 2.0

    def envelope_target(self, at: Evaluation, sigma: float) -> float:
        """The envelope value that a trial point must not exceed.

        Where the cost is not convex it is no more than the objective at the proximal gradient point z, so that the
        objective falls along the points z, up to rounding.
        """
        target = self.envelope(at) - sigma * self.envelope_decrease(at)
        if self.cost.convex:
            return target
        assert self.potential is not None
        self.work.operator_products += 1
        safe = self.potential(at.data.moved) + self.cost.value(at.data.moved, self.weights)
        return min(target, safe) + ROUNDING * abs(safe)

    def proximal_gradient_point(self, at: Evaluation) -> FloatArray:
        """Z of the evaluation."""
        moved: FloatArray = at.data.moved
        return moved

    def shrink_step(self, at: Evaluation) -> Evaluation:
        """Halve the step until the curvature of the potential along the proximal gradient step is below 1/s.

        By gradients, not by values: a value that does not belong to the gradient must not drive the step to zero.
        """
        if self.potential is None or self.piecewise_affine:
            return at
        for _ in range(60):
            gap = -at.residual
            there = self.map.value(at.data.moved)
            self.work.operator_products += 1
            curvature = float((there - at.data.force) @ gap)
            if np.isfinite(curvature) and curvature <= 1.9 * self.envelope_decrease(at):
                break
            self.step = 0.5 * self.step
            at = self.evaluate(at.x)
            self._best_norm = np.inf
        return at

    def is_best(self, at: Evaluation) -> bool:
        """Whether the residual norm is the smallest seen, which remembers it; never where the cost is not convex.

        There a small residual may belong to a worse point, and every step has to lower the envelope.
        """
        if not self.cost.convex:
            return False
        if at.norm < self._best_norm:
            self._best_norm = at.norm
            return True
        return False

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """The proximal gradient step, backtracked on the objective; for maps without a potential a damped step."""
        if self.potential is None:
            return None
        at = self.shrink_step(at)
        decrease = self.envelope_decrease(at)
        return FallbackStep(at.data.moved, "proximal gradient", decrease) if decrease > 0 else None
