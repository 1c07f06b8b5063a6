"""Structured Newton derivatives of proximal maps."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


class DiagonalDerivative:
    """A diagonal Newton derivative, for separable costs."""

    def __init__(self, diagonal: FloatArray) -> None:
        self.diagonal: FloatArray | None = diagonal

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        d = self.diagonal
        assert d is not None
        return d * directions if directions.ndim == 1 else d[:, None] * directions
