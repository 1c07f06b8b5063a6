"""The Huber function: quadratic near zero, linear beyond."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..errors import InputError
from ..validate import float_array
from .piecewise import PiecewiseQuadraticCost, by_component, check_together, not_negative


class HuberCost(PiecewiseQuadraticCost):
    """g(u) = sum_i beta_i h_i(u_i - target_i), h(r) = r^2/(2 width) where |r| <= width, else |r| - width/2.

    The smooth approximation of beta |r| from below with error at most beta width / 2, and a robust loss.

    Parameters
    ----------
    beta : float or array, shape (n,)
        Slope far from the target, cost per unit of u; not negative.
    width : float or array, shape (n,)
        Half width of the quadratic piece, in the unit of u; positive.
    target : float or array, shape (n,), optional
        Zero by default.

    Raises
    ------
    InputError
        For a negative weight or a width that is not positive.

    Notes
    -----
    The derivative is continuous: the proximal map has no constant piece.
    Source: P. J. Huber, Ann. Math. Statist. 35 (1964) 73-101 (from memory), scaled.
    """

    _words = ("below", "kink below", "quadratic", "kink above", "above")

    def __init__(self, beta: Any, width: Any, target: Any = 0.0) -> None:
        self.beta, self.width = not_negative(beta, "beta"), not_negative(width, "width")
        self.target = float_array(target, "target")
        if (self.width == 0).any():
            raise InputError("width must be positive; without a quadratic piece take SparseCost")
        check_together(beta=self.beta, width=self.width, target=self.target)
        bend, none = self.beta / self.width, np.zeros(())
        super().__init__(
            by_component(self.target - self.width, self.target + self.width),
            by_component(-self.beta, -bend * self.target, self.beta),
            by_component(none, bend, none),
            value_at=(self.target, 0.0),
        )
