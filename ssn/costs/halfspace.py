"""Half-spaces and hyperplanes: one linear inequality or equation."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import ProxDerivative
from ..validate import float_array, scalar
from .convex_set import FEASIBLE, ConvexSet, smooth_plus
from .derivative import DiagonalDerivative, LowRankDerivative

FloatArray = npt.NDArray[np.float64]

# angle between a normal and a subgradient, as a sine, that counts as rounding in the support function
PARALLEL = 1e-9
# what is left of a component, relative to it, that is rounding
ROUNDING = 4.0 * float(np.finfo(np.float64).eps)


class HalfSpace(ConvexSet):
    """{a'u <= level}: one linear inequality.

    Parameters
    ----------
    normal : array, shape (n,)
        a, plain coefficients (for an integral: the mass vector); not all zero.
    level : float
        In the unit of a'u.
    weights : float or array, shape (n,), optional
        w, the inner product in which it projects; ones by default. Weights of a problem must be proportional to them.

    Raises
    ------
    InputError
        For a zero normal or parameters that do not fit.

    Notes
    -----
    With s = (a'v - level) / ||a/w|| the projection is v - y max(0, s), y = (a/w) / ||a/w|| the unit normal in the
    product; derivative I, or I - y y' W where a'v > level. Selection on the boundary: the piece outside. Smoothed map:
    max(0, s) by (s + sqrt(s^2 + 4 eps^2)) / 2; it stays inside and differs from the projection by at most eps in norm.
    """

    def __init__(self, normal: Any, level: float, weights: Any = None) -> None:
        self.normal = float_array(normal, "normal", ndim=1)
        if not self.normal.any():
            raise InputError("normal is zero: it bounds no half-space")
        self.normal.setflags(write=False)
        self.level = scalar(level, "level")
        super().__init__(self.normal.size, weights)
        direction = self.normal / self.weights
        self._length = float(np.sqrt(self.normal @ direction))
        self._unit: FloatArray = direction / self._length

    def _excess(self, v: FloatArray) -> float:
        """Signed distance to the boundary, positive outside."""
        return (float(self.normal @ v) - self.level) / self._length

    def _rounding(self, u: FloatArray) -> float:
        return FEASIBLE * (abs(self.level) / self._length + float(np.sqrt((self.weights * u * u).sum())))

    def contains(self, u: FloatArray) -> bool:
        """Whether u satisfies the inequality, up to rounding."""
        return self._excess(u) <= self._rounding(u)

    def _support(self, y: FloatArray) -> float:
        """Finite on multiples of the unit normal only."""
        along = float((self.weights * y) @ self._unit)
        rest = y - along * self._unit
        size = float(np.sqrt((self.weights * y * y).sum()))
        if np.sqrt((self.weights * rest * rest).sum()) > PARALLEL * size or not self._admits(along, size):
            return float("inf")
        return along * self.level / self._length

    def _admits(self, along: float, size: float) -> bool:
        return along >= -PARALLEL * size

    def _outside(self, v: FloatArray) -> bool:
        return self._excess(v) >= 0.0

    def _project(self, v: FloatArray) -> FloatArray:
        if not self._outside(v):
            return v.copy()
        u = v - self._excess(v) * self._unit
        u[np.abs(u) <= ROUNDING * np.abs(v)] = 0.0  # what cancels to rounding is zero
        return u

    def _partial(self, slope: float) -> LowRankDerivative:
        return LowRankDerivative(np.ones(()), self._unit[:, None], np.array([slope]), self.weights)

    def _derivative(self, v: FloatArray) -> ProxDerivative:
        return self._partial(1.0) if self._outside(v) else DiagonalDerivative(np.ones(v.shape))

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label all components inside (0) or boundary (1)."""
        return self._one_label(self._outside(v), v, ("inside", "boundary"))

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to the boundary over sqrt(w)."""
        return self._spread(abs(self._excess(v)), v)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, ProxDerivative]:
        excess, slope = (float(x) for x in smooth_plus(np.asarray(self._excess(v)), eps))
        return v - excess * self._unit, self._partial(slope)


class Hyperplane(HalfSpace):
    """{a'u = level}: one linear equation; parameters as for `HalfSpace`.

    The projection is affine: one piece, no kink, and the smoothed map is the projection itself. The multiplier
    ``normal`` is a multiple of a/w of either sign.
    """

    def contains(self, u: FloatArray) -> bool:
        """Whether u satisfies the equation, up to rounding."""
        return abs(self._excess(u)) <= self._rounding(u)

    def _admits(self, along: float, size: float) -> bool:
        return True

    def _outside(self, v: FloatArray) -> bool:
        return True

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label all components plane (0)."""
        return self._one_label(False, v, ("plane",))

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return inf: there is no kink."""
        return self._spread(np.inf, v)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, ProxDerivative]:
        return self._project(v), self._partial(1.0)
