"""The small structural protocols that the parts of ssn meet through.

Nothing here computes. A user's own object fits wherever it has the listed members.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

from .pieces import Pieces
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


@runtime_checkable
class ProxDerivative(Protocol):
    """Newton derivative D of a proximal map: linear; for a convex cost self-adjoint with 0 <= D <= I."""

    diagonal: FloatArray | None
    """The diagonal where D is diagonal, else None."""

    def apply(self, directions: FloatArray) -> FloatArray:
        """D times a vector (n,) or the columns of (n, k)."""
        ...


@runtime_checkable
class Cost(Protocol):
    """A nonsmooth cost g with a proximal map.

    ``prox(v, step)`` minimises ``step * g(u) + 1/2 ||u - v||^2``; in a problem with weights both terms
    are weighted by them (a lumped mass), which leaves the map of a separable cost unchanged.
    """

    convex: bool

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """g(u), a weighted sum where weights are given; inf outside the domain."""
        ...

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """The proximal map."""
        ...

    def prox_derivative(self, v: FloatArray, step: float) -> ProxDerivative:
        """The Newton derivative of the proximal map at v; the selection at kinks is documented and fixed."""
        ...

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """The active sets of the proximal map at v."""
        ...

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Distance of each component of v to the nearest kink of the proximal map."""
        ...

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """A smooth map that tends to the proximal map as eps -> 0."""
        ...

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ProxDerivative:
        """The derivative of the smoothed map, eps > 0."""
        ...

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split a subgradient of g at u into named multipliers (bound forces and the like)."""
        ...

    def check_size(self, size: int) -> None:
        """Raise `InputError` where the cost cannot act on `size` unknowns."""
        ...


@runtime_checkable
class SmoothPart(Protocol):
    """A twice differentiable f with derivatives in the Euclidean sense (weights are applied by the problem)."""

    def value(self, u: FloatArray) -> float:
        """f(u)."""
        ...

    def gradient(self, u: FloatArray) -> FloatArray:
        """The vector of partial derivatives, shape (n,)."""
        ...

    def hessian(self, u: FloatArray) -> Any:
        """The Hessian at u: array, sparse array or LinearOperator of shape (n, n)."""
        ...


@dataclass(frozen=True)
class Linearization:
    """One evaluation of an equation: residual, derivative and pieces, which belong together.

    Attributes
    ----------
    residual : array, shape (n,)
        F(x).
    derivative : sparse array, array, LinearOperator or structured object
        A Newton derivative G(x), from the same pieces.
    pieces : Pieces or mapping of str to integer array
        Active sets; empty for a smooth F.
    symmetric, positive_definite : bool
        Known structure of the derivative; a wrong claim is the caller's error.
    preconditioner : LinearOperator, shape (n, n), optional
        Approximates the inverse of the derivative: systems are then solved by preconditioned iterations, by conjugate
        gradients where positive_definite is claimed, which it must be too.
    """

    residual: FloatArray
    derivative: Any
    pieces: Mapping[str, Any] = field(default_factory=Pieces)
    symmetric: bool = False
    positive_definite: bool = False
    preconditioner: Any = None


@runtime_checkable
class Equation(Protocol):
    """F(x) = 0 given by a user's object.

    Optional members: ``scale`` (magnitude of the residual, a number or an array like the residual), ``start`` (an
    array, used when `solve` gets no start) and ``preconditioner`` (as in `Linearization`, one for all x).
    """

    def residual(self, x: FloatArray) -> FloatArray:
        """F(x), shape (n,)."""
        ...

    def linearize(self, x: FloatArray) -> Linearization:
        """F(x) with a Newton derivative and the pieces."""
        ...


@dataclass(frozen=True)
class Evaluation:
    """What the Newton loop sees of an equation at a point.

    ``accuracy`` is the figure compared with the tolerance (relative, in the user's unknown);
    ``norm`` is the residual norm in the equation's inner product; ``data`` is the equation's own.
    """

    x: FloatArray
    residual: FloatArray
    norm: float
    accuracy: float
    pieces: Pieces
    data: Any = None

    @property
    def finite(self) -> bool:
        """Whether the residual norm is finite."""
        return bool(np.isfinite(self.norm))


class NewtonEquation(Protocol):
    """An equation inside the kernel, as the loop, the linear solvers and the searches see it."""

    work: WorkCounts
    piecewise_affine: bool

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Residual, norm, accuracy, pieces."""
        ...

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]] | None:
        """A function t -> (merit slope, its derivative, rounding error) along x + t d where cheap, else None."""
        ...

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """A step that makes progress where the Newton direction does not, or None."""
        ...


@dataclass(frozen=True)
class FallbackStep:
    """A safe step: where it leads, its name for the history, and whether its own test was passed."""

    x: FloatArray
    name: str
    decrease: float


@dataclass(frozen=True)
class Direction:
    """A Newton direction with an honest account of the linear solve.

    Attributes
    ----------
    vector : array
        The direction d with G d = -F up to `relative_residual`.
    relative_residual : float
        ||G d + F|| / ||F||, computed, not estimated, for iterative solvers.
    inner_iterations : int
        Krylov or subspace iterations; 0 for a direct solve.
    status : {"solved", "inaccurate", "singular"}
    message : str
    """

    vector: FloatArray | None
    relative_residual: float
    inner_iterations: int
    status: str = "solved"
    message: str = ""


class LinearSolver(Protocol):
    """Solves the Newton systems of one equation; keeps between steps what does not change."""

    @property
    def name(self) -> str:
        """Its name in options and histories."""
        ...

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d with ||G(x) d + F(x)|| <= forcing ||F(x)||."""
        ...


@dataclass(frozen=True)
class StepOutcome:
    """What a globalisation did with a direction.

    ``at`` is the evaluation of the new point, None when nothing made progress.
    """

    at: Evaluation | None
    length: float
    evaluations: int
    action: str
    reason: str = ""


class Globalization(Protocol):
    """Turns a direction into the next point."""

    @property
    def name(self) -> str:
        """Its name in options and histories."""
        ...

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Return the next point, or an outcome without one and the reason."""
        ...

    def tightened(self) -> Any:
        """A stricter variant, taken when active sets recur; None if there is none."""
        ...
