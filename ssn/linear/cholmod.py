"""The one adapter to CHOLMOD (scikit-sparse); hides the change of its interface in version 0.5."""

from __future__ import annotations

import os
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..errors import MissingExtraError

FloatArray = npt.NDArray[np.float64]

try:
    import sksparse.cholmod as _cholmod  # type: ignore[import-untyped,unused-ignore]

    _reason = ""
except ImportError as error:
    _cholmod = None
    _reason = f"scikit-sparse is not installed ({error})"

_LEGACY = _cholmod is not None and hasattr(_cholmod, "analyze")
if _cholmod is not None and not (_LEGACY or hasattr(_cholmod, "cho_factor")):
    _reason, _cholmod = "the installed scikit-sparse has an unknown interface", None


def available() -> bool:
    """Whether CHOLMOD can be used; the environment variable SSN_WITHOUT_CHOLMOD=1 switches it off."""
    return _cholmod is not None and os.environ.get("SSN_WITHOUT_CHOLMOD", "") in ("", "0")


def why_not() -> str:
    """Why CHOLMOD is not used."""
    if _cholmod is None:
        return _reason
    return "switched off by SSN_WITHOUT_CHOLMOD" if not available() else ""


def require() -> None:
    """Raise `MissingExtraError` unless CHOLMOD can be used."""
    if not available():
        raise MissingExtraError(f"CHOLMOD was asked for: {why_not()}; pip install 'ssn[cholmod]'")


class NotPositiveDefinite(Exception):
    """The matrix has no Cholesky factor."""


class CholmodFactor:
    """A sparse Cholesky factor whose symbolic part serves again for matrices of the same pattern."""

    def __init__(self, matrix: sp.csc_array) -> None:
        require()
        a = _with_short_indices(matrix)
        try:
            if _LEGACY:
                self._factor: Any = _cholmod.analyze(a)
                self._factor.cholesky_inplace(a)
            else:
                self._factor = _cholmod.cho_factor(a)
        except Exception as error:
            raise _translated(error) from error

    def refactorize(self, matrix: sp.csc_array) -> None:
        """Numeric factorisation of a matrix with the same pattern."""
        a = _with_short_indices(matrix)
        try:
            if _LEGACY:
                self._factor.cholesky_inplace(a)
            else:
                self._factor = _cholmod.cho_factor(a)
        except Exception as error:
            raise _translated(error) from error

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve for one (n,) or several (n, k) right-hand sides."""
        solution = self._factor(rhs) if _LEGACY else self._factor.solve(rhs)
        return np.asarray(solution, dtype=np.float64)


def _with_short_indices(matrix: sp.csc_array) -> sp.csc_matrix:
    """The matrix with 32-bit indices where they suffice: products of matrices may have longer ones."""
    a = sp.csc_matrix(matrix)
    if a.indices.dtype != np.int32 and a.nnz <= np.iinfo(np.int32).max:
        a.indices, a.indptr = a.indices.astype(np.int32), a.indptr.astype(np.int32)
    return a


def _translated(error: Exception) -> Exception:
    name = type(error).__name__
    return NotPositiveDefinite(str(error)) if "PositiveDefinite" in name else error
