"""Comparisons, np.where and np.sign: refused, unless in a function that was declared continuous and passes a check."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from .array import FUNCTIONS, REMEDIES, UFUNCS, TracedArray, as_operand, elementwise, parts, refuse
from .trace import Trace

FloatArray = npt.NDArray[np.float64]

WORDS = ("false", "true")
SIGNS = ("negative", "zero", "positive")
DECLARE = (
    "it can make the equation jump. Use np.maximum, np.minimum, np.clip or np.abs; if the result is continuous all "
    "the same, put it into a function decorated with ssn.declare_continuous, which checks that"
)
REMEDIES.update(
    {"equal": "two reals are equal by accident only", "not_equal": "two reals are equal by accident only"}
)

# Bisection stops at this share of the segment; a change of the result beyond this share of its range is a jump.
BISECTIONS = 44
JUMP = 1e-6


class TracedCondition:
    """A comparison inside a function that was declared continuous; goes into np.where, ``&``, ``|`` and ``~``."""

    __slots__ = ("chosen", "trace", "weight")
    __hash__ = None  # type: ignore[assignment]

    def __init__(self, trace: Trace, chosen: Any, weight: Callable[[], Any]) -> None:
        self.trace = trace
        self.chosen = chosen
        self.weight = weight

    def __bool__(self) -> bool:
        refuse(
            "a decision (if, and, or, not) on a traced condition",
            "use np.where, and &, |, ~ for and, or, not",
        )

    def __and__(self, other: Any) -> TracedCondition:
        other = _condition(self.trace, other)
        return TracedCondition(self.trace, self.chosen & other.chosen, lambda: self.weight() * other.weight())

    def __or__(self, other: Any) -> TracedCondition:
        return ~(~self & ~_condition(self.trace, other))

    def __invert__(self) -> TracedCondition:
        return TracedCondition(self.trace, ~self.chosen, lambda: 1.0 - self.weight())

    __rand__, __ror__ = __and__, __or__

    def __array_ufunc__(self, ufunc: Any, method: str, *inputs: Any, **options: Any) -> Any:
        """Logical operations only."""
        first = _condition(self.trace, inputs[0])
        if method == "__call__" and ufunc in (np.logical_and, np.bitwise_and):
            return first & inputs[1]
        if method == "__call__" and ufunc in (np.logical_or, np.bitwise_or):
            return first | inputs[1]
        if method == "__call__" and ufunc in (np.logical_not, np.invert):
            return ~first
        refuse(f"np.{ufunc.__name__} of a condition", "use it in np.where")

    def __array_function__(self, function: Any, types: Any, inputs: Any, options: Any) -> Any:
        """np.where only."""
        if function is not np.where:
            refuse(f"np.{function.__name__} of a condition", "use it in np.where")
        return _where(self.trace, *inputs, **options)

    def __mul__(self, other: Any) -> Any:
        return _where(self.trace, self, other, 0.0)

    __rmul__ = __mul__


def _condition(trace: Trace, given: Any) -> TracedCondition:
    if isinstance(given, TracedCondition):
        return given
    chosen = np.asarray(given, dtype=bool)
    return TracedCondition(trace, chosen, lambda: chosen.astype(np.float64))


def _make_comparison(ufunc: Any, sign: float) -> Callable[..., Any]:
    def operation(trace: Trace, a: Any, b: Any) -> Any:
        if not trace.declared:
            refuse(f"a comparison (np.{ufunc.__name__})", DECLARE)
        a, b = as_operand(trace, a), as_operand(trace, b)
        chosen = np.asarray(ufunc(parts(a)[0], parts(b)[0]))
        trace.note("condition", chosen, WORDS)

        def weight() -> Any:
            gap = sign * (a - b)
            return 0.5 * (1.0 + gap / np.sqrt(gap * gap + 4.0 * trace.eps**2))

        return TracedCondition(trace, chosen, weight)

    return operation


for _ufunc, _sign in ((np.greater, 1.0), (np.greater_equal, 1.0), (np.less, -1.0), (np.less_equal, -1.0)):
    UFUNCS[_ufunc] = _make_comparison(_ufunc, _sign)


def _where(trace: Trace, condition: Any, *branches: Any) -> Any:
    if len(branches) != 2:
        refuse("np.where with one argument", "the number of entries would jump")
    if isinstance(condition, TracedArray):
        refuse("np.where with numbers as its condition", DECLARE)
    a, b = as_operand(trace, branches[0]), as_operand(trace, branches[1])
    if isinstance(condition, TracedCondition) and trace.eps > 0:
        return b + (a - b) * condition.weight()
    chosen = condition.chosen if isinstance(condition, TracedCondition) else np.asarray(condition, dtype=bool)
    value = np.where(chosen, parts(a)[0], parts(b)[0])
    mask = np.broadcast_to(chosen, value.shape)
    return elementwise(
        trace, value, (a, b), (lambda: mask.astype(np.float64), lambda: (~mask).astype(np.float64))
    )


def _sign_of(trace: Trace, x: Any) -> Any:
    if not trace.declared:
        refuse("np.sign", DECLARE)
    x = as_operand(trace, x)
    value = np.sign(parts(x)[0])
    trace.note("sign", value.astype(np.int8) + 1, SIGNS)
    if trace.eps > 0:
        return x / np.sqrt(x * x + trace.eps**2)
    return elementwise(trace, value, (x,), (lambda: 0.0,))


FUNCTIONS[np.where] = _where
UFUNCS[np.sign] = _sign_of


class ContinuousFunction:
    """A function in which comparisons, np.where and np.sign may be traced; see `declare_continuous`."""

    def __init__(self, function: Callable[..., Any]) -> None:
        if not callable(function):
            raise InputError(f"declare_continuous needs a function, got {type(function).__name__}")
        self.function = function
        self.__doc__ = function.__doc__
        self.__name__ = getattr(function, "__name__", "function")
        self._checked: set[tuple[Any, ...]] = set()

    def __call__(self, *arguments: Any) -> Any:
        """The function; on a traced array checked before its first use with these shapes."""
        traced = [argument for argument in arguments if isinstance(argument, TracedArray)]
        if not traced:
            return self.function(*arguments)
        shapes = tuple(np.shape(argument) for argument in arguments)
        if shapes not in self._checked:
            self._check(arguments)
            self._checked.add(shapes)
        with traced[0].trace.continuity():
            return self.function(*arguments)

    def _evaluate(
        self, arguments: tuple[Any, ...], values: list[FloatArray]
    ) -> tuple[FloatArray, FloatArray]:
        """The result, and all labels one after the other."""
        trace = Trace(record=False)
        given = iter(values)
        replaced = [
            TracedArray(next(given), trace, trace.node(argument.size))
            if isinstance(argument, TracedArray)
            else argument
            for argument in arguments
        ]
        with trace.continuity(), np.errstate(all="ignore"):
            result = as_operand(trace, self.function(*replaced))
        labels = [labels.ravel() for labels in trace.pieces.values()]
        return parts(result)[0], np.concatenate(labels) if labels else np.zeros(0)

    def _check(self, arguments: tuple[Any, ...]) -> None:
        """Look for a jump on segments through the present arguments, by bisection to where labels change."""
        centre = [argument.value for argument in arguments if isinstance(argument, TracedArray)]
        generator = np.random.default_rng(0)
        large = sum(value.size for value in centre) > 100_000
        for radius in (1.0,) if large else (1.0, 0.03, 10.0, 1.0):
            ends = []
            steps = [radius * max(1.0, float(np.abs(v).max(initial=0.0))) * generator.standard_normal(v.shape)
                     for v in centre]  # fmt: skip
            for sign in (-1.0, 1.0):
                ends.append([v + sign * step for v, step in zip(centre, steps, strict=True)])
            self._search(arguments, ends[0], ends[1], each=True)
            self._search(arguments, ends[0], ends[1], each=False)

    def _search(self, arguments: tuple[Any, ...], low: Any, high: Any, *, each: bool) -> None:
        result, labels = self._evaluate(arguments, low)
        other, other_labels = self._evaluate(arguments, high)
        if labels.shape != other_labels.shape:
            raise InputError(f"{self.__name__} was declared continuous, but takes other operations elsewhere")
        shape = low[0].shape
        together = each and labels.size == low[0].size and result.shape == shape
        if each and not (together and all(value.shape == shape for value in low)):
            return
        span = float(np.abs(other - result).max(initial=0.0))
        size = float(max(np.abs(result).max(initial=0.0), np.abs(other).max(initial=0.0)))
        if not (labels != other_labels).any() or not np.isfinite(size):
            return
        for _ in range(BISECTIONS):
            middle = [0.5 * (a + b) for a, b in zip(low, high, strict=True)]
            _, found = self._evaluate(arguments, middle)
            if together:  # each component has its own segment
                stay = (found == labels).reshape(shape)
                low = [np.where(stay, m, a) for m, a in zip(middle, low, strict=True)]
                high = [np.where(stay, b, m) for m, b in zip(middle, high, strict=True)]
            elif (found == labels).all():
                low = middle
            else:
                high = middle
        jump = np.abs(self._evaluate(arguments, high)[0] - self._evaluate(arguments, low)[0])
        if float(jump.max(initial=0.0)) > JUMP * span + 1e-10 * size:
            worst = np.unravel_index(int(np.argmax(jump)), jump.shape)
            near = ", ".join(f"{value[worst]:.6g}" if value.shape == jump.shape else "..." for value in low)
            raise InputError(
                f"{self.__name__} was declared continuous, but component {tuple(map(int, worst))} jumps by "
                f"{jump[worst]:.3g} near the argument {near}: an equation with a jump has no Newton derivative there"
            )


def declare_continuous(function: Callable[..., Any]) -> ContinuousFunction:
    """Declare that a function with comparisons, np.where or np.sign is continuous, so that it can be traced.

    Parameters
    ----------
    function : callable
        A NumPy function of arrays, given by position, that returns an array. It must be piecewise smooth and
        continuous; each comparison is recorded as pieces, and its smoothed form replaces the switch by
        (1 + c / sqrt(c^2 + 4 eps^2)) / 2 with c the difference of the two sides.

    Returns
    -------
    ContinuousFunction
        To be called like the function. At the first traced call with arrays of some shape it searches for jumps
        where labels change, on seeded segments around the arguments, and raises `InputError` where it finds one. A
        jump elsewhere is not found: the declaration is the caller's.

    Examples
    --------
    >>> import numpy as np
    >>> from ssn.traced import TracedEquation, declare_continuous
    >>> @declare_continuous
    ... def law(v):
    ...     return np.where(v > 1.0, 2.0 * v - 1.0, v)
    >>> TracedEquation(lambda u: law(u) - 3.0, np.zeros(2)).linearize(np.array([0.0, 5.0])).derivative.toarray()
    array([[1., 0.],
           [0., 2.]])
    """
    return ContinuousFunction(function)
