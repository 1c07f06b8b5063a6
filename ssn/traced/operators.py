"""While a function is traced, SciPy's linear operators hand traced operands over."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from scipy.sparse.linalg import LinearOperator

from .array import TracedArray, times_operator

# LinearOperator turns whatever it gets into a plain array before it looks at it, unlike sparse arrays, so these
# methods step aside for traced operands while a trace runs. For all other operands they are as they were.
METHODS = ("dot", "matvec", "rmatvec", "matmat")

_lock = threading.Lock()
_running = 0
_originals: dict[str, Callable[..., Any]] = {}


def _stepping_aside(name: str, original: Callable[..., Any]) -> Callable[..., Any]:
    def method(self: Any, x: Any) -> Any:
        if isinstance(x, TracedArray):
            return times_operator(self.H if name == "rmatvec" else self, x)
        return original(self, x)

    method.__doc__ = original.__doc__
    method.__name__ = name
    return method


@contextmanager
def operators_accept_traced_arrays() -> Iterator[None]:
    """Within, ``operator @ x`` works for traced x; nests, and may run in several threads."""
    global _running
    with _lock:
        _running += 1
        if _running == 1:
            for name in METHODS:
                _originals[name] = getattr(LinearOperator, name)
                setattr(LinearOperator, name, _stepping_aside(name, _originals[name]))
    try:
        yield
    finally:
        with _lock:
            _running -= 1
            if _running == 0:
                for name, original in _originals.items():
                    setattr(LinearOperator, name, original)
                _originals.clear()
