"""The cone of positive semidefinite matrices."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import count
from .convex_set import FEASIBLE, PROPORTIONAL, ConvexSet, smooth_plus
from .derivative import SpectralDerivative

FloatArray = npt.NDArray[np.float64]


class PositiveSemidefiniteCone(ConvexSet):
    """Symmetric positive semidefinite matrices of a given order, as vectors.

    Parameters
    ----------
    order : int
        Rows of the matrix, m. The unknown has n = m (m + 1) / 2 components: the lower triangle row by row, entries off
        the diagonal multiplied by sqrt(2), so that the inner product of vectors is that of matrices (Frobenius). Use
        `to_vector` and `to_matrix`.

    Raises
    ------
    InputError
        For another number of unknowns, or weights of a problem that are not all equal.

    Notes
    -----
    The projection replaces each eigenvalue by its positive part (N. J. Higham, Linear Algebra Appl. 103 (1988)
    103-118, from memory). Derivative, with A = Q diag(l) Q': H -> Q (O * (Q' H Q)) Q', O the divided differences of
    max(0, .) at the eigenvalues; strongly semismooth (D. Sun and J. Sun, Math. Oper. Res. 27 (2002) 150-169, from
    memory). Selection at kinks: an eigenvalue 0 counts as negative, slope 0.

    Smoothed map: (l + sqrt(l^2 + 4 eps^2)) / 2 for each eigenvalue; it stays inside the cone and differs from the
    projection by at most eps in the spectral norm.

    One eigenvalue decomposition, O(m^3), serves all members at the same point.
    """

    piecewise_affine = False

    def __init__(self, order: int) -> None:
        self.order = count(order, "order")
        super().__init__(self.order * (self.order + 1) // 2)
        self._rows, self._columns = np.tril_indices(self.order)
        self._scale = np.where(self._rows == self._columns, 1.0, np.sqrt(2.0))
        self._known: tuple[FloatArray, FloatArray, FloatArray] | None = None

    def __repr__(self) -> str:
        return f"PositiveSemidefiniteCone(order={self.order})"

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless the weights are all equal."""
        weights = np.asarray(weights)
        if weights.max() > weights.min() * (1.0 + PROPORTIONAL):
            raise InputError(
                "PositiveSemidefiniteCone needs equal weights: it projects in the Frobenius product"
            )

    def to_vector(self, matrix: FloatArray) -> FloatArray:
        """The vector (n,) of a symmetric matrix (m, m), or (k, n) of (k, m, m); reads the lower triangle."""
        return np.asarray(matrix)[..., self._rows, self._columns] * self._scale

    def to_matrix(self, vector: FloatArray) -> FloatArray:
        """The symmetric matrix (m, m) of a vector (n,), or (k, m, m) of (k, n)."""
        vector = np.asarray(vector)
        entries = vector / self._scale
        matrix = np.empty((*vector.shape[:-1], self.order, self.order))
        matrix[..., self._rows, self._columns] = entries
        matrix[..., self._columns, self._rows] = entries
        return matrix

    def _spectrum(self, v: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Eigenvalues, ascending, and eigenvectors; those of the last point are kept."""
        known = self._known
        if known is None or not np.array_equal(known[0], v):
            values, vectors = np.linalg.eigh(self.to_matrix(v))
            known = self._known = (v.copy(), values, vectors)
        return known[1], known[2]

    def contains(self, u: FloatArray) -> bool:
        """Whether no eigenvalue is negative, up to rounding."""
        values = np.linalg.eigvalsh(self.to_matrix(u))
        return bool(values[0] >= -FEASIBLE * max(abs(values[0]), abs(values[-1])))

    def _support(self, y: FloatArray) -> float:
        return 0.0 if self.contains(-y) else float("inf")

    def _project(self, v: FloatArray) -> FloatArray:
        values, vectors = self._spectrum(v)
        if values[0] >= 0.0:
            return v.copy()
        positive = values > 0.0
        if 2 * positive.sum() <= self.order:
            kept = vectors[:, positive]
            return self.to_vector((kept * values[positive]) @ kept.T)
        cut = vectors[:, ~positive]  # fewer: add what is missing
        return v - self.to_vector((cut * values[~positive]) @ cut.T)

    def _slopes(self, values: FloatArray, vectors: FloatArray, eps: float) -> SpectralDerivative:
        differences = divided_differences(values[:, None], values[None, :], eps)
        return SpectralDerivative(vectors, differences, self.to_matrix, self.to_vector)

    def _derivative(self, v: FloatArray) -> SpectralDerivative:
        return self._slopes(*self._spectrum(v), 0.0)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each eigenvalue, in ascending order, zero (0: cut) or positive (1: kept)."""
        labels = (self._spectrum(v)[0] > 0.0).astype(np.int8)
        return Pieces({"eigenvalues": labels}, {"eigenvalues": ("zero", "positive")})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of v to the nearest singular matrix, min |l|, the same in every component."""
        return self._spread(float(np.abs(self._spectrum(v)[0]).min()), v)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, SpectralDerivative]:
        values, vectors = self._spectrum(v)
        moved = plus(values, eps)[0]
        return self.to_vector((vectors * moved) @ vectors.T), self._slopes(values, vectors, eps)


def plus(values: FloatArray, eps: float) -> tuple[FloatArray, FloatArray]:
    """max(0, l) with slope 0 at 0 for eps = 0, else its smoothed form, and the slope."""
    if eps == 0.0:
        return np.maximum(values, 0.0), (values > 0.0).astype(np.float64)
    return smooth_plus(values, eps)


def divided_differences(a: FloatArray, b: FloatArray, eps: float) -> FloatArray:
    """(p(a) - p(b)) / (a - b) for p(x) = (x + sqrt(x^2 + 4 eps^2)) / 2, without cancellation, also for a = b.

    For eps = 0, p = max(0, .): 1, 0, or a / (a - b) where the signs differ, and 0 for a = b = 0.
    """
    roots = np.sqrt(a * a + 4.0 * eps * eps) + np.sqrt(b * b + 4.0 * eps * eps)
    mean = np.divide(a + b, roots, out=np.full(roots.shape, -1.0), where=roots > 0.0)
    return 0.5 * (1.0 + mean)
