"""Between the arrays that a user writes, one or several in a tuple or dict, and one flat vector."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..validate import float_array

FloatArray = npt.NDArray[np.float64]


class Fields:
    """The names and shapes of an unknown.

    Parameters
    ----------
    start : array, or tuple or dict of arrays
    """

    def __init__(self, start: Any) -> None:
        self.keys: tuple[Any, ...] | None
        if isinstance(start, dict):
            self.kind: type = dict
            self.keys = tuple(start)
            given = list(start.values())
        elif isinstance(start, tuple):
            self.kind, self.keys, given = tuple, tuple(range(len(start))), list(start)
        else:
            self.kind, self.keys, given = np.ndarray, None, [start]
        if not given:
            raise InputError(f"start is an empty {self.kind.__name__}: give at least one array")
        arrays = [float_array(array, self.name(k)) for k, array in enumerate(given)]
        self.shapes = [array.shape for array in arrays]
        self.sizes = [array.size for array in arrays]
        self.cuts = np.cumsum([0, *self.sizes])
        self.size = int(self.cuts[-1])
        if self.size == 0:
            raise InputError("start has no entries")
        self.start: FloatArray = np.concatenate([array.ravel() for array in arrays])

    def name(self, k: int, what: str = "start") -> str:
        """How field k is called in messages."""
        return what if self.keys is None else f"{what}[{self.keys[k]!r}]"

    def pieces(self, x: Any) -> list[Any]:
        """The fields as a list, from a flat vector."""
        return [
            x[a:b].reshape(shape)
            for a, b, shape in zip(self.cuts[:-1], self.cuts[1:], self.shapes, strict=True)
        ]

    def form(self, arrays: list[Any]) -> Any:
        """The arrays in the user's form."""
        if self.keys is None:
            return arrays[0]
        return dict(zip(self.keys, arrays, strict=True)) if self.kind is dict else tuple(arrays)

    def listed(self, given: Any, what: str) -> list[Any]:
        """What a user gave in that form as a list of arrays whose shapes fit; they are not converted."""
        if self.keys is None:
            arrays = [given]
        elif self.kind is dict:
            if not isinstance(given, dict) or set(given) != set(self.keys):
                found = (
                    f"the keys {sorted(map(str, given))}" if isinstance(given, dict) else type(given).__name__
                )
                raise InputError(
                    f"{what} must be a dict with the keys {list(self.keys)} like start, got {found}"
                )
            arrays = [given[key] for key in self.keys]
        elif isinstance(given, (tuple, list)) and len(given) == len(self.keys):
            arrays = list(given)
        elif np.shape(given) == (self.size,) and not isinstance(given, (tuple, list)):
            return [given]
        else:
            found = f"{len(given)} entries" if isinstance(given, (tuple, list)) else type(given).__name__
            raise InputError(f"{what} must be a tuple of {len(self.keys)} arrays like start, got {found}")
        return arrays

    def check(self, arrays: list[Any], what: str) -> None:
        """Raise `InputError` where a shape does not fit."""
        if self.keys is not None and len(arrays) == 1 and len(self.shapes) > 1:
            return
        for k, (array, shape, size) in enumerate(zip(arrays, self.shapes, self.sizes, strict=True)):
            if array.shape not in (shape, (size,)):
                raise InputError(f"{self.name(k, what)} has shape {array.shape}, expected {shape} like start")

    def spread(self, given: Any, what: str) -> FloatArray:
        """Numbers, one a field or one an entry, as a flat vector; one number for all passes too."""
        if self.keys is None or (not isinstance(given, (dict, tuple, list)) and np.ndim(given) == 0):
            values = [given] * len(self.shapes)
        else:
            values = self.listed(given, what)
            if len(values) != len(self.shapes):
                raise InputError(f"{what} must have one entry a field: {len(self.shapes)}")
        parts = []
        for k, (value, shape, size) in enumerate(zip(values, self.shapes, self.sizes, strict=True)):
            array = float_array(value, self.name(k, what))
            if (array <= 0).any():
                raise InputError(f"{self.name(k, what)} must be positive")
            if array.shape not in ((), shape, (size,)):
                raise InputError(f"{self.name(k, what)} has shape {array.shape}, expected () or {shape}")
            parts.append(np.broadcast_to(array.ravel() if array.ndim else array, (size,)))
        return np.concatenate(parts)
