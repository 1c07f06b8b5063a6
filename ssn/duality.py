"""The duality gap of a tracking problem: how far an objective is from the least one, proven by a dual point.

For f(u) = 1/2 ||S u - z||^2 and convex g every q in the observation space gives the lower bound

    -1/2 ||q||^2 - <q, z> - g*(-S* q)

of min f + g, and the gap to f(u) + g(u) is 1/2 ||S u - z - q||^2 + [g(u) + g*(p) - <u, p>] with p = -S* q: two terms
that are not negative. For q = t (S u - z) the first is (1 - t)^2/2 ||S u - z||^2; t = 1 unless g* is infinite at p,
then the largest t at which it is finite.

Source: Fenchel-Rockafellar duality (R. T. Rockafellar, Convex Analysis, 1970, sec. 31, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from .protocols import FloatArray

# part of the slopes by which a dual point may be outside the domain of a conjugate without its saying so
FORGIVEN = 1e-12
# part of 1/2 ||z||^2 in the scale of the objective, which may vanish at the solution
PART = 1e-4


@dataclass(frozen=True)
class Gap:
    """A duality gap and the scale of the objective it is compared with, both in its unit."""

    value: float
    scale: float

    @property
    def relative(self) -> float:
        """The gap divided by the scale; 0 where both are 0, inf where there is no dual point."""
        if self.value <= 0.0:
            return 0.0
        return self.value / self.scale if self.scale > 0.0 else float("inf")


def has_gap(problem: Any) -> bool:
    """Whether the conjugate of the cost is known, and finite at 0: the cost is bounded from below."""
    conjugate = getattr(problem.cost, "conjugate_value", None)
    if conjugate is None or not problem.cost.convex:
        return False
    at_zero = conjugate(np.zeros(problem.unknowns), problem.weights)
    return at_zero is not None and bool(np.isfinite(at_zero))


def duality_gap(problem: Any, u: FloatArray, misfit: FloatArray, p: FloatArray) -> Gap:
    """Return the gap of u for the dual points t (S u - z), where misfit = z - S u and p = S* misfit.

    Parameters
    ----------
    problem : ControlProblem
        With control_weight 0 and `has_gap`.
    """
    cost, weights = problem.cost, problem.weights
    g = cost.value(u, weights)
    half = 0.5 * problem.observations.dot(misfit, misfit)
    target = problem.reduced_target()
    scale = half + abs(g) + PART * 0.5 * problem.observations.dot(target, target)
    if not (np.isfinite(g) and np.isfinite(half) and np.isfinite(p).all()):
        return Gap(float("inf"), scale)
    t = _largest_factor(cost, p, weights)
    dual = cost.conjugate_value(t * p, weights)
    return Gap(g + dual - t * problem.controls.dot(u, p) + (1.0 - t) ** 2 * half, scale)


def _largest_factor(cost: Any, p: FloatArray, weights: FloatArray) -> float:
    """The largest t in [0, 1] at which the conjugate is finite at t p."""

    def finite(t: float) -> bool:
        return bool(np.isfinite(cost.conjugate_value(t * p, weights)))

    if finite(1.0):
        return 1.0
    low, high = 0.0, 1.0
    while high - low > 0.1 * FORGIVEN * high and high > 1e-300:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if finite(middle) else (low, middle)
    return low
