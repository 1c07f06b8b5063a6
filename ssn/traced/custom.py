"""Operations that bring their own derivative: custom operations, and the proximal maps of costs."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..errors import InputError
from .array import FUNCTIONS, TracedArray, as_operand, parts, record
from .links import Link, Matrix, Operator
from .trace import Trace, elementwise_link, place


def _link(derivative: Any, shape: tuple[int, ...], out_shape: tuple[int, ...], name: str) -> Link:
    """The link of a derivative given as slopes, array, sparse array or operator."""
    inputs, outputs = math.prod(shape), math.prod(out_shape)
    if isinstance(derivative, LinearOperator) or sp.issparse(derivative):
        found = derivative.shape
        if found == (outputs, inputs):
            return Operator(derivative) if isinstance(derivative, LinearOperator) else Matrix(derivative)
    else:
        derivative = np.asarray(derivative, dtype=np.float64)
        found = derivative.shape
        try:
            elementwise = np.broadcast_shapes(shape, out_shape) == out_shape
        except ValueError:
            elementwise = False
        if elementwise and found in ((), out_shape):
            return elementwise_link(shape, out_shape, derivative)
        if found == (outputs, inputs):
            return Matrix(derivative)
    raise InputError(
        f"the derivative of {name} has shape {found}; expected {out_shape} (slopes of an elementwise operation) or "
        f"({outputs}, {inputs}) (a matrix or LinearOperator from the argument to the value, both flat)"
    )


class CustomOperation:
    """An operation on arrays that brings its own derivative; see `custom_operation`."""

    def __init__(
        self,
        value: Callable[..., Any],
        derivative: Callable[..., Any],
        pieces: Callable[..., Any] | None,
        smoothed: Callable[..., Any] | None,
        name: str | None,
    ) -> None:
        for member, what in (
            (value, "value"),
            (derivative, "derivative"),
            (pieces, "pieces"),
            (smoothed, "smoothed"),
        ):
            if not callable(member) and (member is not None or what in ("value", "derivative")):
                raise InputError(f"{what} must be a function, got {type(member).__name__}")
        if smoothed is not None and pieces is None:
            raise InputError("smoothed is for nonsmooth operations: give pieces too")
        self.value = value
        self.derivative = derivative
        self.pieces = pieces
        self.smoothed = smoothed
        self.name = str(name or getattr(value, "__name__", "custom operation"))

    def __repr__(self) -> str:
        return f"custom_operation({self.name})"

    def __call__(self, *arguments: Any) -> Any:
        """The value; on traced arrays with the derivative."""
        traced = [argument for argument in arguments if isinstance(argument, TracedArray)]
        if not traced:
            return self.value(*arguments)
        trace = traced[0].trace
        operands = [as_operand(trace, argument) for argument in arguments]
        numbers = [parts(operand)[0] for operand in operands]
        if self.pieces is not None:
            _note(trace, self.name, self.pieces(*numbers))
        if trace.eps > 0 and self.pieces is not None:
            if self.smoothed is None:
                raise InputError(
                    f"{self.name} at {place()} has no smoothed form: give smoothed= to ssn.custom_operation"
                )
            return as_operand(trace, self.smoothed(*operands, trace.eps))
        value = np.array(self.value(*numbers), dtype=np.float64)
        nodes = [parts(operand)[1] for operand in operands]
        if not trace.record:
            return record(trace, value, [1 for node in nodes if node is not None])
        derivatives = self.derivative(*numbers)
        if not isinstance(derivatives, tuple):
            derivatives = (derivatives,)
        if len(derivatives) != len(operands):
            raise InputError(
                f"the derivative of {self.name} must be a tuple of {len(operands)} entries, one an argument; "
                f"got {len(derivatives)}"
            )
        pairs = []
        for array, node, derivative in zip(numbers, nodes, derivatives, strict=True):
            if node is not None and derivative is not None:
                pairs.append((node, _link(derivative, array.shape, value.shape, self.name)))
        return record(trace, value, pairs)


def _note(trace: Trace, name: str, pieces: Any) -> None:
    if isinstance(pieces, Mapping):
        legend = getattr(pieces, "legend", {})
        for part, labels in pieces.items():
            trace.note(name, labels, legend.get(part), part if len(pieces) > 1 else "")
    else:
        trace.note(name, pieces)


def custom_operation(
    *,
    value: Callable[..., Any],
    derivative: Callable[..., Any],
    pieces: Callable[..., Any] | None = None,
    smoothed: Callable[..., Any] | None = None,
    name: str | None = None,
) -> CustomOperation:
    """Make an operation that can be used on plain and on traced arrays from functions of plain arrays.

    Parameters
    ----------
    value : callable
        ``value(*arrays)`` returns an array.
    derivative : callable
        ``derivative(*arrays)`` returns the Newton derivative at the same arguments, from the same pieces: an array like
        the value (slopes of an elementwise operation), or a matrix, sparse array or LinearOperator of shape
        (value.size, argument.size) between the flat arrays. With several arguments a tuple, None where an argument
        has no influence or never depends on the unknown.
    pieces : callable, optional
        ``pieces(*arrays)`` returns integer labels, a mapping of name to labels, or `ssn.Pieces`. Leave it out for a
        smooth operation.
    smoothed : callable, optional
        ``smoothed(*arrays, eps)`` returns a smooth value that tends to ``value`` as eps -> 0. It is traced itself:
        write it in NumPy, or with another custom operation. Without it the operation cannot take part in a smoothing
        path.
    name : str, optional
        Name in pieces and messages; by default that of `value`.

    Returns
    -------
    CustomOperation
        To be called with arrays, by position.

    Raises
    ------
    InputError
        Where an argument is no function, or later where a derivative does not have the right shape.

    Examples
    --------
    >>> import numpy as np
    >>> import ssn.traced
    >>> ramp = ssn.traced.custom_operation(
    ...     value=lambda v: np.maximum(v, 0.0),
    ...     derivative=lambda v: (v > 0).astype(float),
    ...     pieces=lambda v: v > 0,
    ...     smoothed=lambda v, eps: 0.5 * (v + np.sqrt(v * v + 4 * eps * eps)),
    ...     name="ramp",
    ... )
    >>> equation = ssn.traced.TracedEquation(lambda u: u + ramp(u) - 4.0, np.zeros(2))
    >>> equation.linearize(np.array([-1.0, 2.0])).derivative.toarray()
    array([[1., 0.],
           [0., 2.]])
    """
    return CustomOperation(value, derivative, pieces, smoothed, name)


def _prox(trace: Trace, v: TracedArray, cost: Any, step: Any) -> TracedArray:
    """The proximal map of a cost: a custom operation made of its members."""
    if isinstance(step, TracedArray):
        raise InputError(
            f"the step of a proximal map at {place()} depends on the unknown; it must be a number"
        )

    def matrix(found: Any, numbers: Any) -> Any:
        if found.diagonal is not None:
            return np.broadcast_to(found.diagonal, numbers.shape)
        size = numbers.size
        # self-adjoint in the cost's own inner product
        weights = np.broadcast_to(np.asarray(getattr(cost, "inner_weights", 1.0), dtype=np.float64), (size,))
        return LinearOperator(
            (size, size),
            matvec=lambda x: found.apply(np.ravel(x)),
            rmatvec=lambda x: weights * found.apply(np.ravel(x) / weights),
            matmat=found.apply,
            dtype=np.float64,
        )

    def smoothed(traced: TracedArray, eps: float) -> Any:
        if not hasattr(cost, "smoothed_prox_derivative"):
            return cost.smoothed_prox(traced, step, eps)
        form = CustomOperation(
            lambda numbers: cost.smoothed_prox(numbers, step, eps),
            lambda numbers: matrix(cost.smoothed_prox_derivative(numbers, step, eps), numbers),
            None,
            None,
            f"smoothed {type(cost).__name__}.prox",
        )
        return form(traced)

    operation = CustomOperation(
        lambda numbers: cost.prox(numbers, step),
        lambda numbers: matrix(cost.prox_derivative(numbers, step), numbers),
        lambda numbers: cost.pieces(numbers, step),
        smoothed,
        f"{type(cost).__name__}.prox",
    )
    return operation(v)


FUNCTIONS["prox"] = _prox
