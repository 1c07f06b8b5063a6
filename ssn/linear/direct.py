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

FloatArray = npt.NDArray[np.float64]


# relative error in recovering a known vector from which on a matrix counts as singular: condition about 1e13
LOST_DIGITS = 1e-3


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
        self._pattern: tuple[Any, Any] | None = None
        self.refactorize(matrix)

    def refactorize(self, matrix: Any) -> None:
        """Factorise new values; symbolic work is reused where the pattern is the same."""
        self.work.factorizations += 1
        self._factorize(matrix)
        self._check_regular(matrix)

    def _check_regular(self, matrix: Any) -> None:
        """Recover a known vector: the loss of digits is the condition number times rounding, in any scaling."""
        n = matrix.shape[0]
        if n == 0:
            return
        known = np.where(np.arange(n) % 7 < 3, -1.0, 1.0) * (1.0 + (np.arange(n) % 5) / 8.0)
        found = self.solve(np.asarray(matrix @ known))
        error = (
            float(np.linalg.norm(found - known) / np.linalg.norm(known))
            if np.isfinite(found).all()
            else np.inf
        )
        if not error < LOST_DIGITS:
            raise SingularMatrixError(
                f"{self.method}: a known vector is recovered with error {error:.1e} only"
            )

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
                if self._permutation is None:
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


def _same_pattern(known: tuple[Any, Any], a: sp.csc_array) -> bool:
    indptr, indices = known
    return (
        indices.size == a.indices.size
        and np.array_equal(indptr, a.indptr)
        and np.array_equal(indices, a.indices)
    )
