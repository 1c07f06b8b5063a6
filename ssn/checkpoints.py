"""The levels of a recursion read backwards, few of them stored and the others computed again.

Source: A. Griewank and A. Walther, ACM Trans. Math. Softw. 26 (2000) 19-45 (from memory): with c levels in store and
each step repeated r times at most, binomial(c + r, c) levels can be read backwards, and no schedule reads more.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from math import comb

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


class Checkpoints:
    """y_k = advance(k, y_{k-1}) for k = 1, ..., steps, read from the last to the first.

    Parameters
    ----------
    advance : callable
        (k, level) -> next level; the same bits at each call. It must not change its argument.
    initial : array
        y_0.
    steps : int
    memory : int
        Bytes for stored levels beside y_0 and the one that is read; room for one at least is taken.

    Attributes
    ----------
    stored : int
        Levels that are stored at most.
    advances : int
        Calls of `advance` so far.
    """

    def __init__(
        self, advance: Callable[[int, FloatArray], FloatArray], initial: FloatArray, steps: int, memory: int
    ) -> None:
        self._advance, self._initial, self.steps = advance, initial, steps
        self.stored = min(steps, max(1, memory // max(1, initial.nbytes)))
        self.advances = 0

    def backward(self) -> Iterator[tuple[int, FloatArray]]:
        """Yield (k, y_k) for k = steps, ..., 1."""
        return self._between(0, self._initial, self.steps, self.stored)

    def _step(self, k: int, level: FloatArray) -> FloatArray:
        self.advances += 1
        return self._advance(k, level)

    def _between(
        self, first: int, level: FloatArray, last: int, room: int
    ) -> Iterator[tuple[int, FloatArray]]:
        """Levels last, ..., first + 1, from that of `first`, with room for so many beside it."""
        count = last - first
        if count <= room:
            kept = []
            for k in range(first + 1, last + 1):
                level = self._step(k, level)
                kept.append(level)
            while kept:
                yield first + len(kept), kept.pop()
            return
        if room <= 1:
            for end in range(last, first, -1):
                reached = level
                for k in range(first + 1, end + 1):
                    reached = self._step(k, reached)
                yield end, reached
            return
        middle = first + split(count, room)
        reached = level
        for k in range(first + 1, middle + 1):
            reached = self._step(k, reached)
        yield from self._between(middle, reached, last, room - 1)
        yield middle, reached
        del reached
        yield from self._between(first, level, middle - 1, room)


def split(count: int, room: int) -> int:
    """Where to store the first of `room` levels among `count`, 1 <= result < count."""
    repeats = 1
    while comb(room + repeats, room) < count:
        repeats += 1
    return int(min(max(count - comb(room + repeats - 1, room - 1), 1), count - 1))
