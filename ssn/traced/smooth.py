"""Smooth elementwise operations: the values are NumPy's own, the slopes are listed here."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.special as special

from .array import REMEDIES, UFUNCS, TracedArray, as_operand, elementwise, parts
from .trace import Trace

_LN2, _LN10 = np.log(2.0), np.log(10.0)

# y = ufunc(x): slope(x, y)
UNARY: dict[Any, Callable[[Any, Any], Any]] = {
    np.negative: lambda x, y: -1.0,
    np.positive: lambda x, y: None,
    np.conjugate: lambda x, y: None,
    np.exp: lambda x, y: y,
    np.exp2: lambda x, y: y * _LN2,
    np.expm1: lambda x, y: np.exp(x),
    np.log: lambda x, y: 1.0 / x,
    np.log2: lambda x, y: 1.0 / (x * _LN2),
    np.log10: lambda x, y: 1.0 / (x * _LN10),
    np.log1p: lambda x, y: 1.0 / (1.0 + x),
    np.sqrt: lambda x, y: 0.5 / y,
    np.cbrt: lambda x, y: 1.0 / (3.0 * y * y),
    np.square: lambda x, y: 2.0 * x,
    np.reciprocal: lambda x, y: -y * y,
    np.sin: lambda x, y: np.cos(x),
    np.cos: lambda x, y: -np.sin(x),
    np.tan: lambda x, y: 1.0 + y * y,
    np.arcsin: lambda x, y: 1.0 / np.sqrt((1.0 - x) * (1.0 + x)),
    np.arccos: lambda x, y: -1.0 / np.sqrt((1.0 - x) * (1.0 + x)),
    np.arctan: lambda x, y: 1.0 / (1.0 + x * x),
    np.sinh: lambda x, y: np.cosh(x),
    np.cosh: lambda x, y: np.sinh(x),
    np.tanh: lambda x, y: 1.0 / np.cosh(x) ** 2,
    np.arcsinh: lambda x, y: 1.0 / np.hypot(1.0, x),
    np.arccosh: lambda x, y: 1.0 / np.sqrt((x - 1.0) * (x + 1.0)),
    np.arctanh: lambda x, y: 1.0 / ((1.0 - x) * (1.0 + x)),
    np.deg2rad: lambda x, y: np.pi / 180.0,
    np.radians: lambda x, y: np.pi / 180.0,
    np.rad2deg: lambda x, y: 180.0 / np.pi,
    np.degrees: lambda x, y: 180.0 / np.pi,
    special.expit: lambda x, y: y * special.expit(-x),
    special.logit: lambda x, y: 1.0 / (x * (1.0 - x)),
    special.erf: lambda x, y: 2.0 / np.sqrt(np.pi) * np.exp(-x * x),
    special.erfc: lambda x, y: -2.0 / np.sqrt(np.pi) * np.exp(-x * x),
    special.gammaln: lambda x, y: special.digamma(x),
}


def _power_base(a: Any, b: Any, y: Any) -> Any:
    return np.where(np.equal(b, 0), 0.0, b * np.power(a, b - 1.0))


def _power_exponent(a: Any, b: Any, y: Any) -> Any:
    return np.where(np.equal(y, 0), 0.0, y * np.log(a))


def _share(a: Any, b: Any) -> Any:
    return special.expit(a - b)


# y = ufunc(a, b): the slopes in a and in b, from (a, b, y)
BINARY: dict[Any, tuple[Callable[..., Any], Callable[..., Any]]] = {
    np.add: (lambda a, b, y: None, lambda a, b, y: None),
    np.subtract: (lambda a, b, y: None, lambda a, b, y: -1.0),
    np.multiply: (lambda a, b, y: b, lambda a, b, y: a),
    np.true_divide: (lambda a, b, y: 1.0 / b, lambda a, b, y: -y / b),
    np.power: (_power_base, _power_exponent),
    np.float_power: (_power_base, _power_exponent),
    np.arctan2: (lambda a, b, y: b / (a * a + b * b), lambda a, b, y: -a / (a * a + b * b)),
    np.logaddexp: (lambda a, b, y: _share(a, b), lambda a, b, y: _share(b, a)),
    special.xlogy: (lambda a, b, y: np.log(b), lambda a, b, y: a / b),
}

REMEDIES.update(
    {
        name: f"np.{name} jumps; an equation with a jump has no Newton derivative there"
        for name in ("floor", "ceil", "rint", "round", "trunc", "fix", "remainder", "fmod", "mod", "floor_divide",
                     "heaviside", "copysign", "signbit", "argmax", "argmin", "argsort", "digitize", "searchsorted")
    }
)  # fmt: skip


def _make_unary(ufunc: Any, slope: Callable[[Any, Any], Any]) -> Callable[..., TracedArray]:
    def operation(trace: Trace, x: Any) -> TracedArray:
        x = as_operand(trace, x)
        numbers, _ = parts(x)
        value = ufunc(numbers)
        return elementwise(trace, value, (x,), (lambda: slope(numbers, value),))

    return operation


def _make_binary(
    ufunc: Any, slopes: tuple[Callable[..., Any], Callable[..., Any]]
) -> Callable[..., TracedArray]:
    left, right = slopes

    def operation(trace: Trace, a: Any, b: Any) -> TracedArray:
        a, b = as_operand(trace, a), as_operand(trace, b)
        p, q = parts(a)[0], parts(b)[0]
        value = ufunc(p, q)
        return elementwise(trace, value, (a, b), (lambda: left(p, q, value), lambda: right(p, q, value)))

    return operation


def _pow(trace: Trace, a: Any, b: Any) -> TracedArray:
    """``a ** b``, with the value that NumPy's operator gives: it computes a square as such."""
    p = parts(as_operand(trace, a))[0] if isinstance(a, TracedArray) else a
    q = parts(as_operand(trace, b))[0] if isinstance(b, TracedArray) else b
    value = p**q
    a, b = as_operand(trace, a), as_operand(trace, b)
    p, q = parts(a)[0], parts(b)[0]
    if q.ndim == 0 and q == 2.0:
        return elementwise(trace, value, (a, b), (lambda: 2.0 * p, lambda: _power_exponent(p, q, value)))
    return elementwise(
        trace, value, (a, b), (lambda: _power_base(p, q, value), lambda: _power_exponent(p, q, value))
    )


for _ufunc, _slope in UNARY.items():
    UFUNCS[_ufunc] = _make_unary(_ufunc, _slope)
for _ufunc, _slopes in BINARY.items():
    UFUNCS[_ufunc] = _make_binary(_ufunc, _slopes)
UFUNCS["pow"] = _pow
