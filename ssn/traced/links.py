"""Linear maps between the flat arrays of a trace: each applies, transposes, and composes with a structure."""

from __future__ import annotations

import math
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..errors import InputError
from .structure import Structure, Unassembled, canonical_csr, check_fill, csr, index_type

FloatArray = npt.NDArray[np.float64]


class Link(Protocol):
    """The derivative of one operation in one of its operands, both flat."""

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of (inputs, k)."""
        ...

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of (outputs, k)."""
        ...

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left; raises `Unassembled` where that is no use."""
        ...


def _scale(values: FloatArray, factor: Any) -> FloatArray:
    if factor is None:
        return values
    result: FloatArray = values * (factor[:, None] if isinstance(factor, np.ndarray) else factor)
    return result


class Gather:
    """out[i] = factor[i] * in[index[i]]: elementwise operations, broadcasting, indexing, permutations.

    `index` is None (as it is), a slice of step 1 or an array; with `gaps`, index -1 gives 0.
    """

    __slots__ = ("factor", "gaps", "index", "inputs", "outputs")

    def __init__(
        self, inputs: int, outputs: int, index: Any = None, factor: Any = None, gaps: bool = False
    ) -> None:
        self.inputs = inputs
        self.outputs = outputs
        self.index = index
        self.factor = factor
        self.gaps = gaps

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of a block."""
        if self.index is not None:
            tangents = tangents[self.index]
            if self.gaps:
                tangents[self.index < 0] = 0.0
        return _scale(tangents, self.factor)

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of a block."""
        scaled = _scale(cotangents, self.factor)
        if self.index is None:
            return scaled
        result = np.zeros((self.inputs, scaled.shape[1]))
        if isinstance(self.index, slice):
            result[self.index] = scaled
        elif self.gaps:
            present = self.index >= 0
            np.add.at(result, self.index[present], scaled[present])
        else:
            np.add.at(result, self.index, scaled)
        return result

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left."""
        return inner.taken(self.index, self.factor, self.outputs, self.gaps)


class Scatter:
    """out[index[i]] += factor[i] * in[i]: sums; `index` None means that all go into one."""

    __slots__ = ("factor", "index", "inputs", "outputs")

    def __init__(self, inputs: int, outputs: int, index: Any = None, factor: Any = None) -> None:
        self.inputs = inputs
        self.outputs = outputs
        self.index = index
        self.factor = factor

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of a block."""
        scaled = _scale(tangents, self.factor)
        if self.index is None:
            return scaled.sum(axis=0, keepdims=True)
        result = np.zeros((self.outputs, scaled.shape[1]))
        np.add.at(result, self.index, scaled)
        return result

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of a block."""
        if self.index is None:
            spread = np.broadcast_to(cotangents, (self.inputs, cotangents.shape[1]))
        else:
            spread = cotangents[self.index]
        return _scale(spread, self.factor)

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left."""
        factor = np.broadcast_to(1.0 if self.factor is None else self.factor, (self.inputs,))
        kind = index_type(self.inputs, self.outputs)
        columns = np.arange(self.inputs, dtype=kind)
        shape = (self.outputs, self.inputs)
        if self.index is None:
            matrix = csr(factor, columns, np.array([0, self.inputs], dtype=kind), shape, True)
        else:
            matrix = canonical_csr(sp.coo_array((factor, (self.index, columns)), shape=shape))
        return inner.multiplied(matrix)


class Matrix:
    """Multiplication with a sparse or dense matrix."""

    __slots__ = ("matrix",)

    def __init__(self, matrix: Any) -> None:
        self.matrix = matrix

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of a block."""
        return np.asarray(self.matrix @ tangents)

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of a block."""
        return np.asarray(self.matrix.T @ cotangents)

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left."""
        if not sp.issparse(self.matrix):
            check_fill(math.prod(self.matrix.shape), inner.shape[1])
        return inner.multiplied(canonical_csr(self.matrix))


class Operator:
    """Multiplication of `columns` columns with a LinearOperator; never assembled."""

    __slots__ = ("columns", "operator")

    def __init__(self, operator: Any, columns: int = 1) -> None:
        self.operator = operator
        self.columns = columns

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of a block."""
        k = tangents.shape[1]
        block = self.operator.matmat(tangents.reshape(-1, self.columns * k))
        return np.asarray(block, dtype=np.float64).reshape(-1, k)

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of a block."""
        k = cotangents.shape[1]
        try:
            block = self.operator.rmatmat(cotangents.reshape(-1, self.columns * k))
        except (NotImplementedError, TypeError) as error:  # SciPy raises one or the other
            raise InputError(
                "the LinearOperator used in F has no adjoint: give it rmatvec (needed for transposed products)"
            ) from error
        return np.asarray(block, dtype=np.float64).reshape(-1, k)

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left."""
        raise Unassembled


class RunningSum:
    """Cumulative sums of an array of `shape` along `axis`."""

    __slots__ = ("axis", "shape")

    def __init__(self, shape: tuple[int, ...], axis: int) -> None:
        self.shape = shape
        self.axis = axis

    def forward(self, tangents: FloatArray) -> FloatArray:
        """Apply to the columns of a block."""
        block = tangents.reshape(*self.shape, tangents.shape[1])
        return np.cumsum(block, axis=self.axis).reshape(tangents.shape)

    def backward(self, cotangents: FloatArray) -> FloatArray:
        """Apply the transpose to the columns of a block."""
        block = np.flip(cotangents.reshape(*self.shape, cotangents.shape[1]), self.axis)
        return np.flip(np.cumsum(block, axis=self.axis), self.axis).reshape(cotangents.shape)

    def compose(self, inner: Structure) -> Structure:
        """Multiply a structure from the left."""
        length = self.shape[self.axis]
        size = math.prod(self.shape)
        check_fill(size * (length + 1) // 2, inner.shape[1])
        numbers = np.moveaxis(np.arange(size).reshape(self.shape), self.axis, -1).reshape(-1, length)
        later, earlier = np.tril_indices(length)
        rows, columns = numbers[:, later].ravel(), numbers[:, earlier].ravel()
        matrix = sp.coo_array((np.ones(rows.size), (rows, columns)), shape=(size, size))
        return inner.multiplied(canonical_csr(matrix))
