"""Direct factorisations in three stages: symbolic once, numeric when values change, solve."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla
import scipy.sparse as sp
from scipy.sparse.linalg import splu

from ..work import WorkCounts
from . import cholmod
from .block_triangular import BlockTriangularFactor, block_order

FloatArray = npt.NDArray[np.float64]


# relative error in recovering a known vector from which on a matrix counts as singular: condition about 1e13
LOST_DIGITS = 1e-3
# ratio of the largest entries of rows from which on a matrix is equilibrated
BADLY_SCALED = 1e8


class SingularMatrixError(ArithmeticError):
    """The matrix is singular to working precision: the one meaning of singular in ssn."""


class Factorization:
    """A factorised square matrix, sparse or dense.

    Parameters
    ----------
    matrix : sparse array or array, shape (n, n)
    symmetric, positive_definite : bool
        Known structure. Positive definite sparse matrices go to CHOLMOD where it is installed; a claim of
        definiteness that turns out wrong falls back to LU.
    work : WorkCounts, optional
        Counters to add to.

    Raises
    ------
    SingularMatrixError
        For a matrix that is singular to working precision.

    Notes
    -----
    `refactorize` reuses the ordering (CHOLMOD: the whole symbolic factor; SuperLU: the column permutation).
    Of nonsymmetric sparse matrices that are block triangular in some order only the diagonal blocks are factorised.
    """

    def __init__(
        self,
        matrix: Any,
        *,
        symmetric: bool = False,
        positive_definite: bool = False,
        work: WorkCounts | None = None,
    ) -> None:
        self.work = work if work is not None else WorkCounts()
        self.symmetric = symmetric or positive_definite
        self.positive_definite = positive_definite
        self.shape = matrix.shape
        self.method = ""
        self._cholmod: cholmod.CholmodFactor | None = None
        self._lu: Any = None
        self._dense: Any = None
        self._permutation: npt.NDArray[np.intp] | None = None
        self._ordered = False
        self._scaling: tuple[FloatArray, FloatArray] | None = None
        self._pattern: tuple[Any, Any] | None = None
        self.refactorize(matrix)

    def refactorize(self, matrix: Any) -> None:
        """Factorise new values; symbolic work is reused where the pattern is the same."""
        self.work.factorizations += 1
        balanced = self._equilibrate(matrix)
        self._factorize(balanced)
        self._check_regular(balanced)

    def _check_regular(self, matrix: Any) -> None:
        """Recover a known vector: the loss of digits is the condition number times rounding, in any scaling."""
        n = matrix.shape[0]
        if n == 0:
            return
        known = np.where(np.arange(n) % 7 < 3, -1.0, 1.0) * (1.0 + (np.arange(n) % 5) / 8.0)
        found = self._solve(np.asarray(matrix @ known))
        error = (
            float(np.linalg.norm(found - known) / np.linalg.norm(known))
            if np.isfinite(found).all()
            else np.inf
        )
        if not error < LOST_DIGITS:
            raise SingularMatrixError(
                f"{self.method}: a known vector is recovered with error {error:.1e} only"
            )

    def _equilibrate(self, matrix: Any) -> Any:
        """Scale rows and columns by powers of two where they differ by more than eight orders of magnitude."""
        self._scaling = None
        if matrix.shape[0] == 0:
            return matrix
        size = abs(matrix)
        rows = _row_maxima(size)
        if not np.isfinite(rows).all():
            raise SingularMatrixError("the matrix has NaN or infinite entries")
        if rows.min() == 0.0:
            raise SingularMatrixError(f"row {int(np.argmin(rows))} of the matrix is zero")
        if rows.max() <= BADLY_SCALED * rows.min():
            return matrix
        if self.symmetric:
            diagonal = np.abs(matrix.diagonal())
            left = right = _power_of_two(1.0 / np.sqrt(np.where(diagonal > 0, diagonal, rows)))
        else:
            left = _power_of_two(1.0 / rows)
            columns = _row_maxima(abs(_scaled(matrix, left, np.ones_like(left))).T)
            if columns.min() == 0.0:
                raise SingularMatrixError(f"column {int(np.argmin(columns))} of the matrix is zero")
            right = _power_of_two(1.0 / columns)
        self._scaling = (left, right)
        return _scaled(matrix, left, right)

    def _factorize(self, matrix: Any) -> None:
        if not sp.issparse(matrix):
            self._factorize_dense(np.asarray(matrix))
            return
        a = sp.csc_array(matrix)
        a.sort_indices()
        same = self._pattern is not None and _same_pattern(self._pattern, a)
        if not same:
            self._pattern = (a.indptr, a.indices)
            self._permutation = None
            self.work.symbolic_analyses += 1
        if self.positive_definite and cholmod.available():
            try:
                if same and self._cholmod is not None:
                    self._cholmod.refactorize(a)
                else:
                    self._cholmod = cholmod.CholmodFactor(a)
                self.method = "CHOLMOD"
                self._lu = None
                return
            except cholmod.NotPositiveDefinite:
                self._cholmod = None
        self._factorize_superlu(a)

    def _factorize_superlu(self, a: sp.csc_array) -> None:
        self.method = "SuperLU"
        options: dict[str, Any] = {}
        if self.symmetric:
            options = {
                "options": {"SymmetricMode": True},
                "diag_pivot_thresh": 0.0 if self.positive_definite else 0.1,
            }
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                blocks = None if self.symmetric else block_order(a)
                if blocks is not None:
                    self.method = "SuperLU by blocks"
                    self._lu, self._ordered = BlockTriangularFactor(a, *blocks), False
                elif self._permutation is None:
                    spec = "MMD_AT_PLUS_A" if self.symmetric else "COLAMD"
                    self._lu = splu(a, permc_spec=spec, **options)
                    self._permutation = np.argsort(self._lu.perm_c) if self.symmetric else None
                    self._ordered = False
                else:
                    p = self._permutation
                    self._lu = splu(sp.csc_array(a[p][:, p]), permc_spec="NATURAL", **options)
                    self._ordered = True
        except RuntimeError as error:
            raise SingularMatrixError(f"sparse LU: {error}") from error

    def _factorize_dense(self, a: FloatArray) -> None:
        self.method = "dense Cholesky" if self.positive_definite else "dense LU"
        if self.positive_definite:
            try:
                self._dense = ("cholesky", sla.cho_factor(a, check_finite=False))
                return
            except sla.LinAlgError:
                self.method = "dense LU"
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            lu = sla.lu_factor(a, check_finite=False)
        self._dense = ("lu", lu)

    def solve(self, rhs: FloatArray, *, transposed: bool = False) -> FloatArray:
        """Solve A x = rhs, or A' x = rhs; rhs of shape (n,) or (n, k)."""
        if self._scaling is None:
            return self._solve(rhs, transposed=transposed)
        left, right = self._scaling[::-1] if transposed else self._scaling
        if rhs.ndim == 2:
            left, right = left[:, None], right[:, None]
        return right * self._solve(left * rhs, transposed=transposed)

    def _solve(self, rhs: FloatArray, *, transposed: bool = False) -> FloatArray:
        if self._dense is not None:
            kind, data = self._dense
            if kind == "cholesky":
                return np.asarray(sla.cho_solve(data, rhs, check_finite=False))
            return np.asarray(sla.lu_solve(data, rhs, trans=1 if transposed else 0, check_finite=False))
        if self._cholmod is not None and self._lu is None:
            return self._cholmod.solve(rhs)
        trans = "T" if transposed else "N"
        if self._ordered:
            assert self._permutation is not None
            result = np.empty_like(rhs)
            result[self._permutation] = self._lu.solve(rhs[self._permutation], trans)
            return result
        return np.asarray(self._lu.solve(rhs, trans))


def _row_maxima(size: Any) -> FloatArray:
    return (
        np.asarray(size.max(axis=1).toarray()).ravel() if sp.issparse(size) else np.asarray(size.max(axis=1))
    )


def _power_of_two(scale: FloatArray) -> FloatArray:
    return np.asarray(np.exp2(np.round(np.log2(scale))))


def _scaled(matrix: Any, left: FloatArray, right: FloatArray) -> Any:
    if sp.issparse(matrix):
        # by entries: a sparse product drops those that are zero, and the pattern with them
        scaled = sp.csc_array(matrix, copy=True)
        scaled.data *= left[scaled.indices] * np.repeat(right, np.diff(scaled.indptr))
        return scaled
    return left[:, None] * matrix * right


def _same_pattern(known: tuple[Any, Any], a: sp.csc_array) -> bool:
    indptr, indices = known
    return (
        indices.size == a.indices.size
        and np.array_equal(indptr, a.indptr)
        and np.array_equal(indices, a.indices)
    )
