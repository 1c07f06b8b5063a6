"""Structured Newton derivatives of proximal maps."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..protocols import ProxDerivative

FloatArray = npt.NDArray[np.float64]


# components of a group from which on its block is not written out
LARGEST_BLOCK = 8
# entries of all blocks together up to which they are written out for their eigenvectors
MOST_ENTRIES = 5_000_000
# eigenvalues of a block of a derivative that are rounding
EIGENVALUE_ROUNDING = 1e-12


class DiagonalDerivative:
    """A diagonal Newton derivative, for separable costs."""

    def __init__(self, diagonal: FloatArray) -> None:
        self.diagonal: FloatArray | None = diagonal

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        d = self.diagonal
        assert d is not None
        return d * directions if directions.ndim == 1 else d[:, None] * directions


class LowRankDerivative:
    """diag(d) - U diag(c) U' W with U of shape (n, k), self-adjoint in the product of the weights W.

    Parameters
    ----------
    scale : array, shape (n,) or ()
        d.
    factors : array, shape (n, k)
        U.
    coefficients : array, shape (k,)
        c.
    weights : array, shape (n,) or ()
        W.
    """

    def __init__(
        self, scale: FloatArray, factors: FloatArray, coefficients: FloatArray, weights: FloatArray
    ) -> None:
        self.diagonal: FloatArray | None = None
        self.scale, self.factors, self.coefficients, self.weights = scale, factors, coefficients, weights

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        inner = self.factors.T @ (self.weights * directions.T).T
        rest = self.factors @ (self.coefficients * inner.T).T
        return (self.scale * directions.T).T - rest


class BlockDerivative:
    """Derivatives of blocks of the unknown, one after the other; diagonal where all of them are."""

    def __init__(self, parts: Sequence[ProxDerivative], sizes: Sequence[int]) -> None:
        self.parts = tuple(parts)
        self.ends = np.cumsum(sizes)[:-1]
        self.diagonal: FloatArray | None = None
        diagonals = [part.diagonal for part in self.parts]
        if all(diagonal is not None for diagonal in diagonals):
            self.diagonal = np.concatenate(
                [np.broadcast_to(d, (n,)) for d, n in zip(diagonals, sizes, strict=True) if d is not None]
            )

    def modes(self, weights: FloatArray) -> tuple[sp.csc_array, FloatArray] | None:
        """Those of the parts; None where one of them has none."""
        pairs = zip(self.parts, np.split(weights, self.ends), strict=True)
        found = [pair for pair in (modes(part, w) for part, w in pairs) if pair is not None]
        if len(found) < len(self.parts):
            return None
        basis = sp.block_diag([basis for basis, _ in found], format="csc")
        return sp.csc_array(basis), np.concatenate([d for _, d in found])

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        pieces = np.split(directions, self.ends)
        return np.concatenate([part.apply(d) for part, d in zip(self.parts, pieces, strict=True)])


class ConeDerivative:
    """Derivative of a spectral function of second-order cones, on blocks (t, x) of equal size.

    With y = x / ||x|| it maps (t, x) to (p t + q y'x, a x + y (q t + (p - a) y'x)).

    Parameters
    ----------
    mean, half, across : array, shape (blocks,)
        p and q, half the sum and half the difference of the slopes at the two eigenvalues, and a, the divided
        difference.
    axis : array, shape (blocks, size - 1)
        y; zero where x = 0, and then q = 0 and a = p.
    """

    def __init__(self, mean: FloatArray, half: FloatArray, across: FloatArray, axis: FloatArray) -> None:
        self.diagonal: FloatArray | None = None
        self.mean, self.half, self.across, self.axis = mean, half, across, axis

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        blocks, rest = self.axis.shape
        h = directions.reshape(blocks, rest + 1, -1)
        t, x = h[:, 0], h[:, 1:]
        p, q, a = self.mean[:, None], self.half[:, None], self.across[:, None]
        along = np.einsum("bi,bik->bk", self.axis, x)
        result = np.empty_like(h)
        result[:, 0] = p * t + q * along
        result[:, 1:] = a[:, None] * x + self.axis[:, :, None] * (q * t + (p - a) * along)[:, None]
        return result.reshape(directions.shape)


class SpectralDerivative:
    """Derivative of a spectral function of symmetric matrices: H -> Q (O * (Q' H Q)) Q', with * by entries.

    Parameters
    ----------
    vectors : array, shape (m, m)
        Q, eigenvectors in columns.
    differences : array, shape (m, m)
        O, divided differences of the function at the eigenvalues.
    unpack, pack : callable
        From vectors (k, n) to symmetric matrices (k, m, m) and back.
    """

    def __init__(
        self,
        vectors: FloatArray,
        differences: FloatArray,
        unpack: Callable[[FloatArray], FloatArray],
        pack: Callable[[FloatArray], FloatArray],
    ) -> None:
        self.diagonal: FloatArray | None = None
        self.vectors, self.differences, self.unpack, self.pack = vectors, differences, unpack, pack

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        q = self.vectors
        h = self.unpack(np.atleast_2d(directions.T))
        result = self.pack(q @ (self.differences * (q.T @ h @ q)) @ q.T)
        return result[0] if directions.ndim == 1 else np.ascontiguousarray(result.T)


class GroupDerivative:
    """A diagonal plus one rank-one matrix a group: D h = d h + p sum_group(q h), for costs that couple groups.

    Parameters
    ----------
    entries, left, right : array, shape (n,)
        d, p and q.
    groups : Groups
        Which components belong together.
    """

    def __init__(self, entries: FloatArray, left: FloatArray, right: FloatArray, groups: Any) -> None:
        self.diagonal: FloatArray | None = None
        self._entries, self._left, self._right, self._groups = entries, left, right, groups

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        d, p, q = self._entries, self._left, self._right
        if directions.ndim == 2:
            d, p, q = d[:, None], p[:, None], q[:, None]
        return d * directions + p * self._groups.spread(self._groups.sum(q * directions))

    def modes(self, weights: FloatArray) -> tuple[sp.csc_array, FloatArray] | None:
        """Eigenvectors and eigenvalues above zero, by group; None where groups are too large or differ in size."""
        groups = self._groups
        size = int(groups.counts[0])
        if size * groups.size > MOST_ENTRIES or (groups.counts != size).any():
            return None
        members = np.argsort(groups.labels, kind="stable").reshape(-1, size)
        root = np.sqrt(weights)[members]
        blocks = self._left[members][:, :, None] * self._right[members][:, None, :]
        blocks[:, np.arange(size), np.arange(size)] += self._entries[members]
        blocks *= root[:, :, None] / root[:, None, :]
        values, vectors = np.linalg.eigh(0.5 * (blocks + blocks.transpose(0, 2, 1)))
        group, which = np.nonzero(values > EIGENVALUE_ROUNDING)
        columns = vectors[group, :, which] / root[group]
        shape = (weights.size, group.size)
        starts = size * np.arange(group.size + 1)
        basis = sp.csc_array((columns.ravel(), members[group].ravel(), starts), shape=shape)
        basis.eliminate_zeros()
        return basis, np.minimum(values[group, which], 1.0)

    def as_sparse(self) -> sp.csr_array | None:
        """The matrix where groups are small, for solvers that factorise; None where its blocks would be large."""
        if self._groups.counts.max() > LARGEST_BLOCK:
            return None
        gather = self._groups.gather
        coupled = sp.diags_array(self._left) @ (gather.T @ gather) @ sp.diags_array(self._right)
        return sp.csr_array(sp.diags_array(self._entries) + coupled)


class ScaledDerivative:
    """A multiple of a derivative."""

    def __init__(self, inside: Any, factor: float) -> None:
        self._inside, self._factor = inside, factor
        self.diagonal: FloatArray | None = None if inside.diagonal is None else factor * inside.diagonal

    def modes(self, weights: FloatArray) -> tuple[sp.csc_array, FloatArray] | None:
        """The eigenvectors of the derivative inside."""
        inside = modes(self._inside, weights)
        return None if inside is None else (inside[0], self._factor * inside[1])

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        result: FloatArray = self._factor * self._inside.apply(directions)
        return result


class ComplementDerivative:
    """The identity minus a derivative."""

    def __init__(self, inside: Any) -> None:
        self._inside = inside
        self.diagonal: FloatArray | None = None if inside.diagonal is None else 1.0 - inside.diagonal

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        result: FloatArray = directions - self._inside.apply(directions)
        return result


def modes(derivative: Any, weights: FloatArray) -> tuple[sp.csc_array, FloatArray] | None:
    """Eigenvectors of a derivative with eigenvalues above zero, where it is made of small blocks; None where not.

    Parameters
    ----------
    derivative : ProxDerivative
    weights : array, shape (n,)
        W, the inner product.

    Returns
    -------
    (B, d) : sparse array (n, r) and array (r,)
        D = B diag(d) B' W with B' W B = I and 0 < d <= 1.
    """
    if derivative.diagonal is not None:
        diagonal = np.broadcast_to(derivative.diagonal, weights.shape)
        rows = np.flatnonzero(diagonal)
        shape = (weights.size, rows.size)
        entries = (1.0 / np.sqrt(weights[rows]), (rows, np.arange(rows.size)))
        return sp.csc_array(entries, shape=shape), diagonal[rows]
    own = getattr(derivative, "modes", None)
    return None if own is None else own(weights)
