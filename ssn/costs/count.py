"""The number of nonzeros, and what costs with a jump at zero share. Nonconvex."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import bound_arrays, float_array
from .convex_set import smooth_plus
from .derivative import DiagonalDerivative

FloatArray = npt.NDArray[np.float64]

LEGEND = ("lower", "negative", "zero", "positive", "upper")
LOWER, NEGATIVE, ZERO, POSITIVE, UPPER = range(5)


class CountCost:
    """g(u) = sum_i beta_i [u_i != 0], lower_i <= u_i <= upper_i: a price for every nonzero. Nonconvex.

    In a problem with weights w (a lumped mass) the sum is sum_i w_i beta_i [u_i != 0], the measure of the support.

    Parameters
    ----------
    beta : float or array, shape (n,)
        Not negative.
    lower, upper : float or array, shape (n,), optional
        Bounds in the unit of u, lower <= 0 <= upper; infinite where there is none.

    Raises
    ------
    InputError
        For a negative or non-finite weight, NaN bounds, or bounds that exclude zero.

    Notes
    -----
    The proximal map keeps v_i (clipped to the bounds) where |v_i| > sqrt(2 step beta_i) and is zero elsewhere; with a
    bound b nearer than that, the jump is at |v_i| = step beta_i / |b| + |b| / 2. Selection: at a jump both values
    minimise, and zero is taken; at a bound the constant piece. The derivative is 1 on the kept components, 0 elsewhere;
    at a jump there is none, and no Newton derivative in the sense of the quotient: jumps are left to the search.

    Smoothed map: the smoothed clip of v times 1/2 (1 + x / sqrt(x^2 + 4 eps^2)) for x = +-v - jump. It tends to the
    proximal map as eps -> 0 everywhere but at the jump.

    A problem with this cost is solved for a fixed point of the proximal gradient map with a step just below 1/L: the
    objective falls from step to step, and every point returned is stationary (a local minimum on its support), no more.
    It depends on the start. Without a given one, least squares and control problems start from their convex envelope
    (`ConvexEnvelope`), and ``Solution.lower_bound`` and ``Solution.gap`` say how much another point could gain. Least
    squares with more unknowns than rows and no bounds have a flat envelope, which says nothing (gap near 1), and other
    problems are solved from zero; there take several starts and keep the best::

        starts = [np.zeros(n), unpenalised, *(rng.standard_normal(n) for _ in range(8))]
        best = min((ssn.solve(problem, s) for s in starts), key=lambda found: found.objective)

    There is no distance certificate, and nothing that needs convexity is claimed. Source: T. Blumensath and M. Davies,
    J. Fourier Anal. Appl. 14 (2008) 629-654 (from memory).
    """

    convex = False
    separable = True
    piecewise_affine = True

    def __init__(self, beta: Any, lower: Any = -np.inf, upper: Any = np.inf) -> None:
        self.beta = float_array(beta, "beta")
        if (self.beta < 0).any():
            raise InputError(f"beta must not be negative, got {self.beta.min()}")
        self.lower, self.upper = bound_arrays(lower, upper)
        if (self.lower > 0).any() or (self.upper < 0).any():
            raise InputError(f"{type(self).__name__} needs bounds with lower <= 0 <= upper")
        shapes = [a.shape for a in (self.beta, self.lower, self.upper)]
        try:
            shape = np.broadcast_shapes(*shapes)
        except ValueError as error:
            raise InputError(
                f"beta, lower, upper have shapes {shapes} that do not broadcast together"
            ) from error
        if len(shape) > 1:
            raise InputError(f"the parameters must be numbers or arrays (n,), got shape {shape}")
        self.size: int | None = shape[0] if shape not in ((), (1,)) else None
        for array in (self.beta, self.lower, self.upper):
            array.setflags(write=False)

    def __repr__(self) -> str:
        beta = f"{float(self.beta):g}" if self.beta.ndim == 0 else f"array{self.beta.shape}"
        return f"{type(self).__name__}(beta={beta})"

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the parameters fit `size` unknowns."""
        if self.size not in (None, size):
            raise InputError(f"{type(self).__name__} has parameters for {self.size} unknowns, not {size}")

    # what differs between the costs of this kind; sizes and prices (step * beta) as arrays, not negative

    def _price(self, size: FloatArray) -> FloatArray:
        """The cost of a component of that size, for beta = 1."""
        return (size != 0).astype(np.float64)

    def _landing(self, price: FloatArray) -> FloatArray:
        """The least nonzero size that the map takes without bounds."""
        return np.sqrt(2.0 * price)

    def _free(self, size: FloatArray, price: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The stationary size that belongs to |v| = size, and its derivative; anything short of the jump."""
        return size, np.ones_like(size)

    def _free_jump(self, landing: FloatArray, price: FloatArray) -> FloatArray:
        """The |v| whose stationary size is `landing`."""
        return landing

    # the common part

    def _jump(self, bound: FloatArray, step: float) -> FloatArray:
        """The |v| up to which zero is best, with the sizes bounded by `bound` >= 0; inf where that is 0."""
        price = step * self.beta
        landing = self._landing(price)
        near = bound < landing
        inside = np.where(near & (bound > 0), bound, 1.0)
        clipped = price * self._price(inside) / inside + 0.5 * inside
        jump = np.where(near, clipped, self._free_jump(landing, price))
        return np.where(bound > 0, jump, np.inf)

    def _sides(self, v: FloatArray, step: float) -> tuple[FloatArray, FloatArray]:
        """Jump and bound on the side of zero on which each v lies."""
        right = v > 0
        jump = np.where(right, self._jump(self.upper, step), self._jump(-self.lower, step))
        return jump, np.where(right, self.upper, -self.lower)

    def _moved(self, v: FloatArray, step: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """The map, its derivative and the labels."""
        jump, bound = self._sides(v, step)
        size, price = np.abs(v), np.broadcast_to(step * self.beta, v.shape)
        kept = size > jump
        moved, slope = self._free(size, price)
        clipped = kept & (moved >= bound)
        moved = np.where(kept, np.minimum(moved, bound), 0.0)
        slope = np.where(kept & ~clipped, slope, 0.0)
        labels = np.where(v > 0, np.where(clipped, UPPER, POSITIVE), np.where(clipped, LOWER, NEGATIVE))
        labels = np.where(kept, labels, ZERO).astype(np.int8)
        return np.where(kept, np.copysign(moved, v), 0.0), slope, labels

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u); inf where a bound is violated."""
        if (u < self.lower).any() or (u > self.upper).any():
            return float("inf")
        terms = self.beta * self._price(np.abs(u))
        return float(terms.sum() if weights is None else weights @ terms)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the minimiser of step * g(u) + 1/2 ||u - v||^2; zero at a jump."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return self._moved(v, step)[0]

    def prox_derivative(self, v: FloatArray, step: float) -> DiagonalDerivative:
        """Return the derivative of the map on its pieces; self-adjoint, but not bounded by 1 in general."""
        return DiagonalDerivative(self._moved(v, step)[1])

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component lower, negative, zero, positive or upper."""
        return Pieces({"control": self._moved(v, step)[2]}, {"control": LEGEND})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of each v_i to the nearest jump or kink."""
        distance = np.full(v.shape, np.inf)
        for sign, bound in ((1.0, self.upper), (-1.0, -self.lower)):
            jump = self._jump(bound, step)
            np.minimum(distance, np.abs(sign * v - jump), out=distance)
            finite = np.isfinite(bound) & (bound > 0)
            safe = np.where(finite, bound, 1.0)
            kink = np.maximum(jump, self._reaches(safe, step * self.beta))
            np.minimum(distance, np.where(finite, np.abs(sign * v - kink), np.inf), out=distance)
        return distance

    def _reaches(self, size: FloatArray, price: FloatArray) -> FloatArray:
        """The |v| whose stationary size is `size`."""
        return size

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        u, slope = self._smoothed_free(v, step, eps)
        for sign, bound in ((1.0, self.upper), (-1.0, -self.lower)):
            bounded = np.broadcast_to(np.isfinite(bound), v.shape)
            over, rate = smooth_plus(sign * u - np.where(np.isfinite(bound), bound, 0.0), eps)
            u, slope = np.where(bounded, u - sign * over, u), np.where(bounded, (1.0 - rate) * slope, slope)
        gate, rise = np.zeros_like(v), np.zeros_like(v)
        for sign, bound in ((1.0, self.upper), (-1.0, -self.lower)):
            jump = self._jump(bound, step)
            x = sign * v - np.where(np.isfinite(jump), jump, 0.0)
            root = np.sqrt(x * x + 4.0 * eps * eps)
            open_ = np.isfinite(jump)
            gate += np.where(open_, 0.5 * (1.0 + x / root), 0.0)
            rise += np.where(open_, sign * 2.0 * eps * eps / root**3, 0.0)
        return u * gate, slope * gate + u * rise

    def _smoothed_free(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        return v, np.ones_like(v)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return a smooth map that tends to the proximal map as eps -> 0, but at its jumps."""
        return self._smoothed(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> DiagonalDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return DiagonalDerivative(self._smoothed(v, step, eps)[1])

    def _slope_of_price(self, u: FloatArray) -> FloatArray:
        """g' off zero."""
        return np.zeros_like(u)

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split -grad f(u): ``sparsity`` is g'(u) off zero and all of it at zero; the rest is the bound force.

        ``bounds`` is positive at the upper bound, negative at the lower one, zero between.
        """
        sparsity = np.where(u != 0, self._slope_of_price(u), subgradient)
        at_bound = (u != 0) & ((u <= self.lower) | (u >= self.upper))
        return {"sparsity": sparsity, "bounds": np.where(at_bound, subgradient - sparsity, 0.0)}
