"""Functions that move numbers: each is applied to the numbers and to their positions alike."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from .array import FUNCTIONS, TracedArray, as_operand, gathered, parts, refuse
from .trace import Trace

# The position of each entry decides where its number goes; 0 stands for "nothing from there".
MOVING = ("transpose", "reshape", "ravel", "squeeze", "expand_dims", "swapaxes", "moveaxis", "rollaxis", "roll", "flip",
          "fliplr", "flipud", "rot90", "repeat", "tile", "take", "take_along_axis", "broadcast_to", "diagonal", "tril",
          "triu", "diag", "diagflat", "delete", "matrix_transpose", "resize")  # fmt: skip
# These give a view where they can: with NumPy, writing to it writes to the original.
VIEWS = {"transpose", "reshape", "ravel", "squeeze", "expand_dims", "swapaxes", "moveaxis", "rollaxis",
         "flip", "fliplr", "flipud", "rot90", "matrix_transpose"}  # fmt: skip
SPLITTING = ("split", "array_split", "hsplit", "vsplit", "dsplit", "unstack")


def _moved(x: TracedArray, value: Any, positions: Any, view: bool) -> TracedArray:
    value = np.asarray(value)
    flat = positions.ravel() - 1
    if flat.size == x.size and flat.size > 0 and flat[0] == 0 and (np.diff(flat) == 1).all():
        result = TracedArray(value, x.trace, x.node)
    else:
        result = gathered(x, value, flat, bool(flat.size and flat.min() < 0))
    return result.viewing(x) if view else result


def _positions(x: TracedArray) -> Any:
    return np.arange(1, x.size + 1).reshape(x.shape)


def _make_moving(function: Any) -> Callable[..., Any]:
    view = function.__name__ in VIEWS

    def operation(trace: Trace, x: Any, *arguments: Any, **options: Any) -> Any:
        x = as_operand(trace, x)
        if not isinstance(x, TracedArray):
            refuse(
                f"np.{function.__name__} with a traced argument that is not the array",
                "give plain numbers there",
            )
        value = function(x.value, *arguments, **options)
        if x.node is None:
            return TracedArray(value, trace, None)
        return _moved(x, value, function(_positions(x), *arguments, **options), view)

    return operation


def _make_splitting(function: Any) -> Callable[..., Any]:
    def operation(trace: Trace, x: Any, *arguments: Any, **options: Any) -> list[TracedArray]:
        x = as_operand(trace, x)
        values = function(x.value, *arguments, **options)
        places = function(_positions(x), *arguments, **options)
        return [_moved(x, value, place, True) for value, place in zip(values, places, strict=True)]

    return operation


for _name in MOVING:
    if hasattr(np, _name):
        FUNCTIONS[getattr(np, _name)] = _make_moving(getattr(np, _name))
for _name in SPLITTING:
    if hasattr(np, _name):
        FUNCTIONS[getattr(np, _name)] = _make_splitting(getattr(np, _name))


def _pad(trace: Trace, x: Any, pad_width: Any, mode: str = "constant", **options: Any) -> Any:
    x = as_operand(trace, x)
    if mode not in ("constant", "edge", "wrap", "reflect", "symmetric", "empty") or "reflect_type" in options:
        refuse(f"np.pad with mode={mode!r}", "supported: constant, edge, wrap, reflect, symmetric")
    value = np.pad(x.value, pad_width, mode, **options)  # type: ignore[call-overload]
    return _moved(x, value, np.pad(_positions(x), pad_width, mode), False)  # type: ignore[call-overload]


FUNCTIONS[np.pad] = _pad


def _join(trace: Trace, operands: list[Any], function: Any, options: dict[str, Any]) -> Any:
    """Any function that puts arrays together: their numbers one after the other, then moved into place."""
    value = function([parts(operand)[0] for operand in operands], **options)
    nodes = [parts(operand)[1] for operand in operands]
    if all(node is None for node in nodes):
        return TracedArray(value, trace, None)
    if not trace.record:
        return TracedArray(value, trace, trace.node(value.size))
    sizes = [operand.size for operand in operands]
    starts = np.cumsum([0, *sizes])
    chain = trace.join(value.size, tuple(nodes), tuple(sizes))
    result = TracedArray(value, trace, chain)
    if all(operand.ndim <= 1 for operand in operands):
        flat = function([np.arange(a, a + n).reshape(o.shape)
                         for a, n, o in zip(starts, sizes, operands, strict=False)], **options).ravel()  # fmt: skip
        if (np.diff(flat) == 1).all():
            return result
    places = function(
        [np.arange(a, a + n).reshape(o.shape) for a, n, o in zip(starts, sizes, operands, strict=False)],
        **options,
    )
    return gathered(result, value, places.ravel())


def _make_joining(function: Any) -> Callable[..., Any]:
    def operation(trace: Trace, arrays: Any, *arguments: Any, **options: Any) -> Any:
        if isinstance(arrays, TracedArray):
            arrays = list(arrays)
        operands = [as_operand(trace, array) for array in arrays]
        if arguments:
            options["axis"] = arguments[0]
        if options.pop("dtype", None) not in (None, float, np.float64) or options.pop("casting", None):
            refuse(f"np.{function.__name__} with dtype or casting", "leave it out")
        return _join(trace, operands, function, options)

    return operation


for _name in ("concatenate", "stack", "hstack", "vstack", "dstack", "column_stack", "block"):
    FUNCTIONS[getattr(np, _name)] = _make_joining(getattr(np, _name))


def _block(trace: Trace, arrays: Any) -> Any:
    refuse("np.block", "use np.hstack and np.vstack")


FUNCTIONS[np.block] = _block


def _append(trace: Trace, x: Any, values: Any, axis: Any = None) -> Any:
    x, values = as_operand(trace, x), as_operand(trace, values)
    if axis is None:
        x, values = np.ravel(x), np.ravel(values)
    return _join(trace, [x, values], np.concatenate, {"axis": 0 if axis is None else axis})


FUNCTIONS[np.append] = _append


def _make_at_least(dimensions: int, function: Any) -> Callable[..., Any]:
    def operation(trace: Trace, *arrays: Any) -> Any:
        results = []
        for array in arrays:
            x = as_operand(trace, array)
            results.append(x if x.ndim >= dimensions else np.reshape(x, function(parts(x)[0]).shape))
        return results[0] if len(results) == 1 else tuple(results)

    return operation


for _dimensions in (1, 2, 3):
    _name = f"atleast_{_dimensions}d"
    FUNCTIONS[getattr(np, _name)] = _make_at_least(_dimensions, getattr(np, _name))


def _broadcast_arrays(trace: Trace, *arrays: Any, subok: bool = False) -> Any:
    operands = [as_operand(trace, array) for array in arrays]
    shape = np.broadcast_shapes(*(operand.shape for operand in operands))
    return tuple(np.broadcast_to(operand, shape) for operand in operands)


FUNCTIONS[np.broadcast_arrays] = _broadcast_arrays


def _diff(trace: Trace, x: Any, n: int = 1, axis: int = -1, prepend: Any = None, append: Any = None) -> Any:
    x = as_operand(trace, x)
    if prepend is not None or append is not None:
        refuse("np.diff with prepend or append", "use np.concatenate first")
    for _ in range(n):
        later: list[Any] = [slice(None)] * x.ndim
        earlier = list(later)
        later[axis], earlier[axis] = slice(1, None), slice(None, -1)
        x = x[later[0] if x.ndim == 1 else tuple(later)] - x[earlier[0] if x.ndim == 1 else tuple(earlier)]
    return x


FUNCTIONS[np.diff] = _diff


def _constant(function: Any) -> Callable[..., Any]:
    def operation(trace: Trace, x: Any, *arguments: Any, **options: Any) -> TracedArray:
        x = as_operand(trace, x)
        if options.pop("dtype", None) not in (None, float, np.float64):
            refuse(f"np.{function.__name__} with a dtype", "leave it out: traced arrays hold float64 only")
        for fill in (*arguments, *options.values()):
            if isinstance(fill, TracedArray):
                refuse(f"np.{function.__name__} with a traced value", "multiply np.ones_like(x) with it")
        return TracedArray(function(parts(x)[0], *arguments, **options), trace, None)

    return operation


for _name in ("zeros_like", "ones_like", "full_like"):
    FUNCTIONS[getattr(np, _name)] = _constant(getattr(np, _name))
FUNCTIONS[np.empty_like] = _constant(np.zeros_like)  # rather than whatever is in memory


def _copy(trace: Trace, x: Any, order: str = "K", subok: bool = False) -> Any:
    x = as_operand(trace, x)
    return TracedArray(x.value, trace, x.node)  # assignment replaces the value, so it can be shared


FUNCTIONS[np.copy] = _copy
FUNCTIONS[np.shape] = lambda trace, x: x.shape
FUNCTIONS[np.ndim] = lambda trace, x: x.ndim
FUNCTIONS[np.size] = lambda trace, x, axis=None: x.size if axis is None else x.shape[axis]
FUNCTIONS[np.iscomplexobj] = lambda trace, x: False
FUNCTIONS[np.isrealobj] = lambda trace, x: True
FUNCTIONS[np.real] = lambda trace, x: x
