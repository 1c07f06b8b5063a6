"""Factorisation of a block triangular sparse matrix: the diagonal blocks only, substitution between them.

Time stepping stated as one system couples a step with the one before, never with the next: the matrix falls into
strongly connected blocks. An LU factorisation of the whole matrix fills the coupling of neighbouring blocks, whatever
the order; factors of the blocks do not. Source: I. S. Duff, A. M. Erisman, J. K. Reid, Direct Methods for Sparse
Matrices (1986), chapter on block triangular form (from memory).
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import splu

FloatArray = npt.NDArray[np.float64]

# smaller matrices, and those that fall into more blocks, are factorised as a whole
SMALL, MOST_BLOCKS = 1000, 500


def block_order(matrix: sp.csc_array) -> tuple[npt.NDArray[np.intp], npt.NDArray[np.intp]] | None:
    """Return p and the first index of each block (and n), so that matrix[p][:, p] is block lower triangular.

    None where the matrix is small, falls into too many blocks, or has a block of more than half its order.

    Parameters
    ----------
    matrix : csc_array, shape (n, n)
        Explicit zeros count as entries.
    """
    n = matrix.shape[0]
    if n < SMALL:
        return None
    entries = matrix.tocoo()
    rows, columns = entries.row, entries.col
    graph = sp.csr_array((np.ones(rows.size), (rows, columns)), shape=(n, n))
    number, labels = connected_components(graph, directed=True, connection="strong")
    sizes = np.bincount(labels)
    if number == 1 or number > MOST_BLOCKS or 2 * int(sizes.max()) > n:
        return None
    # the search labels a block after those it depends on; that is how it works, but not what it promises
    if (labels[rows] < labels[columns]).any():
        return None
    return np.argsort(labels, kind="stable"), np.concatenate([[0], np.cumsum(sizes)])


class BlockTriangularFactor:
    """Factors of the diagonal blocks of a matrix in the order of `block_order`.

    Raises
    ------
    RuntimeError
        For a block that is exactly singular, as `scipy.sparse.linalg.splu`.
    """

    def __init__(
        self, matrix: sp.csc_array, order: npt.NDArray[np.intp], starts: npt.NDArray[np.intp]
    ) -> None:
        self.order = order
        ordered = sp.csr_array(matrix)[order][:, order]
        self._parts: list[tuple[slice, Any, sp.csr_array]] = []
        for first, end in pairwise(starts):
            rows = sp.csr_array(ordered[first:end])
            self._parts.append(
                (slice(first, end), splu(sp.csc_array(rows[:, first:end])), sp.csr_array(rows[:, :first]))
            )

    def solve(self, rhs: FloatArray, trans: str = "N") -> FloatArray:
        """Solve A x = rhs ("N") or A' x = rhs ("T"); rhs of shape (n,) or (n, k)."""
        result = np.array(rhs[self.order], dtype=np.float64)
        if trans == "N":
            for part, factor, before in self._parts:
                result[part] = factor.solve(result[part] - before @ result[: part.start])
        else:
            for part, factor, before in reversed(self._parts):
                result[part] = factor.solve(result[part], "T")
                result[: part.start] -= before.T @ result[part]
        unordered = np.empty_like(result)
        unordered[self.order] = result
        return unordered
