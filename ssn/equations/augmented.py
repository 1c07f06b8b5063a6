"""The equation of an augmented Lagrangian: grad f(u) + sum_i K_i' W_i sigma (w_i - prox_i(w_i)) + nu (u - c) = 0.

w_i = K_i u - c_i + y_i/sigma, prox_i that of g_i/sigma, W_i the weights of the terms. It is the gradient of a convex,
once continuously differentiable function of u, with Newton derivative f'' + sigma sum K_i' W_i (I - D_i) K_i + nu I;
the search along a direction needs products with K only.

Source: R. T. Rockafellar, Math. Oper. Res. 1 (1976) 97-116; with semismooth Newton steps X. Li, D. Sun and K.-C. Toh,
SIAM J. Optim. 28 (2018) 433-458 (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator

from ..linear.boundary import product
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep, Linearization

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
        norm = problem.dual_norm(residual) if np.isfinite(residual).all() else np.inf
        if not np.isfinite(norm):
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        size = problem.dual_norm(gradient) + problem.dual_norm(pulled)
        step = 1.0 / self.sigma
        parts = [problem.part_of(w, k) for k in range(len(problem.costs))]
        derivatives = tuple(
            cost.prox_derivative(part, step) for cost, part in zip(problem.costs, parts, strict=True)
        )
        accuracy = norm / size if size > 0 else 0.0
        return Evaluation(x, residual, norm, accuracy, self.pieces(w), AugmentedPoint(w, prices, derivatives))

    def linearize(self, x: FloatArray) -> Linearization:
        """The gradient with its Newton derivative as an operator."""
        at = self.evaluate(x)
        problem, hessian = self.problem, self.problem.part.hessian(x)

        def apply(d: FloatArray) -> FloatArray:
            d = np.ravel(d)
            image = problem.forward(d)
            parts = [problem.part_of(image, k) for k in range(len(problem.costs))]
            bent = [
                part - derivative.apply(part)
                for part, derivative in zip(parts, at.data.derivatives, strict=True)
            ]
            return product(hessian, d) + self.sigma * problem.adjoint(np.concatenate(bent)) + self.nu * d

        operator = LinearOperator((self.size, self.size), matvec=apply, dtype=np.float64)
        return Linearization(at.residual, operator, at.pieces, symmetric=True)

    def pieces(self, w: FloatArray) -> Pieces:
        """The active sets of all terms, named by term."""
        return named_pieces(self.problem, w, [1.0 / self.sigma] * len(self.problem.costs))

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]]:
        """Slope, curvature and rounding error of t -> merit(u + t d)."""
        problem, point = self.problem, at.data
        image = problem.forward(direction)
        weighted = problem.term_weights * image
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
            priced = float(prices @ weighted)
            curvature = bent + own
            for k, cost in enumerate(problem.costs):
                part = problem.part_of(image, k)
                bend = part - cost.prox_derivative(problem.part_of(w, k), step).apply(part)
                curvature += self.sigma * float(problem.part_of(weighted, k) @ bend)
            noise = ROUNDING * (abs(smooth) + float(np.linalg.norm(prices) * np.linalg.norm(weighted)))
            return smooth + priced + pull + t * own, curvature, noise

        return slope_and_curvature

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the directions descend."""
        return None


def named_pieces(problem: Any, w: FloatArray, steps: Sequence[float]) -> Pieces:
    """The active sets of the proximal maps of all terms at w, with a step each, by the names of the terms."""
    labels: dict[str, Any] = {}
    legend: dict[str, tuple[str, ...]] = {}
    for k, (cost, step) in enumerate(zip(problem.costs, steps, strict=True)):
        found = cost.pieces(problem.part_of(w, k), step)
        for name in found:
            labels[f"{problem.names[k]}: {name}"] = found[name]
            if name in found.legend:
                legend[f"{problem.names[k]}: {name}"] = found.legend[name]
    return Pieces(labels, legend)
