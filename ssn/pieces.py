"""Active sets: which smooth piece each component of each nonsmooth operation is on."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

LabelArray = npt.NDArray[np.integer]


class Pieces(Mapping[str, LabelArray]):
    """Labels of the smooth pieces, by name of the nonsmooth operation; read-only.

    Parameters
    ----------
    labels : mapping of str to integer array
        One label a component. Arrays are copied to int8 (int64 where labels are larger) and frozen.
    legend : mapping of str to sequence of str, optional
        ``legend[name][label]`` says what a label means ("lower", "zero", ...).
    """

    __slots__ = ("_digest", "_labels", "legend")

    def __init__(
        self,
        labels: Mapping[str, npt.ArrayLike] | None = None,
        legend: Mapping[str, tuple[str, ...]] | None = None,
    ) -> None:
        frozen: dict[str, LabelArray] = {}
        for name, given in (labels or {}).items():
            array = np.asarray(given)
            if array.dtype == np.bool_:
                array = array.astype(np.int8)
            if not np.issubdtype(array.dtype, np.integer):
                raise TypeError(f"pieces[{name!r}] must hold integers or booleans, not {array.dtype}")
            small = array.size == 0 or (array.min() >= -128 and array.max() <= 127)
            array = array.astype(np.int8 if small else np.int64, copy=True)
            array.setflags(write=False)
            frozen[name] = array
        self._labels = frozen
        self.legend: dict[str, tuple[str, ...]] = {k: tuple(v) for k, v in (legend or {}).items()}
        self._digest: bytes | None = None

    def __getitem__(self, name: str) -> LabelArray:
        return self._labels[name]

    def __iter__(self):  # type: ignore[no-untyped-def]
        return iter(self._labels)

    def __len__(self) -> int:
        return len(self._labels)

    def __repr__(self) -> str:
        return f"Pieces({self.sizes()})"

    def sizes(self) -> dict[str, dict[str, int]]:
        """Count the components on each piece: ``{"bounds": {"lower": 3, "free": 20, "upper": 0}}``."""
        result: dict[str, dict[str, int]] = {}
        for name, labels in self._labels.items():
            legend = self.legend.get(name)
            if legend is None:
                values, counts = np.unique(labels, return_counts=True)
                result[name] = {str(v): int(c) for v, c in zip(values, counts, strict=True)}
            else:
                counts = np.bincount(labels.ravel(), minlength=len(legend))
                result[name] = {word: int(c) for word, c in zip(legend, counts, strict=True)}
        return result

    def changes(self, other: Pieces | None) -> int | None:
        """Count the components whose label differs from `other`; None where they cannot be compared."""
        if other is None or set(self) != set(other):
            return None
        total = 0
        for name, labels in self._labels.items():
            if labels.shape != other[name].shape:
                return None
            total += int(np.count_nonzero(labels != other[name]))
        return total

    def digest(self) -> bytes:
        """Return a fingerprint: equal pieces have equal fingerprints (used to detect recurrence)."""
        if self._digest is None:
            h = hashlib.blake2b(digest_size=16)
            for name in sorted(self._labels):
                h.update(name.encode())
                h.update(np.ascontiguousarray(self._labels[name]).tobytes())
            self._digest = h.digest()
        return self._digest
