"""SparseCost and Bounds: values worked out by hand, the documented selection at kinks, refused input."""

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

import ssn

INF = np.inf


@pytest.mark.parametrize(
    ("beta", "lower", "upper", "v", "u", "slope", "piece"),
    [
        # threshold beta * step = 2 * 0.5 = 1
        (2.0, -INF, INF, 3.0, 2.0, 1, "positive"),
        (2.0, -INF, INF, -3.0, -2.0, 1, "negative"),
        (2.0, -INF, INF, 0.9, 0.0, 0, "zero"),
        (2.0, -INF, INF, 1.0, 0.0, 0, "zero"),  # at the kink: the constant piece
        (2.0, -INF, INF, -1.0, 0.0, 0, "zero"),
        (2.0, -1.5, 1.5, 2.5, 1.5, 0, "upper"),  # at the kink
        (2.0, -1.5, 1.5, 2.4, 1.4, 1, "positive"),
        (2.0, -1.5, 1.5, -9.0, -1.5, 0, "lower"),
        (2.0, 0.0, 4.0, 0.5, 0.0, 0, "lower"),
        (2.0, 0.0, 4.0, 1.5, 0.5, 1, "positive"),
        (2.0, 1.0, 4.0, 1.5, 1.0, 0, "lower"),  # bounds that exclude zero
        (2.0, 1.0, 4.0, 2.5, 1.5, 1, "positive"),
        (2.0, -4.0, -1.0, 0.0, -1.0, 0, "upper"),
        (2.0, -4.0, -1.0, -2.75, -1.75, 1, "negative"),
        (0.0, -1.0, 1.0, 0.0, 0.0, 1, "free"),  # no weight: zero is no kink
        (0.0, -1.0, 1.0, 1.0, 1.0, 0, "upper"),
    ],
)
def test_worked_out_values(beta, lower, upper, v, u, slope, piece):
    cost, at = ssn.SparseCost(beta, lower, upper), np.array([v])
    assert cost.prox(at, 0.5)[0] == u
    assert cost.prox_derivative(at, 0.5).diagonal[0] == slope
    assert cost.pieces(at, 0.5).sizes()["control"][piece] == 1


def test_parameters_differ_by_component():
    cost = ssn.SparseCost([0.0, 1.0, 2.0], lower=[-1.0, -INF, 0.5], upper=[1.0, 0.25, INF])
    v = np.array([3.0, 3.0, 0.0])
    np.testing.assert_array_equal(cost.prox(v, 1.0), [1.0, 0.25, 0.5])
    assert cost.value(np.array([1.0, -2.0, 3.0])) == 8.0
    assert cost.value(np.array([1.0, -2.0, 3.0]), np.array([1.0, 10.0, 100.0])) == 620.0


def test_a_bound_is_a_sparse_cost_without_weight():
    v = np.linspace(-3, 3, 25)
    bounds, sparse = ssn.Bounds(-1.0, 2.0), ssn.SparseCost(0.0, -1.0, 2.0)
    np.testing.assert_array_equal(bounds.prox(v, 0.7), sparse.prox(v, 0.7))
    np.testing.assert_array_equal(bounds.margins(v, 0.7), sparse.margins(v, 0.7))
    assert bounds.pieces(v, 0.7).sizes() == {"control": {"lower": 9, "free": 11, "upper": 5}}


def test_against_a_scalar_minimiser():
    rng = np.random.default_rng(1)
    for _ in range(40):
        beta, step = rng.uniform(0, 2), rng.uniform(0.1, 3)
        lower = rng.uniform(-3, 1)
        upper = lower + rng.uniform(0.1, 4)
        v = rng.uniform(-6, 6)
        found = minimize_scalar(
            lambda u, b=beta, s=step, v=v: s * b * abs(u) + 0.5 * (u - v) ** 2,
            bounds=(lower, upper),
            method="bounded",
            options={"xatol": 1e-10},
        ).x
        assert ssn.SparseCost(beta, lower, upper).prox(np.array([v]), step)[0] == pytest.approx(
            found, abs=1e-6
        )


@pytest.mark.parametrize("fixed", [0.0, 2.0, -1.5])
def test_equal_bounds_fix_a_component(fixed):
    cost = ssn.SparseCost(1.0, fixed, fixed)
    v = np.linspace(-4, 4, 17)
    np.testing.assert_array_equal(cost.prox(v, 1.0), np.full(17, fixed))
    assert not cost.prox_derivative(v, 1.0).diagonal.any()
    # margins and labels agree about where the piece changes
    for point, margin in zip(v, cost.margins(v, 1.0), strict=True):
        reach = min(margin, 50.0) * 0.999
        labels = cost.pieces(np.array([point - reach, point, point + reach]), 1.0)["control"]
        assert len(set(labels.tolist())) == 1


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.SparseCost(-1.0), r"beta must not be negative"),
        (lambda: ssn.SparseCost([1.0, 2.0, -3.0]), r"beta must not be negative, got -3\.0 at index \(2,\)"),
        (lambda: ssn.SparseCost([1.0, np.nan]), r"beta\[1\] is nan"),
        (lambda: ssn.SparseCost(np.inf), r"beta is inf"),
        (lambda: ssn.SparseCost("much"), r"beta must be an array of real numbers"),
        (lambda: ssn.SparseCost(1j), r"beta must be an array of real numbers"),
        (
            lambda: ssn.SparseCost(1.0, lower=[0.0, 2.0], upper=[1.0, 1.0]),
            r"lower 2\.0 > upper 1\.0 at index 1",
        ),
        (lambda: ssn.SparseCost(1.0, lower=1.0, upper=0.0), r"lower 1\.0 > upper 0\.0"),
        (lambda: ssn.SparseCost(1.0, lower=[0.0, 0.0], upper=[1.0, 1.0, 1.0]), r"do not broadcast"),
        (lambda: ssn.SparseCost([1.0, 1.0], lower=[0.0, 0.0, 0.0]), r"do not broadcast"),
        (lambda: ssn.Bounds([0.0, np.nan], 1.0), r"lower\[1\] is nan"),
        (lambda: ssn.Bounds(0.0, [1.0, 1.0, np.nan]), r"upper\[2\] is nan"),
        (lambda: ssn.Bounds(np.inf, np.inf), r"lower is \+inf"),
        (lambda: ssn.Bounds(-np.inf, -np.inf), r"upper is -inf"),
        (lambda: ssn.Bounds([[0.0, 5.0]], [[1.0, 1.0]]), r"lower 5\.0 > upper 1\.0 at index 0, 1"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()


def test_parameters_are_copied_and_frozen():
    lower = np.array([-1.0, -2.0])
    cost = ssn.Bounds(lower, 3.0)
    lower[0] = 99.0
    assert cost.prox(np.array([-9.0, -9.0]), 1.0).tolist() == [-1.0, -2.0]
    with pytest.raises(ValueError, match="read-only"):
        cost.lower[0] = 5.0
