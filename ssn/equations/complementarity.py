"""The mid and the Fischer-Burmeister equation of a complementarity problem, each with its smoothed form.

With a = x - lower and b = s F(x): mid is min(a, b) without an upper bound, Fischer-Burmeister is
a + b - sqrt(a^2 + b^2); smoothed, both have the roots a b = eps^2, a > 0, b > 0. The rows of both Newton systems are
combinations (1 - d) dx + d s F' dx with 0 <= d <= 1, so one reduced solver serves both.
Source: A. Fischer, Optimization 24 (1992) 269-284; C. Kanzow, SIAM J. Matrix Anal. Appl. 17 (1996) 851-868
(both from memory).
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..costs.derivative import DiagonalDerivative
from ..inner import InnerProduct, relative
from ..linear.boundary import transpose_product
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep
from .general import least_squares_step
from .natural import NaturalEquation, NaturalPoint

FloatArray = npt.NDArray[np.float64]

# the squared Fischer-Burmeister residual counts as stationary where a move by the size of x promises this fraction
STATIONARY = 1e-4
# x this many times larger than start and magnitude counts as run away: accuracy is relative to no more than that
FAR = 1e8
# how far inside the bounds the derivative is taken where it is infinite on them, relative to the size of x
INSIDE = 1e-8
# below this weight of its F row an unknown counts as fixed
FIXED = 1e-14


class MidEquation(NaturalEquation):
    """mid(x - upper, x - lower, s F(x)) = 0 with residual search.

    Where F is not defined at a point, its projection onto the bounds is evaluated instead (``Evaluation.x`` tells).
    Where no length along the Newton direction serves, a regularised least-squares step on the Fischer-Burmeister
    form is taken, whose squared norm is continuously differentiable and has the same roots.
    """

    form = "mid"

    def __init__(self, problem: Any, step: FloatArray, magnitude: float) -> None:
        potential = problem.potential if problem.symmetric and self.form == "mid" else None
        super().__init__(
            problem,
            problem.cost,
            step,
            problem.weights,
            potential=potential,
            magnitude=magnitude,
            work=problem.work,
        )
        self.lower, self.upper = problem.lower, problem.upper
        self.problem = problem
        self.far = np.inf

    def start_at(self, x: FloatArray) -> None:
        """Note the start: an accuracy relative to an x that has run away from it would say nothing."""
        self.far = FAR * max(self.inner.norm(x), self.magnitude)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The residual at x, or at its projection onto the bounds where F(x) is not defined."""
        with np.errstate(all="ignore"):
            at = self._evaluate_here(x)
            if at.finite:
                return at
            inside = np.clip(x, self.lower, self.upper)
            return at if not np.isfinite(x).all() or (inside == x).all() else self._evaluate_here(inside)

    def _evaluate_here(self, x: FloatArray) -> Evaluation:
        on_given_pieces = self.first_pieces is not None
        at = super().evaluate(x)
        if self.eps > 0.0 or on_given_pieces or not at.finite:
            return at
        residual = mid_residual(x, at.data.step * at.data.force, self.lower, self.upper)
        norm = self.inner.norm(residual)
        accuracy = relative(norm, self.size_of(at.data.moved))
        return replace(at, residual=residual, norm=norm, accuracy=accuracy)

    def size_of(self, x: FloatArray) -> float:
        """What the accuracy is relative to: ||x||, at least the magnitude, at most FAR times start and magnitude."""
        return max(min(self.inner.norm(x), self.far), self.magnitude)

    def jacobian(self, x: FloatArray) -> Any:
        """F'(x), taken a little inside the bounds where it is infinite on them."""
        known, derivative = self._derivative_at
        if derivative is None or not (self.map.affine or known is x):
            with np.errstate(all="ignore"):
                derivative = super().jacobian(x)
                if not _finite(derivative):
                    derivative = self.map.derivative(inside_bounds(x, self.lower, self.upper, INSIDE))
            self._derivative_at = (x, derivative)
        return derivative

    def rescale(self, x: FloatArray) -> bool:
        """Bring F to the unit of x anew, at x; whether that changed anything."""
        if self.map.affine:
            return False
        step = self.problem.row_step(x)
        if not np.isfinite(step).all() or (step == self.step).all():
            return False
        self.step = step
        self._best_norm = np.inf
        return True

    def confirmed(self, at: Evaluation) -> Evaluation:
        """The evaluation at the projection onto the bounds, with F brought to the unit of x there."""
        x = np.clip(at.x, self.lower, self.upper)
        if not self.rescale(x) and (x == at.x).all():
            return at
        return self.evaluate(x)

    def typical(self, x: FloatArray) -> float:
        """Root mean square of x."""
        return self.inner.norm(x) / float(np.sqrt(self.weights.sum()))

    def other_form(self) -> MidEquation:
        """The Fischer-Burmeister equation of the same problem."""
        return self._in_form(FischerBurmeisterEquation)

    def _in_form(self, kind: type[MidEquation]) -> MidEquation:
        other = kind(self.problem, self.step, self.magnitude)
        other.far = self.far
        return other

    def interior(self, x: FloatArray, distance: float) -> FloatArray:
        """The nearest point at least `distance` inside the bounds, or halfway where they are closer."""
        return inside_bounds(x, self.lower, self.upper, distance)

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """Projected gradient with a step below 1/L where F is a gradient, else least squares on Fischer-Burmeister.

        None at a stationary point of the latter that is not a root.
        """
        if self.potential is not None and self.eps == 0.0:
            projected = self._projected_gradient(at)
            if projected is not None:
                return projected
        smooth = FischerBurmeister(self)
        derivative = smooth.derivative(at.x)
        if isinstance(derivative, LinearOperator) or not _finite(derivative) or self.stationary(at):
            return None
        return least_squares_step(smooth, smooth.evaluate(at.x), derivative, np.ones(at.x.size))

    def stationary(self, at: Evaluation) -> bool:
        """Whether a move by the size of x promises next to no change of the squared Fischer-Burmeister residual."""
        smooth = FischerBurmeister(self)
        derivative = smooth.derivative(at.x)
        residual = smooth.evaluate(at.x).residual
        if (
            isinstance(derivative, LinearOperator)
            or not _finite(derivative)
            or not np.isfinite(residual).all()
        ):
            return False
        gradient = transpose_product(derivative, residual)
        reach = 1.0 + float(np.linalg.norm(at.x))
        return bool(np.linalg.norm(gradient) * reach <= STATIONARY * float(residual @ residual))

    def _projected_gradient(self, at: Evaluation) -> FallbackStep | None:
        assert self.potential is not None
        here = (
            self.potential(at.x)
            if not (at.x < self.lower).any() and not (at.x > self.upper).any()
            else np.inf
        )
        t = 1.0
        for _ in range(40):
            x = np.clip(at.x - t * self.step * at.data.force, self.lower, self.upper)
            self.work.operator_products += 1
            value = self.potential(x)
            gap = x - at.x
            if value <= here - 0.1 * float((gap / self.step) @ gap) / (2 * t) and value < here:
                return FallbackStep(x, "projected gradient", here - value)
            t *= 0.5
        return None


class FischerBurmeisterEquation(MidEquation):
    """phi(x - lower, s F(x)) = 0, phi(a, b) = a + b - sqrt(a^2 + b^2), nested where there is an upper bound.

    Its squared norm is continuously differentiable, so that every Newton direction lowers it. Rows are divided by the
    sum of their two derivatives (at least 2 - sqrt(2)), which gives the rows the form of the mid equation; ``norm``
    is that of phi itself. The accuracy is that of the mid equation.
    """

    form = "Fischer-Burmeister"

    def _evaluate_here(self, x: FloatArray) -> Evaluation:
        if self.first_pieces is not None:  # a warm start: both forms have the same system on given pieces
            return super()._evaluate_here(x)
        self.work.operator_products += 1
        force = self.map.value(x)
        if not np.isfinite(force).all():
            return Evaluation(x, force, np.inf, np.inf, Pieces())
        value, dx, df = fischer_burmeister(x, self.step * force, self.lower, self.upper, self.eps)
        total = dx + df
        d = df / total
        d[d < FIXED] = 0.0
        v = x - self.step * force
        moved = np.clip(v, self.lower, self.upper)
        data = NaturalPoint(force, v, moved, DiagonalDerivative(d), self.step)
        norm = self.inner.norm(value)
        if self.eps > 0.0:
            accuracy, pieces = norm / (self.eps * float(np.sqrt(self.weights.sum()))), Pieces()
        else:
            natural = mid_residual(x, self.step * force, self.lower, self.upper)
            accuracy = relative(self.inner.norm(natural), self.size_of(moved))
            pieces = self.cost.pieces(v, 1.0)
        return Evaluation(x, value / total, norm, accuracy, pieces, data)

    def other_form(self) -> MidEquation:
        """The mid equation of the same problem."""
        return self._in_form(MidEquation)


def mid_residual(x: FloatArray, f: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """mid(x - high, x - low, f): x - clip(x - f, low, high), but f does not drown in a large x."""
    return np.maximum(np.minimum(f, x - low), x - high)


def fischer_burmeister(
    x: FloatArray, f: FloatArray, low: FloatArray, high: FloatArray, eps: float = 0.0
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """phi(x - low, -phi(high - x, -f)) and its derivatives with respect to x_i and f_i, both nonnegative.

    Infinite bounds drop out. At a kink the derivative is that along the diagonal a = b > 0.
    """
    value, dx, df = f.copy(), np.zeros_like(f), np.ones_like(f)
    has = np.isfinite(high)
    if has.any():
        phi, pa, pb = _phi((high - x)[has], -f[has], eps)
        value[has], dx[has], df[has] = -phi, pa, pb
    has = np.isfinite(low)
    if has.any():
        phi, pa, pb = _phi((x - low)[has], value[has], eps)
        value[has] = phi
        dx[has] = pa + pb * dx[has]
        df[has] = pb * df[has]
    return value, dx, df


def _phi(a: FloatArray, b: FloatArray, eps: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    root = np.hypot(np.hypot(a, b), np.sqrt(2.0) * eps)
    safe = np.where(root > 0, root, 1.0)
    half = np.sqrt(0.5)
    pa, pb = 1.0 - np.where(root > 0, a / safe, half), 1.0 - np.where(root > 0, b / safe, half)
    # a + b - root without cancellation where one of the two is positive
    large, small = np.maximum(a, b), np.minimum(a, b)
    below = np.where(large > 0, large + root, 1.0)
    exact = small - small * (small / below) - 2.0 * eps * (eps / below)
    return np.where(large > 0, exact, a + b - root), pa, pb


class FischerBurmeister:
    """The (smoothed) Fischer-Burmeister residual of a mid equation, as the least-squares step sees it."""

    def __init__(self, mid: MidEquation) -> None:
        self.mid = mid
        self.work = mid.work
        self.inner = InnerProduct(mid.weights)

    def _parts(self, x: FloatArray, force: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        mid = self.mid
        return fischer_burmeister(x, mid.step * force, mid.lower, mid.upper, mid.eps)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The residual at x."""
        self.work.operator_products += 1
        with np.errstate(all="ignore"):
            force = self.mid.map.value(x)
            if not np.isfinite(force).all():
                return Evaluation(x, force, np.inf, np.inf, Pieces())
            residual, _, _ = self._parts(x, force)
            norm = self.inner.norm(residual)
        return Evaluation(x, residual, norm, norm, Pieces())

    def derivative(self, x: FloatArray) -> Any:
        """A generalised derivative at x; F'(x) itself where that is an operator."""
        jacobian = self.mid.jacobian(x)
        if isinstance(jacobian, LinearOperator):
            return jacobian
        with np.errstate(all="ignore"):
            _, dx, df = self._parts(x, self.mid.map.value(x))
        rows = df * self.mid.step
        if sp.issparse(jacobian):
            return sp.csr_array(sp.diags_array(dx) + sp.diags_array(rows) @ jacobian)
        return np.diag(dx) + rows[:, None] * np.asarray(jacobian)


def inside_bounds(x: FloatArray, lower: FloatArray, upper: FloatArray, distance: float) -> FloatArray:
    """The nearest point at least `distance` max(1, |bound|) inside the bounds, or halfway where they are closer."""
    room = 0.5 * (upper - lower)
    low = lower + np.minimum(
        distance * np.maximum(1.0, np.where(np.isfinite(lower), np.abs(lower), 0.0)), room
    )
    high = upper - np.minimum(
        distance * np.maximum(1.0, np.where(np.isfinite(upper), np.abs(upper), 0.0)), room
    )
    return np.clip(x, low, high)


def _finite(derivative: Any) -> bool:
    if isinstance(derivative, LinearOperator):
        return True
    return bool(np.isfinite(derivative.data if sp.issparse(derivative) else np.asarray(derivative)).all())
