"""L1 plus a quadratic: sparse and shrunken."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..validate import bound_arrays
from .piecewise import PiecewiseQuadraticCost, by_component, check_together, not_negative


class ElasticNetCost(PiecewiseQuadraticCost):
    """g(u) = sum_i beta_i |u_i| + gamma_i / 2 u_i^2 with lower_i <= u_i <= upper_i.

    Parameters
    ----------
    beta : float or array, shape (n,)
        Weight of |u|, cost per unit of u; not negative.
    gamma : float or array, shape (n,)
        Weight of u^2/2, cost per unit of u squared; not negative.
    lower, upper : float or array, shape (n,), optional
        Bounds in the unit of u; infinite where there is none.

    Raises
    ------
    InputError
        For a negative or non-finite weight, or crossing bounds.

    Notes
    -----
    The proximal map is soft shrinkage, divided by 1 + step gamma, then clipped.
    Source: H. Zou and T. Hastie, J. R. Statist. Soc. B 67 (2005) 301-320 (from memory), in other units.
    """

    _words = ("negative", "zero", "positive")

    def __init__(self, beta: Any, gamma: Any, lower: Any = -np.inf, upper: Any = np.inf) -> None:
        self.beta, self.gamma = not_negative(beta, "beta"), not_negative(gamma, "gamma")
        slopes, curvatures = by_component(-self.beta, self.beta), by_component(self.gamma, self.gamma)
        low, high = bound_arrays(lower, upper)
        check_together(beta=self.beta, gamma=self.gamma, lower=low, upper=high)
        origin = np.clip(0.0, low, high)
        value = self.beta * np.abs(origin) + 0.5 * self.gamma * origin * origin
        super().__init__([0.0], slopes, curvatures, lower=lower, upper=upper, value_at=(origin, value))
