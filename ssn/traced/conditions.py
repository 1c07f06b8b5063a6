"""Comparisons, np.where and np.sign: refused, unless in a function that was declared continuous and passes a check."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
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

# What the check of continuity bisects, to which share of a segment, and what it calls a jump (relative to the change
# of the result over the segment). Up to SMALL entries it looks more closely.
SWITCHES = ("condition", "sign")
BISECTIONS = 44
JUMP = 1e-8
SMALL = 10_000


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

    def _evaluate(self, arguments: tuple[Any, ...], values: list[FloatArray]) -> tuple[FloatArray, list[Any]]:
        """The result, and the labels of the comparisons."""
        trace = Trace(record=False)
        given = iter(values)
        replaced = [
            TracedArray(next(given), trace, trace.node(a.size)) if isinstance(a, TracedArray) else a
            for a in arguments
        ]
        with trace.continuity(), np.errstate(all="ignore"):
            result = as_operand(trace, self.function(*replaced))
        labels = [labels for name, labels in trace.pieces.items() if name.startswith(SWITCHES)]
        return parts(result)[0], labels

    def _check(self, arguments: tuple[Any, ...]) -> None:
        """Look for a jump on a path around the present arguments, by bisection to where labels change."""
        centre = [argument.value for argument in arguments if isinstance(argument, TracedArray)]
        generator = np.random.default_rng(0)
        small = sum(value.size for value in centre) <= SMALL
        size = max(1.0, *(float(np.abs(value).max(initial=0.0)) for value in centre))

        def point(share: float, spread: float) -> list[FloatArray]:
            return [share * v + spread * size * generator.standard_normal(v.shape) for v in centre]

        corners = [point(1.0, 10.0), point(1.0, 0.0), point(0.0, 0.0), point(1.0, 1.0), point(1.0, 0.03)]
        corners += [point(-1.0, 1.0), point(-1.0, 0.0), point(0.0, 0.1), point(0.0, 10.0)]
        budget = 60 if small else 4
        for start, end in pairwise(corners):
            cuts = np.linspace(0.0, 1.0, 9 if small else 3)
            stops = [[(1.0 - t) * a + t * b for a, b in zip(start, end, strict=True)] for t in cuts]
            for low, high in pairwise(stops):
                if budget > 0:
                    budget -= self._search(arguments, low, high)

    def _search(self, arguments: tuple[Any, ...], low: list[FloatArray], high: list[FloatArray]) -> int:
        """Bisect one segment; return how many bisections that took."""
        result, labels = self._evaluate(arguments, low)
        other, other_labels = self._evaluate(arguments, high)
        if [a.shape for a in labels] != [a.shape for a in other_labels]:
            raise InputError(f"{self.__name__} was declared continuous, but takes other operations elsewhere")
        if all(np.array_equal(a, b) for a, b in zip(labels, other_labels, strict=True)):
            return 0
        span = float(np.abs(other - result).max(initial=0.0))
        size = float(max(np.abs(result).max(initial=0.0), np.abs(other).max(initial=0.0)))
        if not np.isfinite(size):
            return 0
        shape = low[0].shape
        alike = shape != () and all(array.shape == shape for array in (*labels, *low, result))
        for each in (True, False) if alike else (False,):
            a, b = low, high
            for _ in range(BISECTIONS):
                middle = [0.5 * (p + q) for p, q in zip(a, b, strict=True)]
                found = self._evaluate(arguments, middle)[1]
                same = [p == q for p, q in zip(found, labels, strict=True)]
                # each component on a segment of its own, or all on one
                stay: Any = np.all(same, axis=0) if each else all(part.all() for part in same)
                a = [np.where(stay, m, p) for m, p in zip(middle, a, strict=True)]
                b = [np.where(stay, q, m) for m, q in zip(middle, b, strict=True)]
            jump = np.abs(self._evaluate(arguments, b)[0] - self._evaluate(arguments, a)[0])
            if float(jump.max(initial=0.0)) > JUMP * span + 1e-11 * size:
                self._complain(jump, a)
        return 2 if alike else 1

    def _complain(self, jump: FloatArray, arguments: list[FloatArray]) -> None:
        worst = np.unravel_index(int(np.argmax(jump)), jump.shape)
        near = ", ".join(f"{value[worst]:.6g}" if value.shape == jump.shape else "..." for value in arguments)
        component = f"component {', '.join(str(int(k)) for k in worst)}" if worst else "the result"
        raise InputError(
            f"{self.__name__} was declared continuous, but {component} jumps by {jump[worst]:.3g} near the argument "
            f"{near}: an equation with a jump has no Newton derivative there"
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
