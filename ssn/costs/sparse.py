"""L1 cost with optional bounds: sparse controls and sparse coefficients."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import bound_arrays, float_array
from .blocks import BLOCK, by_blocks, cut_parameter
from .derivative import DiagonalDerivative

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

# a slope that differs from beta by less than this fraction of both does not differ
ROUNDING = 1e-12

LEGEND = ("lower", "negative", "zero", "positive", "upper", "free")
LOWER, NEGATIVE, ZERO, POSITIVE, UPPER, FREE = range(6)


class SparseCost:
    """g(u) = sum_i beta_i |u_i| with lower_i <= u_i <= upper_i.

    In a problem with weights w (a lumped mass) the sum is sum_i w_i beta_i |u_i|, the L1 norm of the function.

    Parameters
    ----------
    beta : float or array, shape (n,)
        Weight, cost per unit of |u|; not negative.
    lower, upper : float or array, shape (n,), optional
        Bounds in the unit of u; infinite where there is none. They need not contain zero.

    Raises
    ------
    InputError
        For a negative or non-finite weight, NaN bounds, or crossing bounds (with the index).

    Notes
    -----
    The proximal map is soft shrinkage followed by clipping; exact because g is convex in one variable.
    Selection at kinks: the constant piece (derivative 0), so G is the Hessian on a smaller set.
    Source: G. Stadler, Comput. Optim. Appl. 44 (2009) 159-181 (from memory), for the elliptic control problem.
    """

    convex = True

    def __init__(self, beta: Any, lower: Any = -np.inf, upper: Any = np.inf) -> None:
        self.beta = float_array(beta, "beta")
        if (self.beta < 0).any():
            index = tuple(int(i) for i in np.argwhere(self.beta < 0)[0])
            raise InputError(f"beta must not be negative, got {self.beta[index]} at index {index}")
        self.lower, self.upper = bound_arrays(lower, upper)
        shapes = [a.shape for a in (self.beta, self.lower, self.upper)]
        try:
            self._shape: tuple[int, ...] = np.broadcast_shapes(*shapes)
        except ValueError as error:
            raise InputError(
                f"beta, lower, upper have shapes {shapes} that do not broadcast together"
            ) from error
        for array in (self.beta, self.lower, self.upper):
            array.setflags(write=False)

    def __repr__(self) -> str:
        beta, lower, upper = (_brief(a) for a in (self.beta, self.lower, self.upper))
        return f"{type(self).__name__}(beta={beta}, lower={lower}, upper={upper})"

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the parameters fit `size` unknowns."""
        if self._shape not in ((), (1,), (size,)):
            raise InputError(
                f"{type(self).__name__} has parameters of shape {self._shape} for {size} unknowns"
            )

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u); inf where a bound is violated."""
        if (u < self.lower).any() or (u > self.upper).any():
            return float("inf")
        terms = self.beta * np.abs(u)
        return float(terms.sum() if weights is None else weights @ terms)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of sup u y_i - beta_i |u| over the bounds; inf where an open end slopes upwards.

        A slope that equals beta up to rounding on a piece without end is no reason for infinity.
        """
        slack = ROUNDING * (np.abs(y) + self.beta)
        best = np.full(y.shape, -np.inf)
        for bound, outwards in ((self.lower, -1.0), (self.upper, 1.0)):
            rise = outwards * y - self.beta  # of u y - beta |u| on the way out
            end = np.where(np.isfinite(bound), bound, 0.0)
            there = np.where(rise > slack, np.inf, -np.inf)
            best = np.maximum(best, np.where(np.isfinite(bound), end * y - self.beta * np.abs(end), there))
        zero = (self.lower <= 0.0) & (self.upper >= 0.0)
        # with an open end and without zero inside the other bound is the best point
        terms = np.where(zero, np.maximum(best, 0.0), best)
        if (terms == -np.inf).any() or not np.isfinite(terms).all():
            return float("inf")
        return float(terms.sum() if weights is None else weights @ terms)

    def _shrink(self, v: FloatArray, step: float) -> FloatArray:
        threshold = step * self.beta
        result = np.clip(v, -threshold, threshold)
        np.subtract(v, result, out=result)
        return result

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return clip(soft(v, step * beta), lower, upper)."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        if v.ndim == 1 and v.size > BLOCK:

            def fill(cut: slice, out: FloatArray, spare: FloatArray) -> None:
                beta, lower, upper = self._parameters(cut)
                _shrink_into(out, v[cut], step, beta, spare)
                np.clip(out, lower, upper, out=out)

            return by_blocks(fill, v.size, scratch=[np.float64])
        result = self._shrink(v, step)
        return np.clip(result, self.lower, self.upper, out=result)

    def _parameters(self, cut: slice) -> tuple[FloatArray, FloatArray, FloatArray]:
        """beta, lower and upper of the components of a slice."""
        return cut_parameter(self.beta, cut), cut_parameter(self.lower, cut), cut_parameter(self.upper, cut)

    def prox_derivative(self, v: FloatArray, step: float) -> DiagonalDerivative:
        """Return the diagonal with 1 on the sloped pieces and 0 on the constant ones and at kinks."""
        weighted = bool(self.beta.any())
        if v.ndim == 1 and v.size > BLOCK:

            def fill(
                cut: slice, out: FloatArray, spare: FloatArray, one: BoolArray, other: BoolArray
            ) -> None:
                beta, lower, upper = self._parameters(cut)
                shrunk = v[cut]
                if weighted:
                    _shrink_into(out, shrunk, step, beta, spare)
                    shrunk = out
                np.greater(shrunk, lower, out=one)
                np.less(shrunk, upper, out=other)
                one &= other
                if weighted:
                    np.not_equal(shrunk, 0.0, out=other)
                    if not beta.all():
                        other |= beta == 0.0
                    one &= other
                np.copyto(out, one)

            return DiagonalDerivative(by_blocks(fill, v.size, scratch=[np.float64, np.bool_, np.bool_]))
        shrunk = self._shrink(v, step)
        sloped = (shrunk > self.lower) & (shrunk < self.upper)
        if weighted:
            sloped &= (shrunk != 0.0) | (self.beta == 0.0)
        return DiagonalDerivative(sloped.astype(np.float64))

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component lower, negative, zero, positive, upper, or free (between bounds, no weight)."""
        shrunk = self._shrink(v, step)
        labels = np.where(shrunk > 0, np.int8(POSITIVE), np.int8(NEGATIVE))
        labels[shrunk == 0] = ZERO
        if not self.beta.all():  # without a weight the sign is no kink
            labels[np.broadcast_to(self.beta == 0, labels.shape)] = FREE
        labels[shrunk <= self.lower] = LOWER
        labels[shrunk >= self.upper] = UPPER
        labels[np.broadcast_to(self.lower == self.upper, labels.shape)] = LOWER  # one piece, one label
        return Pieces({"control": labels}, {"control": LEGEND})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of each v_i to the nearest kink of the proximal map, in the unit of v."""
        t = step * self.beta
        distance = np.full(v.shape, np.inf)
        zero_inside = (self.lower < 0) & (self.upper > 0) & (t > 0)
        one_sided = (self.lower <= 0) & (self.upper >= 0) & (t > 0)
        # kinks of the shrinkage at +-t, each only where the sloped piece beyond it exists
        right = np.where(zero_inside | (one_sided & (self.upper > 0)), np.abs(v - t), np.inf)
        left = np.where(zero_inside | (one_sided & (self.lower < 0)), np.abs(v + t), np.inf)
        np.minimum(distance, right, out=distance)
        np.minimum(distance, left, out=distance)
        for bound in (self.lower, self.upper):
            nonzero = np.isfinite(bound) & ((bound != 0) | (t == 0))
            kink = np.where(nonzero, bound + np.sign(bound) * t, 0.0)
            np.minimum(distance, np.where(nonzero, np.abs(v - kink), np.inf), out=distance)
        return np.where(self.lower == self.upper, np.inf, distance)

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        """The smoothed map and its derivative, every max by its smoothed form."""
        u, slope = v, np.ones_like(v)
        if self.beta.any():
            t = step * self.beta
            up, d_up = _smooth_max(v - t, 0.0, eps)
            down, d_down = _smooth_max(-v - t, 0.0, eps)
            u, slope = up - down, d_up + d_down
        if np.isfinite(self.lower).any():
            bounded = np.isfinite(self.lower)
            raised, d_raised = _smooth_max(u, np.where(bounded, self.lower, 0.0), eps)
            u, slope = np.where(bounded, raised, u), np.where(bounded, d_raised * slope, slope)
        if np.isfinite(self.upper).any():
            bounded = np.isfinite(self.upper)
            lowered, d_lowered = _smooth_max(-u, np.where(bounded, -self.upper, 0.0), eps)
            u, slope = np.where(bounded, -lowered, u), np.where(bounded, d_lowered * slope, slope)
        return u, slope

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the map with every max(a, b) replaced by (a + b + sqrt((a - b)^2 + 4 eps^2)) / 2.

        It differs from the proximal map by at most 4 eps (eps for each max).
        """
        return self._smoothed(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> DiagonalDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return DiagonalDerivative(self._smoothed(v, step, eps)[1])

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split xi = -grad f(u) into the L1 part and the bound force.

        ``sparsity`` lies in [-beta, beta] (beta sign(u) off zero); ``bounds`` is positive at the upper bound
        (the bound pushes u down), negative at the lower bound, zero between.
        """
        sparsity = np.where(u != 0, self.beta * np.sign(u), np.clip(subgradient, -self.beta, self.beta))
        rest = subgradient - sparsity
        at_bound = (u <= self.lower) | (u >= self.upper)
        return {"sparsity": sparsity, "bounds": np.where(at_bound, rest, 0.0)}


def _shrink_into(out: FloatArray, v: FloatArray, step: float, beta: FloatArray, spare: FloatArray) -> None:
    """Write v shrunk by step beta to `out`; `spare` is a scratch array of its size."""
    if beta.size == 1:
        threshold = step * beta
        np.clip(v, -threshold, threshold, out=out)
    else:
        np.multiply(beta, step, out=spare)
        np.minimum(v, spare, out=out)
        np.negative(spare, out=spare)
        np.maximum(out, spare, out=out)
    np.subtract(v, out, out=out)


def _smooth_max(a: FloatArray, b: FloatArray | float, eps: float) -> tuple[FloatArray, FloatArray]:
    """The smoothed maximum and its derivative with respect to a."""
    root = np.sqrt((a - b) ** 2 + 4.0 * eps * eps)
    return 0.5 * (a + b + root), 0.5 * (1.0 + (a - b) / root)


def _brief(array: FloatArray) -> str:
    return repr(float(array)) if array.ndim == 0 else f"array{array.shape}"
