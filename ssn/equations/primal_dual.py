"""The primal-dual equation of several terms, each norm smoothed to its Huber form around given multipliers.

Unknown (u, y), y stacked over all terms as densities. With w = K u - c + gamma z, z the multipliers of the last point:

    grad f(u) + K'W y = 0,    s (y - Y(w)) = 0,
    norms:       Y(w) = beta w / m, m = max(gamma beta, ||w_g||), s = m / beta,
    quadratics:  Y = curvature (K u - c),                         s = 1 / curvature,
    the rest:    Y(w) = (w - prox_gamma(w)) / gamma,              s = gamma.

The factor s puts the second residual into the unit of K u and keeps it free of the rounding that 1/gamma magnifies.
K'W Y(w) is the gradient of a convex function of u, so the u-part of a Newton direction descends on it where the matrix
is made symmetric and positive (`linear/primal_dual.py`), and an exact search along it needs products with K only. With
z the multipliers of the solution, the solution itself is a root for every gamma, so gamma need not become small.

Source: M. Hintermueller and G. Stadler, SIAM J. Sci. Comput. 28 (2006) 1-23, with z = 0; the shift by z is that of the
method of multipliers, R. T. Rockafellar, Math. Oper. Res. 1 (1976) 97-116 (both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..inner import InnerProduct
from ..linear.boundary import product
from ..norm_terms import NORM, OTHER, NormRows
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep, Linearization
from .augmented import ROUNDING, named_pieces

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class PrimalDualPoint:
    """What one evaluation knows.

    Attributes
    ----------
    w, image : array, shape (m,)
        The shifted arguments and Y(w).
    length, divisor : array, shape (m,)
        ||w_g|| and m; of no meaning in the rows of other terms.
    scale : array, shape (m,)
        s.
    gradient : array, shape (n,)
        grad f(u).
    derivatives : dict of int to ProxDerivative
        D of the terms that are neither norm nor quadratic.
    """

    w: FloatArray
    image: FloatArray
    length: FloatArray
    divisor: FloatArray
    scale: FloatArray
    gradient: FloatArray
    derivatives: dict[int, Any]


class PrimalDualEquation:
    """Optimality of the smoothed problem in u and y.

    Parameters
    ----------
    problem : SumProblem
    rows : NormRows
    gammas : sequence of float
        One a term, positive.
    centre : array, shape (m,)
        z.
    """

    piecewise_affine = False

    def __init__(self, problem: Any, rows: NormRows, gammas: Any, centre: FloatArray) -> None:
        self.problem, self.rows, self.centre = problem, rows, centre
        self.gammas = [float(g) for g in gammas]
        self.gamma = np.repeat(self.gammas, np.diff(problem.splits))
        self.work = problem.work
        self.unknowns = int(problem.unknowns)
        self.size = self.unknowns + int(problem.splits[-1])
        self.others = [k for k, kind in enumerate(rows.kinds) if kind == OTHER]
        # multipliers are weighed like the arguments they go with
        self.inner = InnerProduct(np.concatenate([problem.weights, problem.term_weights * self.gamma**2]))

    def image(self, w: FloatArray, plain: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Y(w), ||w_g|| and m; `plain` is K u - c, without the shift."""
        rows = self.rows
        length = rows.lengths(w)
        divisor = np.maximum(np.maximum(self.gamma * rows.beta, length), 1e-300)
        y = np.where(rows.is_norm, rows.beta * w / divisor, rows.curvature * plain)
        for k in self.others:
            part = slice(int(self.problem.splits[k]), int(self.problem.splits[k + 1]))
            gamma = self.gammas[k]
            y[part] = (w[part] - self.problem.costs[k].prox(w[part], gamma)) / gamma
        return y, length, divisor

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Both residuals; accuracy is the larger of them relative to the size of what they are made of."""
        problem, rows, n = self.problem, self.rows, self.unknowns
        u, y = x[:n], x[n:]
        plain = problem.arguments(u)
        w = plain + self.gamma * self.centre
        image, length, divisor = self.image(w, plain)
        gradient, pulled = problem.gradient(u), problem.adjoint(y)
        scale = self.gamma.copy()
        sized = rows.is_norm & (rows.beta > 0)
        scale[sized] = divisor[sized] / rows.beta[sized]
        curved = rows.curvature > 0
        scale[curved] = 1.0 / rows.curvature[curved]
        residual = np.concatenate([gradient + pulled, scale * (y - image)])
        if not np.isfinite(residual).all():
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        first, second = problem.dual_norm(residual[:n]), problem.term_norm(residual[n:])
        size = problem.dual_norm(gradient) + problem.dual_norm(pulled)
        reach = problem.term_norm(plain) + problem.term_norm(self.gamma * (y - self.centre))
        prices = problem.term_norm(y) + problem.term_norm(image)
        off = problem.term_norm(y - image)
        accuracy = max(
            first / size if size > 0 else 0.0,
            second / reach if reach > 0 else second,
            off / prices if prices > 0 else 0.0,
        )
        derivatives = {
            k: problem.costs[k].prox_derivative(problem.part_of(w, k), self.gammas[k]) for k in self.others
        }
        norm = self.residual_norm(residual)
        point = PrimalDualPoint(w, image, length, divisor, scale, gradient, derivatives)
        return Evaluation(x, residual, norm, accuracy, named_pieces(problem, w, self.gammas), point)

    def residual_norm(self, residual: FloatArray) -> float:
        """Norm of both parts, the second in the unit of the gradient."""
        first = self.problem.dual_norm(residual[: self.unknowns])
        second = self.problem.term_norm(residual[self.unknowns :])
        return float(np.hypot(first, second * self.problem.gradient_unit()))

    def consistent(self, x: FloatArray) -> FloatArray:
        """The point with y = Y(w), where the second residual vanishes and the safeguards of the solver do not act."""
        plain = self.problem.arguments(x[: self.unknowns])
        y = self.image(plain + self.gamma * self.centre, plain)[0]
        return np.concatenate([x[: self.unknowns], y])

    def linearize(self, x: FloatArray) -> Linearization:
        """Both residuals with their Newton derivative, without safeguards."""
        at = self.evaluate(x)
        return Linearization(at.residual, PrimalDualDerivative(self, at), at.pieces)

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]]:
        """Slope, curvature and rounding error of the smoothed objective along the u-part of the direction."""
        problem, point, n = self.problem, at.data, self.unknowns
        u, d = at.x[:n], direction[:n]
        ahead = problem.forward(d)
        weighted = problem.term_weights * ahead
        bent = float(d @ product(problem.part.hessian(u), d))
        first = float(point.gradient @ d)
        plain = point.w - self.gamma * self.centre

        def slope_and_curvature(t: float) -> tuple[float, float, float]:
            y, _, divisor = self.image(point.w + t * ahead, plain + t * ahead)
            smooth = first + t * bent if problem.affine else float(problem.gradient(u + t * d) @ d)
            # an upper bound of the curvature of the terms serves a bracketed search
            stiff = np.where(self.rows.is_norm, self.rows.beta / divisor, 1.0 / self.gamma)
            stiff = np.where(self.rows.curvature > 0, self.rows.curvature, stiff)
            curvature = bent + float(weighted @ (stiff * ahead))
            noise = ROUNDING * (abs(smooth) + float(np.linalg.norm(y) * np.linalg.norm(weighted)))
            return smooth + float(y @ weighted), curvature, noise

        return slope_and_curvature

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the directions descend."""
        return None


class PrimalDualDerivative:
    """The Newton derivative [[f'', K'W], [-s Y' K + y s' K, s]] of the equation, applied."""

    def __init__(self, equation: PrimalDualEquation, at: Evaluation) -> None:
        self.equation, self.at = equation, at
        self.shape = (equation.size, equation.size)

    def __matmul__(self, x: FloatArray) -> FloatArray:
        equation, point = self.equation, self.at.data
        problem, rows, n = equation.problem, equation.rows, equation.unknowns
        du, dy = x[:n], x[n:]
        dx = problem.forward(du)
        first = product(problem.part.hessian(self.at.x[:n]), du) + problem.adjoint(dy)
        second = point.scale * dy - dx
        # norms: m y / beta - w, m varies with the length where that is the larger one
        long = rows.is_norm & (point.length > equation.gamma * rows.beta) & (rows.beta > 0)
        beta, length = np.where(long, rows.beta, 1.0), np.where(long, point.length, 1.0)
        stretch = rows.sums(rows.inner * point.w * dx) / length
        second += np.where(long, stretch / beta * self.at.x[n:], 0.0)
        second = np.where(rows.is_norm & (rows.beta == 0.0), point.scale * dy, second)
        flat = np.repeat([kind not in (NORM, OTHER) for kind in rows.kinds], np.diff(problem.splits))
        second = np.where(flat & (rows.curvature == 0.0), point.scale * dy, second)
        for k, derivative in point.derivatives.items():
            part = slice(int(problem.splits[k]), int(problem.splits[k + 1]))
            second[part] = point.scale[part] * dy[part] - dx[part] + derivative.apply(dx[part])
        return np.concatenate([first, second])


def explicit(problem: Any) -> bool:
    """Whether every operator is a sparse or dense matrix."""
    return all(sp.issparse(o) or isinstance(o, np.ndarray) for o in problem.operators)
