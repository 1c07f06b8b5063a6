"""Algebraic multigrid for the coupled state and adjoint system on any mesh.

The system is [[K, -T], [W, K]] [y; q] = [f; g], K symmetric positive definite. The interpolation comes from a pyamg
hierarchy of K, built once, and serves both unknowns; K, W and T all get their Galerkin products, of which only that of
T is formed anew when the active sets change. Both unknowns of a node are relaxed together: a forward sweep of pyamg's
block Gauss-Seidel before the coarse correction, a backward one after it. Block rows have a fixed pattern, that of K,
W and T together.

Which interpolation: classical (Ruge and Stueben) with strength by positive couplings left out and the second coarsening
pass, which stays robust on meshes with obtuse angles; where its coarse operators fill up, as they do on tetrahedra,
smoothed aggregation by evolution strength.

Source: K. Stueben, J. Comput. Appl. Math. 128 (2001) 281-309, for the systems approach by unknowns (from memory).
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla
import scipy.sparse as sp

FloatArray = npt.NDArray[np.float64]

# nonzeros of all operators over those of the finest beyond which the classical hierarchy is given up
COMPLEXITY = 3.5
# nodes of the coarsest mesh at most
COARSEST = 100
# of the numbers inside a cycle: less traffic of memory, and what single precision loses the outer iteration mends
PRECISION = np.float32
# keeps an entry that is zero for the active sets of the moment in the pattern: SciPy drops exact zeros
TINY = 1e-290


@dataclass
class AlgebraicLevel:
    """Operators of one level; `blocks` is [[K, -T], [W, K]] with interleaved unknowns."""

    state: sp.csr_array
    pattern: sp.csr_array
    blocks: Any
    interpolation: Any
    restriction: Any
    prolong: Any
    restrict: Any
    inverse: Any = None


class AlgebraicHierarchy:
    """Cycles for the coupled system on any mesh, V(1,1).

    Parameters
    ----------
    state : sparse array, shape (N, N)
        K, symmetric positive definite.
    mass : sparse array, shape (N, N)
        W.
    coupling_pattern : sparse array, shape (N, N), optional
        Pattern of T where it is not diagonal.
    """

    name = "algebraic multigrid"

    def __init__(self, state: Any, mass: Any, coupling_pattern: Any = None) -> None:
        self.size = int(state.shape[0])
        transfers = _interpolations(state)
        state, mass = sp.csr_array(state), sp.csr_array(mass)
        pattern = abs(state) + abs(mass) + sp.eye_array(self.size, format="csr")
        if coupling_pattern is not None:
            pattern = pattern + abs(coupling_pattern)
        self.levels: list[AlgebraicLevel] = []
        for interpolation in [*transfers, None]:
            pattern = _as_pattern(pattern)
            restriction = None if interpolation is None else sp.csr_array(interpolation.T)
            self.levels.append(_make_level(state, mass, pattern, interpolation, restriction))
            if interpolation is None:
                break
            state, mass = restriction @ state @ interpolation, restriction @ mass @ interpolation
            pattern = _as_pattern(restriction) @ pattern @ _as_pattern(interpolation)
        self._coarsest: dict[bool, Any] = {False: sla.lu_factor(state.toarray())}

    @property
    def complexity(self) -> float:
        """Nonzeros of all state operators over those of the finest."""
        return sum(level.state.nnz for level in self.levels) / self.levels[0].state.nnz

    def refresh(self, active: Any) -> None:
        """Take the active-set term T, a vector with its diagonal or a sparse matrix within the pattern."""
        term = sp.csr_array(active) if sp.issparse(active) else sp.csr_array(sp.diags_array(active))
        for level in self.levels:
            values = _on_pattern(term, level.pattern)
            level.blocks.data[:, 0, 1] = -values
            level.inverse = _diagonal_inverse(level.blocks, level.pattern)
            if level.interpolation is not None:
                term = level.restriction @ (term @ level.interpolation)
        self._coarsest[True] = sla.lu_factor(self.levels[-1].blocks.toarray().astype(np.float64))

    def correct(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for the coupled system."""
        return self._run(f, g, True)

    def solve_each(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for K y = f and K q = g."""
        return self._run(f, g, False)

    def _run(self, f: FloatArray, g: FloatArray, coupled: bool) -> tuple[FloatArray, FloatArray]:
        # loads of size one, so that small numbers do not leave the range of single precision
        size = float(max(abs(f).max(), abs(g).max()))
        if size == 0.0 or not np.isfinite(size):
            return np.full(self.size, size * 0.0), np.full(self.size, size * 0.0)
        x = self._cycle(0, np.column_stack([f / size, g / size]).astype(PRECISION), coupled)
        return x[:, 0].astype(np.float64) * size, x[:, 1].astype(np.float64) * size

    def _cycle(self, k: int, loads: FloatArray, coupled: bool) -> FloatArray:
        level = self.levels[k]
        if level.interpolation is None:
            load = loads.ravel() if coupled else loads
            x = sla.lu_solve(self._coarsest[coupled], load.astype(np.float64))
            return np.reshape(x, loads.shape).astype(PRECISION)
        x = np.zeros_like(loads)
        if coupled:
            _relax(level.blocks, level.inverse, x, loads, forward=True)
            left = loads - (level.blocks @ x.ravel()).reshape(x.shape)
            x += level.prolong @ self._cycle(k + 1, level.restrict @ left, coupled)
            _relax(level.blocks, level.inverse, x, loads, forward=False)
            return x
        both = [np.ascontiguousarray(loads[:, j]) for j in (0, 1)]
        parts = [np.zeros_like(b) for b in both]
        for part, load in zip(parts, both, strict=True):
            _relax_one(level.state, part, load, forward=True)
        x = np.column_stack(parts)
        x += level.prolong @ self._cycle(k + 1, level.restrict @ (loads - level.state @ x), coupled)
        for j, load in enumerate(both):
            column = np.ascontiguousarray(x[:, j])
            _relax_one(level.state, column, load, forward=False)
            x[:, j] = column
        return x


def _interpolations(state: Any) -> list[sp.csr_array]:
    """The interpolation operators of a pyamg hierarchy of K."""
    import pyamg

    matrix = sp.csr_matrix(state)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        hierarchy: Any = pyamg.ruge_stuben_solver(
            matrix,
            strength=("classical", {"theta": 0.25, "norm": "min"}),
            CF=("RS", {"second_pass": True}),
            max_coarse=COARSEST,
        )
        if hierarchy.operator_complexity() > COMPLEXITY:
            hierarchy = pyamg.smoothed_aggregation_solver(matrix, strength="evolution", max_coarse=COARSEST)
    return [_without_rounding(sp.csr_array(level.P)) for level in hierarchy.levels[:-1]]


def _without_rounding(interpolation: sp.csr_array) -> sp.csr_array:
    """The interpolation without entries at rounding level, which would fill the coarse patterns."""
    interpolation.data[abs(interpolation.data) < 1e-12 * abs(interpolation.data).max(initial=0.0)] = 0.0
    interpolation.eliminate_zeros()
    return interpolation


def _as_pattern(matrix: Any) -> sp.csr_array:
    pattern = sp.csr_array(matrix)
    pattern.sort_indices()
    pattern.data = np.ones(pattern.data.size)
    return pattern


def _on_pattern(matrix: Any, pattern: sp.csr_array) -> FloatArray:
    """The values of a matrix on a pattern that contains its own."""
    total = sp.csr_array(matrix) + TINY * pattern
    total.sort_indices()
    return np.asarray(total.data)


def _make_level(
    state: sp.csr_array, mass: sp.csr_array, pattern: sp.csr_array, interpolation: Any, restriction: Any
) -> AlgebraicLevel:
    data = np.zeros((pattern.nnz, 2, 2), PRECISION)
    data[:, 0, 0] = data[:, 1, 1] = _on_pattern(state, pattern)
    data[:, 1, 0] = _on_pattern(mass, pattern)
    n = 2 * state.shape[0]
    blocks = sp.bsr_array((data, pattern.indices, pattern.indptr), shape=(n, n))
    single = [None if part is None else part.astype(PRECISION) for part in (interpolation, restriction)]
    return AlgebraicLevel(state.astype(PRECISION), pattern, blocks, interpolation, restriction, *single)


def _diagonal_inverse(blocks: Any, pattern: sp.csr_array) -> FloatArray:
    """The inverses of the diagonal blocks, shape (N, 2, 2)."""
    rows = np.repeat(np.arange(pattern.shape[0]), np.diff(pattern.indptr))
    a = blocks.data[rows == pattern.indices]
    determinant = a[:, 0, 0] * a[:, 1, 1] - a[:, 0, 1] * a[:, 1, 0]
    inverse = np.empty_like(a)
    inverse[:, 0, 0], inverse[:, 1, 1] = a[:, 1, 1], a[:, 0, 0]
    inverse[:, 0, 1], inverse[:, 1, 0] = -a[:, 0, 1], -a[:, 1, 0]
    return np.ascontiguousarray(inverse / determinant[:, None, None])


def _relax(blocks: Any, inverse: Any, x: FloatArray, loads: FloatArray, *, forward: bool) -> None:
    """One sweep of block Gauss-Seidel, x of shape (N, 2) changed in place."""
    from pyamg import amg_core

    n = x.shape[0]
    start, stop, step = (0, n, 1) if forward else (n - 1, -1, -1)
    amg_core.block_gauss_seidel(
        blocks.indptr,
        blocks.indices,
        blocks.data.ravel(),
        x.ravel(),
        loads.ravel(),
        inverse.ravel(),
        start,
        stop,
        step,
        2,
    )


def _relax_one(matrix: Any, x: FloatArray, load: FloatArray, *, forward: bool) -> None:
    from pyamg import amg_core

    n = x.size
    start, stop, step = (0, n, 1) if forward else (n - 1, -1, -1)
    amg_core.gauss_seidel(matrix.indptr, matrix.indices, matrix.data, x, load, start, stop, step)
