"""Weighted inner products: a lumped mass vector or a mass matrix."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .errors import InputError

FloatArray = npt.NDArray[np.float64]


class InnerProduct:
    """<x, y> = x' W y with W diagonal (a vector of positive weights) or sparse symmetric positive definite."""

    def __init__(self, weight: Any, name: str = "weights") -> None:
        self.matrix: sp.csr_array | None = None
        self.vector: FloatArray | None = None
        if sp.issparse(weight):
            self.matrix = sp.csr_array(weight)
            self.size = self.matrix.shape[0]
            diagonal = self.matrix.diagonal()
            if (diagonal <= 0).any():
                raise InputError(
                    f"{name} has a nonpositive diagonal entry at {int(np.argmax(diagonal <= 0))}"
                )
        else:
            self.vector = np.asarray(weight, dtype=np.float64)
            self.size = self.vector.size

    def apply(self, x: FloatArray) -> FloatArray:
        """W x for a vector (n,)."""
        if self.vector is not None:
            return self.vector * x
        assert self.matrix is not None
        return np.asarray(self.matrix @ x)

    def dot(self, x: FloatArray, y: FloatArray) -> float:
        """The inner product."""
        return float(x @ self.apply(y))

    def norm(self, x: FloatArray) -> float:
        """The norm."""
        return float(np.sqrt(max(self.dot(x, x), 0.0))) if np.isfinite(x).all() else float("inf")


def relative(difference: float, reference: float) -> float:
    """difference / reference with 0 / 0 = 0: the zero solution is a case of its own."""
    if difference == 0.0:
        return 0.0
    return difference / reference if reference > 0.0 else float("inf")
