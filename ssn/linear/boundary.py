"""The one gate for matrices: every sparse matrix, dense array or operator enters here, once."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..errors import InputError

FloatArray = npt.NDArray[np.float64]


def as_matrix(value: Any, name: str, *, shape: tuple[int | None, int | None] = (None, None)) -> Any:
    """Return `value` as a csr_array, a 2-D float array or a LinearOperator of its own.

    Sparse input of any kind and index width is copied to csr with sorted indices and summed duplicates; the
    caller's object is never changed. Entries are checked for NaN and infinity, the shape against `shape`
    (None matches any size).

    Raises
    ------
    InputError
        With the name, the shape found and the shape expected, or the first bad entry.
    """
    result: Any
    if getattr(value, "dtype", None) is not None and np.issubdtype(value.dtype, np.complexfloating):
        raise InputError(
            f"{name} is complex; ssn works with real numbers: split it into real and imaginary parts"
        )
    if sp.issparse(value):
        result = sp.csr_array(value, dtype=np.float64, copy=True)
        result.sum_duplicates()
        result.sort_indices()
        bad = ~np.isfinite(result.data)
        if bad.any():
            k = int(np.argmax(bad))
            row = int(np.searchsorted(result.indptr, k, side="right")) - 1
            raise InputError(
                f"{name}[{row}, {int(result.indices[k])}] is {result.data[k]}; check the assembly"
            )
    elif isinstance(value, LinearOperator) or (
        not isinstance(value, np.ndarray) and hasattr(value, "matvec") and hasattr(value, "shape")
    ):
        result = value if isinstance(value, LinearOperator) else sp.linalg.aslinearoperator(value)
    else:
        try:
            result = np.array(value, dtype=np.float64, copy=True)
        except (TypeError, ValueError) as error:
            raise InputError(
                f"{name} must be a sparse matrix, an array or a LinearOperator: {error}"
            ) from error
        if result.ndim != 2:
            raise InputError(f"{name} must have 2 dimensions, got shape {result.shape}")
        bad = ~np.isfinite(result)
        if bad.any():
            i, j = (int(k) for k in np.argwhere(bad)[0])
            raise InputError(f"{name}[{i}, {j}] is {result[i, j]}; check the assembly")
    for axis, expected in enumerate(shape):
        if expected is not None and result.shape[axis] != expected:
            wanted = "x".join("any" if k is None else str(k) for k in shape)
            raise InputError(f"{name} has shape {result.shape[0]}x{result.shape[1]}, expected {wanted}")
    return result


def as_square(value: Any, name: str, size: int | None = None) -> Any:
    """`as_matrix` for a square matrix."""
    result = as_matrix(value, name, shape=(size, size))
    if result.shape[0] != result.shape[1]:
        raise InputError(f"{name} must be square, got shape {result.shape[0]}x{result.shape[1]}")
    return result


def is_symmetric(matrix: Any, tolerance: float = 1e-13) -> bool:
    """Whether an explicit matrix equals its transpose up to rounding; False for operators."""
    if isinstance(matrix, LinearOperator):
        return False
    difference = abs(matrix - matrix.T)
    size = abs(matrix).max() if matrix.shape[0] else 0.0
    return bool(difference.max() <= tolerance * size) if matrix.shape[0] else True


def transpose_product(matrix: Any, x: FloatArray) -> FloatArray:
    """A' x for an explicit matrix or an operator with an adjoint."""
    if isinstance(matrix, LinearOperator):
        return np.asarray(matrix.rmatvec(x), dtype=np.float64)
    return np.asarray(matrix.T @ x, dtype=np.float64)


def product(matrix: Any, x: FloatArray) -> FloatArray:
    """A x as a float array."""
    return np.asarray(matrix @ x, dtype=np.float64)
