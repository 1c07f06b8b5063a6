"""From the nodes of a trace to a derivative: dense for a few unknowns, sparse, or an operator."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .links import Operator
from .structure import Rows, Structure, Unassembled, csr
from .trace import Node

FloatArray = npt.NDArray[np.float64]

# Up to this many entries in all derivatives together dense arrays are quicker than any sparse form.
DENSE_ENTRIES = 100_000


def derivative(node: Node | None, root: Node, rows: int) -> Any:
    """The derivative of `node` in `root`: a csr_array, or a LinearOperator where that cannot be assembled.

    It is a LinearOperator where an operator took part, or where it would have too many entries.
    """
    columns = root.size
    if node is None:
        return sp.csr_array((rows, columns))
    order = _needed(node)
    if node.size == 0 or columns == 0 or root not in order:
        return sp.csr_array((rows, columns))
    small = columns * sum(part.size for part in order) <= DENSE_ENTRIES
    if small and not any(isinstance(link, Operator) for part in order for link in part.links):
        return _from_dense(_dense(order, root))
    return _sparse(order, root)


def _needed(node: Node) -> list[Node]:
    """All nodes that `node` depends on, and itself, in the order in which they arose."""
    found = {node}
    waiting = [node]
    while waiting:
        for parent in waiting.pop().parents:
            if parent is not None and parent not in found:
                found.add(parent)
                waiting.append(parent)
    return sorted(found, key=lambda part: part.serial)


def _dense(order: list[Node], root: Node) -> FloatArray:
    tangents: dict[Node, FloatArray] = {root: np.eye(root.size)}
    for node in order:
        if node is not root:
            tangents[node] = node.forward([tangents[p] for p in node.parents if p is not None])
    return tangents[order[-1]]


def _from_dense(dense: FloatArray) -> sp.csr_array:
    rows, columns = dense.shape
    present = dense != 0
    indptr = np.zeros(rows + 1, dtype=np.int32)
    np.cumsum(np.count_nonzero(present, axis=1), out=indptr[1:])
    return csr(dense[present], present.nonzero()[1].astype(np.int32), indptr, (rows, columns), True)


def _sparse(order: list[Node], root: Node) -> Any:
    columns = root.size
    known: dict[Node, Structure] = {root: Structure((columns, columns), [Rows(columns)])}
    uses: dict[Node, int] = {}
    for node in order:
        for parent in node.parents:
            if parent is not None:
                uses[parent] = uses.get(parent, 0) + 1
    frontier: dict[Node, Any] = {}
    walked: list[Node] = []
    for node in order:
        if node is root:
            continue
        parents = [parent for parent in node.parents if parent is not None]
        try:
            if any(parent not in known for parent in parents):
                raise Unassembled
            known[node] = node.compose([known[parent] for parent in parents], columns)
        except Unassembled:
            walked.append(node)
            for parent in parents:
                if parent in known and parent not in frontier:
                    frontier[parent] = None if parent is root else known[parent].assembled()
        for parent in parents:
            uses[parent] -= 1
            if uses[parent] == 0:
                known.pop(parent, None)
    last = order[-1]
    if last in known:
        return _finished(known[last])
    return TracedDerivative(columns, walked, frontier)


def _finished(structure: Structure) -> sp.csr_array:
    matrix = structure.assembled()
    if np.count_nonzero(matrix.data) < matrix.nnz:
        matrix = sp.csr_array(matrix, copy=True)
        matrix.eliminate_zeros()
    elif not structure.rows:
        matrix = sp.csr_array(matrix, copy=True)  # the parts may belong to the user
    return matrix


class TracedDerivative(LinearOperator):
    """The derivative of a trace as an operator: products walk through the operations, nothing is assembled.

    Parameters
    ----------
    columns : int
        Number of unknowns.
    walked : list of Node
        The operations to walk through, in order; the last is the result.
    frontier : dict of Node to csr_array or None
        The operations before them, with their derivative; None is the identity.
    """

    def __init__(self, columns: int, walked: list[Node], frontier: dict[Node, Any]) -> None:
        super().__init__(np.dtype(np.float64), (walked[-1].size, columns))
        self._walked = walked
        self._frontier = frontier

    def _matmat(self, block: FloatArray) -> FloatArray:
        block = np.asarray(block, dtype=np.float64)
        tangents = {
            node: block if matrix is None else matrix @ block for node, matrix in self._frontier.items()
        }
        for node in self._walked:
            tangents[node] = node.forward([tangents[p] for p in node.parents if p is not None])
        return tangents[self._walked[-1]]

    def _rmatmat(self, block: FloatArray) -> FloatArray:
        block = np.asarray(block, dtype=np.float64)
        cotangents: dict[Node, FloatArray] = {self._walked[-1]: block}
        for node in reversed(self._walked):
            own = cotangents.pop(node, None)
            if own is None:
                continue
            parents = [parent for parent in node.parents if parent is not None]
            for parent, part in zip(parents, node.backward(own), strict=True):
                cotangents[parent] = cotangents[parent] + part if parent in cotangents else part
        total = np.zeros((self.shape[1], block.shape[1]))
        for node, matrix in self._frontier.items():
            if node in cotangents:
                total += cotangents[node] if matrix is None else matrix.T @ cotangents[node]
        return total

    def _matvec(self, vector: FloatArray) -> FloatArray:
        return self._matmat(np.reshape(vector, (-1, 1))).ravel()

    def _rmatvec(self, vector: FloatArray) -> FloatArray:
        return self._rmatmat(np.reshape(vector, (-1, 1))).ravel()
