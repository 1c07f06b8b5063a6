"""Sums and products: sum, mean, prod, cumsum, scatter-add, matmul and its relatives."""

from __future__ import annotations

import string
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse as sp

from .array import FUNCTIONS, UFUNCS, TracedArray, as_operand, parts, record, refuse, times_matrix
from .kinks import reduction_index
from .links import Matrix, RunningSum, Scatter
from .structure import canonical_csr
from .trace import Node, Trace


def _reduced(trace: Trace, x: Any, value: Any, axis: Any, factor: Any) -> TracedArray:
    value = np.asarray(value)
    if x.node is None:
        return TracedArray(value, trace, None)
    index, _ = reduction_index(x.shape, axis)
    return record(trace, value, [(x.node, Scatter(x.size, value.size, index, factor))])


def _options(name: str, options: dict[str, Any]) -> None:
    options = {k: v for k, v in options.items() if v is not None and v is not np._NoValue}
    if options.pop("dtype", float) not in (float, np.float64) or options:
        refuse(f"np.{name} with {', '.join(options) or 'dtype'}", "leave the option out")


def _sum(trace: Trace, x: Any, axis: Any = None, keepdims: bool = False, **options: Any) -> Any:
    _options("sum", options)
    x = as_operand(trace, x)
    keepdims = keepdims is True
    return _reduced(trace, x, np.sum(parts(x)[0], axis=axis, keepdims=keepdims), axis, None)


def _mean(trace: Trace, x: Any, axis: Any = None, keepdims: bool = False, **options: Any) -> Any:
    _options("mean", options)
    x = as_operand(trace, x)
    keepdims = keepdims is True
    value = np.asarray(np.mean(parts(x)[0], axis=axis, keepdims=keepdims))
    return _reduced(trace, x, value, axis, value.size / x.size)


def _prod(trace: Trace, x: Any, axis: Any = None, keepdims: bool = False, **options: Any) -> Any:
    _options("prod", options)
    x = as_operand(trace, x)
    if isinstance(axis, tuple):
        refuse("np.prod over several axes", "reshape to join them first")
    numbers = parts(x)[0]
    value = np.prod(numbers, axis=axis, keepdims=keepdims is True)
    if not trace.record:
        return _reduced(trace, x, value, axis, None)
    along = numbers.reshape(-1) if axis is None else np.moveaxis(numbers, axis, -1)
    ones = np.ones((*along.shape[:-1], 1))
    before = np.cumprod(np.concatenate([ones, along[..., :-1]], axis=-1), axis=-1)
    after = np.cumprod(np.concatenate([ones, along[..., :0:-1]], axis=-1), axis=-1)[..., ::-1]
    slope = before * after  # the product of all others, right at zeros too
    slope = slope if axis is None else np.moveaxis(slope, -1, axis)
    return _reduced(trace, x, value, axis, slope.ravel())


def _cumsum(trace: Trace, x: Any, axis: Any = None, **options: Any) -> Any:
    _options("cumsum", options)
    x = as_operand(trace, x)
    if axis is None:
        x, axis = np.ravel(x), 0
    value = np.cumsum(x.value, axis=axis)
    pairs = [] if x.node is None else [(x.node, RunningSum(x.shape, axis % x.ndim))]
    return record(trace, value, pairs)


FUNCTIONS[np.sum] = _sum
FUNCTIONS[np.mean] = _mean
FUNCTIONS[np.prod] = _prod
FUNCTIONS[np.cumsum] = _cumsum
UFUNCS[np.add, "reduce"] = lambda trace, x, axis=0, **options: _sum(trace, x, axis, **options)
UFUNCS[np.multiply, "reduce"] = lambda trace, x, axis=0, **options: _prod(trace, x, axis, **options)
UFUNCS[np.add, "accumulate"] = lambda trace, x, axis=0, **options: _cumsum(trace, x, axis, **options)


def _add_at(trace: Trace, target: Any, index: Any, given: Any) -> None:
    if not isinstance(target, TracedArray):
        refuse("np.add.at into a plain array",
               "make it with np.zeros_like(x), or use np.bincount(index, weights=...)")  # fmt: skip
    operand = as_operand(trace, given)
    numbers, node = parts(operand)
    value = target.value.copy()
    np.add.at(value, index, numbers)
    pairs: list[Any] = (
        [] if target.node is None else [(target.node, Scatter(value.size, value.size, _all(value)))]
    )
    if node is not None:
        places = np.arange(value.size).reshape(value.shape)[index]
        spread_out = np.broadcast_to(np.arange(numbers.size).reshape(numbers.shape), places.shape).ravel()
        matrix = sp.coo_array(
            (np.ones(places.size), (places.ravel(), spread_out)), shape=(value.size, numbers.size)
        )
        pairs.append((node, Matrix(canonical_csr(matrix))))
    target.become(record(trace, value, pairs))


def _all(value: Any) -> Any:
    return np.arange(value.size)


UFUNCS[np.add, "at"] = _add_at


def _bincount(trace: Trace, x: Any, weights: Any = None, minlength: int = 0) -> Any:
    if isinstance(x, TracedArray):
        refuse("np.bincount of a traced array", "only weights may depend on the unknown")
    weights = as_operand(trace, weights)
    value = np.bincount(x, parts(weights)[0], minlength)
    link = Scatter(weights.size, value.size, np.asarray(x))
    return record(trace, value, [] if weights.node is None else [(weights.node, link)])


FUNCTIONS[np.bincount] = _bincount


def _contract(trace: Trace, value: Any, operands: list[Any], inputs: list[str], output: str) -> TracedArray:
    """The derivative of an einsum of one or two operands, whose value is known."""
    value = np.asarray(value)
    if not trace.record:
        return record(trace, value, [1 for operand in operands if parts(operand)[1] is not None])
    letters = sorted(set("".join(inputs)))
    extent = dict.fromkeys(letters, 1)
    for operand, subscripts in zip(operands, inputs, strict=True):
        for letter, size in zip(subscripts, operand.shape, strict=True):
            extent[letter] = max(extent[letter], size)
    full = tuple(extent[letter] for letter in letters)

    def places(subscripts: str, shape: tuple[int, ...]) -> Any:
        total = np.zeros((1,) * len(full), dtype=np.intp)
        step = 1
        for letter, size in zip(reversed(subscripts), reversed(shape), strict=True):
            axis = letters.index(letter)
            if size > 1:
                ramp = np.arange(size) * step
                total = total + ramp.reshape([-1 if k == axis else 1 for k in range(len(full))])
            step *= size
        return np.broadcast_to(total, full).ravel()

    where = [places(subscripts, operand.shape) for operand, subscripts in zip(operands, inputs, strict=True)]
    target = places(output, value.shape)
    pairs: list[tuple[Node, Matrix]] = []
    for k, operand in enumerate(operands):
        node = parts(operand)[1]
        if node is not None:
            entries = np.ones(target.size)
            for other, other_operand in enumerate(operands):
                if other != k:
                    entries = entries * parts(other_operand)[0].ravel()[where[other]]
            shape = (value.size, operand.size)
            matrix = sp.coo_array((entries, (target, where[k])), shape=shape)
            pairs.append((node, Matrix(canonical_csr(matrix))))
    return record(trace, value, pairs)


def _product(trace: Trace, a: Any, b: Any, function: Callable[..., Any]) -> Any:
    """function(a, b) with the meaning of matmul."""
    p, q = parts(a)[0], parts(b)[0]
    value = np.asarray(function(p, q))
    left, right = parts(a)[1], parts(b)[1]
    if p.ndim == 1 and q.ndim == 1:
        pairs = [
            (node, Scatter(p.size, 1, None, other))
            for node, other in ((left, q), (right, p))
            if node is not None
        ]
        return record(trace, value, pairs)
    if left is None and p.ndim == 2 and q.ndim == 1:
        return record(trace, value, [] if right is None else [(right, Matrix(p))])
    if right is None and p.ndim == 1 and q.ndim == 2:
        return record(trace, value, [] if left is None else [(left, Matrix(q.T))])
    batch = string.ascii_lowercase[: max(p.ndim, q.ndim, 2) - 2]
    first = "y" if p.ndim == 1 else batch[len(batch) - (p.ndim - 2) :] + "xy"
    second = "y" if q.ndim == 1 else batch[len(batch) - (q.ndim - 2) :] + "yz"
    output = batch + ("x" if p.ndim > 1 else "") + ("z" if q.ndim > 1 else "")
    return _contract(trace, value, [a, b], [first, second], output)


def _matmul(trace: Trace, a: Any, b: Any) -> Any:
    for matrix, x in ((a, b), (b, a)):
        if sp.issparse(matrix):
            return times_matrix(matrix, x) if x is b else a @ matrix
    return _product(trace, as_operand(trace, a), as_operand(trace, b), np.matmul)


def _dot(trace: Trace, a: Any, b: Any) -> Any:
    if sp.issparse(a) or sp.issparse(b):
        return _matmul(trace, a, b)
    a, b = as_operand(trace, a), as_operand(trace, b)
    if a.ndim == 0 or b.ndim == 0:
        return a * b
    if a.ndim > 2 or b.ndim > 2:
        refuse("np.dot of arrays with more than two axes", "use np.einsum or @")
    return _product(trace, a, b, np.dot)


def _vdot(trace: Trace, a: Any, b: Any) -> Any:
    return _product(trace, np.ravel(as_operand(trace, a)), np.ravel(as_operand(trace, b)), np.vdot)


def _inner(trace: Trace, a: Any, b: Any) -> Any:
    a, b = as_operand(trace, a), as_operand(trace, b)
    if a.ndim > 1 or b.ndim > 1:
        refuse("np.inner of arrays with more than one axis", "use np.einsum or @")
    return a * b if a.ndim == 0 or b.ndim == 0 else _product(trace, a, b, np.inner)


def _outer(trace: Trace, a: Any, b: Any) -> Any:
    a, b = np.ravel(as_operand(trace, a)), np.ravel(as_operand(trace, b))
    return np.reshape(a, (-1, 1)) * np.reshape(b, (1, -1))


def _einsum(trace: Trace, subscripts: Any, *operands: Any, **options: Any) -> Any:
    if not isinstance(subscripts, str) or "." in subscripts or len(operands) > 2:
        refuse(
            "np.einsum with ellipsis, lists or more than two operands", "write subscripts for two at a time"
        )
    if options.pop("optimize", None) is None and options:
        refuse(f"np.einsum with {', '.join(options)}", "leave the option out")
    given = [as_operand(trace, operand) for operand in operands]
    value = np.einsum(subscripts, *(parts(operand)[0] for operand in given))
    left, arrow, output = subscripts.replace(" ", "").partition("->")
    if not arrow:
        output = "".join(sorted(letter for letter in set(left) - {","} if left.count(letter) == 1))
    return _contract(trace, value, given, left.split(","), output)


def _trace(trace: Trace, x: Any, offset: int = 0) -> Any:
    return np.sum(np.diagonal(x, offset), axis=-1)


UFUNCS[np.matmul] = _matmul
FUNCTIONS[np.dot] = _dot
FUNCTIONS[np.vdot] = _vdot
FUNCTIONS[np.inner] = _inner
FUNCTIONS[np.outer] = _outer
FUNCTIONS[np.einsum] = _einsum
FUNCTIONS[np.trace] = _trace
UFUNCS[np.multiply, "outer"] = lambda trace, a, b: np.reshape(
    _outer(trace, a, b), as_operand(trace, a).shape + as_operand(trace, b).shape
)
