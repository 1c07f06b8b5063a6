r"""Nonsmooth operations: value, selection at kinks, pieces, and smoothed form.

The selection is the same at every evaluation. Where the two arguments of a maximum or minimum are equal, a constant
argument is taken before one that depends on the unknown, and the first before the second; so ``maximum(0, u)`` has
derivative 0 at u = 0. ``abs(u)`` is maximum(u, -u), with derivative 1 at u = 0; a Euclidean norm has derivative 0
at 0; ``clip`` is on its bounds where it touches them; the largest of several is the first that is largest.

Smoothed forms with parameter eps: maximum(a, b) is (a + b + sqrt((a - b)^2 + 4 eps^2)) / 2, a minimum is
-maximum(-a, -b), ``abs(u)`` accordingly sqrt(u^2 + eps^2), a norm sqrt(\|u\|^2 + eps^2), the largest of several
eps log(sum(exp(u / eps))), ``clip`` a minimum of a maximum.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from .array import FUNCTIONS, UFUNCS, TracedArray, as_operand, elementwise, gathered, parts, record, refuse
from .links import Scatter
from .trace import Trace

ORDER = ("first", "second")
SIGN = ("negative", "positive")
LENGTH = ("zero", "positive")
BOX = ("lower", "free", "upper")


def smoothed_larger(a: Any, b: Any, eps: float) -> tuple[Any, Any, Any]:
    """The smoothed maximum and its two slopes, without cancellation; an infinite argument is never smoothed."""
    gap = np.asarray(a - b)
    with np.errstate(invalid="ignore"):
        root = np.sqrt(gap * gap + 4.0 * eps * eps)
        small = 2.0 * eps * eps / (root * (root + np.abs(gap)))  # slope in the smaller argument
        small = np.where(np.isfinite(gap), small, 0.0)
        value = np.maximum(a, b) + np.where(np.isfinite(gap), 2.0 * eps * eps / (root + np.abs(gap)), 0.0)
    return value, np.where(gap >= 0, 1.0 - small, small), np.where(gap >= 0, small, 1.0 - small)


def _extreme(trace: Trace, a: Any, b: Any, ufunc: Any, kind: str) -> TracedArray:
    a, b = as_operand(trace, a), as_operand(trace, b)
    (p, left), (q, right) = parts(a), parts(b)
    value = ufunc(p, q)
    if left is None and right is None:
        return TracedArray(value, trace, None)
    ahead, behind = (q, p) if kind == "maximum" else (p, q)
    # ties: the constant argument, else the first
    second = ahead >= behind if right is None else ahead > behind
    second = np.broadcast_to(second, np.shape(value))
    trace.note(kind, second, ORDER)
    if trace.eps > 0:
        if kind == "maximum":
            value, slope_a, slope_b = smoothed_larger(p, q, trace.eps)
        else:
            value, slope_a, slope_b = smoothed_larger(-p, -q, trace.eps)
            value = -value
        return elementwise(trace, value, (a, b), (lambda: slope_a, lambda: slope_b))
    return elementwise(trace, value, (a, b),
                       (lambda: (~second).astype(np.float64), lambda: second.astype(np.float64)))  # fmt: skip


def _make_extreme(ufunc: Any, kind: str) -> Any:
    def operation(trace: Trace, a: Any, b: Any) -> TracedArray:
        return _extreme(trace, a, b, ufunc, kind)

    return operation


for _kind in ("maximum", "minimum"):
    for _name in (_kind, "f" + _kind[:3]):
        UFUNCS[getattr(np, _name)] = _make_extreme(getattr(np, _name), _kind)


def _absolute(trace: Trace, x: Any) -> TracedArray:
    x = as_operand(trace, x)
    numbers, node = parts(x)
    if node is None:
        return TracedArray(np.abs(numbers), trace, None)
    positive = numbers >= 0
    trace.note("abs", positive, SIGN)
    if trace.eps > 0:
        value = np.hypot(numbers, trace.eps)
        return elementwise(trace, value, (x,), (lambda: numbers / value,))
    return elementwise(trace, np.abs(numbers), (x,), (lambda: np.where(positive, 1.0, -1.0),))


UFUNCS[np.absolute] = UFUNCS[np.fabs] = _absolute


def _clip(trace: Trace, x: Any, *bounds: Any, a_min: Any = None, a_max: Any = None, **options: Any) -> Any:
    lower = options.pop("min", None) if len(bounds) < 1 and a_min is None else bounds[0] if bounds else a_min
    upper = (
        options.pop("max", None)
        if len(bounds) < 2 and a_max is None
        else bounds[1]
        if len(bounds) > 1
        else a_max
    )
    if options or len(bounds) > 2:
        refuse("np.clip with further options", "leave them out")
    x = as_operand(trace, x)
    low = -np.inf if lower is None else as_operand(trace, lower)
    high = np.inf if upper is None else as_operand(trace, upper)
    if isinstance(low, TracedArray) or isinstance(high, TracedArray):
        raised = x if lower is None else _extreme(trace, x, low, np.maximum, "maximum")
        return raised if upper is None else _extreme(trace, raised, high, np.minimum, "minimum")
    numbers, node = parts(x)
    value = np.clip(numbers, low, high)
    if node is None:
        return TracedArray(value, trace, None)
    labels = np.ones(value.shape, dtype=np.int8)
    labels[np.broadcast_to(numbers <= low, value.shape)] = 0
    labels[np.broadcast_to(numbers >= high, value.shape)] = 2
    trace.note("clip", labels, BOX)
    if trace.eps > 0:
        raised, first, _ = smoothed_larger(numbers, low, trace.eps)
        value, second, _ = smoothed_larger(-raised, -np.asarray(high), trace.eps)
        return elementwise(trace, -value, (x,), (lambda: first * second,))
    return elementwise(trace, value, (x,), (lambda: (labels == 1).astype(np.float64),))


FUNCTIONS[np.clip] = _clip


def _hypot(trace: Trace, a: Any, b: Any) -> TracedArray:
    a, b = as_operand(trace, a), as_operand(trace, b)
    p, q = parts(a)[0], parts(b)[0]
    value = np.asarray(np.hypot(p, q))
    trace.note("hypot", value > 0, LENGTH)
    if trace.eps > 0:
        value = np.hypot(value, trace.eps)
    length = np.where(value > 0, value, 1.0)
    return elementwise(trace, value, (a, b), (lambda: p / length, lambda: q / length))


UFUNCS[np.hypot] = _hypot


def reduction_index(shape: tuple[int, ...], axis: Any) -> tuple[Any, tuple[int, ...]]:
    """The flat index of the result to which each entry goes (None: all to one), and the shape with axes of 1."""
    if axis is None:
        return None, (1,) * len(shape)
    axes = {int(a) % len(shape) for a in (axis if isinstance(axis, tuple) else (axis,))}
    kept = tuple(1 if k in axes else n for k, n in enumerate(shape))
    if all(n == 1 for n in kept):
        return None, kept
    return np.broadcast_to(np.arange(math.prod(kept)).reshape(kept), shape).ravel(), kept


def _norm(trace: Trace, x: Any, ord: Any = None, axis: Any = None, keepdims: bool = False) -> Any:
    x = as_operand(trace, x)
    vector = (axis is None and x.ndim <= 1) or (axis is not None and not isinstance(axis, tuple))
    if vector and ord == 1:
        return np.sum(np.abs(x), axis=axis, keepdims=keepdims)
    if vector and ord in (np.inf, -np.inf):
        return (np.max if ord > 0 else np.min)(np.abs(x), axis=axis, keepdims=keepdims)
    if not (ord is None or (ord == 2 and vector) or (ord == "fro" and not vector)):
        refuse(
            f"np.linalg.norm with ord={ord!r}",
            "supported: Euclidean, 1 and inf norms of vectors, Frobenius norm",
        )
    value = np.asarray(np.linalg.norm(x.value, ord, axis, keepdims))
    if x.node is None:
        return TracedArray(value, trace, None)
    trace.note("norm", value > 0, LENGTH)
    if trace.eps > 0:
        value = np.hypot(value, trace.eps)
    index, kept = reduction_index(x.shape, axis)
    if not trace.record:
        return record(trace, value, [1])
    length = np.where(value > 0, value, 1.0).reshape(kept)
    slope = np.broadcast_to(x.value / length, x.shape).ravel()
    return record(trace, value, [(x.node, Scatter(x.size, value.size, index, slope))])


FUNCTIONS[np.linalg.norm] = _norm


def _largest(trace: Trace, x: Any, axis: Any, keepdims: bool, sign: int) -> Any:
    x = as_operand(trace, x)
    kind = "largest" if sign > 0 else "smallest"
    if isinstance(axis, tuple):
        refuse(f"np.{'max' if sign > 0 else 'min'} over several axes", "reshape to join them first")
    value = np.asarray((np.max if sign > 0 else np.min)(x.value, axis=axis, keepdims=keepdims))
    if x.node is None:
        return TracedArray(value, trace, None)
    chosen = (np.argmax if sign > 0 else np.argmin)(x.value, axis=axis)
    trace.note(kind, chosen)
    if trace.eps > 0:
        index, kept = reduction_index(x.shape, axis)
        shares = np.exp(sign * (x.value - value.reshape(kept)) / trace.eps)
        total = shares.sum(axis=axis).reshape(kept)
        value = value + sign * trace.eps * np.log(total).reshape(value.shape)
        link = Scatter(x.size, value.size, index, np.broadcast_to(shares / total, x.shape).ravel())
        return record(trace, value, [(x.node, link)])
    if axis is None:
        return gathered(x, value, np.asarray(chosen).ravel())
    numbers = np.arange(x.size).reshape(x.shape)
    return gathered(x, value, np.take_along_axis(numbers, np.expand_dims(chosen, axis), axis).ravel())


def _max(trace: Trace, x: Any, axis: Any = None, keepdims: bool = False) -> Any:
    return _largest(trace, x, axis, keepdims, 1)


def _min(trace: Trace, x: Any, axis: Any = None, keepdims: bool = False) -> Any:
    return _largest(trace, x, axis, keepdims, -1)


FUNCTIONS[np.max] = FUNCTIONS[np.amax] = _max
FUNCTIONS[np.min] = FUNCTIONS[np.amin] = _min
UFUNCS[np.maximum, "reduce"] = lambda trace, x, axis=0, keepdims=False: _max(trace, x, axis, keepdims)
UFUNCS[np.minimum, "reduce"] = lambda trace, x, axis=0, keepdims=False: _min(trace, x, axis, keepdims)


def _interp(
    trace: Trace, x: Any, xp: Any, fp: Any, left: Any = None, right: Any = None, period: Any = None
) -> Any:
    """A table: piecewise linear, constant outside; the smoothed form is a sum of smoothed maxima at the kinks."""
    if period is not None or isinstance(xp, TracedArray) or isinstance(fp, TracedArray):
        refuse("np.interp with a period or a traced table", "trace only the first argument")
    xp, fp = np.asarray(xp, dtype=np.float64), np.asarray(fp, dtype=np.float64)
    if left not in (None, fp[0]) or right not in (None, fp[-1]):
        refuse("np.interp with left or right", "the result would jump at the end of the table")
    x = as_operand(trace, x)
    numbers = x.value
    value = np.asarray(np.interp(numbers, xp, fp))
    labels = np.searchsorted(xp, numbers, side="left")  # at a kink the piece before it
    slopes = np.concatenate([[0.0], np.diff(fp) / np.diff(xp), [0.0]])
    trace.note("interp", labels)
    if trace.eps == 0:
        return elementwise(trace, value, (x,), (lambda: slopes[labels],))
    value, slope = np.full(numbers.shape, fp[0]), np.zeros(numbers.shape)
    for kink, change in zip(xp, np.diff(slopes), strict=True):
        above, share, _ = smoothed_larger(numbers - kink, np.zeros(numbers.shape), trace.eps)
        value, slope = value + change * above, slope + change * share
    return elementwise(trace, value, (x,), (lambda: slope,))


FUNCTIONS[np.interp] = _interp
