"""PiecewiseQuadraticCost: values worked out by hand, what it contains, the selection at kinks, refused input."""

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

import ssn

INF = np.inf
V = np.linspace(-6, 6, 97)


def price() -> ssn.PiecewiseQuadraticCost:
    """Selling below 0 at 1, free up to 1, then 2 u + u^2/2 - 2.5, within [-2, 3]."""
    return ssn.PiecewiseQuadraticCost([0.0, 1.0], [1.0, 1.0, 2.0], [0.0, 0.0, 1.0], lower=-2.0, upper=3.0)


def test_values_are_continuous_and_fixed_at_one_point():
    cost = price()
    np.testing.assert_allclose(cost.terms(np.array([-2.0, 0.0, 1.0, 2.0, 3.0])), [-2, 0, 1, 4.5, 9])
    assert cost.value(np.array([3.1])) == INF
    shifted = ssn.PiecewiseQuadraticCost([0.0], [-1.0, 1.0], value_at=(2.0, 10.0))
    np.testing.assert_allclose(shifted.terms(np.array([0.0, -3.0])), [8.0, 11.0])
    assert cost.value(np.array([1.0, 2.0]), np.array([10.0, 2.0])) == 19.0


@pytest.mark.parametrize(
    ("v", "u", "slope", "piece"),
    [
        # step 1: kink at 1 (derivative from 1 to 3) holds 2 <= v <= 4; the bounds act from -1 and from 8 on
        (-1.0, -2.0, 0.0, "lower"),
        (-0.5, -1.5, 1.0, "piece 1"),
        (1.0, 0.0, 1.0, "piece 1"),  # no jump at 0: the left piece has the point
        (1.5, 0.5, 1.0, "piece 2"),
        (2.0, 1.0, 0.0, "kink 2"),
        (4.0, 1.0, 0.0, "kink 2"),
        (5.0, 1.5, 0.5, "piece 3"),
        (8.0, 3.0, 0.0, "upper"),
    ],
)
def test_worked_out_map(v, u, slope, piece):
    at = np.array([v])
    assert price().prox(at, 1.0)[0] == u
    assert price().prox_derivative(at, 1.0).diagonal[0] == slope
    assert price().pieces(at, 1.0).sizes()["control"][piece] == 1


def test_contains_l1_and_bounds_to_the_last_bit():
    sparse = ssn.SparseCost(0.75, -1.5, 2.0)
    same = ssn.PiecewiseQuadraticCost([0.0], [-0.75, 0.75], lower=-1.5, upper=2.0)
    for step in (0.5, 1.0, 3.0):
        np.testing.assert_array_equal(same.prox(V, step), sparse.prox(V, step))
        np.testing.assert_array_equal(same.margins(V, step), sparse.margins(V, step))
        np.testing.assert_array_equal(
            same.prox_derivative(V, step).diagonal, sparse.prox_derivative(V, step).diagonal
        )
    assert same.value(sparse.prox(V, 1.0)) == pytest.approx(sparse.value(sparse.prox(V, 1.0)))
    box = ssn.PiecewiseQuadraticCost([], [0.0], lower=-1.0, upper=2.0)
    np.testing.assert_array_equal(box.prox(V, 0.7), ssn.Bounds(-1.0, 2.0).prox(V, 0.7))


def test_parameters_vary_by_component():
    rng = np.random.default_rng(0)
    points = np.sort(rng.uniform(-2, 2, (6, 3)), axis=1)
    curvatures = rng.uniform(0, 2, (6, 4)) * (rng.uniform(size=(6, 4)) < 0.6)
    slopes = np.zeros((6, 4))
    for j in range(3):
        jump = rng.uniform(0, 1, 6) * (j != 1)
        slopes[:, j + 1] = slopes[:, j] + (curvatures[:, j] - curvatures[:, j + 1]) * points[:, j] + jump
    together = ssn.PiecewiseQuadraticCost(points, slopes, curvatures, lower=-3.0)
    v = rng.uniform(-5, 5, 6)
    for i in range(6):
        alone = ssn.PiecewiseQuadraticCost(points[i], slopes[i], curvatures[i], lower=-3.0)
        assert together.prox(v, 0.8)[i] == alone.prox(v[i : i + 1], 0.8)[0]

        def objective(u, alone=alone, i=i):
            return 0.8 * alone.value(np.array([u])) + 0.5 * (u - v[i]) ** 2

        found = minimize_scalar(objective, bounds=(-3, 6), method="bounded", options={"xatol": 1e-11})
        assert together.prox(v, 0.8)[i] == pytest.approx(found.x, abs=1e-5)


def test_what_the_domain_hides_need_not_be_convex():
    cost = ssn.PiecewiseQuadraticCost([-1.0, 0.0], [5.0, -1.0, 1.0], lower=-1.0)
    np.testing.assert_array_equal(cost.prox(V, 1.0), ssn.SparseCost(1.0, lower=-1.0).prox(V, 1.0))


def test_conjugate_of_the_dead_zone():
    """max(0, |u| - 1) has the conjugate |y| on [-1, 1]."""
    cost = ssn.PiecewiseQuadraticCost([-1.0, 1.0], [-1.0, 0.0, 1.0])
    assert cost.conjugate_value(np.array([0.5])) == 0.5
    assert cost.conjugate_value(np.array([-1.0])) == 1.0
    assert cost.conjugate_value(np.array([1.1])) == INF


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.PiecewiseQuadraticCost([0.0], [1.0, -1.0]), "not convex: .* breakpoint 0, from 1 to -1"),
        (lambda: ssn.PiecewiseQuadraticCost([0.0], [[0, 1], [1, 0]]), "breakpoint 0 of component 1"),
        (lambda: ssn.PiecewiseQuadraticCost([0.0], [1.0]), "1 breakpoints make 2 pieces, but slopes has 1"),
        (lambda: ssn.PiecewiseQuadraticCost([0.0], [0, 1], [0.0]), "but curvatures has 1"),
        (lambda: ssn.PiecewiseQuadraticCost([1.0, 1.0], [0, 1, 2]), "breakpoints must increase"),
        (
            lambda: ssn.PiecewiseQuadraticCost([0.0], [0, 1], [0, -1]),
            "curvatures must not be negative.*index 1",
        ),
        (lambda: ssn.PiecewiseQuadraticCost([np.nan], [0, 1]), r"breakpoints\[0\] is nan"),
        (lambda: ssn.PiecewiseQuadraticCost([], [0], lower=1, upper=0), "no value lies between"),
        (lambda: ssn.PiecewiseQuadraticCost([], [0], lower=1, value_at=(0, 0)), "point of the domain"),
        (lambda: ssn.PiecewiseQuadraticCost([[0], [1]], [[0, 1]] * 3), "do not fit together"),
        (lambda: ssn.PiecewiseQuadraticCost(0.0, [0, 1]), r"breakpoints must have shape \(pieces,\)"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
