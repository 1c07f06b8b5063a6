"""The equation of an augmented Lagrangian: grad f(u) + sum_i K_i' sigma (w_i - prox_{g_i/sigma}(w_i)) + nu (u - c) = 0.

w_i = K_i u - c_i + y_i/sigma. It is the gradient of a convex, once continuously differentiable function of u, with
Newton derivative f'' + sigma sum K_i' (I - D_i) K_i + nu I; the search along a direction needs products with K only.

Source: R. T. Rockafellar, Math. Oper. Res. 1 (1976) 97-116; with semismooth Newton steps X. Li, D. Sun and K.-C. Toh,
SIAM J. Optim. 28 (2018) 433-458 (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep

FloatArray = npt.NDArray[np.float64]

ROUNDING = 1e-14


@dataclass(frozen=True)
class AugmentedPoint:
    """What one evaluation knows: the shifted arguments w, the multipliers they give, and the derivatives D_i."""

    w: FloatArray
    multipliers: FloatArray
    derivatives: tuple[Any, ...]


class AugmentedEquation:
    """Stationarity of the augmented Lagrangian in u for given multipliers.

    Parameters
    ----------
    problem : SumProblem
    multipliers : array
        y, all terms stacked.
    sigma : float
        Penalty.
    centre : array
        c of the proximal term.
    nu : float
        Its weight, not negative.
    """

    piecewise_affine = True

    def __init__(
        self, problem: Any, multipliers: FloatArray, sigma: float, centre: FloatArray, nu: float
    ) -> None:
        self.problem, self.multipliers, self.sigma = problem, multipliers, sigma
        self.centre, self.nu = centre, nu
        self.work = problem.work
        self.size = int(problem.unknowns)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The gradient in u; accuracy is its size relative to that of its parts."""
        problem = self.problem
        w = problem.arguments(x) + self.multipliers / self.sigma
        prices = self.sigma * (w - problem.prox(w, 1.0 / self.sigma))
        gradient, pulled = problem.gradient(x), problem.adjoint(prices)
        residual = gradient + pulled + self.nu * (x - self.centre)
        norm = float(np.linalg.norm(residual)) if np.isfinite(residual).all() else np.inf
        if not np.isfinite(norm):
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        size = float(np.linalg.norm(gradient) + np.linalg.norm(pulled))
        step = 1.0 / self.sigma
        parts = [problem.part_of(w, k) for k in range(len(problem.costs))]
        derivatives = tuple(
            cost.prox_derivative(part, step) for cost, part in zip(problem.costs, parts, strict=True)
        )
        accuracy = norm / size if size > 0 else 0.0
        return Evaluation(x, residual, norm, accuracy, self.pieces(w), AugmentedPoint(w, prices, derivatives))

    def pieces(self, w: FloatArray) -> Pieces:
        """The active sets of all terms, named by term."""
        labels: dict[str, Any] = {}
        legend: dict[str, tuple[str, ...]] = {}
        for k, cost in enumerate(self.problem.costs):
            found = cost.pieces(self.problem.part_of(w, k), 1.0 / self.sigma)
            for name in found:
                labels[f"term {k}: {name}"] = found[name]
                if name in found.legend:
                    legend[f"term {k}: {name}"] = found.legend[name]
        return Pieces(labels, legend)

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]]:
        """Slope, curvature and rounding error of t -> merit(u + t d)."""
        problem, point = self.problem, at.data
        image = problem.forward(direction)
        step = 1.0 / self.sigma
        own = float(direction @ direction) * self.nu
        pull = float((at.x - self.centre) @ direction) * self.nu
        hessian = problem.part.hessian(at.x)
        bent = float(direction @ np.asarray(hessian @ direction))
        first = float(problem.gradient(at.x) @ direction)

        def slope_and_curvature(t: float) -> tuple[float, float, float]:
            w = point.w + t * image
            prices = self.sigma * (w - problem.prox(w, step))
            smooth = (
                first + t * bent
                if problem.affine
                else float(problem.gradient(at.x + t * direction) @ direction)
            )
            priced = float(prices @ image)
            curvature = bent + own
            for k, cost in enumerate(problem.costs):
                part = problem.part_of(image, k)
                bend = part - cost.prox_derivative(problem.part_of(w, k), step).apply(part)
                curvature += self.sigma * float(part @ bend)
            noise = ROUNDING * (abs(smooth) + float(np.linalg.norm(prices) * np.linalg.norm(image)))
            return smooth + priced + pull + t * own, curvature, noise

        return slope_and_curvature

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the directions descend."""
        return None
