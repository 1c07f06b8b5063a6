"""Bounds: the indicator of a box."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..pieces import Pieces
from .sparse import SparseCost

FloatArray = npt.NDArray[np.float64]


class Bounds(SparseCost):
    """g(u) = 0 where lower <= u <= upper, inf elsewhere; the proximal map clips.

    Parameters
    ----------
    lower, upper : float or array, shape (n,)
        Bounds in the unit of u; infinite where there is none.

    Raises
    ------
    InputError
        For NaN or crossing bounds.
    """

    def __init__(self, lower: Any = -np.inf, upper: Any = np.inf) -> None:
        super().__init__(0.0, lower, upper)

    def __repr__(self) -> str:
        return super().__repr__().replace("beta=0.0, ", "")

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return clip(v, lower, upper)."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return np.clip(v, self.lower, self.upper)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component lower (0), free (1) or upper (2)."""
        labels = np.ones(v.shape, dtype=np.int8)
        labels[v <= self.lower] = 0
        labels[v >= self.upper] = 2
        labels[np.broadcast_to(self.lower == self.upper, labels.shape)] = 0
        return Pieces({"control": labels}, {"control": ("lower", "free", "upper")})

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return the bound force: positive at the upper bound, negative at the lower one."""
        return {"bounds": super().multipliers(u, subgradient)["bounds"]}
