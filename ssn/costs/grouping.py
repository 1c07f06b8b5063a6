"""Groups of components, and the inner weights of costs that couple the components of a group."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..errors import InputError
from ..validate import count, float_array

FloatArray = npt.NDArray[np.float64]

# relative difference of the outer weights within a group that counts as rounding
ROUNDING = 1e-8


class Groups:
    """Which of n components belong together; sums over groups and their spreading without a loop.

    Parameters
    ----------
    labels : integer array, shape (n,)
        The group of each component, 0 .. number - 1, each used at least once.
    """

    def __init__(self, labels: npt.NDArray[np.integer]) -> None:
        self.labels = labels.astype(np.intp)
        self.size = labels.size
        self.counts = np.bincount(self.labels).astype(np.float64)
        self.number = self.counts.size
        self._gather: sp.csr_array | None = None
        self._sorted = bool((np.diff(self.labels) >= 0).all())
        # (m, s): component i = (j m + k) s + l, k < m, belongs to group j s + l; set where the groups are such lines
        self.line: tuple[int, int] | None = None

    @classmethod
    def given(cls, groups: Any) -> Groups:
        """From one label a component, or from a list of index arrays that hold each component once."""
        try:
            labels = np.asarray(groups)
        except ValueError:
            labels = np.empty((0, 0))
        if labels.ndim == 1 and labels.size and np.issubdtype(labels.dtype, np.integer):
            if labels.min() < 0:
                raise InputError(f"groups[{int(np.argmin(labels))}] is {labels.min()}: labels count from 0")
            unused = np.flatnonzero(np.bincount(labels) == 0)
            if unused.size:
                raise InputError(f"groups has no component with label {int(unused[0])}")
            return cls(labels)
        if isinstance(groups, str) or not isinstance(groups, Sequence) or not len(groups):
            raise InputError(
                "groups must be an integer array with one label a component, or a list of index arrays"
            )
        parts = [np.atleast_1d(np.asarray(part)) for part in groups]
        for k, part in enumerate(parts):
            if part.ndim != 1 or not part.size or not np.issubdtype(part.dtype, np.integer):
                raise InputError(f"groups[{k}] must be a non-empty array of indices")
        flat = np.concatenate(parts)
        times = np.bincount(flat[flat >= 0], minlength=flat.size)
        if flat.min() < 0 or times.size > flat.size or (times != 1).any():
            raise InputError(f"groups must hold each of the indices 0 .. {flat.size - 1} once")
        labels = np.empty(flat.size, dtype=np.intp)
        labels[flat] = np.repeat(np.arange(len(parts)), [part.size for part in parts])
        return cls(labels)

    @classmethod
    def along(cls, shape: Any, axis: Any) -> Groups:
        """The lines along one axis of an array of the given shape, numbered in the order of the other axes."""
        try:
            sizes = tuple(count(s, "shape") for s in shape)
        except TypeError as error:
            raise InputError(f"shape must be a tuple of whole numbers, got {shape!r}") from error
        if (
            isinstance(axis, bool)
            or not isinstance(axis, (int, np.integer))
            or not -len(sizes) <= axis < len(sizes)
        ):
            raise InputError(f"axis must be one of the {len(sizes)} axes of shape {sizes}, got {axis!r}")
        rest = sizes[: axis % len(sizes)] + sizes[axis % len(sizes) + 1 :]
        lines = np.arange(int(np.prod(rest))).reshape(rest)
        result = cls(np.broadcast_to(np.expand_dims(lines, axis % len(sizes)), sizes).ravel())
        result.line = sizes[axis % len(sizes)], int(np.prod(sizes[axis % len(sizes) + 1 :]))
        return result

    @property
    def gather(self) -> sp.csr_array:
        """The matrix (number, n) that sums over groups."""
        if self._gather is None:
            self._gather = sp.csr_array(
                (np.ones(self.size), (self.labels, np.arange(self.size))), shape=(self.number, self.size)
            )
        return self._gather

    def sum(self, x: FloatArray) -> FloatArray:
        """Sums over the groups, (number,) or (number, k)."""
        if x.ndim == 1 and self.line is not None and self.line[1] > 1:
            return np.asarray(np.sum(x.reshape(-1, *self.line), axis=1)).ravel()
        if x.ndim == 1 and not self._sorted:  # the matrix would be read in leaps
            return np.asarray(np.bincount(self.labels, weights=x), dtype=np.float64)
        return np.asarray(self.gather @ x)

    def spread(self, x: npt.NDArray[Any]) -> npt.NDArray[Any]:
        """The value of its group for each component."""
        return x[self.labels]

    def weights(self, value: Any, name: str, line: tuple[Any, int] | None = None) -> FloatArray:
        """Positive weights of all components: a number, one each, or one a place along the axis of `line`."""
        array = float_array(value, name)
        if (array <= 0).any():
            raise InputError(f"{name} must be positive, got {array.min()}")
        if line is not None and array.shape == (line[0][line[1]],) and array.size != self.size:
            other = [1] * len(line[0])
            other[line[1]] = array.size
            array = np.broadcast_to(array.reshape(other), line[0]).ravel()
        if array.shape not in ((), (1,), (self.size,)):
            raise InputError(f"{name} has shape {array.shape}, expected a number or ({self.size},)")
        return np.broadcast_to(array, (self.size,)).copy()

    def outer(self, weights: FloatArray | None, inner: FloatArray) -> FloatArray:
        """The weight of each group, w / inner, which must be constant on it; ones where no weights are given."""
        if weights is None:
            return np.ones(self.number)
        ratio = weights / inner
        outer = self.sum(ratio) / self.counts
        gap = np.abs(ratio - self.spread(outer)) > ROUNDING * np.abs(ratio)
        if gap.any():
            index = int(np.argmax(gap))
            raise InputError(
                f"the weights divided by inner_weights must be constant within a group, but differ at index {index}: "
                "give inner_weights, the part of the weights that varies within groups"
            )
        return outer
