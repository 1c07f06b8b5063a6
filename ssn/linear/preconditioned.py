"""Newton matrices too large to factorise: when that is so, and Krylov iterations with a preconditioner made from them.

A matrix with a dominant positive diagonal and hardly a positive entry beside it, as diffusion and upwinded transport
have it, goes to one multigrid cycle, symmetric or not. Others are factorised, or incompletely where the factor of the
whole would cost too much: the width of the matrix in reverse Cuthill-McKee order tells, about sqrt(n) for meshes in the
plane, where sparse factors are cheap, and n^(2/3) in space.
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.csgraph import reverse_cuthill_mckee
from scipy.sparse.linalg import LinearOperator, cg, spilu

from ..errors import InputError
from ..work import WorkCounts
from .direct import SingularMatrixError
from .krylov import conjugate_residuals
from .multigrid import one_cycle

FloatArray = npt.NDArray[np.float64]

# unknowns from which on a cycle beats a factorisation, and from which on the width is looked at
LARGE = 30_000
# width from which on the factors of a matrix cost too much: a cube of 32 x 32 x 32 nodes has 800
WIDE = 700
# share of positive entries beside the diagonal, and excess of a row over its diagonal, that multigrid bears
POSITIVE, EXCESS = 0.1, 1.2
# drop tolerance and fill of incomplete factors
DROP, FILL = 1e-3, 10.0
# iterations at most, and directions kept
ITERATIONS, KEPT = 200, 60


def why_iterate(matrix: Any) -> tuple[str, str] | None:
    """The kind of preconditioner and the reason, where a sparse matrix should not be factorised."""
    n = int(matrix.shape[0])
    if n < LARGE or not sp.issparse(matrix):
        return None
    if dominant(matrix):
        return "multigrid", f"{n} unknowns, the diagonal dominates"
    width = bandwidth(matrix)
    if width >= WIDE:
        return "incomplete factors", f"{n} unknowns, {width} wide when ordered: too much fill"
    return None


def dominant(matrix: Any) -> bool:
    """Whether the diagonal is positive and dominant, and the rest hardly ever positive."""
    diagonal = matrix.diagonal()
    if not (diagonal > 0).all():
        return False
    size = abs(matrix)
    rows = np.asarray(size.sum(axis=1)).ravel() - diagonal
    total = float(np.asarray(matrix.sum(axis=1)).sum() - diagonal.sum())
    positive = 0.5 * (float(rows.sum()) + total)
    if positive > POSITIVE * float(rows.sum()):
        return False
    return float(np.mean(rows <= EXCESS * diagonal)) >= 0.99


def bandwidth(matrix: Any) -> int:
    """The bandwidth after reverse Cuthill-McKee ordering of the pattern."""
    pattern = sp.csr_array(abs(matrix) + abs(matrix).T)
    order = reverse_cuthill_mckee(sp.csr_matrix(pattern), symmetric_mode=True)
    place = np.empty(order.size, dtype=np.int64)
    place[order] = np.arange(order.size)
    entries = pattern.tocoo()
    return int(np.abs(place[entries.row] - place[entries.col]).max(initial=0))


class PreconditionedMatrix:
    """A sparse matrix with a preconditioner made from it.

    Parameters
    ----------
    matrix : sparse array, shape (n, n)
    kind : {"multigrid", "incomplete factors"}
        As `why_iterate` says.
    definite : bool
        Symmetric positive definite: conjugate gradients where the preconditioner is so too.

    Raises
    ------
    SingularMatrixError
        Where no incomplete factors exist.
    """

    def __init__(self, matrix: Any, kind: str, *, definite: bool, work: WorkCounts) -> None:
        self.matrix, self.work = sp.csr_array(matrix), work
        self.definite = definite and kind == "multigrid"
        if kind == "multigrid":
            self.preconditioner: LinearOperator = one_cycle(self.matrix)
        else:
            self.preconditioner = _incomplete(self.matrix)
        work.factorizations += 1

    def solve(self, rhs: FloatArray, forcing: float) -> tuple[FloatArray, float, int]:
        """Return x, its relative residual (computed), and the iterations it took."""
        return krylov(
            self.matrix, rhs, forcing, self.preconditioner, definite=self.definite, max_inner=ITERATIONS,
            work=self.work,
        )  # fmt: skip


def krylov(
    matrix: Any,
    rhs: FloatArray,
    forcing: float,
    preconditioner: LinearOperator,
    *,
    definite: bool,
    max_inner: int,
    work: WorkCounts,
) -> tuple[FloatArray, float, int]:
    """Solve with a preconditioner; return x, its relative residual (computed, infinite for NaN), and the iterations."""
    iterations = 0

    def apply(x: FloatArray) -> FloatArray:
        nonlocal iterations
        iterations += 1
        work.operator_products += 1
        return np.asarray(matrix @ np.ravel(x), dtype=np.float64)

    if definite:
        operator = LinearOperator(matrix.shape, matvec=apply, dtype=np.float64)
        x, _ = cg(operator, rhs, rtol=forcing, atol=0.0, maxiter=max_inner, M=preconditioner)
        left = float(np.linalg.norm(apply(x) - rhs)) / (float(np.linalg.norm(rhs)) or 1.0)
        return x, left if np.isfinite(left) else np.inf, iterations

    def precondition(r: FloatArray, inner: int) -> FloatArray:
        return np.asarray(preconditioner @ r, dtype=np.float64)

    return conjugate_residuals(apply, precondition, rhs, forcing, max_inner=max_inner, kept=KEPT)


def checked_preconditioner(given: Any, size: int) -> LinearOperator | None:
    """A user's preconditioner, or None where there is none; raises `InputError` where it does not fit."""
    if given is None:
        return None
    if getattr(given, "shape", None) != (size, size) or not hasattr(given, "matvec"):
        raise InputError(
            f"preconditioner must be a LinearOperator of shape {size}x{size} that approximates the inverse of the "
            f"derivative, got {type(given).__name__} of shape {getattr(given, 'shape', None)}"
        )
    return given


def preconditioner_of(equation: Any, size: int) -> LinearOperator | None:
    """The preconditioner that the map of a natural equation brings."""
    return checked_preconditioner(getattr(getattr(equation, "map", None), "preconditioner", None), size)


def _incomplete(matrix: sp.csr_array) -> LinearOperator:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            factors = spilu(sp.csc_matrix(matrix), drop_tol=DROP, fill_factor=FILL)
    except RuntimeError as error:
        raise SingularMatrixError(f"incomplete LU: {error}") from error
    return LinearOperator(matrix.shape, matvec=factors.solve, dtype=np.float64)
