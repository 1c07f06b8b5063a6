"""Balls in the Euclidean and in the L1 norm."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import ProxDerivative
from ..validate import float_array, scalar
from .convex_set import FEASIBLE, ConvexSet, falling_root, smooth_plus, threshold
from .derivative import DiagonalDerivative, LowRankDerivative
from .simplex import distances

FloatArray = npt.NDArray[np.float64]

INSIDE, NEGATIVE, ZERO, POSITIVE = range(4)


class EuclideanBall(ConvexSet):
    """{||u - centre|| <= radius} in the norm of the weights: a bound on the energy of a control.

    Parameters
    ----------
    radius : float
        Positive, in the unit of the norm, sqrt(sum_i w_i u_i^2).
    centre : float or array, shape (n,)
        In the unit of u.
    weights : float or array, shape (n,), optional
        w, the inner product; ones by default. Weights of a problem must be proportional to them.

    Raises
    ------
    InputError
        For a radius or weights that are not positive, or a centre that does not fit.

    Notes
    -----
    Outside, with d = v - centre and y = d / ||d||: centre + radius y, derivative radius / ||d|| (I - y y' W). Selection
    on the sphere: the piece outside, with the smaller derivative. Smoothed map: the square of max(||d||, radius) by
    (||d||^2 + radius^2 + sqrt((||d||^2 - radius^2)^2 + (4 eps radius)^2)) / 2; it stays inside the ball and differs
    from the projection by at most eps in norm.
    """

    piecewise_affine = False

    def __init__(self, radius: float, centre: Any = 0.0, weights: Any = None) -> None:
        self.radius = scalar(radius, "radius", positive=True)
        self.centre = float_array(centre, "centre")
        if self.centre.ndim > 1:
            raise InputError(f"centre has shape {self.centre.shape}, expected a number or (n,)")
        self.centre.setflags(write=False)
        super().__init__(self.centre.size if self.centre.ndim else None, weights)

    def __repr__(self) -> str:
        return f"EuclideanBall(radius={self.radius:g})"

    def _offset(self, v: FloatArray) -> tuple[FloatArray, float]:
        d = v - self.centre
        return d, float(np.sqrt((self.weights * d * d).sum()))

    def contains(self, u: FloatArray) -> bool:
        """Whether u lies in the ball, up to rounding."""
        scale = self.radius + float(np.sqrt((self.weights * u * u).sum()))
        return self._offset(u)[1] <= self.radius + FEASIBLE * scale

    def _support(self, y: FloatArray) -> float:
        w = self.weights
        return float((w * y * self.centre).sum()) + self.radius * float(np.sqrt((w * y * y).sum()))

    def _project(self, v: FloatArray) -> FloatArray:
        d, size = self._offset(v)
        return v.copy() if size < self.radius else self.centre + (self.radius / size) * d

    def _radial(self, d: FloatArray, size: float, ratio: float, along: float) -> ProxDerivative:
        """Slope `ratio` across and `along` along d."""
        if size == 0.0:
            return DiagonalDerivative(np.full(d.shape, ratio))
        factors = (d / size)[:, None]
        return LowRankDerivative(np.asarray(ratio), factors, np.array([ratio - along]), self.weights)

    def _derivative(self, v: FloatArray) -> ProxDerivative:
        d, size = self._offset(v)
        if size < self.radius:
            return DiagonalDerivative(np.ones(v.shape))
        return self._radial(d, size, self.radius / size, 0.0)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label all components inside (0) or sphere (1)."""
        return self._one_label(not self._offset(v)[1] < self.radius, v, ("inside", "sphere"))

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to the sphere over sqrt(w)."""
        return self._spread(abs(self._offset(v)[1] - self.radius), v)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, ProxDerivative]:
        d, size = self._offset(v)
        r, over = self.radius, size * size - self.radius**2
        root = float(np.sqrt(over * over + (4.0 * eps * r) ** 2))
        larger = float(np.sqrt(0.5 * (size * size + r * r + root)))
        ratio = r / larger
        # ratio times (larger - size * its derivative) / larger
        along = 0.5 * ratio * (r * r * (1.0 - over / root) + 16.0 * (eps * r) ** 2 / root) / larger**2
        return self.centre + ratio * d, self._radial(d, size, ratio, along)


class L1Ball(ConvexSet):
    """{sum_i w_i |u_i| <= radius}: sparse vectors by a constraint.

    Parameters
    ----------
    radius : float
        Positive, in the unit of u times that of the weights.
    weights : float or array, shape (n,), optional
        w, the inner product in which it projects and the weights of the sum (a lumped mass: the L1 norm of the
        function); ones by default. Weights of a problem must be proportional to them.

    Raises
    ------
    InputError
        For a radius or weights that are not positive.

    Notes
    -----
    Outside, the projection is the shrinkage by the threshold t at which the sum is right (see
    `convex_set.threshold`); t is the multiplier of the constraint. Derivative: diag(A) - s_A (w s)_A' / w(A), A the
    nonzero components of the projection and s their signs. Selection at kinks: |v_i| = t is zero, and a point of the
    sphere counts as outside.

    Smoothed map: with p(x) = (x + sqrt(x^2 + 4 eps^2)) / 2 components are p(v_i - t) - p(-v_i - t), and t > 0 solves
    sum_i w_i (p(v_i - t) + p(-v_i - t)) + eps^2 w(all) / t = radius: the gradient of a smooth convex function, since
    the last term is that of a logarithmic barrier for t >= 0. Its error is of the order of eps.
    """

    def __init__(self, radius: float, weights: Any = None) -> None:
        super().__init__(weights=weights)
        self.radius = scalar(radius, "radius", positive=True)

    def __repr__(self) -> str:
        return f"L1Ball(radius={self.radius:g})"

    def _sum(self, u: FloatArray) -> float:
        return float((self.weights * np.abs(u)).sum())

    def contains(self, u: FloatArray) -> bool:
        """Whether u lies in the ball, up to rounding."""
        return self._sum(u) <= self.radius * (1.0 + FEASIBLE)

    def _support(self, y: FloatArray) -> float:
        return self.radius * float(np.abs(y).max())

    def _gaps(self, v: FloatArray) -> FloatArray | None:
        """|v| - t, t the threshold, measured from the largest size so that no digit is lost; None inside the ball."""
        size = np.abs(v)
        if (
            float((self.weights * size).sum() if self.weights.ndim else self.weights * size.sum())
            < self.radius
        ):
            return None
        top = float(size.max())
        size -= top
        t = threshold(size, self.weights, self.radius)
        size -= max(t, -top)  # at the sphere rounding may take t below zero
        return size

    def _project(self, v: FloatArray) -> FloatArray:
        gaps = self._gaps(v)
        if gaps is None:
            return v.copy()
        np.maximum(gaps, 0.0, out=gaps)
        return np.copysign(gaps, v, out=gaps)

    def _derivative(self, v: FloatArray) -> ProxDerivative:
        gaps = self._gaps(v)
        if gaps is None:
            return DiagonalDerivative(np.ones(v.shape))
        signs = np.where(gaps > 0.0, np.sign(v), 0.0)
        coefficient = np.array([1.0 / self._sum(signs)])
        return LowRankDerivative(np.abs(signs), signs[:, None], coefficient, self.weights)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label all components inside, or each one negative, zero or positive."""
        gaps = self._gaps(v)
        if gaps is None:
            labels = np.full(v.shape, INSIDE, dtype=np.int8)
        else:
            labels = np.where(v > 0.0, np.int8(POSITIVE), np.int8(NEGATIVE))
            labels[gaps <= 0.0] = ZERO
        return Pieces({"control": labels}, {"control": ("inside", "negative", "zero", "positive")})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to where component i changes its label, in the weighted norm, over sqrt(w_i)."""
        gaps = self._gaps(v)
        if gaps is None:
            return self._spread((self.radius - self._sum(v)) / np.sqrt(self._sum(np.ones(v.shape))), v)
        active = gaps > 0.0
        t = float((np.abs(v) - gaps).max())
        mass = self._sum(active.astype(np.float64))
        own = distances(gaps, 1.0 + np.where(active, -self.weights, self.weights) / mass)
        return np.minimum(own, self._spread(t * float(np.sqrt(mass)), v))

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, LowRankDerivative]:
        w = self.weights
        mass = self._sum(np.ones(v.shape))

        def excess(t: float) -> tuple[float, float]:
            up, rising = smooth_plus(v - t, eps)
            down, falling = smooth_plus(-v - t, eps)
            barrier = eps * eps * mass / t
            value = float((w * (up + down)).sum()) + barrier - self.radius
            return value, -float((w * (rising + falling)).sum()) - barrier / t

        low = high = float(np.abs(v).max()) + eps
        while excess(low)[0] < 0.0:
            low *= 0.25
        while excess(high)[0] > 0.0:
            high *= 2.0
        t = falling_root(excess, low, high, self.radius)
        up, rising = smooth_plus(v - t, eps)
        down, falling = smooth_plus(-v - t, eps)
        q = rising - falling
        coefficient = np.array([-1.0 / excess(t)[1]])
        return up - down, LowRankDerivative(rising + falling, q[:, None], coefficient, w)
