"""The duality gap of several terms, and the distance bound that follows from it by strong convexity.

For y in the domain of the conjugates let G = sum_i g_i(x_i) + g_i*(y_i) - <x_i, y_i> with x_i = K_i u - c_i, which is
not negative and vanishes where y_i is a subgradient of g_i at x_i, and r = grad f(u) + sum_i K_i' W_i y_i. By convexity
of g_i and strong convexity of f with modulus mu, for every v

    P(v) >= P(u) - G + <r, v - u> + mu/2 ||v - u||^2.

So P(u) - min P <= G + ||r||^2 / (2 mu), and with v = u*, where P(u) - P(u*) >= mu/2 ||u - u*||^2,
mu ||u - u*||^2 <= G + ||r|| ||u - u*||.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from .costs import SparseCost
from .inner import relative
from .norm_terms import NORM, QUADRATIC, NormRows
from .records import Certificate

FloatArray = npt.NDArray[np.float64]

EPS = float(np.finfo(float).eps)


@dataclass(frozen=True)
class Gap:
    """A pair and how far its objective can be from the optimal value.

    Attributes
    ----------
    u, multipliers : array
        The pair, moved into the domains where that is a projection.
    terms : float
        G; inf where a term is infinite, or its conjugate infinite or not known.
    stationarity : float
        ||r|| in the dual norm of the unknown.
    value : float
        G + ||r||^2/(2 mu); inf where mu = 0 and r is not zero.
    objective : float
        P(u).
    rounding : float
        What rounding may have left in G.
    """

    u: FloatArray
    multipliers: FloatArray
    terms: float
    stationarity: float
    value: float
    objective: float
    rounding: float

    @property
    def relative(self) -> float:
        """The gap relative to the objective."""
        return relative(self.value, abs(self.objective)) if np.isfinite(self.objective) else float("inf")


def duality_gap(problem: Any, u: FloatArray, multipliers: FloatArray) -> Gap:
    """Return the gap of u and the stacked multipliers, all evaluated afresh.

    Parameters
    ----------
    problem : SumProblem
    u : array, shape (n,)
        Moved into the domain of those terms whose operator is the identity.
    multipliers : array, shape (m,)
        Densities; those of norms are first projected into their balls, those of L1 costs with a single bound into the
        half-line where the conjugate is finite.
    """
    rows = NormRows(problem)
    u = problem.inside(u)
    y = _dual_point(problem, rows, multipliers)
    x = problem.arguments(u)
    weights = problem.term_weights
    terms, size = _norm_gap(rows, x, y, weights)
    curved = rows.curvature > 0
    slack = rows.curvature[curved] * x[curved] - y[curved]
    terms += 0.5 * float(np.sum(weights[curved] * slack**2 / rows.curvature[curved]))
    for k, cost in enumerate(problem.costs):
        if rows.kinds[k] in (NORM, QUADRATIC):
            continue
        own, price, weight = (problem.part_of(a, k) for a in (x, y, weights))
        gap, scale = _term_gap(cost, own, price, weight)
        terms, size = terms + gap, size + scale
    r = problem.dual_norm(problem.gradient(u) + problem.adjoint(y))
    mu = problem.strong_convexity
    rest = 0.5 * r * r / mu if mu > 0.0 else (0.0 if r == 0.0 else np.inf)
    return Gap(u, y, terms, r, terms + rest, problem.objective(u), 4.0 * EPS * size)


def certify(problem: Any, u: FloatArray, multipliers: FloatArray) -> tuple[Gap, Certificate | None]:
    """Return the gap and the distance bound; None where f is not known to be strongly convex or the gap is infinite.

    ||u - u*|| <= (||r|| + sqrt(||r||^2 + 4 mu G)) / (2 mu), plus the distance to the point of the domain certified.
    """
    gap = duality_gap(problem, u, multipliers)
    mu = problem.strong_convexity
    if not (mu > 0.0 and np.isfinite(gap.value)):
        return gap, None
    norm = problem.controls.norm
    moved = norm(u - gap.u)
    gradient = problem.dual_norm(problem.gradient(gap.u))

    def distance(terms: float, r: float) -> float:
        return float((r + np.sqrt(r * r + 4.0 * mu * terms)) / (2.0 * mu))

    own = distance(gap.terms, gap.stationarity)
    bound = distance(gap.terms + gap.rounding, gap.stationarity + 4.0 * EPS * gradient) + moved
    method = "duality gap, strong convexity"
    return gap, Certificate(bound, relative(bound, norm(u)), method, bound - moved - own)


def _dual_point(problem: Any, rows: NormRows, multipliers: FloatArray) -> FloatArray:
    y = rows.into_balls(multipliers).copy()
    for k, cost in enumerate(problem.costs):
        if isinstance(cost, SparseCost) and rows.kinds[k] != NORM:
            part = slice(int(problem.splits[k]), int(problem.splits[k + 1]))
            least = np.where(np.isneginf(cost.lower), -cost.beta, -np.inf)
            most = np.where(np.isposinf(cost.upper), cost.beta, np.inf)
            y[part] = np.clip(y[part], least, most)
    return y


def _norm_gap(rows: NormRows, x: FloatArray, y: FloatArray, weights: FloatArray) -> tuple[float, float]:
    """Sum of beta_g ||x_g|| - <x_g, y_g> over the groups of norms, each at least 0, and the size of what is summed."""
    a = np.where(rows.is_norm, rows.inner, 0.0)
    counts = np.bincount(rows.labels, minlength=rows.groups)
    lengths = np.sqrt(np.bincount(rows.labels, weights=a * x * x, minlength=rows.groups))
    inner = np.bincount(rows.labels, weights=a * x * y, minlength=rows.groups)
    beta = np.bincount(rows.labels, weights=rows.beta, minlength=rows.groups) / counts
    outer = np.bincount(rows.labels, weights=weights / rows.inner, minlength=rows.groups) / counts
    each = outer * np.maximum(beta * lengths - inner, 0.0)
    return float(each.sum()), float((outer * beta * lengths).sum())


def _term_gap(cost: Any, x: FloatArray, y: FloatArray, weights: FloatArray) -> tuple[float, float]:
    """g(x) + g*(y) - <x, y> of a term of another kind, and the size of what is added."""
    value = cost.value(x, weights)
    if isinstance(cost, SparseCost):
        conjugate: float | None = _box_conjugate(cost, y, weights)
    else:
        known = getattr(cost, "conjugate_value", None)
        conjugate = None if known is None else known(y, weights)
    if conjugate is None or not np.isfinite(value + conjugate):
        return np.inf, 0.0
    product = float((weights * x) @ y)
    return max(value + conjugate - product, 0.0), abs(value) + abs(conjugate) + float(
        np.abs(weights * x * y).sum()
    )


def _box_conjugate(cost: SparseCost, y: FloatArray, weights: FloatArray) -> float:
    """sup over lower <= v <= upper of <v, y> - beta ||v||_1; the supremum is at a bound or at the kink."""
    lower, upper = np.broadcast_to(cost.lower, y.shape), np.broadcast_to(cost.upper, y.shape)
    v = np.where(y > cost.beta, upper, np.where(y < -cost.beta, lower, np.clip(0.0, lower, upper)))
    if not np.isfinite(v).all():
        return float("inf")
    return float(weights @ (v * y - cost.beta * np.abs(v)))
