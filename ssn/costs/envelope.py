"""The convex envelope of a count or power cost together with a quadratic: what a lower bound stands on."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import scalar
from .convex_set import smooth_plus
from .count import CountCost
from .derivative import DiagonalDerivative

FloatArray = npt.NDArray[np.float64]

LEGEND = ("lower", "negative", "undecided, negative", "zero", "undecided, positive", "positive", "upper")
ZERO, LINE, CURVE, END = 0, 1, 2, 3


class ConvexEnvelope:
    """h** of h(u) = g(u) + alpha/2 u^2, g a `CountCost` or `PowerCost` with its bounds: the largest convex minorant.

    Parameters
    ----------
    cost : CountCost or PowerCost
        g.
    alpha : float
        Not negative; with 0 and without bounds the envelope is zero.

    Raises
    ------
    InputError
        For another cost or a negative alpha.

    Notes
    -----
    On each side of zero h** is the tangent from the origin up to the size t at which it touches h, and h beyond:
    t^(2-p) = 2 beta (1-p)/alpha (p = 0 for a count: t = sqrt(2 beta/alpha), slope sqrt(2 alpha beta)), or the bound
    where that is nearer. A component of size between 0 and t is undecided: there h** < h, and the more such
    components a minimiser of a sum with h** has, the wider the gap between the bound and what is attained.
    t and the slope are jump and size of the proximal map of g with step 1/alpha, and h* is known in closed form.
    Selection: each kink belongs to the piece nearer to zero. Source: biconjugates by direct calculation; J. E. Falk
    and R. M. Soland, Management Sci. 15 (1969) 550-569, for bounds by envelopes (from memory).
    """

    convex = True
    separable = True

    def __init__(self, cost: CountCost, alpha: Any) -> None:
        if not isinstance(cost, CountCost):
            raise InputError(f"cost must be a CountCost or PowerCost, got {type(cost).__name__}")
        self.cost, self.alpha = cost, scalar(alpha, "alpha", nonnegative=True)
        self.lower, self.upper, self.beta = cost.lower, cost.upper, cost.beta
        self.piecewise_affine = cost.piecewise_affine
        # for each side: sign, bound, size t of the tangent point, slope of the tangent
        self._sides = [(sign, bound, *self._tangent(bound)) for sign, bound in self._bounds()]

    def _bounds(self) -> tuple[tuple[float, FloatArray], tuple[float, FloatArray]]:
        return (1.0, self.upper), (-1.0, -self.lower)

    def _tangent(self, bound: FloatArray) -> tuple[FloatArray, FloatArray]:
        with np.errstate(divide="ignore", invalid="ignore"):
            free = self.cost._landing(self.beta / self.alpha) if self.alpha > 0 else np.full((), np.inf)
            free = np.where(self.beta > 0, free, 0.0)
            size = np.minimum(free, bound)
            inside = np.where((size > 0) & np.isfinite(size), size, 1.0)
            rate = self.beta * self.cost._price(inside) / inside + 0.5 * self.alpha * inside
        slope = np.where((size > 0) & np.isfinite(size), rate, 0.0)
        return size, np.where(bound > 0, slope, np.inf)

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.cost!r}, alpha={self.alpha:g})"

    @property
    def size(self) -> int | None:
        """Number of unknowns that the parameters fit; None for any."""
        return self.cost.size

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the parameters fit `size` unknowns."""
        self.cost.check_size(size)

    @property
    def tangent_sizes(self) -> tuple[FloatArray, FloatArray]:
        """The sizes t above and below zero up to which a component is undecided."""
        return self._sides[0][2], self._sides[1][2]

    # values

    def terms(self, u: FloatArray) -> FloatArray:
        """h**(u_i), bounds aside."""
        total = np.zeros(u.shape)
        for sign, _, size, slope in self._sides:
            part = np.maximum(sign * u, 0.0)
            line = np.where(part > 0, part * np.where(np.isfinite(slope), slope, 0.0), 0.0)
            curve = self.beta * self.cost._price(part) + 0.5 * self.alpha * part * part
            total += np.where(part > size, curve, line)
        return total

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of h**(u_i); inf where a bound is violated."""
        if (u < self.lower).any() or (u > self.upper).any():
            return float("inf")
        terms = self.terms(u)
        return float(terms.sum() if weights is None else weights @ terms)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of h*(y_i) = sup over u of u y_i - h(u): that of the envelope is the same."""
        total = np.zeros(y.shape)
        for sign, bound, _, slope in self._sides:
            force = sign * y
            rises = force > slope
            if self.alpha > 0:
                best, _ = self.cost._free(
                    np.where(rises, force, 0.0) / self.alpha,
                    np.broadcast_to(self.beta / self.alpha, y.shape),
                )
                best = np.minimum(best, bound)
            else:
                rises = rises & (force > 1e-12 * (1.0 + np.abs(y).max(initial=0.0)))
                best = np.broadcast_to(bound, y.shape)
            if (rises & np.isinf(best)).any():
                return float("inf")
            u = np.where(rises, best, 0.0)
            total += u * force - self.beta * self.cost._price(u) - 0.5 * self.alpha * u * u
        return float(total.sum() if weights is None else weights @ total)

    # the proximal map

    def _ends(self, step: float, side: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """The |v| at which the line, the curve and the bound begin."""
        _, bound, size, slope = self._sides[side]
        first = step * slope
        grown = 1.0 + step * self.alpha
        safe = np.where(np.isfinite(bound), bound, 1.0)
        end = grown * self.cost._reaches(safe, step * self.beta / grown)
        end = np.where(np.isfinite(bound), np.where(bound <= size, size + first, end), np.inf)
        return first, size + first, end

    def _curve(self, size: FloatArray, step: float) -> tuple[FloatArray, FloatArray]:
        """The stationary size on the curve that belongs to |v| = size, and its derivative."""
        grown = 1.0 + step * self.alpha
        u, rate = self.cost._free(size / grown, np.broadcast_to(step * self.beta / grown, size.shape))
        return u, rate / grown

    def _moved(self, v: FloatArray, step: float) -> tuple[FloatArray, FloatArray, npt.NDArray[np.int8]]:
        u: FloatArray
        u, rate, labels = np.zeros(v.shape), np.zeros(v.shape), np.full(v.shape, 3, dtype=np.int8)
        for k, (sign, bound, _, _) in enumerate(self._sides):
            first, second, last = self._ends(step, k)
            part = sign * v
            curve, sloped = self._curve(np.maximum(part, 0.0), step)
            line = part - np.where(np.isfinite(first), first, 0.0)
            where = np.zeros(v.shape, dtype=np.int8) + LINE * (part > first)
            where = np.where((part > first) & (part > second), CURVE, where)
            where = np.where((part > first) & (part >= last) & np.isfinite(last), END, where)
            moved = np.where(where == LINE, np.minimum(line, bound), 0.0)
            moved = np.where(where == CURVE, np.minimum(curve, bound), np.where(where == END, bound, moved))
            u = np.where(where > 0, sign * moved, u)
            rate = np.where(where == LINE, 1.0, np.where(where == CURVE, sloped, rate))
            labels = np.where(where > 0, 3 + int(sign) * where, labels).astype(np.int8)
        return u, rate, labels

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the minimiser of step h**(u) + 1/2 ||u - v||^2."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return self._moved(v, step)[0]

    def prox_derivative(self, v: FloatArray, step: float) -> DiagonalDerivative:
        """Return the diagonal: 0 at zero and at bounds, 1 on the tangents, that of the curve beyond."""
        return DiagonalDerivative(self._moved(v, step)[1])

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component; the undecided ones lie on a tangent."""
        return Pieces({"control": self._moved(v, step)[2]}, {"control": LEGEND})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of each v_i to the nearest end of a piece."""
        distance = np.full(v.shape, np.inf)
        for k, (sign, bound, _, _) in enumerate(self._sides):
            for end in self._ends(step, k):
                there = np.isfinite(end) & (bound > 0)
                gap = np.abs(sign * v - np.where(there, end, 0.0))
                distance = np.where(there, np.minimum(distance, gap), distance)
        return distance

    # the smoothed map: every max(0, x) in it by its smoothed form

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        u, rate = np.zeros(v.shape), np.zeros(v.shape)
        for k, (sign, bound, size, _) in enumerate(self._sides):
            first, _, _ = self._ends(step, k)
            open_ = np.broadcast_to(np.isfinite(first), v.shape)
            begin = np.where(open_, first, 0.0)
            moved, sloped = smooth_plus(sign * v - begin, eps)
            bends = np.broadcast_to(np.isfinite(size) & (size < bound), v.shape)
            at = np.where(bends, size, 0.0)
            over, share = smooth_plus(moved - at, eps)
            curve, curved = self._curve(np.maximum(at + over + begin, 0.0), step)
            moved = np.where(bends, moved - over + curve - at, moved)
            sloped = np.where(bends, sloped * (1.0 + share * (curved - 1.0)), sloped)
            ended = np.broadcast_to(np.isfinite(bound), v.shape)
            over, share = smooth_plus(moved - np.where(ended, bound, 0.0), eps)
            moved = np.where(ended, moved - over, moved)
            sloped = np.where(ended, sloped * (1.0 - share), sloped)
            u += np.where(open_, sign * moved, 0.0)
            rate += np.where(open_, sloped, 0.0)
        return u, rate

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return a smooth map that differs from the proximal map by at most 4 eps."""
        return self._smoothed(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> DiagonalDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return DiagonalDerivative(self._smoothed(v, step, eps)[1])

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split -grad f(u) into ``price``, a subgradient of h** without its bounds, and the bound force ``bounds``.

        ``bounds`` is positive at the upper bound, negative at the lower one, zero between.
        """
        price = subgradient.copy()
        for sign, bound, size, slope in self._sides:
            at_end = sign * u >= bound
            inside = np.where(bound > 0, bound, 1.0)
            inside = np.where(np.isfinite(inside), inside, 1.0)
            curve = self._slope(inside)
            least = np.where(bound > size, curve, slope)
            limit = np.where(bound > 0, least, 0.0)
            price = np.where(at_end, sign * np.minimum(sign * price, limit), price)
        return {"price": price, "bounds": subgradient - price}

    def _slope(self, size: FloatArray) -> FloatArray:
        """h'(size), size > 0."""
        return np.asarray(self.cost._slope_of_price(size) + self.alpha * size)
