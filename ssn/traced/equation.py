"""A plain NumPy function as an equation: residual, Newton derivative, pieces, smoothed form."""

from __future__ import annotations

import copy
import os
import traceback
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import Linearization
from ..validate import scalar
from .array import GENERAL_REMEDY, TracedArray, as_operand, gathered, parts
from .assemble import derivative
from .fields import Fields
from .operators import operators_accept_traced_arrays
from .trace import Node, Trace, is_foreign

FloatArray = npt.NDArray[np.float64]

# Values of the traced and of the plain evaluation, relative: they are the same operations.
AGREEMENT = 1e-10


class TracedEquation:
    """F(x) = 0 for a plain NumPy function F; derivative and active sets follow from its operations.

    Parameters
    ----------
    function : callable
        F, called with one argument of the form of `start`: an array, or a tuple or dict of arrays. It returns as many
        numbers in the same form (a list of numbers or a flat array serves too). It must not depend on anything that
        changes between evaluations, and is called with plain arrays where only the residual is wanted.
    start : array, or tuple or dict of arrays
        Start of the iteration; tells the fields and their shapes. Not changed.
    scale : number, array, or tuple or dict of them, optional
        Magnitude of the residual, in the form of `start`: one number a field, or one an entry. By default 1.

    Attributes
    ----------
    start : array, shape (n,)
        The start as a flat vector.
    scale : array, shape (n,)
    size : int
        n, the number of unknowns.
    eps : float
        Smoothing parameter; 0 unless made by `smoothed`.

    Raises
    ------
    InputError
        For unusable arguments; at an evaluation for an operation that cannot be traced, with what to do.

    Notes
    -----
    The selection at kinks is that of `ssn.traced.kinks`: a constant argument before one that depends on the unknown,
    the first before the second. The derivative is a csr_array; it is a LinearOperator where one took part, or where
    it would be too full to store.

    Examples
    --------
    >>> import numpy as np
    >>> from ssn.traced import TracedEquation
    >>> equation = TracedEquation(lambda u: u - 1.0 + np.maximum(0.0, u - 0.25), np.zeros(2))
    >>> at = equation.linearize(np.array([0.0, 0.5]))
    >>> at.residual
    array([-1.  , -0.25])
    >>> at.derivative.toarray()
    array([[1., 0.],
           [0., 2.]])
    """

    def __init__(self, function: Callable[[Any], Any], start: Any, scale: Any = None) -> None:
        if not callable(function):
            raise InputError(f"F must be a function, got {type(function).__name__}")
        self.function = function
        self.fields = Fields(start)
        self.start = self.fields.start
        self.scale = np.ones(self.size) if scale is None else self.fields.spread(scale, "scale")
        self.eps = 0.0
        self._compared = False

    @property
    def size(self) -> int:
        """The number of unknowns."""
        return self.fields.size

    def unpack(self, x: npt.ArrayLike) -> Any:
        """A flat vector in the form of the start; the arrays are new."""
        x = np.array(x, dtype=np.float64)
        if x.shape != (self.size,):
            raise InputError(f"x has shape {x.shape}, expected ({self.size},)")
        return self.fields.form(self.fields.pieces(x))

    def pack(self, fields: Any) -> FloatArray:
        """The arrays of the form of the start as a new flat vector."""
        return self._packed(fields, "x")

    def _packed(self, given: Any, what: str) -> FloatArray:
        arrays = []
        for array in self.fields.listed(given, what):
            try:
                if np.iscomplexobj(array):
                    raise TypeError("complex values")
                arrays.append(np.asarray(array, dtype=np.float64))
            except (TypeError, ValueError) as error:
                raise InputError(f"{what} must hold real numbers: {error}") from error
        self.fields.check(arrays, what)
        return np.concatenate([array.ravel() for array in arrays])

    def residual(self, x: npt.ArrayLike) -> FloatArray:
        """F(x) as a flat vector, from plain arrays (the smoothed F where eps > 0)."""
        if self.eps > 0:
            return self.residual_and_pieces(x)[0]
        return self._packed(self.function(self.unpack(x)), "F(x)")

    def residual_and_pieces(self, x: npt.ArrayLike) -> tuple[FloatArray, Pieces]:
        """F(x) and the pieces without the derivative."""
        trace = Trace(record=False, eps=self.eps)
        value, _, _ = self._traced(trace, x)
        return value, trace.pieces

    def linearize(self, x: npt.ArrayLike) -> Linearization:
        """F(x), a Newton derivative and the pieces."""
        trace = Trace(eps=self.eps)
        value, node, root = self._traced(trace, x)
        if not self._compared and self.eps == 0:
            self._compare(value, x)
            self._compared = True
        with np.errstate(all="ignore"):
            return Linearization(value, derivative(node, root, self.size), trace.pieces)

    def smoothed(self, eps: float) -> TracedEquation:
        """The equation with each nonsmooth operation in its smoothed form; eps = 0 gives the equation itself."""
        other = copy.copy(self)
        other.eps = scalar(eps, "eps", nonnegative=True)
        return other

    def _traced(self, trace: Trace, x: npt.ArrayLike) -> tuple[FloatArray, Node | None, Node]:
        """The value, its node and the node of the unknown."""
        x = np.array(x, dtype=np.float64)
        if x.shape != (self.size,):
            raise InputError(f"x has shape {x.shape}, expected ({self.size},)")
        root = trace.node(self.size)
        unknown = TracedArray(x, trace, root)
        arrays = []
        for a, value in zip(self.fields.cuts, self.fields.pieces(x), strict=False):
            if self.fields.keys is None:
                arrays.append(TracedArray(value, trace, root))
            else:
                arrays.append(gathered(unknown, value, slice(int(a), int(a) + value.size)))
        try:
            with operators_accept_traced_arrays(), np.errstate(all="ignore"):
                given = self.function(self.fields.form(arrays))
                results = [as_operand(trace, array) for array in self.fields.listed(given, "F(x)")]
                self.fields.check(results, "F(x)")
                flat = [result if result.ndim == 1 else np.reshape(result, (-1,)) for result in results]
                result = flat[0] if len(flat) == 1 else np.concatenate(flat)
        except InputError:
            raise
        except Exception as error:
            self._explain(error, x)
            raise
        numbers, node = parts(result)
        return np.array(numbers, dtype=np.float64), node, root

    def _explain(self, error: Exception, x: FloatArray) -> None:
        """Raise `InputError` where F works on plain arrays, so that it is the tracing that failed."""
        cause: BaseException | None = error
        while cause is not None:
            if isinstance(cause, InputError):
                raise cause
            cause = cause.__cause__ or cause.__context__
        try:
            self.function(self.unpack(x))
        except Exception:
            return
        frames = [
            frame for frame in traceback.extract_tb(error.__traceback__) if not is_foreign(frame.filename)
        ]
        where = f" at {os.path.basename(frames[-1].filename)}:{frames[-1].lineno}" if frames else ""
        hint = GENERAL_REMEDY
        if "len()" in str(error):
            hint = "a traced array has no len(): write x.shape[0] or x.size"
        elif "callable" in str(error) and "method" in str(error):
            hint = "np.array([...]) of traced numbers is no traced array: use np.stack([...])"
        raise InputError(
            f"F works on plain arrays, but cannot be traced{where} ({type(error).__name__}: {error}): {hint}"
        ) from error

    def _compare(self, value: FloatArray, x: npt.ArrayLike) -> None:
        """Once an equation: traced and plain evaluation must agree, or the trace has missed something."""
        plain = self.residual(x)
        with np.errstate(invalid="ignore"):
            size = np.nanmax(np.abs(np.append(plain[np.isfinite(plain)], 0.0)))
            differs = ~((np.abs(plain - value) <= AGREEMENT * size) | (plain == value) | np.isnan(plain))
        if differs.any():
            k = int(np.argmax(differs))
            raise InputError(
                f"F(x)[{k}] is {plain[k]:.17g} with plain arrays, but {value[k]:.17g} traced. F must give the same "
                "value at the same x (no random numbers, no state), and must not write to a view of an array and then "
                "use the array"
            )
