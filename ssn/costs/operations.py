"""Costs made of costs: plus a quadratic, scaled, translated, conjugate."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..protocols import Cost, ProxDerivative
from ..validate import float_array, scalar
from .derivative import ComplementDerivative, ScaledDerivative

FloatArray = npt.NDArray[np.float64]


class _Derived:
    """What every derived cost takes from the one inside."""

    def __init__(self, cost: Cost) -> None:
        if not isinstance(cost, Cost):
            raise InputError(f"cost must have the members of ssn.Cost, got {type(cost).__name__}")
        self.cost = cost
        self.convex = bool(cost.convex)

    @property
    def separable(self) -> bool:
        return bool(getattr(self.cost, "separable", True))

    @property
    def piecewise_affine(self) -> bool:
        return bool(getattr(self.cost, "piecewise_affine", True))

    @property
    def inner_weights(self) -> Any:
        return getattr(self.cost, "inner_weights", np.ones(()))

    @property
    def lower(self) -> Any:
        return getattr(self.cost, "lower", np.array(-np.inf))

    @property
    def upper(self) -> Any:
        return getattr(self.cost, "upper", np.array(np.inf))

    def check_size(self, size: int) -> None:
        """Raise `InputError` where the cost cannot act on `size` unknowns."""
        self.cost.check_size(size)

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` where the cost inside does not fit the inner product."""
        check = getattr(self.cost, "check_weights", None)
        if check is not None:
            check(weights)

    @property
    def size(self) -> int | None:
        """The number of unknowns where the parameters fix it."""
        inside: int | None = getattr(self.cost, "size", None)
        return inside

    def _into(self, u: FloatArray, inside: FloatArray, mirrored: bool = False) -> FloatArray:
        """`inside`, the point of g that belongs to u, with bounds kept exactly where rounding has moved it off them."""
        low, high = getattr(self.cost, "lower", None), getattr(self.cost, "upper", None)
        if low is None or high is None:
            return inside
        at_lower, at_upper = (self.upper, self.lower) if mirrored else (self.lower, self.upper)
        within = (u >= self.lower) & (u <= self.upper)
        inside = np.where(within, np.clip(inside, low, high), inside)
        return np.where(u == at_lower, low, np.where(u == at_upper, high, inside))

    def _dot(self, x: FloatArray, y: FloatArray, weights: FloatArray | None) -> float:
        w = np.broadcast_to(self.inner_weights, x.shape) if weights is None else weights
        return float((w * x) @ y)

    def _inside_conjugate(self, y: FloatArray, weights: FloatArray | None) -> float | None:
        known: Any = getattr(self.cost, "conjugate_value", None)
        return None if known is None else known(y, weights)


class SumWithQuadratic(_Derived):
    """g(u) + gamma/2 ||u - centre||^2, the norm in the problem's inner product.

    Parameters
    ----------
    cost : Cost
        g.
    gamma : float
        Not negative.
    centre : float or array, shape (n,), optional
        In the unit of u; zero by default.

    Notes
    -----
    prox_s(v) = prox_{s' g}(v') with s' = s/(1 + s gamma), v' = (v + s gamma centre)/(1 + s gamma). No conjugate: it is
    the Moreau envelope of that of g.
    """

    def __init__(self, cost: Cost, gamma: float, centre: Any = 0.0) -> None:
        super().__init__(cost)
        self.gamma = scalar(gamma, "gamma", nonnegative=True)
        self.centre = _vector(centre, "centre")

    @property
    def size(self) -> int | None:
        """The number of unknowns where the parameters fix it."""
        return _size_of(self.centre, super().size)

    def __repr__(self) -> str:
        return f"SumWithQuadratic({self.cost!r}, gamma={self.gamma})"

    def check_size(self, size: int) -> None:
        """Raise `InputError` where the cost or the centre does not fit `size` unknowns."""
        super().check_size(size)
        _check_vector(self.centre, "centre", size)

    def _inside(self, v: FloatArray, step: float) -> tuple[FloatArray, float, float]:
        grown = 1.0 + step * self.gamma
        return (v + step * self.gamma * self.centre) / grown, step / grown, grown

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of both."""
        gap = u - self.centre
        return self.cost.value(u, weights) + 0.5 * self.gamma * self._dot(gap, gap, weights)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float | None:
        """Return <u, y> - value(u) at the maximiser u, which is a proximal map of g; None for gamma = 0."""
        if self.gamma == 0.0:
            return self._inside_conjugate(y, weights)
        if not self.convex:
            return None
        u = self.cost.prox(y / self.gamma + self.centre, 1.0 / self.gamma)
        return self._dot(u, y, weights) - self.value(u, weights)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the proximal map of g at another point with a shorter step."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        at, shorter, _ = self._inside(v, step)
        return self.cost.prox(at, shorter)

    def prox_derivative(self, v: FloatArray, step: float) -> ScaledDerivative:
        """Return that of g divided by 1 + step gamma."""
        at, shorter, grown = self._inside(v, step)
        return ScaledDerivative(self.cost.prox_derivative(at, shorter), 1.0 / grown)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label as g does."""
        at, shorter, _ = self._inside(v, step)
        return self.cost.pieces(at, shorter)

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distances to the kinks, in the unit of v."""
        at, shorter, grown = self._inside(v, step)
        return self.cost.margins(at, shorter) * grown

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the smoothed map of g."""
        at, shorter, _ = self._inside(v, step)
        return self.cost.smoothed_prox(at, shorter, eps)

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ScaledDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        at, shorter, grown = self._inside(v, step)
        return ScaledDerivative(self.cost.smoothed_prox_derivative(at, shorter, eps), 1.0 / grown)

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split off ``quadratic`` = gamma (u - centre); the rest as g does."""
        pull = self.gamma * (u - self.centre)
        return {**self.cost.multipliers(u, subgradient - pull), "quadratic": pull}


class ScaledCost(_Derived):
    """factor * g(stretch * u).

    Parameters
    ----------
    cost : Cost
        g.
    factor : float
        Positive.
    stretch : float, optional
        Not zero; -1 mirrors g.

    Notes
    -----
    prox_s(v) = prox_{s factor stretch^2 g}(stretch v) / stretch.
    """

    def __init__(self, cost: Cost, factor: float = 1.0, stretch: float = 1.0) -> None:
        super().__init__(cost)
        self.factor = scalar(factor, "factor", positive=True)
        self.stretch = scalar(stretch, "stretch")
        if self.stretch == 0.0:
            raise InputError("stretch must not be zero")

    def __repr__(self) -> str:
        return f"ScaledCost({self.cost!r}, factor={self.factor}, stretch={self.stretch})"

    @property
    def lower(self) -> Any:
        """Lower bound of u."""
        return (super().lower if self.stretch > 0 else super().upper) / self.stretch

    @property
    def upper(self) -> Any:
        """Upper bound of u."""
        return (super().upper if self.stretch > 0 else super().lower) / self.stretch

    def _inside(self, v: FloatArray, step: float) -> tuple[FloatArray, float]:
        return self.stretch * v, step * self.factor * self.stretch**2

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return factor g(stretch u)."""
        return self.factor * self.cost.value(self._into(u, self.stretch * u, self.stretch < 0), weights)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float | None:
        """Return factor g*(y / (factor stretch)); None where that of g is not known."""
        inside = self._inside_conjugate(y / (self.factor * self.stretch), weights)
        return None if inside is None else self.factor * inside

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the proximal map of g between two changes of scale."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return self.cost.prox(*self._inside(v, step)) / self.stretch

    def prox_derivative(self, v: FloatArray, step: float) -> ProxDerivative:
        """Return that of g."""
        return self.cost.prox_derivative(*self._inside(v, step))

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label as g does: mirrored with a negative stretch."""
        return self.cost.pieces(*self._inside(v, step))

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distances to the kinks, in the unit of v."""
        return self.cost.margins(*self._inside(v, step)) / abs(self.stretch)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the smoothed map of g, with eps in the unit of v."""
        return self.cost.smoothed_prox(*self._inside(v, step), eps * abs(self.stretch)) / self.stretch

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ProxDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return self.cost.smoothed_prox_derivative(*self._inside(v, step), eps * abs(self.stretch))

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split as g does, in the unit of the subgradient here.

        A negative stretch turns the sign with the bounds: positive at the upper bound of u.
        """
        size = self.factor * self.stretch
        inside = self._into(u, self.stretch * u, self.stretch < 0)
        parts = self.cost.multipliers(inside, subgradient / size)
        return {name: size * part for name, part in parts.items()}


class TranslatedCost(_Derived):
    """g(u - shift).

    Parameters
    ----------
    cost : Cost
        g.
    shift : float or array, shape (n,)
        In the unit of u.
    """

    def __init__(self, cost: Cost, shift: Any) -> None:
        super().__init__(cost)
        self.shift = _vector(shift, "shift")

    @property
    def size(self) -> int | None:
        """The number of unknowns where the parameters fix it."""
        return _size_of(self.shift, super().size)

    def __repr__(self) -> str:
        return f"TranslatedCost({self.cost!r})"

    @property
    def lower(self) -> Any:
        """Lower bound of u."""
        return super().lower + self.shift

    @property
    def upper(self) -> Any:
        """Upper bound of u."""
        return super().upper + self.shift

    def check_size(self, size: int) -> None:
        """Raise `InputError` where the cost or the shift does not fit `size` unknowns."""
        super().check_size(size)
        _check_vector(self.shift, "shift", size)

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u - shift)."""
        return self.cost.value(self._back(u), weights)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float | None:
        """Return g*(y) + <shift, y>; None where that of g is not known."""
        inside = self._inside_conjugate(y, weights)
        if inside is None:
            return None
        return inside + self._dot(np.broadcast_to(self.shift, y.shape), y, weights)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the proximal map of g between two translations."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return self.cost.prox(v - self.shift, step) + self.shift

    def prox_derivative(self, v: FloatArray, step: float) -> ProxDerivative:
        """Return that of g."""
        return self.cost.prox_derivative(v - self.shift, step)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label as g does."""
        return self.cost.pieces(v - self.shift, step)

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return those of g."""
        return self.cost.margins(v - self.shift, step)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the smoothed map of g between two translations."""
        return self.cost.smoothed_prox(v - self.shift, step, eps) + self.shift

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ProxDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return self.cost.smoothed_prox_derivative(v - self.shift, step, eps)

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split as g does."""
        return self.cost.multipliers(self._back(u), subgradient)

    def _back(self, u: FloatArray) -> FloatArray:
        """u - shift, exactly 0 and exactly at the bounds where only rounding is left."""
        inside = u - self.shift
        inside = np.where(np.abs(inside) <= 1e-15 * (np.abs(u) + np.abs(self.shift)), 0.0, inside)
        return self._into(u, inside)


class ConjugateCost(_Derived):
    """g*, the convex conjugate in the problem's inner product.

    Parameters
    ----------
    cost : Cost
        g, convex, with a known ``conjugate_value``.

    Raises
    ------
    InputError
        For a cost that is not convex or whose conjugate is not known.

    Notes
    -----
    prox_{s g*}(v) = v - s prox_{g/s}(v/s) (J.-J. Moreau, Bull. Soc. Math. France 93 (1965) 273-299, from memory); the
    derivative is I minus that of g there, so the selection at kinks is complementary: 1 where that of g is 0. The
    conjugate of g* is g.
    """

    def __init__(self, cost: Cost) -> None:
        super().__init__(cost)
        if not self.convex:
            raise InputError(f"{type(cost).__name__} is not convex: it is not the conjugate of its conjugate")
        if not hasattr(cost, "conjugate_value"):
            raise InputError(
                f"the conjugate of {type(cost).__name__} is not known: it has no conjugate_value"
            )

    def __repr__(self) -> str:
        return f"ConjugateCost({self.cost!r})"

    @property
    def lower(self) -> Any:
        """No bounds are known: the domain of g* is that of its value."""
        return np.array(-np.inf)

    @property
    def upper(self) -> Any:
        """No bounds are known: the domain of g* is that of its value."""
        return np.array(np.inf)

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g*(u)."""
        found = self._inside_conjugate(u, weights)
        if found is None:
            raise InputError(f"the conjugate of {self.cost!r} is not known")
        return found

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(y)."""
        return self.cost.value(y, weights)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return v - step prox_{g/step}(v/step)."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        return v - step * self.cost.prox(v / step, 1.0 / step)

    def prox_derivative(self, v: FloatArray, step: float) -> ComplementDerivative:
        """Return I minus that of g."""
        return ComplementDerivative(self.cost.prox_derivative(v / step, 1.0 / step))

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label as g does, in the words of g."""
        return self.cost.pieces(v / step, 1.0 / step)

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return the distances to the kinks, in the unit of v."""
        return step * self.cost.margins(v / step, 1.0 / step)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the map with the smoothed one of g, eps in the unit of v."""
        return v - step * self.cost.smoothed_prox(v / step, 1.0 / step, eps / step)

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> ComplementDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0."""
        return ComplementDerivative(self.cost.smoothed_prox_derivative(v / step, 1.0 / step, eps / step))

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return the subgradient as ``primal``: the minimiser that belongs to u in the problem of g."""
        return {"primal": 1.0 * subgradient}


def _vector(value: Any, name: str) -> FloatArray:
    array = float_array(value, name)
    if array.ndim > 1:
        raise InputError(f"{name} must be a number or an array (n,), got shape {array.shape}")
    array.setflags(write=False)
    return array


def _size_of(array: FloatArray, other: int | None) -> int | None:
    return other if array.shape in ((), (1,)) else array.size


def _check_vector(array: FloatArray, name: str, size: int) -> None:
    if array.shape not in ((), (1,), (size,)):
        raise InputError(f"{name} has shape {array.shape}, expected a number or ({size},)")
