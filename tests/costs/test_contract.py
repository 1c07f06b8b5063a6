"""The contract of every cost: each property of PROPERTIES for each class of `ssn.costs.CATALOGUE`.

A class needs an entry in INSTANCES (how to draw one), in SMOOTHING and in EXPECTED (how many properties it is
held to). A cost that couples components says ``separable = False``, one whose proximal map is curved
``piecewise_affine = False``, one that stands in an inner product of its own ``inner_weights``; FEASIBLE says how
to find points of finite cost where there are no bounds to read, KEEPS_OUT which properties do not fit, and why.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import ssn
from ssn.costs import CATALOGUE
from ssn.protocols import Cost
from tests.costs import nonconvex, sets

QUARTERS = st.integers(-24, 24).map(lambda k: k / 4)  # hits kinks exactly
REALS = st.floats(-6, 6, allow_nan=False).map(lambda x: round(x, 6))
NUMBERS = st.one_of(QUARTERS, REALS)
STEPS = st.sampled_from([0.25, 1.0, 3.0, 0.37])
DIRECTIONS = st.lists(st.floats(-1, 1).map(lambda x: round(x, 3)), min_size=6, max_size=6)


def vector(draw: Any, n: int, numbers: Any = NUMBERS) -> np.ndarray:
    return np.array(draw(st.lists(numbers, min_size=n, max_size=n)), dtype=float)


def number_or_vector(draw: Any, n: int, numbers: Any) -> Any:
    return vector(draw, n, numbers) if draw(st.booleans()) else draw(numbers)


def bounds(draw: Any, n: int) -> tuple[Any, Any]:
    """Finite or infinite, containing zero or not, sometimes equal; numbers or arrays."""
    base = number_or_vector(draw, n, NUMBERS)
    width = number_or_vector(draw, n, st.sampled_from([0.0, 0.5, 1.0, 3.25]))
    lower = base if draw(st.booleans()) else -np.inf
    upper = base + width if draw(st.booleans()) else np.inf
    return lower, upper


@st.composite
def sparse_costs(draw: Any) -> tuple[ssn.SparseCost, int]:
    n = draw(st.integers(1, 5))
    beta = number_or_vector(draw, n, st.sampled_from([0.0, 0.25, 1.0, 2.5]))
    return ssn.SparseCost(beta, *bounds(draw, n)), n


@st.composite
def bounds_costs(draw: Any) -> tuple[ssn.Bounds, int]:
    n = draw(st.integers(1, 5))
    return ssn.Bounds(*bounds(draw, n)), n


@st.composite
def piecewise_costs(draw: Any) -> tuple[ssn.PiecewiseQuadraticCost, int]:
    """Shared or by component: kinks with and without a jump, flat and curved pieces, any domain."""
    n, k = draw(st.integers(1, 5)), draw(st.integers(0, 3))
    rows = n if draw(st.booleans()) else 1
    gaps = st.sampled_from([0.25, 1.0, 2.5])
    points = np.cumsum([vector(draw, k, gaps) for _ in range(rows)], axis=1) - 2.0
    curvatures = np.array([vector(draw, k + 1, st.sampled_from([0.0, 0.0, 0.5, 2.0])) for _ in range(rows)])
    jumps = np.array([vector(draw, k, st.sampled_from([0.0, 0.25, 1.5])) for _ in range(rows)])
    slopes = np.empty((rows, k + 1))
    slopes[:, 0] = draw(QUARTERS)
    for j in range(k):  # the derivative rises by the jump at each breakpoint
        slopes[:, j + 1] = (
            slopes[:, j] + (curvatures[:, j] - curvatures[:, j + 1]) * points[:, j] + jumps[:, j]
        )
    if rows == 1 and draw(st.booleans()):
        points, slopes, curvatures = points[0], slopes[0], curvatures[0]
    lower, upper = bounds(draw, n)
    return ssn.PiecewiseQuadraticCost(points, slopes, curvatures, lower=lower, upper=upper), n


WEIGHTS = st.sampled_from([0.0, 0.25, 1.0, 2.5])
WIDTHS = st.sampled_from([0.25, 1.0, 1.75])


@st.composite
def elastic_net_costs(draw: Any) -> tuple[ssn.ElasticNetCost, int]:
    n = draw(st.integers(1, 5))
    beta, gamma = number_or_vector(draw, n, WEIGHTS), number_or_vector(draw, n, WEIGHTS)
    return ssn.ElasticNetCost(beta, gamma, *bounds(draw, n)), n


@st.composite
def huber_costs(draw: Any) -> tuple[ssn.HuberCost, int]:
    n = draw(st.integers(1, 5))
    beta, width = number_or_vector(draw, n, WEIGHTS), number_or_vector(draw, n, WIDTHS)
    return ssn.HuberCost(beta, width, number_or_vector(draw, n, NUMBERS)), n


@st.composite
def hinge_losses(draw: Any) -> tuple[ssn.HingeLoss, int]:
    n = draw(st.integers(1, 5))
    labels = number_or_vector(draw, n, st.sampled_from([-1.0, 1.0]))
    return ssn.HingeLoss(labels, number_or_vector(draw, n, WEIGHTS), draw(WIDTHS)), n


@st.composite
def quantile_losses(draw: Any) -> tuple[ssn.QuantileLoss, int]:
    n = draw(st.integers(1, 5))
    level = number_or_vector(draw, n, st.sampled_from([0.0, 0.1, 0.5, 0.75, 1.0]))
    return ssn.QuantileLoss(level, number_or_vector(draw, n, NUMBERS), draw(WEIGHTS)), n


@st.composite
def insensitive_losses(draw: Any) -> tuple[ssn.InsensitiveLoss, int]:
    n = draw(st.integers(1, 5))
    width, target = number_or_vector(draw, n, WIDTHS), number_or_vector(draw, n, NUMBERS)
    return ssn.InsensitiveLoss(width, target, number_or_vector(draw, n, WEIGHTS)), n


def groups(draw: Any, n: int) -> list[int]:
    """A label for each component, every label used."""
    given = draw(st.lists(st.integers(0, 2), min_size=n, max_size=n))
    return np.unique(given, return_inverse=True)[1].tolist()


INNER = st.sampled_from([1.0, 0.25, 2.0, 0.7])


@st.composite
def group_costs(draw: Any) -> tuple[ssn.GroupSparseCost, int]:
    n = draw(st.integers(1, 5))
    labels = groups(draw, n)
    beta = number_or_vector(draw, max(labels) + 1, WEIGHTS)
    lower, upper = bounds(draw, n) if draw(st.booleans()) else (-np.inf, np.inf)
    inner = number_or_vector(draw, n, INNER)
    return ssn.GroupSparseCost(beta, np.array(labels), inner_weights=inner, lower=lower, upper=upper), n


@st.composite
def switching_costs(draw: Any) -> tuple[ssn.SwitchingCost, int]:
    instants, actuators = draw(st.sampled_from([(1, 1), (1, 2), (2, 2), (1, 3), (3, 1), (1, 5)]))
    beta = number_or_vector(draw, instants, WEIGHTS)
    inner = number_or_vector(draw, actuators, INNER)
    return ssn.SwitchingCost(beta, (instants, actuators), inner), instants * actuators


@st.composite
def multibang_costs(draw: Any) -> tuple[ssn.MultiBangCost, int]:
    settings = np.cumsum(draw(st.lists(WIDTHS, min_size=2, max_size=5))) - draw(st.integers(0, 4))
    return ssn.MultiBangCost(settings, draw(WEIGHTS)), draw(st.integers(1, 5))


SQUARE = [[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]]
# with and without more than three settings on a circle, on the border of the hull, in it
PLANES = (
    SQUARE,
    [[0.0, 0.0], *SQUARE],
    [[0.0, 0.0], [1.5, 0.0], [-0.75, 1.25], [-0.75, -1.25]],
    [[0.0, 0.0], [1.0, 0.0], [2.0, 0.0], [0.0, 1.0], [1.0, 1.5]],
    [[2.0, 1.0], [3.0, 2.5], [1.25, 2.0]],
)


@st.composite
def planar_costs(draw: Any) -> tuple[ssn.PlanarMultiBangCost, int]:
    settings = np.array(draw(st.sampled_from(PLANES)))
    return ssn.PlanarMultiBangCost(settings, draw(WEIGHTS)), 2 * draw(st.integers(1, 2))


INSIDE = st.one_of(piecewise_costs(), group_costs())


@st.composite
def sums_with_quadratic(draw: Any) -> tuple[ssn.SumWithQuadratic, int]:
    cost, n = draw(st.one_of(INSIDE, switching_costs()))
    return ssn.SumWithQuadratic(cost, draw(WEIGHTS), number_or_vector(draw, n, NUMBERS)), n


@st.composite
def scaled_costs(draw: Any) -> tuple[ssn.ScaledCost, int]:
    cost, n = draw(INSIDE)
    return ssn.ScaledCost(cost, draw(WIDTHS), draw(st.sampled_from([-1.0, 0.7, 1.5, -0.3]))), n


@st.composite
def translated_costs(draw: Any) -> tuple[ssn.TranslatedCost, int]:
    cost, n = draw(st.one_of(INSIDE, switching_costs()))
    return ssn.TranslatedCost(cost, number_or_vector(draw, n, NUMBERS)), n


@st.composite
def conjugate_costs(draw: Any) -> tuple[ssn.ConjugateCost, int]:
    """Without a weight of zero, whose conjugate is 0 at 0 only: rounding does not hit a single point."""
    family = draw(st.sampled_from(["piecewise", "huber", "hinge", "group", "switching"]))
    positive = st.sampled_from([0.25, 1.0, 2.5])
    n = draw(st.integers(1, 5))
    if family == "group":
        labels = np.array(groups(draw, n))
        inner = number_or_vector(draw, n, INNER)
        return ssn.ConjugateCost(ssn.GroupSparseCost(draw(positive), labels, inner_weights=inner)), n
    if family == "switching":
        inner = number_or_vector(draw, n, INNER)
        return ssn.ConjugateCost(ssn.SwitchingCost(draw(positive), (1, n), inner)), n
    if family == "huber":
        target = number_or_vector(draw, n, NUMBERS)
        return ssn.ConjugateCost(ssn.HuberCost(draw(positive), draw(WIDTHS), target)), n
    if family == "hinge":
        return ssn.ConjugateCost(ssn.HingeLoss(draw(st.sampled_from([-1.0, 1.0])), draw(positive))), n
    gap = draw(positive)
    lower, upper = draw(st.sampled_from([(-np.inf, np.inf), (-1.0, 2.0), (0.0, np.inf)]))
    cost = ssn.PiecewiseQuadraticCost([0.0, gap], [-1.0, 0.0, 1.0], [0.0, 0.5, 1.0], lower=lower, upper=upper)
    return ssn.ConjugateCost(cost), n


INSTANCES = {
    ssn.SparseCost: sparse_costs(),
    ssn.Bounds: bounds_costs(),
    ssn.PiecewiseQuadraticCost: piecewise_costs(),
    ssn.ElasticNetCost: elastic_net_costs(),
    ssn.HuberCost: huber_costs(),
    ssn.HingeLoss: hinge_losses(),
    ssn.QuantileLoss: quantile_losses(),
    ssn.InsensitiveLoss: insensitive_losses(),
    **sets.INSTANCES,
    ssn.GroupSparseCost: group_costs(),
    ssn.SwitchingCost: switching_costs(),
    ssn.MultiBangCost: multibang_costs(),
    ssn.PlanarMultiBangCost: planar_costs(),
    ssn.SumWithQuadratic: sums_with_quadratic(),
    ssn.ScaledCost: scaled_costs(),
    ssn.TranslatedCost: translated_costs(),
    ssn.ConjugateCost: conjugate_costs(),
    **nonconvex.INSTANCES,
    ssn.costs.ConvexEnvelope: nonconvex.envelopes(),
}

# error of the smoothed map divided by eps: each max(a, b) contributes at most 1
SMOOTHING = {
    ssn.SparseCost: 4.0,
    ssn.Bounds: 2.0,
    ssn.PiecewiseQuadraticCost: 2.0,
    ssn.ElasticNetCost: 2.0,
    ssn.HuberCost: 2.0,
    ssn.HingeLoss: 2.0,
    ssn.QuantileLoss: 2.0,
    ssn.InsensitiveLoss: 2.0,
    **sets.SMOOTHING,
    ssn.GroupSparseCost: 12.0,
    ssn.SwitchingCost: 12.0,
    ssn.MultiBangCost: 2.0,
    ssn.PlanarMultiBangCost: 8.0,
    ssn.SumWithQuadratic: 12.0,
    ssn.ScaledCost: 12.0,
    ssn.TranslatedCost: 12.0,
    ssn.ConjugateCost: 12.0,
    **nonconvex.SMOOTHING,
    ssn.costs.ConvexEnvelope: 4.0,
}


def within_bounds(cost: Any, x: np.ndarray) -> np.ndarray:
    return np.minimum(np.maximum(x, getattr(cost, "lower", -np.inf)), getattr(cost, "upper", np.inf))


def towards_the_settings(settings: np.ndarray, x: np.ndarray) -> np.ndarray:
    """For each point a mean of the nearest setting and the mean of all, in shares that vary from point to point."""
    points = x.reshape(2, -1).T
    nearest = settings[np.argmin(((points[:, None] - settings) ** 2).sum(axis=2), axis=1)]
    share = 0.5 + 0.5 * np.cos(points.sum(axis=1, keepdims=True))
    return (share * nearest + (1 - share) * settings.mean(axis=0)).T.ravel()


# a point of finite cost near x, for costs whose domain is no box: (cost, x) -> point
FEASIBLE: dict[type, Any] = {
    **sets.FEASIBLE,
    ssn.ConjugateCost: lambda cost, x: x - cost.cost.prox(x, 1.0),  # subgradients of the cost inside
    ssn.PlanarMultiBangCost: lambda cost, x: towards_the_settings(cost.settings, x),
}

# labels of eigenvalues or blocks instead of components
OTHER_LABELS = (ssn.costs.PositiveSemidefiniteCone, ssn.costs.Product)


@dataclass(frozen=True)
class Case:
    """A drawn cost with a point, a second one, a step and the means to draw more."""

    cost: Any
    v: np.ndarray
    w: np.ndarray
    step: float
    draw: Any

    @property
    def n(self) -> int:
        return self.v.size

    @property
    def separable(self) -> bool:
        return bool(getattr(self.cost, "separable", True))

    @property
    def affine(self) -> bool:
        return bool(getattr(self.cost, "piecewise_affine", True))

    @property
    def inner(self) -> np.ndarray:
        """The inner product that the proximal map belongs to."""
        return np.broadcast_to(np.asarray(getattr(self.cost, "inner_weights", 1.0), dtype=float), (self.n,))

    def dot(self, x: np.ndarray, y: np.ndarray) -> float:
        return float((self.inner * x) @ y)

    def objective(self, u: np.ndarray) -> float:
        return self.step * self.cost.value(u, self.inner) + 0.5 * self.dot(u - self.v, u - self.v)

    def bounds(self) -> tuple[np.ndarray, np.ndarray]:
        """Infinite where the cost has none."""
        lower, upper = getattr(self.cost, "lower", -np.inf), getattr(self.cost, "upper", np.inf)
        return np.broadcast_to(lower, (self.n,)), np.broadcast_to(upper, (self.n,))

    def feasible_points(self) -> list[np.ndarray]:
        """Points of finite cost, found without the proximal map where there are bounds to read."""
        candidates = [self.v, self.w, np.zeros(self.n), vector(self.draw, self.n), *self.bounds()]
        candidates = [np.where(np.isfinite(c), c, self.v) for c in candidates]
        feasible = FEASIBLE.get(kind(self.cost), within_bounds)
        points = [feasible(self.cost, c) for c in candidates]
        assert all(np.isfinite(self.cost.value(p)) for p in points)
        return points

    def generic(self) -> Case | None:
        """The case itself or one close to it, at which no component is within 0.02 of a kink; None without luck."""
        for k in range(4):
            v = self.v + 0.17 * k * np.cos(1.0 + 2.7 * k * np.arange(self.n))
            if (self.cost.margins(v, self.step) > 0.02).all():
                return replace(self, v=v)
        return None

    def kinks(self) -> list[np.ndarray]:
        """Points on kinks, found by bisection between points of different pieces."""
        found = []
        for end in (self.w, np.zeros(self.n), 3 * self.v):
            left, right = self.v, end
            start = labels(self, left)
            if np.array_equal(start, labels(self, right)):
                continue
            for _ in range(60):
                middle = 0.5 * (left + right)
                left, right = (
                    (middle, right) if np.array_equal(labels(self, middle), start) else (left, middle)
                )
            found += [left, right]
        return found

    def direction(self) -> np.ndarray:
        return np.resize(self.draw(DIRECTIONS), self.n)


def kind(cost: Any) -> type:
    """The class of the catalogue that a cost, or a wrong variant of it, belongs to."""
    return next(c for c in type(cost).__mro__ if c in INSTANCES)


def matrix_of(derivative: Any, n: int) -> np.ndarray:
    return derivative.apply(np.eye(n))


def labels(case: Case, v: np.ndarray) -> np.ndarray:
    return label_rows(case.cost, v, case.step)


def label_rows(cost: Any, v: np.ndarray, step: float) -> np.ndarray:
    """Labels (rows, n); those that belong to no component count for every component of their block."""
    if isinstance(cost, ssn.costs.Product):
        blocks = zip(cost.costs, np.split(v, np.cumsum(cost.sizes)[:-1]), strict=True)
        rows = [label_rows(part, own, step) for part, own in blocks]
        height = max(len(r) for r in rows)
        return np.concatenate([np.pad(r, ((0, height - len(r)), (0, 0))) for r in rows], axis=1)
    arrays = list(cost.pieces(v, step).values())
    return np.concatenate([a[None] if a.shape == v.shape else np.outer(a, np.ones(v.size)) for a in arrays])


# the properties


def has_the_members(case: Case) -> None:
    assert isinstance(case.cost, Cost)
    assert type(case.cost).__name__ in repr(case.cost)
    case.cost.check_size(case.n)


def prox_is_feasible(case: Case) -> None:
    u = case.cost.prox(case.v, case.step)
    assert u.shape == case.v.shape
    assert np.isfinite(case.cost.value(u))


def prox_is_optimal(case: Case) -> None:
    """(v - u)/s is a subgradient at u: s g(x) >= s g(u) + <v - u, x - u>."""
    u = case.cost.prox(case.v, case.step)
    for x in case.feasible_points():
        left = case.step * case.cost.value(x, case.inner)
        right = case.step * case.cost.value(u, case.inner) + case.dot(case.v - u, x - u)
        assert left >= right - 1e-11 * (1 + abs(left))


def prox_is_the_brute_force_minimiser(case: Case) -> None:
    """On grids along the axes (and, where components are coupled, across them): no point is better.

    Strong convexity with modulus 1 says more: values grow by half the squared distance.
    """
    u = case.cost.prox(case.v, case.step)
    lines = [np.eye(case.n)[i] for i in range(case.n)]
    if not case.separable:
        lines += [case.v - u, -u, case.direction(), case.direction()]
        lines += [np.cos(k + 1.7 * k * np.arange(case.n)) for k in (1, 2, 3)]
    fine, wide = 4e-3 * np.arange(-80, 81), np.linspace(-12, 12, 49)
    least = case.objective(u)
    for line in lines:
        at = u @ line / max(line @ line, 1e-12) if (line != 0).sum() == 1 else 0.0
        points = u + np.outer(np.concatenate([fine, wide - at]), line)
        values = np.array([case.objective(x) for x in points])
        assert least <= values.min() + 1e-12 * (1 + abs(least))
        if not case.cost.convex:
            continue
        finite = np.isfinite(values)
        growth = least + 0.5 * ((points - u) ** 2 @ case.inner)
        assert (values[finite] >= growth[finite] - 1e-9).all()


def prox_is_firmly_nonexpansive(case: Case) -> None:
    gap = case.v - case.w
    moved = case.cost.prox(case.v, case.step) - case.cost.prox(case.w, case.step)
    assert case.dot(moved, gap) >= case.dot(moved, moved) - 1e-12


def derivative_is_symmetric_within_zero_and_one(case: Case) -> None:
    derivative = case.cost.prox_derivative(case.v, case.step)
    matrix = matrix_of(derivative, case.n)
    root = np.sqrt(case.inner)
    symmetric = root[:, None] * matrix / root
    np.testing.assert_allclose(symmetric, symmetric.T, atol=0.0 if case.separable else 1e-14)
    values = np.linalg.eigvalsh(symmetric)
    rounding = 1e-14 if case.separable else 1e-13
    assert values.min() >= -rounding
    assert values.max() <= 1 + rounding
    direction = case.direction()
    np.testing.assert_allclose(derivative.apply(direction), matrix @ direction, atol=1e-14)
    if derivative.diagonal is not None:
        assert np.array_equal(np.diag(derivative.diagonal), matrix)


def derivative_is_the_difference_quotient(case: Case) -> None:
    h = 1e-5
    if case.separable:
        away = case.cost.margins(case.v, case.step) > 2 * h
        direction = np.where(away, case.direction(), 0.0)
    else:
        generic = case.generic()
        if generic is None:
            return
        case, direction = generic, case.direction()
    forward = case.cost.prox(case.v + h * direction, case.step)
    backward = case.cost.prox(case.v - h * direction, case.step)
    expected = case.cost.prox_derivative(case.v, case.step).apply(direction)
    np.testing.assert_allclose((forward - backward) / (2 * h), expected, atol=1e-8 if case.affine else 2e-6)


def derivative_is_newton_at_kinks(case: Case) -> None:
    """||P(v + h) - P(v) - D(v + h) h|| / ||h|| -> 0 at a point moved onto its nearest kinks."""
    direction = case.direction()
    if not direction.any():
        direction = np.ones(case.n)
    if case.separable:
        margins = case.cost.margins(case.v, case.step)
        shift = np.where(np.isfinite(margins), margins, 0.0)
        points = [case.v + shift, case.v - shift]
    else:
        points = case.kinks()
    for v in points:
        quotients = []
        for size in (1e-2, 1e-4, 1e-6):
            h = size * direction
            change = case.cost.prox(v + h, case.step) - case.cost.prox(v, case.step)
            rest = change - case.cost.prox_derivative(v + h, case.step).apply(h)
            quotients.append(np.linalg.norm(rest) / np.linalg.norm(h))
        assert quotients[-1] <= (1e-6 if case.affine else 1e-3), quotients


def equal_pieces_are_affine(case: Case) -> None:
    """Where the labels agree, the map is affine between the two points, with the derivative of either end."""
    if not case.affine:
        return
    for w in (case.w, case.v + 0.1 * case.direction()):
        same = (labels(case, case.v) == labels(case, w)).all(axis=0)
        if not case.separable:
            same &= same.all()
        end = np.where(same, w, case.v)
        start, stop = case.cost.prox(case.v, case.step), case.cost.prox(end, case.step)
        for t in (0.25, 0.5, 0.8):
            between = case.cost.prox((1 - t) * case.v + t * end, case.step)
            np.testing.assert_allclose(between, (1 - t) * start + t * stop, atol=1e-12)
        for at in (case.v, end):
            sloped = case.cost.prox_derivative(at, case.step).apply(end - case.v)
            np.testing.assert_allclose(sloped, stop - start, atol=1e-12)


def no_kink_within_the_margin(case: Case) -> None:
    """Coupled components: the margin is a radius in the inner product, divided by the root of the own weight."""
    margins = case.cost.margins(case.v, case.step)
    assert margins.shape == case.v.shape
    assert (margins >= 0).all()
    radius = np.where(np.isfinite(margins), margins, 50.0)
    here = labels(case, case.v)
    if kind(case.cost) in sets.INSTANCES:  # with the other labels as they are: the least is a radius for all
        root = np.sqrt(case.inner)
        radius = (radius * root).min() / root
    if not case.separable:
        for i in range(case.n):
            for line in (np.eye(case.n)[i], case.v, case.direction(), case.direction()):
                size = np.sqrt(case.dot(line, line))
                for t in (-0.999, -0.5, 0.5, 0.999):
                    h = t * radius[i] * np.sqrt(case.inner[i]) * line / size if size > 0 else line
                    assert np.array_equal(labels(case, case.v + h)[:, i], here[:, i])
        return
    for t in (-0.999, -0.5, 0.5, 0.999):
        assert np.array_equal(labels(case, case.v + t * radius), here)


def a_kink_at_the_margin(case: Case) -> None:
    """Just beyond a finite margin, on one side at least, the piece is another (a mere bound if coupled)."""
    if not case.separable:
        return
    margins = case.cost.margins(case.v, case.step)
    finite = np.isfinite(margins)
    inside, beyond = [], []
    for sign in (1.0, -1.0):
        inside.append(case.v + sign * np.where(finite, margins - 1e-7, 0.0))
        beyond.append(case.v + sign * np.where(finite, margins + 1e-7, 0.0))
    changed = np.zeros(case.n, dtype=bool)
    for near, far in zip(inside, beyond, strict=True):
        changed |= (labels(case, near) != labels(case, far)).any(axis=0)
    assert changed[finite].all()


def pieces_are_named(case: Case) -> None:
    pieces = case.cost.pieces(case.v, case.step)
    assert len(pieces) > 0
    for name, array in pieces.items():
        if kind(case.cost) not in OTHER_LABELS:
            assert array.shape == case.v.shape
        assert 0 <= array.min() <= array.max() < len(pieces.legend[name])
        assert sum(pieces.sizes()[name].values()) == array.size
    assert pieces.digest() == case.cost.pieces(case.v.copy(), case.step).digest()


def smoothing_tends_to_the_prox(case: Case) -> None:
    exact = case.cost.prox(case.v, case.step)
    for eps in (1e-1, 1e-3, 1e-6):
        smooth = case.cost.smoothed_prox(case.v, case.step, eps)
        assert np.abs(smooth - exact).max() <= SMOOTHING[kind(case.cost)] * eps + 1e-14


def smoothing_is_smooth(case: Case) -> None:
    """At eps = 0.1, unlike the map itself, one-sided difference quotients agree everywhere, kinks included."""
    if case.separable:
        margins = case.cost.margins(case.v, case.step)
        points, direction = [case.v + np.where(np.isfinite(margins), margins, 0.0)], np.ones(case.n)
    else:
        points, direction = [case.v, np.zeros(case.n), *case.kinks()], case.direction()
    h = 1e-5
    for v in points:
        middle = case.cost.smoothed_prox(v, case.step, 0.1)
        right = (case.cost.smoothed_prox(v + h * direction, case.step, 0.1) - middle) / h
        left = (middle - case.cost.smoothed_prox(v - h * direction, case.step, 0.1)) / h
        np.testing.assert_allclose(right, left, atol=1e-3)
        rise = case.inner * right * direction
        assert rise.sum() >= -1e-8
        assert rise.sum() <= case.dot(direction, direction) + 1e-8
        if case.separable:
            assert (right >= -1e-9).all() and (right <= 1 + 1e-9).all()


def smoothed_derivative_is_that_of_the_smoothed_map(case: Case) -> None:
    h, direction = 1e-5, case.direction()
    for v in (case.v, np.zeros(case.n), case.w):
        found = case.cost.smoothed_prox_derivative(v, case.step, 0.3)
        forward = case.cost.smoothed_prox(v + h * direction, case.step, 0.3)
        backward = case.cost.smoothed_prox(v - h * direction, case.step, 0.3)
        np.testing.assert_allclose((forward - backward) / (2 * h), found.apply(direction), atol=1e-7)
        matrix = matrix_of(found, case.n)
        root = np.sqrt(case.inner)
        symmetric = root[:, None] * matrix / root
        np.testing.assert_allclose(symmetric, symmetric.T, atol=1e-12)
        values = np.linalg.eigvalsh(symmetric)
        assert values.min() >= -1e-12
        assert values.max() <= 1 + 1e-12


def conjugate_satisfies_fenchel(case: Case) -> None:
    """g(x) + g*(y) >= <x, y>, with equality at y = (v - prox(v)) / s: Moreau's identity in values."""
    if not hasattr(case.cost, "conjugate_value"):
        return
    u = case.cost.prox(case.v, case.step)
    y = (case.v - u) / case.step
    dual = case.cost.conjugate_value(y, case.inner)
    if dual is None:  # not known for these parameters
        return
    total = case.cost.value(u, case.inner) + dual
    assert abs(total - case.dot(u, y)) <= 1e-10 * (1 + abs(total) + abs(dual))
    for x in case.feasible_points():
        assert case.cost.value(x, case.inner) + dual >= case.dot(x, y) - 1e-10 * (1 + abs(dual))
        for other in (y + 0.1 * case.direction(), case.w):
            right = case.dot(x, other) - 1e-9
            assert case.cost.value(x, case.inner) + case.cost.conjugate_value(other, case.inner) >= right


def multipliers_sum_to_the_subgradient(case: Case) -> None:
    u = case.cost.prox(case.v, case.step)
    subgradient = (case.v - u) / case.step
    parts = case.cost.multipliers(u, subgradient)
    np.testing.assert_allclose(sum(parts.values()), subgradient, atol=1e-12)


def multipliers_have_their_signs(case: Case) -> None:
    """Bound force: positive at the upper, negative at the lower bound, 0 between; |L1 part| <= beta."""
    u = case.cost.prox(case.v, case.step)
    parts = case.cost.multipliers(u, (case.v - u) / case.step)
    lower, upper = case.bounds()
    if "bounds" in parts:
        force = parts["bounds"]
        assert (force[u < upper] <= 1e-12).all()
        assert (force[u > lower] >= -1e-12).all()
    else:
        assert np.isinf(lower).all() and np.isinf(upper).all()
    if "sparsity" in parts and case.separable:
        beta = np.broadcast_to(case.cost.beta, u.shape)
        assert (np.abs(parts["sparsity"]) <= beta + 1e-12).all()
        np.testing.assert_allclose(parts["sparsity"][u != 0], (beta * np.sign(u))[u != 0])
    elif not parts.keys() - {"bounds"}:
        assert not np.any(case.cost.beta)


def value_is_weighted(case: Case) -> None:
    u = case.cost.prox(case.v, case.step)
    first, second = 0.5 + np.arange(case.n), np.linspace(2, 1, case.n)
    if not case.separable:  # the weight of a group is the cost's business; see the tests of each
        first, second = 0.7 * case.inner, 2.0 * case.inner
    value = case.cost.value
    np.testing.assert_allclose(value(u, 1.0 * case.inner), value(u), rtol=1e-14)
    np.testing.assert_allclose(
        value(u, first + 3 * second), value(u, first) + 3 * value(u, second), rtol=1e-13
    )


def value_is_infinite_outside(case: Case) -> None:
    for bound, sign in zip(case.bounds(), (-1, 1), strict=True):
        finite = np.isfinite(bound)
        if finite.any():
            u = case.cost.prox(case.v, case.step)
            k = int(np.argmax(finite))
            u[k] = bound[k] + sign * 1e-6
            assert case.cost.value(u) == np.inf
            assert case.cost.value(u, 0.1 * case.inner) == np.inf


def nothing_is_modified(case: Case) -> None:
    def all_results() -> list[bytes]:
        v, cost, step = case.v, case.cost, case.step
        u = cost.prox(v, step)
        results = [u, matrix_of(cost.prox_derivative(v, step), case.n), cost.margins(v, step)]
        results += [cost.smoothed_prox(v, step, 1e-2), labels(case, v), np.float64(cost.value(u))]
        results += list(cost.multipliers(u, v).values())
        return [np.asarray(r).tobytes() for r in results]

    before = case.v.tobytes()
    case.v.setflags(write=False)
    first = all_results()
    assert all_results() == first
    assert case.v.tobytes() == before
    u = case.cost.prox(case.v, case.step)
    assert not np.shares_memory(u, case.v)
    assert not any(np.shares_memory(u, a) for a in vars(case.cost).values() if isinstance(a, np.ndarray))


def wrong_size_is_refused(case: Case) -> None:
    size = getattr(case.cost, "size", None)
    if type(case.cost) in (ssn.SparseCost, ssn.Bounds):
        shapes = [np.shape(a) for a in (case.cost.beta, case.cost.lower, case.cost.upper)]
        size = case.n if any(shape not in ((), (1,)) for shape in shapes) else None
    if size is not None:
        assert size == case.n
        with pytest.raises(ssn.InputError, match=str(case.n + 1)):
            case.cost.check_size(case.n + 1)
    else:
        case.cost.check_size(case.n + 1)


PROPERTIES = (
    has_the_members,
    prox_is_feasible,
    prox_is_optimal,
    prox_is_the_brute_force_minimiser,
    prox_is_firmly_nonexpansive,
    derivative_is_symmetric_within_zero_and_one,
    derivative_is_the_difference_quotient,
    derivative_is_newton_at_kinks,
    equal_pieces_are_affine,
    no_kink_within_the_margin,
    a_kink_at_the_margin,
    pieces_are_named,
    smoothing_tends_to_the_prox,
    smoothing_is_smooth,
    smoothed_derivative_is_that_of_the_smoothed_map,
    conjugate_satisfies_fenchel,
    multipliers_sum_to_the_subgradient,
    multipliers_have_their_signs,
    value_is_weighted,
    value_is_infinite_outside,
    nothing_is_modified,
    wrong_size_is_refused,
)

# what only convex costs have, or maps without jumps
NEEDS_CONVEXITY = {
    prox_is_optimal,
    prox_is_firmly_nonexpansive,
    derivative_is_symmetric_within_zero_and_one,
    derivative_is_newton_at_kinks,
    smoothing_tends_to_the_prox,
    smoothing_is_smooth,
    smoothed_derivative_is_that_of_the_smoothed_map,
    multipliers_have_their_signs,
}

# properties a family cannot have, for a reason that stands beside it
KEEPS_OUT: dict[type, set[Any]] = {
    ssn.costs.SecondOrderCone: {wrong_size_is_refused},  # any multiple of the block: see test_cones.py
    ssn.PlanarMultiBangCost: {wrong_size_is_refused},  # any even number: see test_planar.py
    ssn.costs.Product: {multipliers_have_their_signs},  # those of the parts: see test_product.py
    **{kind: NEEDS_CONVEXITY for kind in nonconvex.INSTANCES},  # see test_nonconvex.py
}

PAIRS = [(cost, check) for cost in CATALOGUE for check in PROPERTIES if check not in KEEPS_OUT.get(cost, ())]

EXPECTED = {
    ssn.SparseCost: 22,
    ssn.Bounds: 22,
    ssn.PiecewiseQuadraticCost: 22,
    ssn.ElasticNetCost: 22,
    ssn.HuberCost: 22,
    ssn.HingeLoss: 22,
    ssn.QuantileLoss: 22,
    ssn.InsensitiveLoss: 22,
    ssn.costs.Simplex: 22,
    ssn.costs.EuclideanBall: 22,
    ssn.costs.L1Ball: 22,
    ssn.costs.HalfSpace: 22,
    ssn.costs.Hyperplane: 22,
    ssn.costs.SecondOrderCone: 21,
    ssn.costs.PositiveSemidefiniteCone: 22,
    ssn.costs.Product: 21,
    ssn.GroupSparseCost: 22,
    ssn.SwitchingCost: 22,
    ssn.MultiBangCost: 22,
    ssn.PlanarMultiBangCost: 21,
    ssn.SumWithQuadratic: 22,
    ssn.ScaledCost: 22,
    ssn.TranslatedCost: 22,
    ssn.ConjugateCost: 22,
    ssn.costs.CountCost: 14,
    ssn.costs.PowerCost: 14,
    ssn.costs.ConvexEnvelope: 22,
}


def test_every_cost_is_held_to_every_property():
    assert set(INSTANCES) == set(SMOOTHING) == set(EXPECTED) == set(CATALOGUE)
    for cost in CATALOGUE:
        assert sum(pair[0] is cost for pair in PAIRS) == EXPECTED[cost]
    assert len(PAIRS) == sum(EXPECTED.values()) == len(set(PAIRS))


@pytest.mark.parametrize(("cost", "check"), PAIRS, ids=lambda x: x.__name__)
@given(data=st.data())
def test_contract(cost, check, data):
    instance, n = data.draw(INSTANCES[cost])
    check(Case(instance, vector(data.draw, n), vector(data.draw, n), data.draw(STEPS), data.draw))
