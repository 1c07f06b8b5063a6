"""The simplex: nonnegative with a given total."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..pieces import Pieces
from ..validate import scalar
from .convex_set import FEASIBLE, ConvexSet, falling_root, smooth_plus, threshold
from .derivative import LowRankDerivative

FloatArray = npt.NDArray[np.float64]


class Simplex(ConvexSet):
    """{u >= 0, sum_i w_i u_i = total}: portfolios, probabilities, a budget to be used up.

    Parameters
    ----------
    total : float
        Positive, in the unit of u times that of the weights.
    weights : float or array, shape (n,), optional
        w, the inner product in which it projects and the weights of the sum; ones by default. Weights of a problem
        must be proportional to them.

    Raises
    ------
    InputError
        For a total or weights that are not positive.

    Notes
    -----
    The projection is max(0, v - t), t by a finite Newton iteration (see `convex_set.threshold`); time and memory are
    linear in n, without a sort. Derivative: diag(A) - 1_A w_A' / w(A), A the positive components. Selection at kinks:
    a component with v_i = t is zero and not in A.

    Smoothed map: max(0, x) by (x + sqrt(x^2 + 4 eps^2)) / 2, with the threshold that makes the sum right; it stays
    inside the set and differs from the projection by at most (1 + 2 w(all) / w_min) eps in a component.
    """

    def __init__(self, total: float = 1.0, weights: Any = None) -> None:
        super().__init__(weights=weights)
        self.total = scalar(total, "total", positive=True)

    def __repr__(self) -> str:
        return f"Simplex(total={self.total:g})"

    def contains(self, u: FloatArray) -> bool:
        """Whether u is nonnegative with the right total, up to rounding."""
        slack = FEASIBLE * self.total
        w = self.weights
        return bool((w * u >= -slack).all()) and abs(float((w * u).sum()) - self.total) <= slack

    def _support(self, y: FloatArray) -> float:
        return self.total * float(y.max())

    def _gaps(self, v: FloatArray) -> FloatArray:
        """V - t, measured from the largest component, so that a common offset costs no digit."""
        gaps = v - v.max()
        gaps -= threshold(gaps, self.weights, self.total)
        return gaps

    def _project(self, v: FloatArray) -> FloatArray:
        gaps = self._gaps(v)
        return np.maximum(gaps, 0.0, out=gaps)

    def _derivative(self, v: FloatArray) -> LowRankDerivative:
        active = (self._gaps(v) > 0.0).astype(np.float64)
        mass = float((self.weights * active).sum())
        return LowRankDerivative(active, active[:, None], np.array([1.0 / mass]), self.weights)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component zero (0) or positive (1)."""
        labels = (self._gaps(v) > 0.0).astype(np.int8)
        return Pieces({"control": labels}, {"control": ("zero", "positive")})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to where component i changes its label, in the weighted norm, over sqrt(w_i)."""
        gaps = self._gaps(v)
        active = gaps > 0.0
        mass = float((self.weights * active).sum())
        square = 1.0 + np.where(active, -self.weights, self.weights) / mass
        return distances(gaps, square)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, LowRankDerivative]:
        w = self.weights
        low = threshold(v, w, self.total)  # the smoothed sum is larger
        mass = float((w * np.ones(v.shape)).sum())

        def excess(t: float) -> tuple[float, float]:
            value, slope = smooth_plus(v - t, eps)
            return float((w * value).sum()) - self.total, -float((w * slope).sum())

        high = low + eps
        while excess(high)[0] > 0.0:
            high += 2.0 * (high - low) + eps
        t = falling_root(excess, low, high, self.total + eps * mass)
        value, slope = smooth_plus(v - t, eps)
        coefficient = np.array([1.0 / float((w * slope).sum())])
        return value, LowRankDerivative(slope, slope[:, None], coefficient, w)


def distances(gaps: FloatArray, squares: FloatArray) -> FloatArray:
    """|gap| / sqrt(square), inf where the gap cannot close (square 0 up to rounding)."""
    squares = np.broadcast_to(squares, gaps.shape)
    result = np.full(gaps.shape, np.inf)
    movable = squares > 1e-14 * squares.max(initial=0.0)
    result[movable] = np.abs(gaps[movable]) / np.sqrt(squares[movable])
    return result
