"""The array that a user's function gets instead of a NumPy array while its derivative is wanted."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..errors import InputError
from .links import Gather, Matrix, Operator
from .trace import Node, Trace, elementwise_link, refuse

FloatArray = npt.NDArray[np.float64]

# What each NumPy function does with traced arrays; the modules of this folder fill them when they are imported.
UFUNCS: dict[Any, Callable[..., Any]] = {}
FUNCTIONS: dict[Any, Callable[..., Any]] = {}
# Why an operation is refused, by its NumPy name.
REMEDIES: dict[str, str] = {}

GENERAL_REMEDY = (
    "write it with operations that are supported, or wrap it with ssn.custom_operation(value=..., derivative=..., "
    "pieces=..., smoothed=...)"
)


class TracedArray:
    """An array of numbers that remembers how they depend on the unknown.

    It has shape, arithmetic, indexing and the usual methods of a NumPy array, but no ``len()``: SciPy's sparse
    arrays hand ``A @ x`` over only to operands that do not look like a sequence. ``x.value`` is for printing; a
    function that computes with it loses the derivative.

    Parameters
    ----------
    value : array
    trace : Trace
    node : Node or None
        Where the value comes from; None for a constant.
    """

    __array_priority__ = 1000.0
    __slots__ = ("_buffer", "_node", "_origin", "_value", "_version", "trace")
    __hash__ = None  # type: ignore[assignment]

    def __init__(self, value: Any, trace: Trace, node: Node | None) -> None:
        self._value: FloatArray = (
            value if isinstance(value, np.ndarray) else np.asarray(value, dtype=np.float64)
        )
        self._node = node
        self.trace = trace
        self._buffer: list[int] | None = None
        self._version = 0
        self._origin: tuple[Any, Any] | None = None

    # what it holds

    def current(self) -> TracedArray:
        """Return self after a check that no view of it was written to behind its back."""
        if self._buffer is not None and self._buffer[0] != self._version:
            refuse("reading an array after a view of it (or what it is a view of) was assigned to",
                   "assign to the array itself, or take a copy of the part first")  # fmt: skip
        return self

    @property
    def value(self) -> FloatArray:
        """The numbers."""
        return self.current()._value

    @property
    def node(self) -> Node | None:
        """Where they come from."""
        return self.current()._node

    @property
    def shape(self) -> tuple[int, ...]:
        """As for a NumPy array."""
        return self._value.shape

    @property
    def ndim(self) -> int:
        """As for a NumPy array."""
        return self._value.ndim

    @property
    def size(self) -> int:
        """As for a NumPy array."""
        return self._value.size

    @property
    def dtype(self) -> Any:
        """Always float64."""
        return self._value.dtype

    @property
    def T(self) -> TracedArray:
        """The transpose."""
        return np.transpose(self)  # type: ignore[call-overload]

    @property
    def real(self) -> TracedArray:
        """Itself."""
        return self

    @property
    def flat(self) -> Any:
        """Refused."""
        refuse("x.flat", "use x.ravel()")

    def __repr__(self) -> str:
        return f"TracedArray({self._value!r})"

    # what it refuses

    def __float__(self) -> float:
        refuse("turning a traced array into numbers (float(), np.asarray(..., dtype=float), assignment to an entry "
               "of a plain array, functions of the math module)",
               "keep it as it is; build arrays with np.concatenate or np.stack, or start from np.zeros_like(x); "
               "use np.exp instead of math.exp")  # fmt: skip

    __int__ = __index__ = __complex__ = __float__

    def __bool__(self) -> bool:
        refuse("a decision (if, and, or, not, while) on a traced array",
               "use np.maximum, np.minimum, np.clip or np.abs")  # fmt: skip

    # NumPy's two protocols

    def __array_ufunc__(self, ufunc: Any, method: str, *inputs: Any, **options: Any) -> Any:
        """Operations that are ufuncs."""
        outs = options.pop("out", None)
        name = ufunc.__name__
        if options.pop("where", True) is not True:
            refuse(f"np.{name}(..., where=...)", "compute everywhere, then multiply with a mask")
        if method == "__call__":
            options.pop("casting", None)
            if options.pop("dtype", np.float64) not in (np.float64, float, "float64", "d") or options:
                refuse(f"np.{name} with {', '.join(options) or 'dtype'}", "leave the option out")
            handler = UFUNCS.get(ufunc)
            if handler is None:
                refuse(f"np.{name}" if hasattr(np, name) else name, REMEDIES.get(name, GENERAL_REMEDY))
            result = handler(self.trace, *inputs)
        else:
            handler = UFUNCS.get((ufunc, method))
            if handler is None:
                refuse(f"np.{name}.{method}", REMEDIES.get(name, GENERAL_REMEDY))
            result = handler(self.trace, *inputs, **options)
        return result if outs is None else _write_out(outs, result, f"np.{name}")

    def __array_function__(self, function: Any, types: Any, inputs: Any, options: Any) -> Any:
        """Operations that are functions."""
        handler = FUNCTIONS.get(function)
        name = function.__name__
        if handler is None:
            module = (getattr(function, "__module__", "") or "numpy").replace("numpy", "np")
            refuse(f"{module}.{name}", REMEDIES.get(name, GENERAL_REMEDY))
        if options.get("out") is not None:
            outs = options["out"]
            rest = {key: option for key, option in options.items() if key != "out"}
            result = handler(self.trace, *inputs, **rest)
            return _write_out(outs if isinstance(outs, tuple) else (outs,), result, f"np.{name}")
        return handler(self.trace, *inputs, **options)

    # arithmetic

    def __add__(self, other: Any) -> Any:
        return _binary(np.add, self, other)

    def __radd__(self, other: Any) -> Any:
        return _binary(np.add, other, self)

    def __sub__(self, other: Any) -> Any:
        return _binary(np.subtract, self, other)

    def __rsub__(self, other: Any) -> Any:
        return _binary(np.subtract, other, self)

    def __mul__(self, other: Any) -> Any:
        if sp.issparse(other):
            return _times_sparse(other, self, left=False)
        return _binary(np.multiply, self, other)

    def __rmul__(self, other: Any) -> Any:
        if sp.issparse(other):
            return _times_sparse(other, self, left=True)
        return _binary(np.multiply, other, self)

    def __truediv__(self, other: Any) -> Any:
        return _binary(np.true_divide, self, other)

    def __rtruediv__(self, other: Any) -> Any:
        return _binary(np.true_divide, other, self)

    def __pow__(self, other: Any) -> Any:
        return _binary("pow", self, other)

    def __rpow__(self, other: Any) -> Any:
        return _binary("pow", other, self)

    def __mod__(self, other: Any) -> Any:
        return _binary(np.remainder, self, other)

    def __rmod__(self, other: Any) -> Any:
        return _binary(np.remainder, other, self)

    def __floordiv__(self, other: Any) -> Any:
        return _binary(np.floor_divide, self, other)

    def __rfloordiv__(self, other: Any) -> Any:
        return _binary(np.floor_divide, other, self)

    def __neg__(self) -> Any:
        return UFUNCS[np.negative](self.trace, self)

    def __pos__(self) -> Any:
        return self

    def __abs__(self) -> Any:
        return UFUNCS[np.absolute](self.trace, self)

    def __iadd__(self, other: Any) -> Any:
        return self.become(self + other)

    def __isub__(self, other: Any) -> Any:
        return self.become(self - other)

    def __imul__(self, other: Any) -> Any:
        return self.become(self * other)

    def __itruediv__(self, other: Any) -> Any:
        return self.become(self / other)

    def __ipow__(self, other: Any) -> Any:
        return self.become(self**other)

    def __lt__(self, other: Any) -> Any:
        return _binary(np.less, self, other)

    def __le__(self, other: Any) -> Any:
        return _binary(np.less_equal, self, other)

    def __gt__(self, other: Any) -> Any:
        return _binary(np.greater, self, other)

    def __ge__(self, other: Any) -> Any:
        return _binary(np.greater_equal, self, other)

    def __eq__(self, other: Any) -> Any:
        return _binary(np.equal, self, other)

    def __ne__(self, other: Any) -> Any:
        return _binary(np.not_equal, self, other)

    # products with matrices

    def __matmul__(self, other: Any) -> Any:
        if sp.issparse(other):
            return times_matrix(other.T, self) if self.ndim == 1 else times_matrix(other.T, self.T).T
        if isinstance(other, LinearOperator):
            return times_operator(other.T, self) if self.ndim == 1 else times_operator(other.T, self.T).T
        return _binary(np.matmul, self, other)

    def __rmatmul__(self, other: Any) -> Any:
        if sp.issparse(other):
            return times_matrix(other, self)
        if isinstance(other, LinearOperator):
            return times_operator(other, self)
        return _binary(np.matmul, other, self)

    # parts

    def __getitem__(self, key: Any) -> TracedArray:
        _check_key(key)
        value = self.value[key]
        view = isinstance(value, np.ndarray) and value.base is not None and value.size > 0
        value = np.asarray(value)
        if self._node is None:
            part = TracedArray(value, self.trace, None)
        else:
            index: Any
            if type(key) is slice and self.ndim == 1 and key.step in (None, 1):
                start, stop, _ = key.indices(self.size)
                index = slice(start, max(start, stop))
            elif type(key) is int and self.ndim == 1:
                index = np.array([key % self.size])
            else:
                index = np.asarray(np.arange(self.size).reshape(self.shape)[key]).ravel()
            part = gathered(self, value, index)
        return part.viewing(self, key) if view else part

    def __setitem__(self, key: Any, given: Any) -> None:
        _check_key(key)
        origin = given._origin if isinstance(given, TracedArray) else None
        if origin is not None and origin[0] is self and origin[1] is key and given._buffer is not None:
            self._version = given._buffer[0]  # the second half of x[key] += ...
        value = self.value.copy()
        operand = as_operand(self.trace, given)
        own = operand.node if isinstance(operand, TracedArray) else None
        numbers = operand.value if isinstance(operand, TracedArray) else operand
        value[key] = numbers
        node = None
        if self.trace.record and (self._node is not None or own is not None):
            source = np.full(self.shape, -1, dtype=np.intp)
            source[key] = np.arange(numbers.size).reshape(numbers.shape)
            parents: list[Node] = []
            links: list[Gather] = []
            if self._node is not None:
                parents.append(self._node)
                links.append(Gather(self.size, self.size, None, (source < 0).astype(np.float64).ravel()))
            if own is not None:
                parents.append(own)
                links.append(Gather(numbers.size, self.size, source.ravel(), None, gaps=True))
            node = self.trace.node(self.size, tuple(parents), tuple(links))
        elif self._node is not None or own is not None:
            node = self.trace.node(self.size)
        self._written(value, node)

    def __iter__(self) -> Any:
        if self.ndim == 0:
            raise TypeError("iteration over a 0-d array")
        return (self[i] for i in range(self.shape[0]))

    def viewing(self, base: TracedArray, key: Any = None) -> TracedArray:
        """Mark self as sharing memory with `base`, as it would with NumPy."""
        if base._buffer is None:
            base._buffer = [0]
        self._buffer, self._version = base._buffer, base._version
        self._origin = None if key is None else (base, key)
        return self

    def become(self, result: Any) -> TracedArray:
        """Take over the content of `result`: assignment in place."""
        result = as_operand(self.trace, result)
        numbers = result.value if isinstance(result, TracedArray) else result
        if numbers.shape != self.shape:
            raise InputError(f"an array of shape {self.shape} cannot take a result of shape {numbers.shape}")
        self._written(numbers, result.node if isinstance(result, TracedArray) else None)
        return self

    def _written(self, value: FloatArray, node: Node | None) -> None:
        self._value, self._node = value, node
        if self._buffer is not None:
            self._buffer[0] += 1
            self._version = self._buffer[0]

    def through_prox(self, cost: Any, step: float) -> TracedArray:
        """Apply the proximal map of an object with the `ssn.Cost` protocol; its ``prox`` calls this."""
        return FUNCTIONS["prox"](self.trace, self, cost, step)


def _method(name: str, function: Any) -> Callable[..., Any]:
    def method(self: TracedArray, *arguments: Any, **options: Any) -> Any:
        return function(self, *arguments, **options)

    method.__name__ = method.__qualname__ = name
    method.__doc__ = f"As for a NumPy array: np.{name}(x, ...)."
    return method


for _name in ("sum", "mean", "prod", "cumsum", "dot", "max", "min", "clip", "ravel", "squeeze", "swapaxes", "take",
              "repeat", "diagonal", "copy", "round", "argmax", "argmin", "sort", "argsort", "any", "all", "nonzero",
              "std", "var", "cumprod", "ptp", "searchsorted"):  # fmt: skip
    setattr(TracedArray, _name, _method(_name, getattr(np, _name)))
setattr(TracedArray, "conj", _method("conj", np.positive))  # noqa: B010


def _reshape(self: TracedArray, *shape: Any, order: str = "C") -> Any:
    """As for a NumPy array."""
    target = shape[0] if len(shape) == 1 else shape
    return np.reshape(self, target, order=order)  # type: ignore[call-overload]


def _transpose(self: TracedArray, *axes: Any) -> Any:
    """As for a NumPy array."""
    given = None if not axes else axes[0] if len(axes) == 1 else axes
    return np.transpose(self, given)  # type: ignore[call-overload]


def _flatten(self: TracedArray, order: str = "C") -> Any:
    """As for a NumPy array."""
    return np.copy(np.ravel(self, order=order))  # type: ignore[call-overload]


def _astype(self: TracedArray, dtype: Any, copy: bool = True, **_: Any) -> Any:
    """Only to float64."""
    if np.dtype(dtype) != np.float64:
        refuse(f"astype({dtype})", "traced arrays hold float64 only")
    return np.copy(self) if copy else self  # type: ignore[call-overload]


for _name, _function in (("reshape", _reshape), ("transpose", _transpose), ("flatten", _flatten),
                         ("astype", _astype)):  # fmt: skip
    setattr(TracedArray, _name, _function)


def _check_key(key: Any) -> None:
    for part in key if isinstance(key, tuple) else (key,):
        if hasattr(part, "trace") and not isinstance(part, np.ndarray):
            refuse("indexing with what depends on the unknown",
                   "the result would jump; use np.maximum, np.minimum or np.clip")  # fmt: skip


def _write_out(outs: tuple[Any, ...], result: Any, name: str) -> Any:
    if len(outs) != 1 or not isinstance(outs[0], TracedArray):
        refuse(f"{name} into a plain array (out=, or +=, -=, ... with a traced right-hand side)",
               "write `a = a + ...` instead of `a += ...`, or make the array with np.zeros_like(x)")  # fmt: skip
    return outs[0].become(result)


def as_operand(trace: Trace, given: Any) -> Any:
    """A TracedArray of this trace, or a float array."""
    if isinstance(given, TracedArray):
        if given.trace is not trace:
            raise InputError(
                "F uses a traced array kept from an earlier evaluation: F must not store its arguments or results"
            )
        return given.current()
    if isinstance(given, np.ndarray):
        if given.dtype == np.float64:
            return given
        if given.dtype == object:
            return stacked(trace, given)
    elif isinstance(given, float):
        return np.float64(given)
    elif isinstance(given, (list, tuple)):
        array = np.array(given)
        if array.dtype == object:
            return stacked(trace, array)
        given = array
    elif sp.issparse(given) or isinstance(given, LinearOperator):
        refuse(
            f"an elementwise operation with a {type(given).__name__}", "use @ for the product with a matrix"
        )
    if np.iscomplexobj(given):
        refuse("an operation with complex numbers", "split real and imaginary parts into two fields")
    try:
        return np.asarray(given, dtype=np.float64)
    except (TypeError, ValueError):
        refuse(f"an operation with a {type(given).__name__}", GENERAL_REMEDY)


def stacked(trace: Trace, objects: npt.NDArray[Any]) -> Any:
    """What np.array makes of a list of traced arrays, as a traced array."""
    items = [as_operand(trace, item) for item in objects.ravel()]
    if objects.ndim >= 2 and any(item.ndim > 0 for item in items):
        refuse("array.dot(x)", "write A @ x or np.dot(A, x)")
    if len(items) == 1:
        return np.reshape(items[0], objects.shape + items[0].shape)
    result = np.stack(items)
    return np.reshape(result, objects.shape + result.shape[1:])


def parts(operand: Any) -> tuple[Any, Node | None]:
    """The numbers and the node of what `as_operand` returned."""
    if isinstance(operand, TracedArray):
        return operand._value, operand._node
    return operand, None


def _binary(ufunc: Any, left: Any, right: Any) -> Any:
    trace = left.trace if isinstance(left, TracedArray) else right.trace
    if sp.issparse(left) or sp.issparse(right):
        return NotImplemented
    return UFUNCS[ufunc](trace, left, right) if ufunc in UFUNCS else ufunc(left, right)


def record(trace: Trace, value: Any, pairs: Any) -> TracedArray:
    """The result of an operation: `value`, and the pairs (node, link) of the operands that are not constant."""
    value = np.asarray(value)
    if not pairs:
        return TracedArray(value, trace, None)
    if not trace.record:
        return TracedArray(value, trace, trace.node(value.size))
    parents, links = zip(*pairs, strict=True)
    return TracedArray(value, trace, trace.node(value.size, parents, links))


def elementwise(trace: Trace, value: Any, operands: Any, slopes: Any) -> TracedArray:
    """The result of an elementwise operation; `slopes` are functions without arguments, one an operand."""
    value = np.asarray(value)
    if not trace.record:
        return record(trace, value, [1 for operand in operands if parts(operand)[1] is not None])
    pairs = []
    for operand, slope in zip(operands, slopes, strict=True):
        numbers, node = parts(operand)
        if node is not None:
            pairs.append((node, elementwise_link(numbers.shape, value.shape, slope())))
    return record(trace, value, pairs)


def gathered(x: TracedArray, value: Any, index: Any, gaps: bool = False) -> TracedArray:
    """The result of an operation that only moves numbers; `index` says from where (flat), -1 is a constant."""
    value = np.asarray(value)
    if x.node is None:
        return TracedArray(value, x.trace, None)
    link = Gather(x.size, value.size, index, None, gaps)
    return record(x.trace, value, [(x.node, link)])


def times_matrix(matrix: Any, x: TracedArray) -> TracedArray:
    """matrix @ x for a sparse matrix and x of one or two dimensions."""
    if np.iscomplexobj(matrix):
        refuse("the product with a complex matrix", "split real and imaginary parts into two fields")
    value = matrix @ x.value
    if x.node is None:
        return TracedArray(value, x.trace, None)
    if not x.trace.record:
        return record(x.trace, value, [1])
    if x.ndim == 2 and x.shape[1] > 1:
        matrix = sp.kron(matrix, sp.eye_array(x.shape[1]), format="csr")
    return record(x.trace, value, [(x.node, Matrix(matrix))])


def times_operator(operator: LinearOperator, x: TracedArray) -> TracedArray:
    """operator @ x, matrix-free."""
    value = operator @ x.value
    if np.iscomplexobj(value):
        refuse("the product with a complex operator", "split real and imaginary parts into two fields")
    columns = x.shape[1] if x.ndim == 2 else 1
    return record(x.trace, value, [] if x.node is None else [(x.node, Operator(operator, columns))])


def _times_sparse(matrix: Any, x: TracedArray, left: bool) -> Any:
    if isinstance(matrix, sp.spmatrix):  # for these * is the matrix product
        return x.__rmatmul__(matrix) if left else x @ matrix
    refuse("the elementwise product with a sparse array", "use @ for the product with a matrix")
