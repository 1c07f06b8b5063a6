"""The dual equation of a tracking problem with a strongly convex cost.

For f(u) = 1/2 ||S u - z||^2 and the strongly convex g_a(u) = g(u) + a/2 ||u||^2 - <h, u> the dual problem is

    minimise over q   Phi(q) = 1/2 ||q + z||^2 + g_a*(-S* q),

with gradient r(q) = q + z - S u(q), u(q) = prox_{g/a}(v), v = (h - S* q)/a, and generalised Hessian
I + S D S*/a, D the Newton derivative of the proximal map at v. Phi is strongly convex and once continuously
differentiable, so that every (inexact) Newton direction descends, and an exact search along it costs no
application of S once S* d is known. At the minimiser q = S u - z.

Source: Fenchel-Rockafellar duality with the semismooth Newton method of Qi and Sun, Math. Program. 58 (1993)
353-367 (from memory); the linear term h is the centre of a proximal point step (Rockafellar, SIAM J. Control
Optim. 14, 1976, 877-898, from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from ..inner import InnerProduct, relative
from ..pieces import Pieces
from ..protocols import Cost, Evaluation, FallbackStep, ProxDerivative
from ..work import WorkCounts

FloatArray = npt.NDArray[np.float64]


# relative error of an inner product, with room for long sums
ROUNDING = 1e-14


class TrackingMap(Protocol):
    """The linear map S from controls to observations, with its adjoint in the weighted products."""

    controls: InnerProduct
    observations: InnerProduct
    work: WorkCounts

    def forward(self, u: FloatArray) -> FloatArray:
        """S u."""
        ...

    def adjoint(self, q: FloatArray) -> FloatArray:
        """S* q, the Riesz representative in the control product."""
        ...


@dataclass(frozen=True)
class DualPoint:
    """What one evaluation of the dual equation knows; the Newton operator is I + S D S*/a."""

    q: FloatArray
    v: FloatArray
    control: FloatArray
    observed: FloatArray
    adjoint_residual: FloatArray
    corrected: FloatArray
    derivative: ProxDerivative


class DualEquation:
    """r(q) = 0 with the pair x = [q, S* q] as iterate, so that steps along known directions cost no solve.

    Parameters
    ----------
    tracking : TrackingMap
        S with its adjoint and the two inner products.
    target : array, shape (m,)
        z, in the observation space.
    alpha : float
        a > 0.
    cost : Cost
        g, convex.
    linear : array, shape (n,), optional
        h, the Riesz representative of a linear term; zero by default.

    Notes
    -----
    The accuracy is ||u - u'|| / ||u'|| in the control product, u' the proximal map of the normal map at the
    adjoint recomputed from S u: the quantity a user of the control cares for.
    """

    def __init__(
        self,
        tracking: TrackingMap,
        target: FloatArray,
        alpha: float,
        cost: Cost,
        linear: FloatArray | None = None,
    ) -> None:
        self.tracking, self.target, self.alpha, self.cost = tracking, target, alpha, cost
        self.linear = linear
        self.work = tracking.work
        self.size = target.size
        self.piecewise_affine = bool(getattr(cost, "piecewise_affine", True))

    def start(self, control: FloatArray | None) -> FloatArray:
        """Return the iterate that belongs to a control; None means zero."""
        q = -self.target if control is None else self.tracking.forward(control) - self.target
        return np.concatenate([q, self.tracking.adjoint(q)])

    def start_from(self, observed: FloatArray) -> FloatArray:
        """Return the iterate that belongs to an observation S u, of a control of any weight a."""
        q = observed - self.target
        return np.concatenate([q, self.tracking.adjoint(q)])

    def v_of(self, adjoint: FloatArray) -> FloatArray:
        """v = (h - S* q) / a."""
        v = adjoint * (-1.0 / self.alpha)
        if self.linear is not None:
            v += self.linear / self.alpha
        return v

    def prox(self, v: FloatArray) -> FloatArray:
        """The proximal map of g with step 1/a."""
        self.work.proximal_maps += 1
        return self.cost.prox(v, 1.0 / self.alpha)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """One application of S and one of S*."""
        q, p = x[: self.size], x[self.size :]
        v = self.v_of(p)
        u = self.prox(v)
        observed = self.tracking.forward(u)
        residual = q + self.target - observed
        norm = self.tracking.observations.norm(residual)
        if not np.isfinite(norm):
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        lifted = self.tracking.adjoint(residual)
        # q - r = S u - z is the true dual variable of u
        corrected = self.prox(v + lifted / self.alpha)
        accuracy = relative(
            self.tracking.controls.norm(u - corrected), self.tracking.controls.norm(corrected)
        )
        step = 1.0 / self.alpha
        data = DualPoint(q, v, u, observed, lifted, corrected, self.cost.prox_derivative(v, step))
        return Evaluation(x, residual, norm, accuracy, self.cost.pieces(v, step), data)

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]]:
        """Slope and curvature of t -> Phi(q + t d), and the rounding error of the slope; costs proximal maps only."""
        point: DualPoint = at.data
        d, lifted = direction[: self.size], direction[self.size :]
        weighted = self.tracking.observations.apply(d)
        constant, quadratic = float((point.q + self.target) @ weighted), float(d @ weighted)
        dual_weighted = self.tracking.controls.apply(lifted)
        dv = lifted * (-1.0 / self.alpha)
        step = 1.0 / self.alpha

        def slope_and_curvature(t: float) -> tuple[float, float, float]:
            v = point.v + t * dv
            pulled = float(self.prox(v) @ dual_weighted)
            slope = constant + t * quadratic - pulled
            noise = ROUNDING * (abs(constant) + abs(pulled))
            sloped = self.cost.prox_derivative(v, step).apply(lifted)
            return slope, quadratic + float(sloped @ dual_weighted) / self.alpha, noise

        return slope_and_curvature

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: every direction of the subspace solver descends."""
        return None
