"""What all convex sets share: value, tracing, weights, normal vectors, and the threshold of a weighted sum."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import ProxDerivative
from ..validate import float_array

FloatArray = npt.NDArray[np.float64]

# relative violation of a constraint that counts as rounding in `value`
FEASIBLE = 1e-9
# relative spread of weights / own weights that counts as rounding
PROPORTIONAL = 1e-9
# Newton steps on a threshold before the rest is sorted; each one but the last drops components
THRESHOLD_STEPS = 30


class ConvexSet:
    """The indicator of a closed convex set: 0 inside, inf outside; the proximal map is the projection.

    A subclass gives ``_project``, ``_derivative``, ``_smoothed`` (map and derivative), ``pieces``, ``margins`` and
    ``contains``. The step has no influence on a projection.
    """

    convex = True
    separable = False
    piecewise_affine = True

    def __init__(self, size: int | None = None, weights: Any = None) -> None:
        self.weights = positive_weights(weights)
        if self.weights.ndim and size is not None and self.weights.size != size:
            raise InputError(f"weights has shape {self.weights.shape}, expected a number or ({size},)")
        self.size: int | None = self.weights.size if self.weights.ndim else size

    def __repr__(self) -> str:
        return f"{type(self).__name__}({'' if self.size is None else f'size={self.size}'})"

    @property
    def inner_weights(self) -> FloatArray:
        """The inner product in which the set projects, up to a common factor."""
        return self.weights

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the set lies in a space of `size` unknowns."""
        if self.size is not None and size != self.size:
            raise InputError(
                f"{type(self).__name__} has parameters for {self.size} unknowns, not for {size} unknowns"
            )

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless `weights` are proportional to the set's own: then the projections agree."""
        ratio = np.asarray(weights) / self.weights
        if ratio.size and ratio.max() > ratio.min() * (1.0 + PROPORTIONAL):
            index = int(np.argmax(ratio))
            raise InputError(
                f"{type(self).__name__} projects in the inner product of its own weights, not proportional to "
                f"those of the problem (ratios {ratio.min():.6g} to {ratio[index]:.6g}, at index {index}): "
                f"give it weights= of the problem"
            )

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the support function, the supremum of <y, u> over the set, in the product of the weights.

        Parameters
        ----------
        y : array, shape (n,)
        weights : array, shape (n,), optional
            Of a problem, proportional to the set's own, which are the default.
        """
        own = self._support(y)
        if weights is None or own == 0.0 or np.isinf(own):
            return own
        self.check_weights(weights)
        return own * float(np.max(np.asarray(weights) / self.weights))

    def _support(self, y: FloatArray) -> float:
        raise NotImplementedError

    def contains(self, u: FloatArray) -> bool:
        """Whether u lies in the set, up to rounding."""
        raise NotImplementedError

    def _project(self, v: FloatArray) -> FloatArray:
        raise NotImplementedError

    def _derivative(self, v: FloatArray) -> ProxDerivative:
        raise NotImplementedError

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, ProxDerivative]:
        raise NotImplementedError

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """The active sets of the projection at v."""
        raise NotImplementedError

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to where the label i changes and no other, in the weighted norm, over sqrt(w_i).

        A change of v by less than the least r_i sqrt(w_i), in the norm of the weights, leaves all labels.
        """
        raise NotImplementedError

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return 0 in the set (up to a relative 1e-9), inf outside; weights have no influence."""
        return 0.0 if self.contains(u) else float("inf")

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the projection of v, for any step."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return self._project(v)

    def prox_derivative(self, v: FloatArray, step: float) -> ProxDerivative:
        """Return the Newton derivative of the projection; at kinks as the class says."""
        return self._derivative(v)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return a smooth map that tends to the projection as eps -> 0; which one, the class says."""
        return self._smoothed(v, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ProxDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return self._smoothed(v, eps)[1]

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return ``normal`` = -grad f(u), which points out of the set: <normal, x - u> <= 0 for all x in it."""
        return {"normal": np.array(subgradient, dtype=np.float64)}

    def _spread(self, distance: float, v: FloatArray) -> FloatArray:
        """A distance of v, in the norm of the weights, as a margin of every component."""
        return distance / np.sqrt(self.weights) * np.ones(v.shape)

    def _one_label(self, label: bool, v: FloatArray, legend: tuple[str, ...]) -> Pieces:
        return Pieces({"control": np.full(v.shape, label)}, {"control": legend})


def positive_weights(value: Any) -> FloatArray:
    """Return weights of an inner product as a number or array (n,), read-only; None means 1."""
    array = float_array(1.0 if value is None else value, "weights")
    if array.ndim > 1 or (array <= 0).any():
        raise InputError(f"weights must be positive, a number or an array (n,), got shape {array.shape}")
    array.setflags(write=False)
    return array


def smooth_plus(x: FloatArray, eps: float) -> tuple[FloatArray, FloatArray]:
    """(x + sqrt(x^2 + 4 eps^2)) / 2, at most eps above max(0, x), and its derivative."""
    root = np.sqrt(x * x + 4.0 * eps * eps)
    # for x < 0 the sum cancels: 4 eps^2 / (root - x) is the same number
    value = np.where(x >= 0.0, 0.5 * (x + root), 2.0 * eps * eps / (root - np.minimum(x, 0.0)))
    return value, 0.5 * (1.0 + x / root)


def threshold(z: FloatArray, weights: FloatArray, total: float) -> float:
    """The t with sum_i w_i max(0, z_i - t) = total > 0.

    A finite Newton iteration from below: the sum is convex and falls with t, so that the steps never overshoot and
    each drops components for good. C. Michelot, J. Optim. Theory Appl. 50 (1986) 195-200 (from memory). After
    `THRESHOLD_STEPS` steps what is left is sorted (M. Held, P. Wolfe and H. Crowder, Math. Program. 6 (1974) 62-88,
    from memory).
    """
    k = int(np.argmax(z))
    top, own = float(z[k]), float(weights[k] if weights.ndim else weights)
    t = top - total / own  # component k alone reaches the total
    keep = z > t
    z = z[keep] - top  # near zero: no digit is lost to a common offset
    w = weights[keep] if weights.ndim else weights
    if z.size == 0:  # total / own is below the rounding of top
        return float(np.nextafter(top, -np.inf))
    for _ in range(THRESHOLD_STEPS):
        t = _from_active(z, w, total)
        keep = z > t
        if keep.all():
            return t + top
        z = z[keep]
        w = w[keep] if w.ndim else w
    order = np.argsort(-z)
    z, w = z[order], (w[order] if w.ndim else np.full(z.size, float(w)))
    mass = np.cumsum(w)
    candidates = (np.cumsum(w * z) - total) / mass
    active = int(np.flatnonzero(z > candidates)[-1]) + 1
    return _from_active(z[:active], w[:active], total) + top


def _from_active(z: FloatArray, w: FloatArray, total: float) -> float:
    if w.ndim:
        return float((w @ z - total) / w.sum())
    return float((z.sum() - total / w) / z.size)


def falling_root(
    function: Callable[[float], tuple[float, float]], low: float, high: float, scale: float
) -> float:
    """The zero of a falling function (value, derivative) that is positive at low and negative at high.

    Newton steps, kept inside the bracket, which is halved where they leave it or do not halve the residual.
    """
    t = 0.5 * (low + high)
    previous = np.inf
    for _ in range(200):
        value, slope = function(t)
        if value > 0.0:
            low = t
        else:
            high = t
        if abs(value) <= 1e-14 * scale and slope < 0.0:
            return t - value / slope
        if not low < 0.5 * (low + high) < high:
            break
        proposal = t - value / slope if slope < 0.0 else np.inf
        useful = low < proposal < high and abs(value) <= 0.5 * previous
        previous = abs(value)
        new = proposal if useful else 0.5 * (low + high)
        if new == t:
            break
        t = new
    return t
