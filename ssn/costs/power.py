"""Powers below one of the absolute value. Nonconvex."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..validate import scalar
from .convex_set import smooth_plus
from .count import CountCost

FloatArray = npt.NDArray[np.float64]

# Newton steps on the stationary size, from the right: quadratic, 7 at most are used
NEWTON_STEPS = 60


class PowerCost(CountCost):
    """g(u) = sum_i beta_i |u_i|^p, 0 < p < 1, lower_i <= u_i <= upper_i: between L1 and counting. Nonconvex.

    Parameters
    ----------
    beta : float or array, shape (n,)
        Not negative; in a problem with weights w the sum is sum_i w_i beta_i |u_i|^p.
    power : float
        p, in (0, 1).
    lower, upper : float or array, shape (n,), optional
        Bounds in the unit of u, lower <= 0 <= upper; infinite where there is none.

    Raises
    ------
    InputError
        As for `CountCost`, and for a power outside (0, 1).

    Notes
    -----
    With c = step beta the proximal map jumps at |v| = z + c p z^(p-1) from 0 to the size z = (2 c (1-p))^(1/(2-p)),
    and beyond is the larger root of u + c p u^(p-1) = |v|. In closed form for p = 1/2 (Z. Xu, X. Chang, F. Xu and H.
    Zhang, IEEE Trans. Neural Netw. Learn. Syst. 23 (2012) 1013-1027, from memory) and p = 2/3 (W. Cao, J. Sun and Z.
    Xu, J. Vis. Commun. Image Represent. 24 (2013) 31-41, from memory; here the quartic in u^(1/3) is solved by its
    cubic resolvent); else by Newton steps from |v|, which fall monotonically to the root because the left side is
    convex. A bound b < z moves the jump to |v| = c b^(p-1) + b/2.

    The derivative 1 / (1 - c p (1-p) u^(p-2)) lies between 1 and 1/(1 - p/2): it is no convex function's. Selection,
    smoothed map (with the root at the smoothed maximum of |v| and the jump) and how problems are solved: see
    `CountCost`. With p -> 0 the map tends to that of `CountCost`.
    """

    piecewise_affine = False

    def __init__(self, beta: Any, power: float = 0.5, lower: Any = -np.inf, upper: Any = np.inf) -> None:
        self.power = scalar(power, "power", positive=True)
        if self.power >= 1.0:
            raise InputError(f"power must lie below 1, got {self.power}; take SparseCost for 1")
        super().__init__(beta, lower, upper)

    def __repr__(self) -> str:
        return super().__repr__()[:-1] + f", power={self.power:g})"

    def _price(self, size: FloatArray) -> FloatArray:
        return np.asarray(size**self.power)

    def _landing(self, price: FloatArray) -> FloatArray:
        p = self.power
        return np.asarray((2.0 * price * (1.0 - p)) ** (1.0 / (2.0 - p)))

    def _reaches(self, size: FloatArray, price: FloatArray) -> FloatArray:
        safe = np.where(size > 0, size, 1.0)
        return np.where(size > 0, size + price * self.power * safe ** (self.power - 1.0), 0.0)

    def _free_jump(self, landing: FloatArray, price: FloatArray) -> FloatArray:
        return self._reaches(landing, price)

    def _free(self, size: FloatArray, price: FloatArray) -> tuple[FloatArray, FloatArray]:
        p = self.power
        landing = self._landing(price)
        least = self._reaches(landing, price)
        a = np.maximum(size, least)  # components bounded before the free jump: their bound decides
        a = np.where(a > 0, a, 1.0)
        k = p * price * a ** (p - 2.0)  # u = a w with w + k w^(p-1) = 1
        least_ratio = landing / a
        if p == 0.5:
            w = _half(k)
        elif p == 2.0 / 3.0:
            w = _two_thirds(k)
        else:
            w = np.ones_like(a)
            for _ in range(NEWTON_STEPS):
                previous, w = w, _newton(w, k, p, least_ratio)
                if (np.abs(w - previous) <= 1e-15 * w).all():
                    break
        w = _newton(w, k, p, least_ratio)  # takes what rounding has left
        return a * w, 1.0 / (1.0 - (1.0 - p) * k * w ** (p - 2.0))

    def _smoothed_free(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        """V times the ratio of the root to |v|, taken at the smoothed maximum of |v| and the jump."""
        price = np.broadcast_to(step * self.beta, v.shape)
        jump = self._reaches(self._landing(price), price)
        size = np.abs(v)
        over, rate = smooth_plus(size - jump, eps)
        a = jump + over
        u, slope = self._free(a, price)
        return v * u / a, u / a + size * rate * (slope - u / a) / a

    def _slope_of_price(self, u: FloatArray) -> FloatArray:
        size = np.where(u != 0, np.abs(u), 1.0)
        return self.beta * self.power * size ** (self.power - 1.0) * np.sign(u)


def _newton(w: FloatArray, k: FloatArray, p: float, least: FloatArray) -> FloatArray:
    """A Newton step on w + k w^(p-1) = 1, not below `least`."""
    rate = k * w ** (p - 1.0)
    return np.asarray(np.maximum(w - (w + rate - 1.0) / (1.0 - (1.0 - p) * rate / w), least))


def _half(k: FloatArray) -> FloatArray:
    """The larger root of w + k w^(-1/2) = 1 by the cosine formula for the cubic in sqrt(w)."""
    angle = np.arccos(np.clip(0.5 * 3.0**1.5 * k, -1.0, 1.0))
    return np.asarray(2.0 / 3.0 * (1.0 + np.cos(2.0 / 3.0 * (np.pi - angle))))


def _two_thirds(k: FloatArray) -> FloatArray:
    """The larger root of w + k w^(-1/3) = 1: y^4 - y + k = 0 for y = w^(1/3).

    The quartic is (y^2 + r y + ..)(y^2 - r y + ..) with z = r^2 the root of z^3 - 4 k z - 1 = 0, which is alone for
    |v| at or beyond the jump.
    """
    safe = np.maximum(k, 1e-30)
    third = np.sqrt(4.0 / 3.0 * safe)
    z = 2.0 * third * np.cosh(np.arccosh(np.maximum(0.5 / third**3, 1.0)) / 3.0)
    r = np.sqrt(z)
    y = 0.5 * (r + np.sqrt(np.maximum(2.0 / r - z, 0.0)))
    return np.asarray(y**3)
