"""Convex costs that are quadratic on each piece of the line, with an exact proximal map."""

from __future__ import annotations

import copy
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import bound_arrays, float_array
from .blocks import BLOCK, by_blocks, cut_parameter
from .derivative import DiagonalDerivative

FloatArray = npt.NDArray[np.float64]
ByteArray = npt.NDArray[np.int8]
BoolArray = npt.NDArray[np.bool_]

# a jump of the derivative below this fraction of its terms is the rounding of none
ROUNDING = 1e-14
# breakpoints up to which labels fit into a byte
SHORT = 60


class PiecewiseQuadraticCost:
    """g(u) = sum_i phi_i(u_i), phi_i convex, continuous, quadratic on each piece of an interval.

    Between the breakpoints b_j-1 and b_j phi(u) = 1/2 c_j u^2 + s_j u + constant; the constants follow from continuity
    and from the value at one point. Contains L1 (breakpoint 0, slopes -beta and beta), bounds, dead zones, hinge,
    quantile and Huber losses, and prices that differ by sign or amount.

    Parameters
    ----------
    breakpoints : array, shape (k,) or (n, k)
        b_1 < ... < b_k, in the unit of u; k = 0 is allowed. Those outside the domain of a component are not seen.
    slopes : array, shape (k + 1,) or (n, k + 1)
        s_j, cost per unit of u: the derivative on piece j is s_j + c_j u.
    curvatures : array, shape (k + 1,) or (n, k + 1), optional
        c_j >= 0; zero by default.
    lower, upper : float or array, shape (n,), optional
        The domain; infinite where it does not end.
    value_at : pair of float or array (n,), optional
        A point of the domain and phi there; by default phi = 0 at the point of the domain nearest to zero.

    Raises
    ------
    InputError
        For parameters that are not finite, not increasing, of different lengths, or not convex (with the index).

    Notes
    -----
    In a problem with weights w the sum is sum_i w_i phi_i(u_i), with the same proximal map: v - u in s d phi(u) gives
    u = (v - s s_j)/(1 + s c_j) on piece j and u = b_j where v lies in b_j + s [phi'(b_j-), phi'(b_j+)].
    Selection: kinks and bounds own their end points (derivative 0); where phi' has no jump at b_j (a change of
    curvature only) the left piece does.
    Labels count from the left: lower, piece 1, kink 1, piece 2, ..., upper.
    Source: R. T. Rockafellar and R. J.-B. Wets, Variational Analysis, 1998, ch. 11-12 (from memory).
    """

    convex = True
    separable = True
    piecewise_affine = True
    _words: tuple[str, ...] | None = (
        None  # names of piece, kink, piece, ..., for families that have better ones
    )

    def __init__(
        self,
        breakpoints: Any,
        slopes: Any,
        curvatures: Any = None,
        *,
        lower: Any = -np.inf,
        upper: Any = np.inf,
        value_at: tuple[Any, Any] | None = None,
    ) -> None:
        points = _table(breakpoints, "breakpoints")
        tilt = _table(slopes, "slopes")
        bend = np.zeros(tilt.shape) if curvatures is None else _table(curvatures, "curvatures")
        k = points.shape[-1]
        for name, table in (("slopes", tilt), ("curvatures", bend)):
            if table.shape[-1] != k + 1:
                raise InputError(f"{k} breakpoints make {k + 1} pieces, but {name} has {table.shape[-1]}")
        _refuse(np.diff(points, axis=-1) <= 0, "breakpoints must increase, which they do not after", points)
        _refuse(bend < 0, "curvatures must not be negative", bend)
        self.lower, self.upper = bound_arrays(lower, upper)
        at, value = (np.clip(0.0, self.lower, self.upper), 0.0) if value_at is None else value_at
        at, value = float_array(at, "the point of value_at"), float_array(value, "the value of value_at")
        shapes = [points.shape[:-1], tilt.shape[:-1], bend.shape[:-1], self.lower.shape, self.upper.shape]
        shapes += [at.shape, value.shape]
        try:
            shape = np.broadcast_shapes(*shapes)
        except ValueError as error:
            raise InputError(
                f"the parameters are for {shapes} unknowns, which do not fit together"
            ) from error
        if len(shape) > 1:
            raise InputError(f"parameters may vary along one axis, got {shape}")
        if ((at < self.lower) | (at > self.upper)).any():
            raise InputError(f"value_at must name a point of the domain, got {_brief(at)}")
        self.size: int | None = shape[0] if shape not in ((), (1,)) else None
        self._points = [points[..., j] for j in range(k)]
        self._slopes = [tilt[..., j] for j in range(k + 1)]
        self._curvatures = [bend[..., j] for j in range(k + 1)]
        self._hide_what_the_domain_hides()
        self._left, self._right = [], []  # one-sided derivatives at the breakpoints
        for j, b in enumerate(self._points):
            left = self._slopes[j] + self._curvatures[j] * b
            right = self._slopes[j + 1] + self._curvatures[j + 1] * b
            terms = np.abs(self._slopes[j]) + np.abs(self._curvatures[j] * b)
            terms = terms + np.abs(self._slopes[j + 1]) + np.abs(self._curvatures[j + 1] * b)
            bad = np.atleast_1d(left - right > ROUNDING * terms)
            if bad.any():
                index = int(np.argmax(bad))
                where = f" of component {index}" if bad.size > 1 else ""
                raise InputError(
                    f"not convex: the derivative falls at breakpoint {j}{where}, from "
                    f"{np.broadcast_to(left, bad.shape)[index]:.6g} to {np.broadcast_to(right, bad.shape)[index]:.6g}"
                )
            self._left.append(left)
            self._right.append(np.where(right - left > ROUNDING * terms, right, left))
        self._constants = [np.zeros(())]
        for j, b in enumerate(self._points):
            self._constants.append(self._constants[j] + self._polynomial(j, b) - self._polynomial(j + 1, b))
        self._offset = value - self._phi(at)

    def _hide_what_the_domain_hides(self) -> None:
        """Continue the outermost pieces that are seen over the breakpoints that are not."""
        k = len(self._points)
        for table in (self._slopes, self._curvatures):
            for j in reversed(range(k)):
                table[j] = np.where(self._points[j] <= self.lower, table[j + 1], table[j])
            for j in range(k):
                table[j + 1] = np.where(self._points[j] >= self.upper, table[j], table[j + 1])

    def __repr__(self) -> str:
        name, k = type(self).__name__, len(self._points)
        return f"{name}({k} breakpoints, lower={_brief(self.lower)}, upper={_brief(self.upper)})"

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the parameters fit `size` unknowns."""
        if self.size not in (None, size):
            raise InputError(f"{type(self).__name__} has parameters for {self.size} unknowns, not {size}")

    # the function

    def _polynomial(self, j: int, u: FloatArray) -> FloatArray:
        return (0.5 * self._curvatures[j] * u + self._slopes[j]) * u

    def _phi(self, u: FloatArray) -> FloatArray:
        """Phi without the offset."""
        result = self._polynomial(0, u)
        for j, b in enumerate(self._points):
            result = np.where(u > b, self._polynomial(j + 1, u) + self._constants[j + 1], result)
        return result

    def terms(self, u: FloatArray) -> FloatArray:
        """phi_i(u_i), inf outside the domain."""
        inside = (u >= self.lower) & (u <= self.upper)
        return np.where(inside, self._phi(u) + self._offset, np.inf)

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u); inf outside the domain."""
        terms = self.terms(u)
        if not np.isfinite(terms).all():
            return float("inf")
        return float(terms.sum() if weights is None else weights @ terms)

    def one_sided_derivatives(self, u: FloatArray) -> tuple[FloatArray, FloatArray]:
        """phi'(u-) and phi'(u+); -inf and inf where a bound ends the domain."""
        left = self._slopes[0] + self._curvatures[0] * u
        right = left
        for j, b in enumerate(self._points):
            inner = self._slopes[j + 1] + self._curvatures[j + 1] * u
            left = np.where(u > b, inner, left)
            right = np.where(u >= b, inner, right)
        return np.where(u <= self.lower, -np.inf, left), np.where(u >= self.upper, np.inf, right)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of phi_i*(y_i) = sup u y_i - phi_i(u), weighted where weights are given."""
        u = self._maximiser(y)
        with np.errstate(invalid="ignore"):
            terms = np.where(np.isfinite(u), u * y - self._phi(u) - self._offset, np.inf)
        if not np.isfinite(terms).all():
            return float("inf")
        return float(terms.sum() if weights is None else weights @ terms)

    def _maximiser(self, y: FloatArray) -> FloatArray:
        """A point at which u y - phi(u) is largest; infinite where there is none.

        A slope that equals y up to rounding on a piece without end is no reason for infinity.
        """
        found = self._invert(0, y, -np.inf)
        for j, b in enumerate(self._points):
            found = np.where(y >= self._left[j], b, found)
            found = np.where(y > self._right[j], self._invert(j + 1, y, b), found)
        return np.clip(found, self.lower, self.upper)

    def _invert(self, j: int, y: FloatArray, start: Any) -> FloatArray:
        """Where the derivative on piece j is y; without curvature the end of the piece that y points to."""
        slope, bend = self._slopes[j], self._curvatures[j]
        scale = np.max(np.broadcast_arrays(*(np.abs(s) for s in self._slopes)), axis=0)
        near = np.abs(y - slope) <= 1e-12 * (np.abs(y) + scale)
        ahead = self._points[j] if j < len(self._points) else np.inf
        end = np.where(y > slope, ahead, start)
        inside = start if j else (self._points[0] if self._points else np.clip(0.0, self.lower, self.upper))
        flat = np.where(near, inside, end)
        return np.where(bend > 0, (y - slope) / np.where(bend > 0, bend, 1.0), flat)

    # the proximal map

    def _labels(self, v: FloatArray, step: float) -> npt.NDArray[np.integer]:
        kind = np.int8 if len(self._points) <= SHORT else np.int64
        if v.ndim == 1 and v.size > BLOCK:
            if self.size is None and kind is np.int8:
                fill = self._labels_filler(step)
                return by_blocks(lambda cut, out, spare: fill(v[cut], out, spare), v.size, kind, [np.bool_])

            def part(cut: slice, out: npt.NDArray[np.integer]) -> None:
                out[:] = self._part(cut)._labels(v[cut], step)

            return by_blocks(part, v.size, kind)
        labels = np.ones(v.shape, dtype=kind)
        for j, b in enumerate(self._points):
            first, last = b + step * self._left[j], b + step * self._right[j]
            jump = self._right[j] > self._left[j]
            labels += np.where(jump, v >= first, v > first)
            labels += v > last
        low, high = self._ends(step)
        labels[v >= high] = 2 * len(self._points) + 2
        labels[(v <= low) | (self.lower == self.upper)] = 0
        return labels

    def _labels_filler(self, step: float) -> Callable[[FloatArray, ByteArray, BoolArray], None]:
        """A function that writes labels where all components have the same parameters."""
        tests: list[tuple[Any, float]] = []
        for j, b in enumerate(self._points):
            first = b + step * self._left[j]
            tests.append((np.greater_equal if self._right[j] > self._left[j] else np.greater, first.item()))
            tests.append((np.greater, (b + step * self._right[j]).item()))
        low, high = (end.item() for end in self._ends(step))
        last = np.int8(2 * len(self._points) + 2)
        fixed = bool((self.lower == self.upper).item())

        def fill(v: FloatArray, labels: ByteArray, spare: BoolArray) -> None:
            labels.fill(0 if fixed else 1)
            if fixed:
                return
            counted = spare.view(np.int8)
            for test, where in tests:
                test(v, where, out=spare)
                labels += counted
            np.greater_equal(v, high, out=spare)
            counted *= last
            np.maximum(labels, counted, out=labels)
            np.less_equal(v, low, out=spare)
            np.logical_not(spare, out=spare)  # not v > low: NaN must stay NaN
            labels *= counted

        return fill

    def _ends(self, step: float) -> tuple[FloatArray, FloatArray]:
        """Up to which v the lower and from which on the upper bound holds."""
        with np.errstate(invalid="ignore"):
            low = self.lower + step * (self._slopes[0] + self._curvatures[0] * self.lower)
            high = self.upper + step * (self._slopes[-1] + self._curvatures[-1] * self.upper)
        low = np.where(np.isfinite(self.lower), low, -np.inf)
        return low, np.where(np.isfinite(self.upper), high, np.inf)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the exact minimiser of step phi_i(u) + 1/2 (u - v_i)^2 for each component."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        if v.ndim == 1 and v.size > BLOCK:
            if self.size is None and len(self._points) <= SHORT:
                return self._from_tables(v, step)

            def fill(cut: slice, out: FloatArray) -> None:
                out[:] = self._part(cut)._exact(v[cut], step)

            return by_blocks(fill, v.size)
        return self._exact(v, step)

    def _part(self, cut: slice) -> PiecewiseQuadraticCost:
        """The cost of the components of a slice, as far as the proximal map needs it."""
        if self.size is None:
            return self
        other = copy.copy(self)
        other.lower, other.upper = cut_parameter(self.lower, cut), cut_parameter(self.upper, cut)
        for name in ("_points", "_slopes", "_curvatures", "_left", "_right"):
            setattr(other, name, [cut_parameter(table, cut) for table in getattr(self, name)])
        return other

    def _exact(self, v: FloatArray, step: float) -> FloatArray:
        labels = self._labels(v, step)
        u = np.asarray((v - step * self._slopes[0]) / (1.0 + step * self._curvatures[0]))
        for j, b in enumerate(self._points):
            inner = (v - step * self._slopes[j + 1]) / (1.0 + step * self._curvatures[j + 1])
            u = np.where(labels == 2 * j + 2, b, np.where(labels > 2 * j + 2, inner, u))
        u = np.where(labels == 0, self.lower, u)
        return np.clip(np.where(labels == 2 * len(self._points) + 2, self.upper, u), self.lower, self.upper)

    def _from_tables(self, v: FloatArray, step: float) -> FloatArray:
        """The map where all components have the same parameters: a few numbers, looked up by label."""
        k, write_labels = len(self._points), self._labels_filler(step)
        shift, stretch, fixed = np.zeros(2 * k + 3), np.ones(2 * k + 3), np.zeros(2 * k + 3)
        shift[1::2] = step * np.ravel(self._slopes)
        stretch[1::2] = 1.0 + step * np.ravel(self._curvatures)
        fixed[0::2] = [self.lower.item(), *(b.item() for b in self._points), self.upper.item()]
        bent = bool((stretch != 1.0).any())

        def fill(
            cut: slice, out: FloatArray, labels: ByteArray, which: Any, spare: FloatArray, still: BoolArray
        ) -> None:
            write_labels(v[cut], labels, still)
            np.copyto(which, labels)
            np.take(shift, which, out=spare, mode="clip")
            np.subtract(v[cut], spare, out=out)
            if bent:
                np.take(stretch, which, out=spare, mode="clip")
                np.divide(out, spare, out=out)
            np.take(fixed, which, out=spare, mode="clip")
            np.bitwise_and(labels, 1, out=labels)
            np.equal(labels, 0, out=still)
            np.copyto(out, spare, where=still)
            np.clip(out, self.lower, self.upper, out=out)

        return by_blocks(fill, v.size, scratch=[np.int8, np.intp, np.float64, np.bool_])

    def prox_derivative(self, v: FloatArray, step: float) -> DiagonalDerivative:
        """Return the diagonal: 1/(1 + step c_j) on piece j, 0 on kinks and bounds."""
        if v.ndim == 1 and v.size > BLOCK:
            if self.size is None and len(self._points) <= SHORT:
                table = np.zeros(2 * len(self._points) + 3)
                table[1::2] = 1.0 / (1.0 + step * np.ravel(self._curvatures))
                write_labels = self._labels_filler(step)

                def look_up(
                    cut: slice, out: FloatArray, labels: ByteArray, which: Any, spare: BoolArray
                ) -> None:
                    write_labels(v[cut], labels, spare)
                    np.copyto(which, labels)
                    np.take(table, which, out=out, mode="clip")

                return DiagonalDerivative(by_blocks(look_up, v.size, scratch=[np.int8, np.intp, np.bool_]))

            def fill(cut: slice, out: FloatArray) -> None:
                out[:] = self._part(cut)._slopes_at(v[cut], step)

            return DiagonalDerivative(by_blocks(fill, v.size))
        return DiagonalDerivative(self._slopes_at(v, step))

    def _slopes_at(self, v: FloatArray, step: float) -> FloatArray:
        labels = self._labels(v, step)
        diagonal = np.zeros(v.shape)
        for j, bend in enumerate(self._curvatures):
            diagonal = np.where(labels == 2 * j + 1, 1.0 / (1.0 + step * bend), diagonal)
        return diagonal

    def _legend(self) -> tuple[str, ...]:
        if self._words is not None:
            return ("lower", *self._words, "upper")
        middle = [f"{what} {j + 1}" for j in range(len(self._points)) for what in ("piece", "kink")]
        return ("lower", *middle, f"piece {len(self._points) + 1}", "upper")

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component with its piece, kink or bound, counted from the left."""
        return Pieces({"control": self._labels(v, step)}, {"control": self._legend()})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of each v_i to the nearest end of a piece, in the unit of v."""
        low, high = self._ends(step)
        distance = np.minimum(np.abs(v - low), np.abs(v - high))
        for j, b in enumerate(self._points):
            seen = (b > self.lower) & (b < self.upper)
            for slope in (self._left[j], self._right[j]):
                distance = np.where(seen, np.minimum(distance, np.abs(v - b - step * slope)), distance)
        return np.where(self.lower == self.upper, np.inf, distance)

    # the smoothed map: the mean of the proximal map over a kernel of width eps

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        low, high = self._ends(step)
        slope: Any = 1.0 / (1.0 + step * self._curvatures[0])
        bounded = np.isfinite(self.lower)
        u = np.where(bounded, self.lower, (v - step * self._slopes[0]) * slope)
        diagonal = np.where(bounded, 0.0, slope)
        ramps = [(low, slope)]
        for j, b in enumerate(self._points):
            seen = (b > self.lower) & (b < self.upper)
            after = np.where(seen, 1.0 / (1.0 + step * self._curvatures[j + 1]), slope)
            ramps.append((np.where(seen, b + step * self._left[j], np.inf), -slope))
            ramps.append((np.where(seen, b + step * self._right[j], np.inf), after))
            slope = after
        ramps.append((high, -slope))
        for start, change in ramps:
            there = np.isfinite(start) & (self.lower < self.upper)
            x = v - np.where(there, start, 0.0)
            root = np.sqrt(x * x + 4.0 * eps * eps)
            u = u + np.where(there, 0.5 * change * (x + root), 0.0)
            diagonal = diagonal + np.where(there, 0.5 * change * (1.0 + x / root), 0.0)
        return u, np.where(self.lower == self.upper, 0.0, diagonal)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the map with every ramp max(0, v - t) replaced by (v - t + sqrt((v - t)^2 + 4 eps^2)) / 2.

        It is the mean of the proximal map over a kernel of mean distance 2 eps, so it differs from the map by at most
        2 eps, whatever the number of pieces.
        """
        return self._smoothed(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> DiagonalDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return DiagonalDerivative(self._smoothed(v, step, eps)[1])

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split xi = -grad f(u) into ``price``, a subgradient of the pieces, and ``bounds``, the bound force.

        ``price`` lies between the one-sided derivatives at u; the bound force is positive at the upper bound (the bound
        pushes u down), negative at the lower bound, zero between.
        """
        left, right = self.one_sided_derivatives(u)
        fixed = self.lower == self.upper
        left = np.where(
            fixed, self._slopes[0] + self._curvatures[0] * u, np.where(np.isinf(left), right, left)
        )
        right = np.where(np.isinf(right), left, right)
        at_bound = (u <= self.lower) | (u >= self.upper)
        price = np.where(at_bound, np.clip(subgradient, left, right), subgradient)
        return {"price": price, "bounds": subgradient - price}


def _table(value: Any, name: str) -> FloatArray:
    table = float_array(value, name)
    if table.ndim not in (1, 2):
        raise InputError(f"{name} must have shape (pieces,) or (n, pieces), got {table.shape}")
    return table


def _refuse(bad: npt.NDArray[np.bool_], what: str, table: FloatArray) -> None:
    if bad.any():
        index = tuple(int(i) for i in np.argwhere(bad)[0])
        raise InputError(f"{what}, got {table[index]} at index {', '.join(map(str, index))}")


def _brief(array: FloatArray) -> str:
    return repr(float(array)) if array.ndim == 0 else f"array{array.shape}"


def by_component(*columns: FloatArray) -> FloatArray:
    """Stack numbers or arrays (n,) along a last axis: the form in which the class takes its parameters."""
    return np.stack(np.broadcast_arrays(*columns), axis=-1)


def check_together(**parameters: FloatArray) -> None:
    """Raise `InputError` unless the named numbers and arrays (n,) fit together."""
    try:
        np.broadcast_shapes(*(p.shape for p in parameters.values()))
    except ValueError as error:
        shapes = ", ".join(f"{name} {p.shape}" for name, p in parameters.items())
        raise InputError(f"parameters of these shapes do not fit together: {shapes}") from error


def not_negative(value: Any, name: str) -> FloatArray:
    """Return a parameter as an array, or raise `InputError` for its first negative entry."""
    array = float_array(value, name)
    _refuse(np.atleast_1d(array < 0), f"{name} must not be negative", np.atleast_1d(array))
    return array
