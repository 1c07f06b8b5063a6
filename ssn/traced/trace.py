"""The record of one evaluation: which operation came from which, and the pieces of the nonsmooth ones."""

from __future__ import annotations

import math
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, NoReturn

import numpy as np
import numpy.typing as npt
import scipy

from ..errors import InputError
from ..pieces import Pieces
from .links import Gather, Link
from .structure import Structure, joined

FloatArray = npt.NDArray[np.float64]

# Frames in these folders are never the place that a user wrote.
_FOREIGN = (
    os.path.dirname(os.path.dirname(os.path.abspath(__file__))) + os.sep,
    os.path.dirname(os.path.abspath(np.__file__)) + os.sep,
    os.path.dirname(os.path.abspath(scipy.__file__)) + os.sep,
)


def is_foreign(path: str) -> bool:
    """Whether a file belongs to this package, NumPy or SciPy."""
    return path.startswith(_FOREIGN)


def place() -> str:
    """The file and line outside this package from which the present operation was called."""
    frame = sys._getframe(1)
    while frame.f_back is not None and is_foreign(frame.f_code.co_filename):
        frame = frame.f_back
    return f"{os.path.basename(frame.f_code.co_filename)}:{frame.f_lineno}"


def refuse(what: str, remedy: str) -> NoReturn:
    """Raise `InputError` for an operation that cannot be traced."""
    raise InputError(f"{what} at {place()} cannot be traced: {remedy}")


class Node:
    """The result of an operation: the sum of links applied to its parents."""

    __slots__ = ("links", "parents", "serial", "size")

    def __init__(
        self, serial: int, size: int, parents: tuple[Node | None, ...], links: tuple[Link, ...]
    ) -> None:
        self.serial = serial
        self.size = size
        self.parents = parents
        self.links = links

    def forward(self, tangents: list[FloatArray]) -> FloatArray:
        """The tangents of the result from those of the parents."""
        total = self.links[0].forward(tangents[0])
        for link, tangent in zip(self.links[1:], tangents[1:], strict=True):
            total = total + link.forward(tangent)
        return total

    def backward(self, cotangents: FloatArray) -> list[FloatArray]:
        """What the cotangents of the result add to those of each parent."""
        return [link.backward(cotangents) for link in self.links]

    def compose(self, inner: list[Structure], columns: int) -> Structure:
        """The derivative of the result from those of the parents."""
        total = self.links[0].compose(inner[0])
        for link, structure in zip(self.links[1:], inner[1:], strict=True):
            total = total.plus(link.compose(structure))
        return total


class Join(Node):
    """The parents one after the other; a part without a parent is constant."""

    __slots__ = ("sizes",)

    def __init__(
        self, serial: int, size: int, parents: tuple[Node | None, ...], sizes: tuple[int, ...]
    ) -> None:
        super().__init__(serial, size, parents, ())
        self.sizes = sizes

    def _each(self, given: list[Any]) -> Iterator[tuple[int, Any]]:
        known = iter(given)
        for parent, size in zip(self.parents, self.sizes, strict=True):
            yield size, None if parent is None else next(known)

    def forward(self, tangents: list[FloatArray]) -> FloatArray:
        """Apply to the columns of a block."""
        k = tangents[0].shape[1]
        return np.concatenate(
            [np.zeros((size, k)) if part is None else part for size, part in self._each(tangents)]
        )

    def backward(self, cotangents: FloatArray) -> list[FloatArray]:
        """Apply the transpose to the columns of a block."""
        cuts = np.split(cotangents, np.cumsum(self.sizes)[:-1])
        return [cut for parent, cut in zip(self.parents, cuts, strict=True) if parent is not None]

    def compose(self, inner: list[Structure], columns: int) -> Structure:
        """Multiply a structure from the left."""
        parts = list(self._each(inner))
        return joined([part for _, part in parts], [size for size, _ in parts], columns)


class Trace:
    """One evaluation of a function on traced arrays.

    Parameters
    ----------
    record : bool
        Whether derivatives are wanted; without, only values and pieces are found.
    eps : float
        Smoothing parameter; 0 means the nonsmooth operations themselves.
    """

    __slots__ = ("_count", "_declared", "_labels", "_legend", "_seen", "eps", "record")

    def __init__(self, *, record: bool = True, eps: float = 0.0) -> None:
        self.record = record
        self.eps = eps
        self._count = 0
        self._declared = 0
        self._labels: dict[str, Any] = {}
        self._legend: dict[str, tuple[str, ...]] = {}
        self._seen: dict[str, int] = {}

    def node(self, size: int, parents: tuple[Node | None, ...] = (), links: tuple[Any, ...] = ()) -> Node:
        """A new node."""
        self._count += 1
        return Node(self._count, size, parents, links)

    def join(self, size: int, parents: tuple[Node | None, ...], sizes: tuple[int, ...]) -> Node:
        """A new node of parts one after the other."""
        self._count += 1
        return Join(self._count, size, parents, sizes)

    def note(self, kind: str, labels: Any, legend: tuple[str, ...] | None = None, part: str = "") -> None:
        """Keep the pieces of a nonsmooth operation under its kind, file, line and occurrence there."""
        name = f"{kind} at {place()}"
        count = self._seen[name] = self._seen.get(name, 0) + 1
        if count > 1:
            name = f"{name} ({count})"
        if part:
            name = f"{name}: {part}"
        self._labels[name] = labels
        if legend is not None:
            self._legend[name] = legend

    @property
    def pieces(self) -> Pieces:
        """The pieces noted so far."""
        return Pieces(self._labels, self._legend)

    @property
    def declared(self) -> bool:
        """Whether the running part of the function was declared continuous."""
        return self._declared > 0

    @contextmanager
    def continuity(self) -> Iterator[None]:
        """Within, comparisons are allowed."""
        self._declared += 1
        try:
            yield
        finally:
            self._declared -= 1


def spread(shape: tuple[int, ...], out_shape: tuple[int, ...]) -> Any:
    """The flat index from a broadcast array of `out_shape` to one of `shape`; None where they are equal."""
    size, outputs = math.prod(shape), math.prod(out_shape)
    if size == outputs:  # at most axes of length 1 were added
        return None
    if size == 1:
        return np.zeros(outputs, dtype=np.intp)
    return np.broadcast_to(np.arange(size).reshape(shape), out_shape).ravel()


def elementwise_link(shape: tuple[int, ...], out_shape: tuple[int, ...], slope: Any) -> Gather:
    """The link of an elementwise operation with this slope, which broadcasts to the result."""
    if isinstance(slope, np.ndarray):
        if slope.ndim == 0:
            slope = float(slope)
        elif slope.shape != out_shape:
            slope = np.broadcast_to(slope, out_shape).ravel()
        else:
            slope = slope.ravel()
    elif slope is not None:
        slope = float(slope)
    if shape == out_shape:
        size = math.prod(shape)
        return Gather(size, size, None, slope)
    return Gather(math.prod(shape), math.prod(out_shape), spread(shape, out_shape), slope)
