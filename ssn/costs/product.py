"""Costs on blocks of the unknown."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import Cost
from ..validate import count
from .derivative import BlockDerivative

FloatArray = npt.NDArray[np.float64]


class Product:
    """g(u) = g_1(u_1) + ... + g_k(u_k), u = [u_1, ..., u_k]: costs or sets on consecutive blocks.

    Parameters
    ----------
    costs : sequence of Cost
        One a block.
    sizes : sequence of int
        Unknowns of each block.
    names : sequence of str, optional
        Names of the blocks in pieces; "block 0", "block 1", ... by default.

    Raises
    ------
    InputError
        Where the sequences differ in length or a cost does not fit its block.

    Notes
    -----
    All members act block by block, with the selections and smoothed forms of the parts. Pieces are named
    "<block>: <name>"; multipliers of one name are put together in an array for the whole unknown, zero in blocks that
    have none.
    """

    def __init__(
        self, costs: Sequence[Cost], sizes: Sequence[int], names: Sequence[str] | None = None
    ) -> None:
        self.costs = tuple(costs)
        self.sizes = tuple(count(size, f"sizes[{k}]") for k, size in enumerate(sizes))
        self.names = (
            tuple(f"block {k}" for k in range(len(self.costs))) if names is None else tuple(map(str, names))
        )
        if not self.costs or not len(self.costs) == len(self.sizes) == len(self.names):
            raise InputError(
                f"costs, sizes and names must have one entry a block, got {len(self.costs)}, {len(self.sizes)} and "
                f"{len(self.names)}"
            )
        if len(set(self.names)) < len(self.names):
            raise InputError(f"names of blocks must differ, got {', '.join(self.names)}")
        for k, (cost, size) in enumerate(zip(self.costs, self.sizes, strict=True)):
            if not isinstance(cost, Cost):
                raise InputError(f"costs[{k}] must have the members of ssn.Cost, got {type(cost).__name__}")
            try:
                cost.check_size(size)
            except InputError as error:
                raise InputError(f"costs[{k}]: {error}") from error
        self.convex = all(cost.convex for cost in self.costs)
        self.piecewise_affine = all(getattr(cost, "piecewise_affine", True) for cost in self.costs)
        self.separable = all(getattr(cost, "separable", True) for cost in self.costs)
        self.size = sum(self.sizes)
        self._ends = np.cumsum(self.sizes)[:-1]

    def __repr__(self) -> str:
        return f"Product({list(self.costs)!r}, {list(self.sizes)})"

    @property
    def inner_weights(self) -> FloatArray:
        """The inner products of the blocks, one after the other; each up to a factor of its own."""
        own = [np.asarray(getattr(cost, "inner_weights", 1.0), dtype=np.float64) for cost in self.costs]
        return np.concatenate([np.broadcast_to(w, (n,)) for w, n in zip(own, self.sizes, strict=True)])

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the blocks fill `size` unknowns."""
        if size != self.size:
            raise InputError(f"Product has blocks of {self.size} unknowns together, not {size}")

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` where the weights of a block do not suit its cost."""
        for k, (cost, part) in enumerate(zip(self.costs, self._split(weights), strict=True)):
            if hasattr(cost, "check_weights"):
                try:
                    cost.check_weights(part)
                except InputError as error:
                    raise InputError(f"costs[{k}]: {error}") from error

    def _split(self, v: FloatArray) -> list[FloatArray]:
        return np.split(v, self._ends)

    def _each(self, member: str, v: FloatArray, *options: float) -> list[Any]:
        return [
            getattr(cost, member)(part, *options)
            for cost, part in zip(self.costs, self._split(v), strict=True)
        ]

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of the parts, each with the weights of its block."""
        if weights is None:
            return float(sum(self._each("value", u)))
        pairs = zip(self.costs, self._split(u), self._split(weights), strict=True)
        return float(sum(cost.value(part, w) for cost, part, w in pairs))

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float | None:
        """Return the sum of the conjugates at y, in the product of the weights; None where one is not known."""
        total = 0.0
        parts = [None] * len(self.costs) if weights is None else self._split(weights)
        for cost, part, own in zip(self.costs, self._split(y), parts, strict=True):
            value = cost.conjugate_value(part, own) if hasattr(cost, "conjugate_value") else None
            if value is None:
                return None
            total += value
        return float(total)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the proximal maps of the blocks."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return np.concatenate(self._each("prox", v, step))

    def prox_derivative(self, v: FloatArray, step: float) -> BlockDerivative:
        """Return the derivatives of the blocks."""
        return BlockDerivative(self._each("prox_derivative", v, step), self.sizes)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Return the labels of the blocks."""
        labels, legend = {}, {}
        for name, pieces in zip(self.names, self._each("pieces", v, step), strict=True):
            for own, array in pieces.items():
                labels[f"{name}: {own}"] = array
                if own in pieces.legend:
                    legend[f"{name}: {own}"] = pieces.legend[own]
        return Pieces(labels, legend)

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the margins of the blocks."""
        return np.concatenate(self._each("margins", v, step))

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the smoothed maps of the blocks."""
        return np.concatenate(self._each("smoothed_prox", v, step, eps))

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> BlockDerivative:
        """Return the derivatives of the smoothed maps, for eps > 0."""
        return BlockDerivative(self._each("smoothed_prox_derivative", v, step, eps), self.sizes)

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return the multipliers of the blocks, by name, with their signs."""
        result: dict[str, FloatArray] = {}
        start = 0
        for cost, part, own in zip(self.costs, self._split(u), self._split(subgradient), strict=True):
            for name, array in cost.multipliers(part, own).items():
                result.setdefault(name, np.zeros(u.shape))[start : start + part.size] = array
            start += part.size
        return result
