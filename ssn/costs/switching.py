"""Half the squared L1 norm across actuators: few actuators on at a time."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from .derivative import GroupDerivative
from .grouping import Groups
from .piecewise import not_negative

FloatArray = npt.NDArray[np.float64]

LEGEND = ("negative", "off", "positive", "free")
NEGATIVE, OFF, POSITIVE, FREE = range(4)
# steps of the scalar equation of the smoothed map, a concave one: Newton steps rise to its root
ITERATIONS = 200


class SwitchingCost:
    """g(u) = sum over instants of beta_t/2 (sum_i |u_ti|)^2, u of shape (instants, actuators), flattened.

    Parameters
    ----------
    beta : float or array, shape (instants,)
        Weight, cost per unit of u squared; not negative.
    shape : tuple of int
        (instants, actuators): u[t * actuators + i] is actuator i at instant t.
    inner_weights : float or array, shape (actuators,) or (instants * actuators,), optional
        a, the weights of the sum across actuators; ones by default.

    Raises
    ------
    InputError
        For a negative weight, or arrays that do not fit the shape.

    Notes
    -----
    *Inner product.* The sum is sum_i a_i |u_ti|. A problem with weights w needs w_ti = outer_t a_i, with one outer
    weight an instant (the time step); `value` is then sum_t outer_t beta_t/2 (...)^2, raises `InputError` for other w,
    and the proximal map minimises step g(u) + 1/2 sum w (u - v)^2. Without weights the outer ones are 1.

    *Proximal map.* Soft shrinkage by tau = step beta sum_i a_i |u_i|; the actuators that stay on are the first k in
    the order of |v_i|, and tau_k = step beta sum_j<=k a_j |v_j| / (1 + step beta sum_j<=k a_j). The derivative is the
    identity on them minus a rank-one term, 0 on the others and at kinks |v_i| = tau.

    Sources: C. Clason, K. Ito, K. Kunisch, Math. Model. Numer. Anal. 50 (2016) 581-609, for two actuators; sorting as
    for projections on the simplex, M. Held, P. Wolfe, H. Crowder, Math. Program. 6 (1974) 62-88 (both from memory).
    """

    convex = True
    separable = False
    piecewise_affine = True

    def __init__(self, beta: Any, shape: Any, inner_weights: Any = 1.0) -> None:
        self.groups = Groups.along(shape, -1)
        self.shape = tuple(int(s) for s in shape)
        if len(self.shape) != 2:
            raise InputError(f"shape must be (instants, actuators), got {self.shape}")
        self.size = self.groups.size
        self.beta = not_negative(beta, "beta")
        if self.beta.shape not in ((), (1,), (self.shape[0],)):
            raise InputError(f"beta has shape {self.beta.shape} for {self.shape[0]} instants")
        self.inner_weights = self.groups.weights(inner_weights, "inner_weights", (self.shape, 1))
        for array in (self.beta, self.inner_weights):
            array.setflags(write=False)

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.shape[0]} instants, {self.shape[1]} actuators)"

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless `size` is instants times actuators."""
        if size != self.size:
            raise InputError(
                f"{type(self).__name__} of shape {self.shape} has {self.size} unknowns, not {size}"
            )

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless the weights are outer times inner ones."""
        self.groups.outer(weights, self.inner_weights)

    def _sums(self, u: FloatArray) -> FloatArray:
        return self.groups.sum(self.inner_weights * np.abs(u))

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u) for weights outer times inner."""
        outer = self.groups.outer(weights, self.inner_weights)
        return float(np.sum(0.5 * outer * self.beta * self._sums(u) ** 2))

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of outer_t max_i |y_ti|^2 / (2 beta_t); where beta is 0, 0 for y = 0 and inf otherwise."""
        outer = self.groups.outer(weights, self.inner_weights)
        largest = np.abs(y).reshape(self.shape).max(axis=1)
        beta = np.broadcast_to(self.beta, largest.shape)
        if ((beta == 0) & (largest > 0)).any():
            return float("inf")
        return float(np.sum(0.5 * outer * largest**2 / np.where(beta > 0, beta, 1.0)))

    # the proximal map

    def _strength(self, step: float) -> FloatArray:
        return np.broadcast_to(step * self.beta, (self.shape[0],))

    def _threshold(self, v: FloatArray, step: float) -> FloatArray:
        """tau of each instant, by sorting."""
        size = np.abs(v).reshape(self.shape)
        order = np.argsort(-size, axis=1, kind="stable")
        sorted_size = np.take_along_axis(size, order, axis=1)
        a = np.take_along_axis(self.inner_weights.reshape(self.shape), order, axis=1)
        t = self._strength(step)[:, None]
        taus = t * np.cumsum(a * sorted_size, axis=1) / (1.0 + t * np.cumsum(a, axis=1))
        on = np.maximum((sorted_size > taus).sum(axis=1), 1)
        result: FloatArray = np.take_along_axis(taus, on[:, None] - 1, axis=1)[:, 0]
        return result

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return v shrunk by the threshold of its instant."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        tau = self.groups.spread(self._threshold(v, step))
        return v - np.clip(v, -tau, tau)

    def _labels(self, v: FloatArray, step: float) -> npt.NDArray[np.int8]:
        tau = self.groups.spread(self._threshold(v, step))
        labels = np.full(v.shape, OFF, dtype=np.int8)
        labels[v > tau] = POSITIVE
        labels[v < -tau] = NEGATIVE
        labels[self.groups.spread(self._strength(step) == 0)] = FREE
        return labels

    def prox_derivative(self, v: FloatArray, step: float) -> GroupDerivative:
        """Return the identity on the actuators that are on, minus a rank-one term an instant."""
        labels = self._labels(v, step)
        on = (labels != OFF).astype(np.float64)
        sign = np.where(labels == POSITIVE, 1.0, np.where(labels == NEGATIVE, -1.0, 0.0))
        return self._derivative(on, sign, sign, step)

    def _derivative(
        self, kept: FloatArray, sign: FloatArray, shares: FloatArray, step: float
    ) -> GroupDerivative:
        """kept - sign t (a sign)' / (1 + t sum a |shares|)."""
        t = self._strength(step)
        factor = t / (1.0 + t * self.groups.sum(self.inner_weights * np.abs(shares)))
        return GroupDerivative(
            kept, -self.groups.spread(factor) * sign, self.inner_weights * sign, self.groups
        )

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each actuator at each instant negative, off or positive; free where there is no weight."""
        return Pieces({"control": self._labels(v, step)}, {"control": LEGEND})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return for each component how far v_i alone can move before its label may change, a lower bound.

        tau changes at most by sqrt(step beta)/2 times the norm of the change of v; any change of an instant shorter in
        the inner product than sqrt(a_i) times the margin leaves the label of i as it is.
        """
        t = self.groups.spread(self._strength(step))
        tau = self.groups.spread(self._threshold(v, step))
        distance = np.abs(np.abs(v) - tau) / (1.0 + 0.5 * np.sqrt(t * self.inner_weights))
        return np.where(t > 0, distance, np.inf)

    # the smoothed map

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, ...]:
        """u, and the derivatives of the two smoothed ramps max(0, +-v - tau).

        tau = step beta sum_i a_i (ramp_i+ + ramp_i-): both come from one smooth saddle function of (v, tau), so the
        derivative of u stays self-adjoint.
        """
        t = self._strength(step)
        tau = np.zeros(self.shape[0])
        for _ in range(ITERATIONS):
            up, down, d_up, d_down = _ramps(v, self.groups.spread(tau), eps)
            rest = t * self.groups.sum(self.inner_weights * (up + down)) - tau
            move = rest / (1.0 + t * self.groups.sum(self.inner_weights * (d_up + d_down)))
            tau = np.maximum(tau + move, 0.0)
            if (np.abs(move) <= 1e-15 * np.maximum(tau, eps)).all():
                break
        up, down, d_up, d_down = _ramps(v, self.groups.spread(tau), eps)
        free = self.groups.spread(t == 0)
        return np.where(free, v, up - down), np.where(free, 1.0, d_up), np.where(free, 0.0, d_down)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the map with max(0, x) replaced by (x + sqrt(x^2 + 4 eps^2)) / 2, in the threshold, too.

        It differs from the proximal map by a multiple of eps that grows with step beta sum_i a_i.
        """
        return self._smoothed(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> GroupDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        _, d_up, d_down = self._smoothed(v, step, eps)
        return self._derivative(d_up + d_down, d_up - d_down, d_up + d_down, step)

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return the subgradient as ``switching``: beta sum_j a_j |u_j| sign(u_i) where on, at most that where off."""
        return {"switching": 1.0 * subgradient}


def _ramps(
    v: FloatArray, tau: FloatArray, eps: float
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """The smoothed max(0, v - tau) and max(0, -v - tau), and their derivatives."""
    x, y = v - tau, -v - tau
    root_x, root_y = np.sqrt(x * x + 4.0 * eps * eps), np.sqrt(y * y + 4.0 * eps * eps)
    return 0.5 * (x + root_x), 0.5 * (y + root_y), 0.5 * (1.0 + x / root_x), 0.5 * (1.0 + y / root_y)
