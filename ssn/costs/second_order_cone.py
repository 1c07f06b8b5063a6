"""Second-order cones on blocks of equal size."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import count
from .convex_set import FEASIBLE, PROPORTIONAL, ConvexSet
from .derivative import ConeDerivative
from .semidefinite import divided_differences, plus

FloatArray = npt.NDArray[np.float64]

ZERO, BOUNDARY, INSIDE = range(3)


class SecondOrderCone(ConvexSet):
    """{(t, x): ||x|| <= t} in every block (t, x) of the unknown: friction, norms as constraints.

    Parameters
    ----------
    block : int
        Components of a block, t first; the unknown is a sequence of such blocks.

    Raises
    ------
    InputError
        Where the number of unknowns is no multiple of `block`, or a problem's weights differ within a block.

    Notes
    -----
    A block has the eigenvalues t - ||x|| and t + ||x||; the projection replaces each by its positive part, and the
    derivative is made of the slopes and the divided difference at the two. Selection at kinks: an eigenvalue 0 counts
    as negative (slope 0). Source: M. Fukushima, Z.-Q. Luo and P. Tseng, SIAM J. Optim. 12 (2002) 436-460, whose
    smoothed form, (l + sqrt(l^2 + 4 eps^2)) / 2 for each eigenvalue, is the one here (from memory); it stays inside
    the cone and differs from the projection by at most eps in the norm of a block.

    The multiplier ``normal`` lies in the negative cone and is orthogonal to u.
    """

    piecewise_affine = False

    def __init__(self, block: int) -> None:
        super().__init__()
        self.block = count(block, "block")

    def __repr__(self) -> str:
        return f"SecondOrderCone(block={self.block})"

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless `size` is a multiple of the block."""
        if size % self.block or size == 0:
            raise InputError(f"SecondOrderCone has blocks of {self.block}, which do not fill {size} unknowns")

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless the weights are constant in every block."""
        rows = np.asarray(weights).reshape(-1, self.block)
        uneven = rows.max(axis=1) > rows.min(axis=1) * (1.0 + PROPORTIONAL)
        if uneven.any():
            raise InputError(
                f"SecondOrderCone needs equal weights within a block; they differ in block {int(np.argmax(uneven))}"
            )

    def _spectrum(self, v: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Eigenvalues (blocks, 2), ascending, and axes x / ||x||, zero where x is."""
        rows = v.reshape(-1, self.block)
        t, x = rows[:, 0], rows[:, 1:]
        largest = np.abs(x).max(axis=1, initial=0.0)
        scaled = x / np.where(largest > 0.0, largest, 1.0)[:, None]  # squares neither overflow nor vanish
        scaled_size = np.sqrt(np.einsum("bi,bi->b", scaled, scaled))
        size = largest * scaled_size
        axis = scaled / np.where(scaled_size > 0.0, scaled_size, 1.0)[:, None]
        return np.stack([t - size, t + size], axis=1), axis

    def _rebuilt(self, values: FloatArray, axis: FloatArray) -> FloatArray:
        rows = np.empty((axis.shape[0], self.block))
        rows[:, 0] = 0.5 * (values[:, 0] + values[:, 1])
        rows[:, 1:] = (0.5 * (values[:, 1] - values[:, 0]))[:, None] * axis
        return rows.ravel()

    def contains(self, u: FloatArray) -> bool:
        """Whether every block lies in the cone, up to rounding."""
        values, _ = self._spectrum(u)
        return bool((values[:, 0] >= -FEASIBLE * np.abs(values[:, 1])).all())

    def _support(self, y: FloatArray) -> float:
        return 0.0 if self.contains(-y) else float("inf")

    def _project(self, v: FloatArray) -> FloatArray:
        values, axis = self._spectrum(v)
        inside = values[:, 0] >= 0.0
        result = self._rebuilt(np.maximum(values, 0.0), axis).reshape(-1, self.block)
        result[inside] = v.reshape(-1, self.block)[inside]
        return result.ravel()

    def _slopes(self, values: FloatArray, axis: FloatArray, eps: float) -> ConeDerivative:
        slopes = plus(values, eps)[1]
        across = divided_differences(values[:, 0], values[:, 1], eps)
        mean, half = 0.5 * (slopes[:, 0] + slopes[:, 1]), 0.5 * (slopes[:, 1] - slopes[:, 0])
        return ConeDerivative(mean, half, across, axis)

    def _derivative(self, v: FloatArray) -> ConeDerivative:
        return self._slopes(*self._spectrum(v), 0.0)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label the components of each block zero (0), boundary (1) or inside (2)."""
        labels = (self._spectrum(v)[0] > 0.0).sum(axis=1).astype(np.int8)
        return Pieces({"control": np.repeat(labels, self.block)}, {"control": ("zero", "boundary", "inside")})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distance of each block to the nearest kink (an eigenvalue 0), the same in all its components."""
        least = np.abs(self._spectrum(v)[0]).min(axis=1)
        return np.repeat(least if self.block == 1 else least / np.sqrt(2.0), self.block)

    def _smoothed(self, v: FloatArray, eps: float) -> tuple[FloatArray, ConeDerivative]:
        values, axis = self._spectrum(v)
        return self._rebuilt(plus(values, eps)[0], axis), self._slopes(values, axis, eps)
