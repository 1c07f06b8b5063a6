"""The contract of every cost: each property of PROPERTIES for each class of `ssn.costs.CATALOGUE`.

A class needs an entry in INSTANCES (how to draw one) and in EXPECTED (how many properties it is held to).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import ssn
from ssn.costs import CATALOGUE
from ssn.protocols import Cost

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


INSTANCES = {ssn.SparseCost: sparse_costs(), ssn.Bounds: bounds_costs()}

# error of the smoothed map divided by eps: each max(a, b) contributes at most 1
SMOOTHING = {ssn.SparseCost: 4.0, ssn.Bounds: 2.0}


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

    def feasible_points(self) -> list[np.ndarray]:
        """Points of finite cost, found without the proximal map where there are bounds to read."""
        lower, upper = (
            np.broadcast_to(self.cost.lower, self.v.shape),
            np.broadcast_to(self.cost.upper, self.v.shape),
        )
        candidates = [self.v, self.w, np.zeros(self.n), vector(self.draw, self.n), lower, upper]
        candidates = [np.where(np.isfinite(c), c, self.v) for c in candidates]
        points = [np.minimum(np.maximum(c, lower), upper) for c in candidates]
        assert all(np.isfinite(self.cost.value(p)) for p in points)
        return points

    def direction(self) -> np.ndarray:
        return np.array(self.draw(DIRECTIONS))[: self.n]


def matrix_of(derivative: Any, n: int) -> np.ndarray:
    return derivative.apply(np.eye(n))


def labels(case: Case, v: np.ndarray) -> np.ndarray:
    pieces = case.cost.pieces(v, case.step)
    return np.stack([pieces[name] for name in pieces])


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
        left = case.step * case.cost.value(x)
        right = case.step * case.cost.value(u) + (case.v - u) @ (x - u)
        assert left >= right - 1e-11 * (1 + abs(left))


def prox_is_the_brute_force_minimiser(case: Case) -> None:
    """One component at a time on a grid: no better value, and the best grid point is a neighbour."""
    u = case.cost.prox(case.v, case.step)
    for i in range(case.n):
        spacing = 1e-3
        grid = u[i] + spacing * np.arange(-400, 401)
        grid = np.concatenate([grid, np.linspace(-12, 12, 97)])

        def objective(x: float, i: int = i) -> float:
            moved = u.copy()
            moved[i] = x
            return case.step * case.cost.value(moved) + 0.5 * float(np.sum((moved - case.v) ** 2))

        values = np.array([objective(x) for x in grid])
        assert objective(u[i]) <= values.min() + 1e-12
        # strong convexity with modulus 1: values grow by half the squared distance
        finite = np.isfinite(values)
        growth = objective(u[i]) + 0.5 * (grid - u[i]) ** 2
        assert (values[finite] >= growth[finite] - 1e-9).all()


def prox_is_firmly_nonexpansive(case: Case) -> None:
    gap = case.v - case.w
    moved = case.cost.prox(case.v, case.step) - case.cost.prox(case.w, case.step)
    assert moved @ gap >= moved @ moved - 1e-12


def derivative_is_symmetric_within_zero_and_one(case: Case) -> None:
    derivative = case.cost.prox_derivative(case.v, case.step)
    matrix = matrix_of(derivative, case.n)
    assert np.array_equal(matrix, matrix.T)
    values = np.linalg.eigvalsh(matrix)
    assert values.min() >= -1e-14
    assert values.max() <= 1 + 1e-14
    direction = case.direction()
    np.testing.assert_allclose(derivative.apply(direction), matrix @ direction, atol=1e-14)
    if derivative.diagonal is not None:
        assert np.array_equal(np.diag(derivative.diagonal), matrix)


def derivative_is_the_difference_quotient(case: Case) -> None:
    h = 1e-5
    away = case.cost.margins(case.v, case.step) > 2 * h
    direction = np.where(away, case.direction(), 0.0)
    forward = case.cost.prox(case.v + h * direction, case.step)
    backward = case.cost.prox(case.v - h * direction, case.step)
    expected = case.cost.prox_derivative(case.v, case.step).apply(direction)
    np.testing.assert_allclose((forward - backward) / (2 * h), expected, atol=1e-8)


def derivative_is_newton_at_kinks(case: Case) -> None:
    """||P(v + h) - P(v) - D(v + h) h|| / ||h|| -> 0 at a point moved onto its nearest kinks."""
    margins = case.cost.margins(case.v, case.step)
    shift = np.where(np.isfinite(margins), margins, 0.0)
    direction = case.direction()
    if not direction.any():
        direction = np.ones(case.n)
    for sign in (1.0, -1.0):
        v = case.v + sign * shift
        quotients = []
        for size in (1e-2, 1e-4, 1e-6):
            h = size * direction
            change = case.cost.prox(v + h, case.step) - case.cost.prox(v, case.step)
            rest = change - case.cost.prox_derivative(v + h, case.step).apply(h)
            quotients.append(np.linalg.norm(rest) / np.linalg.norm(h))
        assert quotients[-1] <= 1e-6, quotients


def equal_pieces_are_affine(case: Case) -> None:
    """Where the labels agree, the map is affine between the two points, with the derivative of either end."""
    for w in (case.w, case.v + 0.1 * case.direction()):
        same = (labels(case, case.v) == labels(case, w)).all(axis=0)
        end = np.where(same, w, case.v)
        start, stop = case.cost.prox(case.v, case.step), case.cost.prox(end, case.step)
        for t in (0.25, 0.5, 0.8):
            between = case.cost.prox((1 - t) * case.v + t * end, case.step)
            np.testing.assert_allclose(between, (1 - t) * start + t * stop, atol=1e-12)
        for at in (case.v, end):
            sloped = case.cost.prox_derivative(at, case.step).apply(end - case.v)
            np.testing.assert_allclose(sloped, stop - start, atol=1e-12)


def no_kink_within_the_margin(case: Case) -> None:
    margins = case.cost.margins(case.v, case.step)
    assert (margins >= 0).all()
    radius = np.where(np.isfinite(margins), margins, 50.0)
    here = labels(case, case.v)
    for t in (-0.999, -0.5, 0.5, 0.999):
        assert np.array_equal(labels(case, case.v + t * radius), here)


def a_kink_at_the_margin(case: Case) -> None:
    """Just beyond a finite margin, on one side at least, the piece or the slope is another."""
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
        assert array.shape == case.v.shape
        assert 0 <= array.min() <= array.max() < len(pieces.legend[name])
        assert sum(pieces.sizes()[name].values()) == case.n
    assert pieces.digest() == case.cost.pieces(case.v.copy(), case.step).digest()


def smoothing_tends_to_the_prox(case: Case) -> None:
    exact = case.cost.prox(case.v, case.step)
    for eps in (1e-1, 1e-3, 1e-6):
        smooth = case.cost.smoothed_prox(case.v, case.step, eps)
        assert np.abs(smooth - exact).max() <= SMOOTHING[type(case.cost)] * eps + 1e-14


def smoothing_is_smooth(case: Case) -> None:
    """At eps = 0.1, unlike the map itself, one-sided difference quotients agree everywhere, kinks included."""
    margins = case.cost.margins(case.v, case.step)
    v = case.v + np.where(np.isfinite(margins), margins, 0.0)
    h, middle = 1e-5, case.cost.smoothed_prox(v, case.step, 0.1)
    right = (case.cost.smoothed_prox(v + h, case.step, 0.1) - middle) / h
    left = (middle - case.cost.smoothed_prox(v - h, case.step, 0.1)) / h
    np.testing.assert_allclose(right, left, atol=1e-3)
    assert (right >= -1e-9).all() and (right <= 1 + 1e-9).all()


def multipliers_sum_to_the_subgradient(case: Case) -> None:
    u = case.cost.prox(case.v, case.step)
    subgradient = (case.v - u) / case.step
    parts = case.cost.multipliers(u, subgradient)
    np.testing.assert_allclose(sum(parts.values()), subgradient, atol=1e-12)


def multipliers_have_their_signs(case: Case) -> None:
    """Bound force: positive at the upper, negative at the lower bound, 0 between; |L1 part| <= beta."""
    u = case.cost.prox(case.v, case.step)
    parts = case.cost.multipliers(u, (case.v - u) / case.step)
    force = parts["bounds"]
    assert (force[u < case.cost.upper] <= 1e-12).all()
    assert (force[u > case.cost.lower] >= -1e-12).all()
    if "sparsity" in parts:
        beta = np.broadcast_to(case.cost.beta, u.shape)
        assert (np.abs(parts["sparsity"]) <= beta + 1e-12).all()
        np.testing.assert_allclose(parts["sparsity"][u != 0], (beta * np.sign(u))[u != 0])
    else:
        assert not np.any(case.cost.beta)


def value_is_weighted(case: Case) -> None:
    u = case.cost.prox(case.v, case.step)
    first, second = 0.5 + np.arange(case.n), np.linspace(2, 1, case.n)
    value = case.cost.value
    np.testing.assert_allclose(value(u, np.ones(case.n)), value(u), rtol=1e-14)
    np.testing.assert_allclose(
        value(u, first + 3 * second), value(u, first) + 3 * value(u, second), rtol=1e-13
    )


def value_is_infinite_outside(case: Case) -> None:
    for bound, sign in ((case.cost.lower, -1), (case.cost.upper, 1)):
        finite = np.isfinite(np.broadcast_to(bound, case.v.shape))
        if finite.any():
            u = case.cost.prox(case.v, case.step)
            k = int(np.argmax(finite))
            u[k] = np.broadcast_to(bound, case.v.shape)[k] + sign * 1e-6
            assert case.cost.value(u) == np.inf
            assert case.cost.value(u, np.full(case.n, 0.1)) == np.inf


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
    assert not any(np.shares_memory(u, bound) for bound in (case.cost.lower, case.cost.upper))


def wrong_size_is_refused(case: Case) -> None:
    shapes = [np.shape(a) for a in (case.cost.beta, case.cost.lower, case.cost.upper)]
    if any(shape not in ((), (1,)) for shape in shapes):
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
    multipliers_sum_to_the_subgradient,
    multipliers_have_their_signs,
    value_is_weighted,
    value_is_infinite_outside,
    nothing_is_modified,
    wrong_size_is_refused,
)

PAIRS = [(cost, check) for cost in CATALOGUE for check in PROPERTIES]

EXPECTED = {ssn.SparseCost: 20, ssn.Bounds: 20}


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
