"""Complementarity: lower <= x <= upper, F >= 0 at the lower, <= 0 at the upper bound, = 0 between."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator

from .costs import Bounds
from .errors import InputError
from .inner import InnerProduct, relative
from .linear.boundary import is_symmetric
from .smooth import TracedMap
from .validate import bound_arrays, scalar
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]

FORMS = ("mid", "fischer-burmeister")


class ComplementarityProblem:
    """Find x with lower <= x <= upper and F(x) normal to the box.

    Parameters
    ----------
    F : AffineMap, SmoothMap, function, or object with value(x) and derivative(x)
        A plain function of a NumPy array of n numbers is traced: its derivative follows from its operations. Where the
        derivative is a LinearOperator, an attribute ``preconditioner`` of the object, a LinearOperator (n, n) that
        approximates its inverse (symmetric positive definite where F' is), speeds up the inner iterations.
    lower, upper : float or array, shape (n,)
        Infinite where there is no bound.
    size : int, optional
        Number of unknowns, where neither F nor the bounds tell.
    magnitude : float, optional
        Typical size of x (root mean square), below which accuracy is absolute; by default the size of F(x)/F'(x)
        at the projection of zero for an affine F, 1 otherwise.
    form : {"mid", "fischer-burmeister"}
        The equation that is solved; both have the same roots. The smoothing path of "auto" begins with it and goes over
        to the other one where it fails.

    Raises
    ------
    InputError
        For crossing or NaN bounds, with the index; for shapes that do not fit.

    Notes
    -----
    ``Solution.multipliers["contact"]`` is F(x) on the bounds: positive at the lower one (the obstacle pushes up),
    negative at the upper one. ``Solution.margins`` is the distance of each component to its nearest kink, in the
    unit of x, with F divided by the diagonal of its derivative.
    """

    convex = False

    def __init__(
        self,
        F: Any,
        lower: Any = 0.0,
        upper: Any = np.inf,
        *,
        size: int | None = None,
        magnitude: float | None = None,
        form: str = "mid",
    ) -> None:
        if form not in FORMS:
            raise InputError(f"form must be one of {', '.join(map(repr, FORMS))}, got {form!r}")
        self.form = form
        traced = callable(F) and not hasattr(F, "value")
        if not traced and not (hasattr(F, "value") and hasattr(F, "derivative")):
            raise InputError(
                "F must be an AffineMap, a SmoothMap, a function of NumPy arrays, or an object with value(x) and "
                "derivative(x)"
            )
        low, high = bound_arrays(lower, upper)
        sizes = {int(k) for k in (getattr(F, "size", None), size) if k is not None}
        sizes |= {a.shape[0] for a in (low, high) if a.ndim == 1}
        if any(a.ndim > 1 for a in (low, high)):
            raise InputError(f"lower {low.shape} and upper {high.shape} must be numbers or vectors")
        if len(sizes) != 1:
            raise InputError(
                f"the number of unknowns is not clear: F, lower, upper and size say {sorted(sizes) or 'nothing'}"
            )
        self.unknowns = sizes.pop()
        self.map = TracedMap(F, self.unknowns) if traced else F
        self.affine = bool(getattr(self.map, "affine", False))
        self.lower = np.broadcast_to(low, (self.unknowns,)).copy()
        self.upper = np.broadcast_to(high, (self.unknowns,)).copy()
        self.cost = Bounds(self.lower, self.upper)
        self.weights = np.ones(self.unknowns)
        self.controls = InnerProduct(self.weights)
        self.work = WorkCounts()
        self._magnitude = None if magnitude is None else scalar(magnitude, "magnitude", nonnegative=True)
        self._symmetric: bool | None = None
        self._at_zero: FloatArray | None = None

    def value(self, x: FloatArray) -> FloatArray:
        """F(x), checked for shape."""
        force = np.asarray(self.map.value(x), dtype=np.float64)
        if force.shape != (self.unknowns,):
            raise InputError(f"F(x) has shape {force.shape}, expected ({self.unknowns},)")
        return force

    def derivative(self, x: FloatArray) -> Any:
        """F'(x), checked for shape."""
        derivative = self.map.derivative(x)
        if getattr(derivative, "shape", None) != (self.unknowns, self.unknowns):
            raise InputError(
                f"F'(x) has shape {getattr(derivative, 'shape', None)}, expected n x n, n = {self.unknowns}"
            )
        return derivative

    @property
    def preconditioner(self) -> Any:
        """What F brings under this name, else None."""
        return getattr(self.map, "preconditioner", None)

    @property
    def symmetric(self) -> bool:
        """Whether F is the gradient of a quadratic: affine with a symmetric matrix."""
        if self._symmetric is None:
            self._symmetric = self.affine and bool(
                self.map.symmetric
                if hasattr(self.map, "symmetric")
                else is_symmetric(self.derivative(self.start()))
            )
        return self._symmetric

    def potential(self, x: FloatArray) -> float:
        """1/2 x'Mx + q'x where F = M x + q with symmetric M."""
        if self._at_zero is None:
            self._at_zero = self.value(np.zeros(self.unknowns))
        return float(0.5 * x @ (self.value(x) + self._at_zero))

    # an objective, where F is a gradient: what the reference method sees

    def smooth(self, x: FloatArray) -> tuple[float, FloatArray]:
        """Value and gradient of 1/2 x'Mx + q'x."""
        self.work.operator_products += 1
        return self.potential(x), self.value(x)

    def objective(self, x: FloatArray) -> float:
        """1/2 x'Mx + q'x within the bounds, inf outside."""
        return self.potential(x) + self.cost.value(x)

    @property
    def strong_convexity(self) -> float:
        """0: not known."""
        return 0.0

    def start(self) -> FloatArray:
        """Zero, projected onto the box."""
        return np.clip(np.zeros(self.unknowns), self.lower, self.upper)

    def row_step(self, x: FloatArray) -> FloatArray:
        """1 / |diagonal of F'(x)|, by which F is brought to the unit of x; the row sum where a diagonal vanishes.

        It differs from its median by a factor of 1000 at most.
        """
        with np.errstate(all="ignore"):
            derivative = self.derivative(x)
        if isinstance(derivative, LinearOperator):
            known = getattr(self.map, "diagonal", None)
            if known is None:
                return np.ones(self.unknowns)
            diagonal = np.abs(known)
        else:
            diagonal = np.abs(derivative.diagonal())
            rows = np.asarray(abs(derivative).sum(axis=1)).ravel()
            diagonal = np.where(diagonal > 1e-8 * rows, diagonal, rows)
        usable = np.isfinite(diagonal) & (diagonal > 0)
        if not usable.any():
            return np.ones(self.unknowns)
        middle = float(np.median(diagonal[usable]))
        return 1.0 / np.clip(np.where(usable, diagonal, middle), 1e-3 * middle, 1e3 * middle)

    def magnitude(self, x: FloatArray, step: FloatArray) -> float:
        """Norm of x below which the accuracy is absolute."""
        if self._magnitude is not None:
            return self._magnitude * float(np.sqrt(self.unknowns))
        if self.affine:
            return float(np.linalg.norm(step * self.value(self.start())))
        return float(np.sqrt(self.unknowns))

    def accuracy(self, x: FloatArray) -> float:
        """||mid(x - upper, x - lower, F/diag F')|| relative to ||x||, evaluated afresh."""
        step = self.row_step(x)
        force = step * self.value(x)  # compared as it is: in x - clip(x - F, ...) it would drown in a large x
        residual = np.maximum(np.minimum(force, x - self.lower), x - self.upper)
        return relative(
            float(np.linalg.norm(residual)), max(float(np.linalg.norm(x)), self.magnitude(x, step))
        )
