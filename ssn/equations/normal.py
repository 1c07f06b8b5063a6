"""The normal map of f + alpha/2 ||u||^2 + g in the scaled negative gradient of f.

    N(v) = v + h(u)/alpha,   u = prox_{g/alpha}(v),   h the Riesz gradient of f,

vanishes where u minimises, or is stationary. A Newton derivative is I + T D/alpha, T the Hessian of f at u and D the
derivative of the proximal map at v. Here f need not be convex: f is the reduced tracking of a nonlinear state equation,
or a quadratic model of it.

Source: S. M. Robinson, Math. Oper. Res. 17 (1992) 691-714 (normal maps, from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from ..errors import StateSolveError
from ..inner import InnerProduct, relative
from ..pieces import Pieces
from ..protocols import Cost, Evaluation, FallbackStep, ProxDerivative
from ..work import WorkCounts

FloatArray = npt.NDArray[np.float64]
Action = Callable[[FloatArray], FloatArray]


class SmoothGradient(Protocol):
    """What the equation asks of f."""

    def gradient(self, u: FloatArray) -> tuple[FloatArray, Callable[[], Action]]:
        """h(u), and a function that makes v -> T v; may raise `StateSolveError`."""
        ...


@dataclass(frozen=True)
class QuadraticModel:
    """h(u) = h_0 + T (u - u_0)."""

    at: FloatArray
    base: FloatArray
    hessian: Action

    def gradient(self, u: FloatArray) -> tuple[FloatArray, Callable[[], Action]]:
        """h(u) and T."""
        change = u - self.at
        return (self.base + self.hessian(change) if change.any() else self.base), lambda: self.hessian


@dataclass(frozen=True)
class NormalPoint:
    """What one evaluation knows; `hessian()` makes v -> T v."""

    v: FloatArray
    control: FloatArray
    corrected: FloatArray
    derivative: ProxDerivative
    step: float
    hessian: Callable[[], Action]


class NormalEquation:
    """N(v) = 0 with v as iterate.

    Parameters
    ----------
    smooth : SmoothGradient
    cost : Cost
        g, convex.
    alpha : float
        Positive.
    controls : InnerProduct
        With a vector of weights.
    work : WorkCounts

    Notes
    -----
    The accuracy is ||u - u'|| / ||u'||, u' = prox(-h(u)/alpha).
    """

    piecewise_affine = False

    def __init__(
        self, smooth: SmoothGradient, cost: Cost, alpha: float, controls: InnerProduct, work: WorkCounts
    ) -> None:
        self.smooth, self.cost, self.alpha, self.inner, self.work = smooth, cost, alpha, controls, work
        self.weights = controls.vector
        self.failure = ""

    def evaluate(self, x: FloatArray) -> Evaluation:
        """One gradient of f and two proximal maps; an infinite norm where f has no value, the reason in `failure`."""
        step = 1.0 / self.alpha
        self.work.proximal_maps += 2
        u = self.cost.prox(x, step)
        try:
            h, hessian = self.smooth.gradient(u)
        except StateSolveError as error:
            self.failure = str(error)
            return Evaluation(x, np.full(x.shape, np.nan), np.inf, np.inf, Pieces())
        residual = x + step * h
        if not np.isfinite(residual).all():
            self.failure = "the gradient is not finite"
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        corrected = self.cost.prox(-step * h, step)
        norm = self.inner.norm(residual)
        accuracy = relative(self.inner.norm(u - corrected), self.inner.norm(corrected))
        data = NormalPoint(x, u, corrected, self.cost.prox_derivative(x, step), step, hessian)
        return Evaluation(x, residual, norm, accuracy, self.cost.pieces(x, step), data)

    def derivative(self, at: Evaluation) -> Action:
        """The function h -> h + T D h / alpha at an evaluation."""
        hessian = at.data.hessian()

        def apply(h: FloatArray) -> FloatArray:
            sloped = at.data.derivative.apply(h)
            return h + hessian(sloped) / self.alpha if sloped.any() else h

        return apply

    def merit_line(self, at: Evaluation, direction: FloatArray) -> None:
        """None: no merit function that is cheap along a line."""
        return None

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the caller has a safe step of its own."""
        return None


def least_curvature(equation: NormalEquation, at: Any, steps: int) -> float:
    """The smallest Ritz value of I + D^1/2 T D^1/2 / alpha: negative where the point is no minimiser; at most 1.

    Lanczos steps with full orthogonalisation in <x, D y>, in which T D is self-adjoint.
    """
    hessian, derivative = at.data.hessian(), at.data.derivative
    x = np.cos(0.7 * np.arange(at.x.size)) + 0.3
    basis: list[FloatArray] = []
    sloped: list[FloatArray] = []
    matrix = np.zeros((steps, steps))
    for k in range(steps):
        dx = derivative.apply(x)
        size = np.sqrt(max(equation.inner.dot(x, dx), 0.0))
        if size <= 1e-12 * max(equation.inner.norm(x), 1e-300) or not np.isfinite(size):
            steps = k
            break
        basis.append(x / size)
        sloped.append(dx / size)
        image = hessian(sloped[k]) / equation.alpha
        before = equation.inner.norm(image)
        for _ in range(2):
            for j in range(k + 1):
                part = equation.inner.dot(image, sloped[j])
                matrix[j, k] += part
                image = image - part * basis[j]
        if equation.inner.norm(image) <= 1e-10 * before:
            steps = k + 1
            break
        x = image
    if steps == 0:
        return 1.0
    square = matrix[:steps, :steps]
    return min(1.0, 1.0 + float(np.linalg.eigvalsh(np.triu(square) + np.triu(square, 1).T)[0]))
