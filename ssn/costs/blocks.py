"""Long arrays in blocks that stay in the cache, with scratch arrays that are used again for each block.

Fresh memory for every intermediate result costs more than the arithmetic.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

# components of a block: a dozen arrays of it fit into a second-level cache
BLOCK = 8192


def by_blocks(
    function: Callable[..., None],
    size: int,
    dtype: npt.DTypeLike = np.float64,
    scratch: Sequence[npt.DTypeLike] = (),
) -> npt.NDArray[Any]:
    """An array filled block by block.

    Parameters
    ----------
    function : callable
        Gets the slice of a block, the part of the result to write to, and a scratch array of the same length for each
        type of `scratch`.
    size : int
        Components of the result.
    """
    result = np.empty(size, dtype=dtype)
    spare = [np.empty(min(size, BLOCK), dtype=kind) for kind in scratch]
    for begin in range(0, size, BLOCK):
        part = result[begin : begin + BLOCK]
        cut = slice(begin, begin + part.size)
        function(cut, part, *(array[: part.size] for array in spare))
    return result


def cut_parameter(parameter: npt.NDArray[Any], cut: slice) -> npt.NDArray[Any]:
    """The part of a parameter that belongs to a slice; a number is the same everywhere."""
    return parameter[cut] if parameter.size > 1 else parameter
