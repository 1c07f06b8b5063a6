"""Sparse derivatives kept in the form that their next use needs: rows with one entry each, and a csr array."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

FloatArray = npt.NDArray[np.float64]

# Entries that a derivative may have before it is kept as an operator: a fixed part and a part a column.
FILL_FIXED = 4_000_000
FILL_PER_COLUMN = 60


class Unassembled(Exception):
    """A derivative that would be too full, or that contains an operator."""


def check_fill(entries: int, columns: int) -> None:
    """Raise `Unassembled` where so many entries are too many."""
    if entries > FILL_FIXED + FILL_PER_COLUMN * columns:
        raise Unassembled


def index_type(*sizes: int) -> Any:
    """The integer type that SciPy uses for indices below these sizes."""
    return np.int32 if max(sizes) < np.iinfo(np.int32).max else np.int64


def csr(data: Any, indices: Any, indptr: Any, shape: tuple[int, int], canonical: bool) -> sp.csr_array:
    """A csr_array of these arrays, not copied; `canonical` claims sorted indices without duplicates."""
    matrix = sp.csr_array((data, indices, indptr), shape=shape)
    if canonical:
        matrix.has_sorted_indices = True
        matrix.has_canonical_format = True
    return matrix


def canonical_csr(matrix: Any) -> sp.csr_array:
    """`matrix` (sparse of any kind, or a dense array) as a canonical float csr_array; shares memory if it is one."""
    if sp.issparse(matrix) and matrix.format == "csr" and matrix.dtype == np.float64:
        if matrix.has_canonical_format:
            return csr(matrix.data, matrix.indices, matrix.indptr, matrix.shape, True)
        result = sp.csr_array(matrix, copy=True)
    else:
        result = sp.csr_array(matrix, dtype=np.float64)
    result.sum_duplicates()
    return result


class Rows:
    """A derivative with at most one entry a row: `data[i]` in column `columns[i]`.

    Parameters
    ----------
    size : int
        Number of rows.
    columns : int or integer array
        An int means consecutive columns from there on; -1 in an array means an empty row.
    data : None, float or array
        None means ones.
    gaps : bool
        Whether there may be empty rows.
    """

    __slots__ = ("columns", "data", "gaps", "size")

    def __init__(self, size: int, columns: Any = 0, data: Any = None, gaps: bool = False) -> None:
        self.size = size
        self.columns = columns
        self.data = data
        self.gaps = gaps

    def scaled(self, factor: Any) -> Rows:
        """Multiply row i by factor[i]; None leaves all as it is."""
        if factor is None:
            return self
        data = factor if self.data is None else self.data * factor
        return Rows(self.size, self.columns, data, self.gaps)

    def taken(self, index: Any, size: int, gaps: bool) -> Rows:
        """Take rows: `index` is a slice of step 1, or an array in which -1 means an empty row."""
        columns = self.columns
        if not isinstance(columns, int):
            columns = columns[index]
        elif isinstance(index, slice):
            columns = columns + index.start
        else:
            columns = index + columns
        if gaps:
            columns = np.where(index < 0, -1, columns)
        data = self.data[index] if isinstance(self.data, np.ndarray) else self.data
        return Rows(size, columns, data, self.gaps or gaps)

    def same_columns(self, other: Rows) -> bool:
        """Whether the entries are known to lie in the same places."""
        if isinstance(self.columns, int) or isinstance(other.columns, int):
            return type(self.columns) is type(other.columns) and bool(self.columns == other.columns)
        return self.columns is other.columns

    def plus(self, other: Rows) -> Rows:
        """Add entries that lie in the same places."""
        left = 1.0 if self.data is None else self.data
        right = 1.0 if other.data is None else other.data
        return Rows(self.size, self.columns, left + right, self.gaps or other.gaps)


class Structure:
    """A sparse derivative of shape (rows, columns) as a sum of `Rows` and at most one canonical csr_array."""

    __slots__ = ("matrix", "rows", "shape")

    def __init__(self, shape: tuple[int, int], rows: list[Rows], matrix: sp.csr_array | None = None) -> None:
        self.shape = shape
        self.rows = rows
        self.matrix = matrix

    def plus(self, other: Structure) -> Structure:
        """The sum; entries known to lie in the same places are added now, others when assembled."""
        rows = list(self.rows)
        for new in other.rows:
            for k, old in enumerate(rows):
                if old.same_columns(new):
                    rows[k] = old.plus(new)
                    break
            else:
                rows.append(new)
        if self.matrix is None or other.matrix is None:
            matrix = other.matrix if self.matrix is None else self.matrix
        else:
            matrix = self.matrix + other.matrix
        return Structure(self.shape, rows, matrix)

    def assembled(self) -> sp.csr_array:
        """All of it as one canonical csr_array, which may share memory with the parts."""
        if not self.rows:
            return sp.csr_array(self.shape) if self.matrix is None else self.matrix
        together = _assemble_rows(self.rows, self.shape)
        return together if self.matrix is None else self.matrix + together

    def taken(self, index: Any, factor: Any, size: int, gaps: bool) -> Structure:
        """Take rows (None: all), then scale them."""
        shape = (size, self.shape[1])
        rows = self.rows if index is None else [part.taken(index, size, gaps) for part in self.rows]
        rows = [part.scaled(factor) for part in rows]
        matrix = self.matrix
        if matrix is not None and index is not None:
            if gaps:
                present = index >= 0
                index = np.where(present, index, 0)
                factor = present.astype(np.float64) if factor is None else factor * present
            if not isinstance(index, slice):
                check_fill(int(np.diff(matrix.indptr)[index].sum()), shape[1])
            matrix = matrix[index]
        if matrix is not None and factor is not None:
            if isinstance(factor, np.ndarray):
                factor = np.repeat(factor, np.diff(matrix.indptr))
            matrix = csr(matrix.data * factor, matrix.indices, matrix.indptr, shape, True)
        return Structure(shape, rows, matrix)

    def multiplied(self, left: sp.csr_array) -> Structure:
        """The product left @ self for a canonical csr_array."""
        shape = (left.shape[0], self.shape[1])
        if self.matrix is None and len(self.rows) == 1 and not self.rows[0].gaps:
            part = self.rows[0]
            data, indices = left.data, left.indices
            if part.data is not None:
                data = data * (part.data[indices] if isinstance(part.data, np.ndarray) else part.data)
            ordered = isinstance(part.columns, int)
            if not ordered:
                indices = part.columns[indices].astype(index_type(*shape), copy=False)
            elif part.columns:
                indices = indices + indices.dtype.type(part.columns)
            if not ordered and data is left.data:
                data = data.copy()
            product = csr(data, indices, left.indptr if ordered else left.indptr.copy(), shape, ordered)
            product.sum_duplicates()
            return Structure(shape, [], product)
        right = self.assembled()
        lengths = np.diff(right.indptr)
        if left.nnz * (int(lengths.max()) if lengths.size else 0) > FILL_FIXED:
            check_fill(int(lengths[left.indices].sum()), shape[1])
        product = left @ right
        product.sum_duplicates()
        return Structure(shape, [], product)


def _assemble_rows(parts: list[Rows], shape: tuple[int, int]) -> sp.csr_array:
    size = shape[0]
    kind = index_type(shape[1], size * len(parts))
    consecutive = all(isinstance(part.columns, int) for part in parts)
    if consecutive:
        parts = sorted(parts, key=lambda part: part.columns)
    indices = np.empty((size, len(parts)), dtype=kind)
    data = np.empty((size, len(parts)))
    for k, part in enumerate(parts):
        columns = part.columns
        indices[:, k] = np.arange(columns, columns + size) if isinstance(columns, int) else columns
        data[:, k] = 1.0 if part.data is None else part.data
    if any(part.gaps for part in parts):
        present = indices >= 0
        indptr = np.zeros(size + 1, dtype=kind)
        np.cumsum(present.sum(axis=1), out=indptr[1:])
        matrix = csr(data[present], indices[present], indptr, shape, False)
    else:
        indptr = np.arange(0, size * len(parts) + 1, len(parts), dtype=kind)
        matrix = csr(data.ravel(), indices.ravel(), indptr, shape, consecutive)
    matrix.sum_duplicates()
    return matrix


def joined(parts: list[Structure | None], sizes: list[int], columns: int) -> Structure:
    """Put derivatives below each other; None is a block of zeros."""
    shape = (sum(sizes), columns)
    simple = [part for part in parts if part is not None]
    if all(part.matrix is None and len(part.rows) == 1 for part in simple):
        places = [np.full(size, -1) if part is None else _columns_of(part.rows[0])
                  for part, size in zip(parts, sizes, strict=True)]  # fmt: skip
        if all(part is not None and part.rows[0].data is None for part in parts):
            data: Any = None
        else:
            data = np.concatenate(
                [np.broadcast_to(1.0 if part is None or part.rows[0].data is None else part.rows[0].data, (size,))
                 for part, size in zip(parts, sizes, strict=True)]
            )  # fmt: skip
        gaps = len(simple) < len(parts) or any(part.rows[0].gaps for part in simple)
        return Structure(shape, [Rows(shape[0], np.concatenate(places), data, gaps)])
    blocks = [sp.csr_array((size, columns)) if part is None else part.assembled()
              for part, size in zip(parts, sizes, strict=True)]  # fmt: skip
    return Structure(shape, [], canonical_csr(sp.vstack(blocks, format="csr")))


def _columns_of(part: Rows) -> Any:
    columns = part.columns
    return np.arange(columns, columns + part.size) if isinstance(columns, int) else columns
