"""Losses of classification and regression, functions of the predictions u."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..errors import InputError
from ..validate import float_array
from .piecewise import PiecewiseQuadraticCost, by_component, check_together, not_negative


class HingeLoss(PiecewiseQuadraticCost):
    """g(u) = sum_i weight_i max(0, margin_i - label_i u_i): classification with a margin.

    Parameters
    ----------
    labels : float or array, shape (n,)
        +1 or -1.
    weight : float or array, shape (n,), optional
        Not negative; one by default.
    margin : float or array, shape (n,), optional
        In the unit of u; one by default.

    Raises
    ------
    InputError
        For other labels, or a negative weight.

    Notes
    -----
    Source: C. Cortes and V. Vapnik, Machine Learning 20 (1995) 273-297 (from memory).
    """

    _words = ("left", "on the margin", "right")

    def __init__(self, labels: Any, weight: Any = 1.0, margin: Any = 1.0) -> None:
        self.labels, self.weight = float_array(labels, "labels"), not_negative(weight, "weight")
        self.margin = float_array(margin, "margin")
        if (np.abs(self.labels) != 1).any():
            index = int(np.argmax(np.atleast_1d(np.abs(self.labels) != 1)))
            raise InputError(
                f"labels must be +1 or -1, got {np.atleast_1d(self.labels)[index]} at index {index}"
            )
        check_together(labels=self.labels, weight=self.weight, margin=self.margin)
        left = np.where(self.labels > 0, -self.weight, 0.0)
        right = np.where(self.labels > 0, 0.0, self.weight)
        edge = self.labels * self.margin
        super().__init__(by_component(edge), by_component(left, right), value_at=(edge, 0.0))


class QuantileLoss(PiecewiseQuadraticCost):
    """g(u) = sum_i weight_i rho(target_i - u_i), rho(r) = level r where r >= 0, (level - 1) r where r < 0.

    Parameters
    ----------
    level : float or array, shape (n,)
        Between 0 and 1; 1/2 gives half the absolute deviation.
    target : float or array, shape (n,), optional
        Zero by default.
    weight : float or array, shape (n,), optional
        Not negative; one by default.

    Raises
    ------
    InputError
        For a level outside [0, 1], or a negative weight.

    Notes
    -----
    Source: R. Koenker and G. Bassett, Econometrica 46 (1978) 33-50 (from memory).
    """

    _words = ("below the target", "on the target", "above the target")

    def __init__(self, level: Any, target: Any = 0.0, weight: Any = 1.0) -> None:
        self.level, self.target = not_negative(level, "level"), float_array(target, "target")
        self.weight = not_negative(weight, "weight")
        if (self.level > 1).any():
            raise InputError(f"level must lie between 0 and 1, got {self.level.max()}")
        check_together(level=self.level, target=self.target, weight=self.weight)
        slopes = by_component(-self.weight * self.level, self.weight * (1.0 - self.level))
        super().__init__(by_component(self.target), slopes, value_at=(self.target, 0.0))


class InsensitiveLoss(PiecewiseQuadraticCost):
    """g(u) = sum_i weight_i max(0, |u_i - target_i| - width_i): deviations within the width cost nothing.

    Parameters
    ----------
    width : float or array, shape (n,)
        Half width of the dead zone, in the unit of u; positive.
    target : float or array, shape (n,), optional
        Zero by default.
    weight : float or array, shape (n,), optional
        Not negative; one by default.

    Raises
    ------
    InputError
        For a width that is not positive, or a negative weight.

    Notes
    -----
    Source: V. Vapnik, The Nature of Statistical Learning Theory, 1995 (from memory).
    """

    _words = ("below", "lower edge", "dead zone", "upper edge", "above")

    def __init__(self, width: Any, target: Any = 0.0, weight: Any = 1.0) -> None:
        self.width, self.target = not_negative(width, "width"), float_array(target, "target")
        self.weight = not_negative(weight, "weight")
        if (self.width == 0).any():
            raise InputError(
                "width must be positive; without a dead zone take QuantileLoss(0.5, target, 2 * weight)"
            )
        check_together(width=self.width, target=self.target, weight=self.weight)
        super().__init__(
            by_component(self.target - self.width, self.target + self.width),
            by_component(-self.weight, np.zeros(()), self.weight),
            value_at=(self.target, 0.0),
        )
