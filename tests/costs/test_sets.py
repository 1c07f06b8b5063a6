"""Simplex, balls and half-spaces: values worked out by hand, brute force in the plane, weights, refused input."""

import numpy as np
import pytest

import ssn
from ssn.costs.convex_set import THRESHOLD_STEPS, threshold
from tests.costs import sets

RNG = np.random.default_rng(5)


@pytest.mark.parametrize(
    ("cost", "v", "u", "labels"),
    [
        (ssn.Simplex(1.0), [1.0, 0.5, -3.0], [0.75, 0.25, 0.0], [1, 1, 0]),
        (ssn.Simplex(1.0), [2.0, 1.0, 0.0], [1.0, 0.0, 0.0], [1, 0, 0]),  # v_2 = t: zero
        (ssn.Simplex(3.0, [1.0, 2.0]), [1.0, 1.0], [1.0, 1.0], [1, 1]),
        (ssn.Simplex(3.0, [1.0, 2.0]), [4.0, 1.0], [3.0, 0.0], [1, 0]),
        (ssn.Simplex(2.0), [1e9 + 1.0, 1e9, 0.0], [1.5, 0.5, 0.0], [1, 1, 0]),  # no digit lost to the offset
        (ssn.EuclideanBall(5.0), [6.0, 8.0], [3.0, 4.0], [1, 1]),
        (ssn.EuclideanBall(5.0), [3.0, 3.0], [3.0, 3.0], [0, 0]),
        (ssn.EuclideanBall(5.0), [3.0, 4.0], [3.0, 4.0], [1, 1]),  # on the sphere: the piece outside
        (ssn.EuclideanBall(1.0, [1.0, 0.0]), [4.0, 4.0], [1.6, 0.8], [1, 1]),
        (ssn.EuclideanBall(2.0, weights=4.0), [0.0, 8.0], [0.0, 1.0], [1, 1]),
        (ssn.L1Ball(2.0), [3.0, -2.0, 0.25], [1.5, -0.5, 0.0], [3, 1, 2]),
        (ssn.L1Ball(2.0), [0.5, -0.5, 0.25], [0.5, -0.5, 0.25], [0, 0, 0]),
        (ssn.L1Ball(1.0), [0.75, -0.25, 0.0], [0.75, -0.25, 0.0], [3, 1, 2]),  # on the sphere
        (ssn.L1Ball(2.0, [1.0, 2.0]), [3.0, -2.0], [4 / 3, -1 / 3], [3, 1]),
        (ssn.L1Ball(2.0), [1e9 + 1.0, -1e9], [1.5, -0.5], [3, 1]),
        (ssn.HalfSpace([3.0, 4.0], 5.0), [3.0, 4.0], [0.6, 0.8], [1, 1]),
        (ssn.HalfSpace([3.0, 4.0], 5.0), [0.0, 1.0], [0.0, 1.0], [0, 0]),
        (ssn.HalfSpace([1.0, 1.0], 0.0, [1.0, 2.0]), [2.0, 1.0], [0.0, 0.0], [1, 1]),
        (ssn.Hyperplane([1.0, 1.0], 4.0), [0.0, 0.0], [2.0, 2.0], [0, 0]),
    ],
)
def test_worked_out_values(cost, v, u, labels):
    v = np.array(v)
    np.testing.assert_allclose(cost.prox(v, 0.3), u, atol=1e-12)
    np.testing.assert_array_equal(cost.pieces(v, 0.3)["control"], labels)
    assert cost.value(cost.prox(v, 7.0)) == 0.0


def test_worked_out_derivatives():
    simplex = ssn.Simplex(3.0, [1.0, 2.0, 1.0]).prox_derivative(np.array([1.0, 1.0, -9.0]), 1.0)
    expected = np.array([[2, -2, 0], [-1, 1, 0], [0, 0, 0]]) / 3
    np.testing.assert_allclose(simplex.apply(np.eye(3)), expected, atol=1e-15)
    ball = ssn.EuclideanBall(5.0).prox_derivative(np.array([0.0, 10.0]), 1.0)
    np.testing.assert_allclose(ball.apply(np.eye(2)), [[0.5, 0.0], [0.0, 0.0]], atol=1e-15)
    inside = ssn.EuclideanBall(5.0).prox_derivative(np.array([0.0, 1.0]), 1.0)
    np.testing.assert_array_equal(inside.diagonal, [1.0, 1.0])
    assert ball.diagonal is None


@pytest.mark.parametrize("family", sorted(sets.INSTANCES, key=lambda c: c.__name__), ids=lambda c: c.__name__)
def test_brute_force_in_low_dimension(family):
    """The nearest of 20000 points of the set is not nearer than the projection, and lies close to it."""
    makers = {
        ssn.Simplex: lambda: ssn.Simplex(2.0, [1.0, 0.5, 2.0]),
        ssn.EuclideanBall: lambda: ssn.EuclideanBall(1.5, [0.3, -0.4], [1.0, 2.0]),
        ssn.L1Ball: lambda: ssn.L1Ball(2.0, [1.0, 3.0]),
        ssn.HalfSpace: lambda: ssn.HalfSpace([1.0, -2.0], -0.5, [1.0, 3.0]),
        ssn.Hyperplane: lambda: ssn.Hyperplane([1.0, -2.0], 0.5, [1.0, 3.0]),
        ssn.SecondOrderCone: lambda: ssn.SecondOrderCone(3),
        ssn.PositiveSemidefiniteCone: lambda: ssn.PositiveSemidefiniteCone(2),
        ssn.Product: lambda: ssn.Product([ssn.L1Ball(1.0), ssn.Bounds(-1.0, 0.5)], [2, 1]),
    }
    cost = makers[family]()
    n = cost.size or 3
    w = np.broadcast_to(cost.inner_weights, (n,))
    rng = np.random.default_rng(0)
    for _ in range(4):
        v = rng.uniform(-2, 2, n)
        u = cost.prox(v, 1.0)
        scale = 3.0 * 10.0 ** -rng.integers(0, 3, 20000)
        points = [
            sets.a_point(cost, u + s * d) for s, d in zip(scale, rng.standard_normal((20000, n)), strict=True)
        ]
        distance = np.sqrt(((np.array(points) - v) ** 2 * w).sum(axis=1))
        best = int(np.argmin(distance))
        least = float(np.sqrt(((u - v) ** 2 * w).sum()))
        assert distance[best] >= least - 1e-12
        assert distance[best] <= least + 0.02
        assert np.abs(points[best] - u).max() <= 0.35  # distance grows quadratically from u


@pytest.mark.parametrize(
    "cost",
    [
        ssn.Simplex(2.0, [1.0, 0.5, 2.0, 1.0]),
        ssn.EuclideanBall(1.5, 0.2, [1.0, 2.0, 0.5, 1.0]),
        ssn.L1Ball(2.0, [1.0, 3.0, 0.5, 1.0]),
        ssn.HalfSpace([1.0, -2.0, 0.5, 0.0], 0.3, [1.0, 3.0, 2.0, 1.0]),
        ssn.SecondOrderCone(4),
        ssn.SecondOrderCone(2),
    ],
    ids=repr,
)
def test_the_least_margin_is_the_distance_to_a_kink(cost):
    """Nearer there is none (random and worst directions), and a little further there is one."""
    rng = np.random.default_rng(1)
    w = np.broadcast_to(cost.inner_weights, (4,))
    for _ in range(30):
        v = 1.5 * rng.standard_normal(4)
        radius = float((cost.margins(v, 1.0) * np.sqrt(w)).min())
        here = cost.pieces(v, 1.0).digest()
        directions = rng.standard_normal((4000, 4))
        directions /= np.sqrt((directions**2 * w).sum(axis=1))[:, None]
        assert all(cost.pieces(v + 0.9999 * radius * d, 1.0).digest() == here for d in directions[:500])
        assert any(cost.pieces(v + 1.3 * radius * d, 1.0).digest() != here for d in directions)


@pytest.mark.parametrize(
    ("cost", "inside", "outside"),
    [
        (ssn.Simplex(1.0), [0.5, 0.5], [0.5, 0.5 + 1e-6]),
        (ssn.Simplex(1.0), [1.0, 0.0], [1.0 + 1e-6, -1e-6]),
        (ssn.EuclideanBall(5.0), [3.0, 4.0], [3.0, 4.0 + 1e-6]),
        (ssn.L1Ball(2.0), [1.0, -1.0], [1.0, -1.0 - 1e-6]),
        (ssn.HalfSpace([1.0, 1.0], 1.0), [0.5, 0.5], [0.5, 0.5 + 1e-6]),
        (ssn.Hyperplane([1.0, 1.0], 1.0), [0.5, 0.5], [0.5, 0.5 - 1e-6]),
        (ssn.SecondOrderCone(3), [5.0, 3.0, 4.0], [5.0 - 1e-6, 3.0, 4.0]),
        (ssn.PositiveSemidefiniteCone(2), [1.0, np.sqrt(2.0), 1.0], [1.0, np.sqrt(2.0), 1.0 - 1e-6]),
    ],
)
def test_value_is_zero_inside_and_infinite_outside(cost, inside, outside):
    for weights in (None, np.full(len(inside), 0.5)):
        assert cost.value(np.array(inside), weights) == 0.0
        assert cost.value(np.array(outside), weights) == np.inf


def test_the_threshold_by_sorting_where_newton_steps_drop_one_component_each():
    z = np.concatenate([-(2.0 ** np.arange(3 * THRESHOLD_STEPS))[::-1], [0.0]])
    for w in (np.ones(()), np.linspace(1.0, 2.0, z.size)):
        for total in (1e-3, 1.0, 1e5, 1e20):
            t = threshold(z, w, total)
            assert np.sum(w * np.maximum(z - t, 0.0)) == pytest.approx(total, rel=1e-12)


def test_the_threshold_agrees_with_sorting():
    for n in (1, 2, 10, 1000):
        v = RNG.standard_normal(n)
        for total in (1e-6, 1.0, 30.0):
            ordered = np.sort(v)[::-1]
            candidates = (np.cumsum(ordered) - total) / np.arange(1, n + 1)
            expected = candidates[np.flatnonzero(ordered > candidates)[-1]]
            assert threshold(v, np.ones(()), total) == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_weights_of_a_problem_must_suit_the_set():
    part = ssn.LeastSquares(np.eye(3), np.array([1.0, 2.0, 3.0]))
    mass = np.array([0.5, 1.0, 0.5])
    for make in (
        ssn.Simplex,
        ssn.EuclideanBall,
        ssn.L1Ball,
        lambda r, weights=None: ssn.HalfSpace(mass, r, weights),
    ):
        with pytest.raises(ssn.InputError, match="not proportional"):
            ssn.CompositeProblem(smooth=part, cost=make(1.0), weights=mass)
        for weights in (mass, 3.0 * mass):
            ssn.CompositeProblem(smooth=part, cost=make(1.0, weights=mass), weights=weights)
        ssn.CompositeProblem(smooth=part, cost=make(1.0), weights=np.full(3, 2.0))
    with pytest.raises(ssn.InputError, match="not proportional"):
        ssn.ControlProblem(
            state=ssn.SteadyState(np.eye(3)), state_mass=np.ones(3), target=np.ones(3), control_weight=1.0,
            control_mass=mass, cost=ssn.L1Ball(1.0),
        )  # fmt: skip


def test_the_support_function_in_the_weights_of_a_problem():
    own = np.array([0.5, 1.0, 0.5])
    y = np.array([1.0, -3.0, 2.0])
    for cost in (ssn.Simplex(2.0, own), ssn.L1Ball(2.0, own), ssn.EuclideanBall(2.0, 0.1, own)):
        assert cost.conjugate_value(y, 3.0 * own) == pytest.approx(3.0 * cost.conjugate_value(y))
        with pytest.raises(ssn.InputError, match="not proportional"):
            cost.conjugate_value(y, np.ones(3))


def test_a_budget_in_a_control_problem():
    """Weighted: the solution and its multiplier do not depend on how the unknowns are split."""
    found = []
    for split in (1, 4):
        x = np.repeat(np.array([1.0, 2.0, 0.2]), split)
        mass = np.full(3 * split, 1.0 / split)
        problem = ssn.CompositeProblem(
            smooth=ssn.Quadratic(np.diag(mass), mass * x), cost=ssn.Simplex(1.0, mass), weights=mass
        )
        solution = ssn.solve(problem).require()
        found.append(solution.x[::split])
        # u - x is orthogonal to the simplex: one number where u > 0, larger elsewhere
        normal = solution.multipliers["normal"]
        assert np.ptp(normal[solution.x > 0]) <= 1e-9
        assert normal[solution.x == 0].max() <= normal[solution.x > 0].min() + 1e-9
    np.testing.assert_allclose(found[0], [0.0, 1.0, 0.0], atol=1e-9)
    np.testing.assert_allclose(found[0], found[1], atol=1e-9)


@pytest.mark.parametrize("cost", [ssn.Simplex(1.0), ssn.L1Ball(1.0), ssn.EuclideanBall(1.0)], ids=repr)
def test_in_a_traced_function(cost):
    h = RNG.standard_normal((6, 6))
    h = h @ h.T + np.eye(6)
    b = 3 * RNG.standard_normal(6)
    step = 1.0 / np.linalg.norm(h, 2)

    def residual(u):
        return u - cost.prox(u - step * (h @ u - b), step)

    traced = ssn.solve(residual, start=np.zeros(6)).require()
    other = ssn.solve(ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=cost)).require()
    np.testing.assert_allclose(traced.x, other.x, atol=1e-7)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.Simplex(0.0), "total must be positive"),
        (lambda: ssn.Simplex(1.0, [1.0, 0.0]), "weights must be positive"),
        (lambda: ssn.Simplex(1.0, [1.0, np.nan]), r"weights\[1\] is nan"),
        (lambda: ssn.EuclideanBall(-1.0), "radius must be positive"),
        (lambda: ssn.EuclideanBall(1.0, [0.0, np.inf]), r"centre\[1\] is inf"),
        (lambda: ssn.EuclideanBall(1.0, [0.0, 1.0], [1.0, 1.0, 1.0]), r"weights has shape \(3,\)"),
        (lambda: ssn.EuclideanBall(1.0, np.zeros((2, 2))), "centre has shape"),
        (lambda: ssn.L1Ball(np.inf), "radius is inf"),
        (lambda: ssn.HalfSpace([0.0, 0.0], 1.0), "normal is zero"),
        (lambda: ssn.HalfSpace(1.0, 1.0), r"normal must have 1 dimension"),
        (lambda: ssn.HalfSpace([1.0, 0.0], np.nan), "level is nan"),
        (lambda: ssn.Hyperplane([1.0, 2.0], 0.0, [1.0]), "weights has shape"),
        (lambda: ssn.Simplex(1.0, [1.0, 2.0]).check_size(3), "3 unknowns"),
        (lambda: ssn.HalfSpace([1.0, 2.0], 1.0).check_size(3), "3 unknowns"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
