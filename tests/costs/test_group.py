"""GroupSparseCost: groups, inner products, closed forms, bounds against a general method, refused input."""

import time

import numpy as np
import pytest
from scipy.optimize import minimize

import ssn

INF = np.inf


def test_two_components_by_hand():
    cost = ssn.GroupSparseCost(2.0, [[0, 1], [2]])
    v = np.array([3.0, 4.0, -1.0])  # norms 5 and 1, threshold 1
    np.testing.assert_allclose(cost.prox(v, 0.5), [2.4, 3.2, 0.0])
    assert cost.pieces(v, 0.5).sizes()["control"] == {"zero": 1, "nonzero": 2, "lower": 0, "upper": 0}
    matrix = cost.prox_derivative(v, 0.5).apply(np.eye(3))
    unit = np.array([0.6, 0.8])
    expected = np.zeros((3, 3))
    expected[:2, :2] = 0.8 * np.eye(2) + 0.2 * np.outer(unit, unit)
    np.testing.assert_allclose(
        matrix, expected, atol=1e-15
    )  # the group of norm 1 is at its kink: derivative 0
    np.testing.assert_allclose(cost.margins(v, 0.5), [4.0, 4.0, 0.0])
    assert cost.value(v) == 12.0


def test_groups_may_be_given_in_three_ways():
    v = np.random.default_rng(0).standard_normal(12)
    along = ssn.GroupSparseCost(0.7, shape=(3, 4), axis=0)
    labels = ssn.GroupSparseCost(0.7, np.tile(np.arange(4), 3))
    listed = ssn.GroupSparseCost(0.7, [np.arange(k, 12, 4) for k in range(4)])
    np.testing.assert_array_equal(along.prox(v, 1.0), labels.prox(v, 1.0))
    np.testing.assert_array_equal(along.prox(v, 1.0), listed.prox(v, 1.0))
    other = ssn.GroupSparseCost(0.7, shape=(3, 4), axis=1)
    np.testing.assert_array_equal(
        other.prox(v, 1.0), along.__class__(0.7, np.repeat(np.arange(3), 4)).prox(v, 1.0)
    )


def test_groups_of_one_are_sparse_costs():
    rng = np.random.default_rng(1)
    v, beta = 3 * rng.standard_normal(50), rng.uniform(0, 2, 50)
    lower, upper = -rng.uniform(-0.5, 2, 50), 2 + rng.uniform(0, 2, 50)
    one = ssn.GroupSparseCost(
        beta, np.arange(50), lower=lower, upper=upper, inner_weights=rng.uniform(1, 1, 50)
    )
    np.testing.assert_allclose(one.prox(v, 0.8), ssn.SparseCost(beta, lower, upper).prox(v, 0.8), atol=1e-14)


def test_prox_minimises_the_weighted_functional():
    """Weights = (mass of a place) x (time weight); the inner weights are those of time."""
    rng = np.random.default_rng(2)
    times, places = 4, 3
    inner, mass = rng.uniform(0.2, 2, times), rng.uniform(0.5, 3, places)
    weights = np.outer(inner, mass).ravel()
    cost = ssn.GroupSparseCost(0.9, shape=(times, places), axis=0, inner_weights=inner, lower=-0.8, upper=0.6)
    v, step = 2 * rng.standard_normal(times * places), 0.7

    def objective(u):
        norms = np.sqrt(inner @ u.reshape(times, places) ** 2)
        return step * 0.9 * mass @ norms + 0.5 * weights @ (u - v) ** 2

    u = cost.prox(v, step)
    assert step * cost.value(u, weights) + 0.5 * weights @ (u - v) ** 2 == pytest.approx(
        objective(u), rel=1e-14
    )
    found = minimize(objective, np.clip(v, -0.8, 0.6), bounds=[(-0.8, 0.6)] * v.size, method="L-BFGS-B",
                     options={"ftol": 1e-15, "gtol": 1e-10, "maxiter": 10000})  # fmt: skip
    assert objective(u) <= found.fun + 1e-12
    np.testing.assert_allclose(u, found.x, atol=1e-5)
    cost.check_weights(weights)
    with pytest.raises(ssn.InputError, match="give inner_weights"):
        ssn.GroupSparseCost(0.9, shape=(times, places), axis=0).value(u, weights)


def test_bounds_that_exclude_zero_and_bounds_that_fix():
    cost = ssn.GroupSparseCost(1.0, [0, 0, 0], lower=[0.5, -INF, 0.25], upper=[1.0, INF, 0.25])
    u = cost.prox(np.array([0.0, 0.0, 3.0]), 1.0)
    np.testing.assert_allclose(u, [0.5, 0.0, 0.25])
    assert cost.pieces(u, 1.0)["control"].tolist() == [2, 1, 2]
    r = np.linalg.norm(u)
    np.testing.assert_allclose(cost.prox(u + 2.0 * u / r, 2.0)[1], 0.0)


@pytest.mark.parametrize("bounded", [False, True])
def test_large_and_tiny_lengths_keep_their_digits(bounded):
    limits = {"lower": -1e30, "upper": 1e30} if bounded else {}
    cost = ssn.GroupSparseCost(1.0, [0, 0], **limits)
    for scale in (1.0 + 1e-9, 1e6, 1e12):
        v = scale * np.array([0.6, 0.8])
        np.testing.assert_allclose(cost.prox(v, 1.0), (1 - 1 / np.linalg.norm(v)) * v, rtol=1e-6)


def test_many_groups_without_a_loop():
    rng = np.random.default_rng(3)
    shape = (50, 4000)
    v = rng.standard_normal(shape[0] * shape[1])
    cost = ssn.GroupSparseCost(5.0, shape=shape, axis=0, lower=-0.7, upper=1.2)
    begin = time.perf_counter()
    u = cost.prox(v, 1.0)
    cost.prox_derivative(v, 1.0).apply(v)
    assert time.perf_counter() - begin < 10.0
    r = np.linalg.norm(u.reshape(shape), axis=0)
    nonzero = r > 0
    assert nonzero.sum() > 0
    # optimality, with the bound forces of the right sign
    force = (v - u).reshape(shape)[:, nonzero] - 5.0 * u.reshape(shape)[:, nonzero] / r[nonzero]
    inside = u.reshape(shape)[:, nonzero]
    free = (inside > -0.7) & (inside < 1.2)
    assert np.abs(force[free]).max() < 1e-12
    assert (force[inside == 1.2] >= -1e-12).all() and (force[inside == -0.7] <= 1e-12).all()


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.GroupSparseCost(1.0), "either groups, or shape and axis"),
        (lambda: ssn.GroupSparseCost(1.0, [0, 0], shape=(1, 2), axis=0), "either groups, or shape and axis"),
        (lambda: ssn.GroupSparseCost(1.0, shape=(1, 2)), "either groups, or shape and axis"),
        (lambda: ssn.GroupSparseCost(1.0, [0, 2]), "no component with label 1"),
        (lambda: ssn.GroupSparseCost(1.0, [0, -1]), r"groups\[1\] is -1"),
        (lambda: ssn.GroupSparseCost(1.0, [[0, 1], [1]]), "each of the indices 0 .. 2 once"),
        (lambda: ssn.GroupSparseCost(1.0, [[0], [2]]), "each of the indices 0 .. 1 once"),
        (lambda: ssn.GroupSparseCost(1.0, [[0], []]), r"groups\[1\] must be a non-empty"),
        (lambda: ssn.GroupSparseCost(1.0, "ab"), "one label a component, or a list"),
        (lambda: ssn.GroupSparseCost(1.0, [0.0, 1.0]), "groups"),
        (lambda: ssn.GroupSparseCost([1.0, -1.0], [0, 1]), "beta must not be negative.*index 1"),
        (lambda: ssn.GroupSparseCost([1.0, 1.0, 1.0], [0, 1]), r"beta has shape \(3,\) for 2 groups"),
        (
            lambda: ssn.GroupSparseCost(1.0, [0, 1], inner_weights=[1.0, 0.0]),
            "inner_weights must be positive",
        ),
        (
            lambda: ssn.GroupSparseCost(1.0, [0, 1], inner_weights=[1.0] * 3),
            r"inner_weights has shape \(3,\)",
        ),
        (lambda: ssn.GroupSparseCost(1.0, [0, 1], lower=[0.0] * 3), r"lower has shape \(3,\)"),
        (lambda: ssn.GroupSparseCost(1.0, [0, 1], lower=2.0, upper=1.0), "no value lies between"),
        (lambda: ssn.GroupSparseCost(1.0, shape=(2, 2), axis=2), "axis must be one of the 2 axes"),
        (lambda: ssn.GroupSparseCost(1.0, shape=(2, 0), axis=0), "shape must be at least 1"),
        (lambda: ssn.GroupSparseCost(1.0, shape=4, axis=0), "shape must be a tuple"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()


def test_map_derivative_and_pieces_solve_the_scalar_equations_once(monkeypatch):
    """And a changed array is seen, even where it is the same object."""
    cost = ssn.GroupSparseCost(0.5, shape=(6, 4), axis=0, lower=-0.5, upper=0.8)
    calls = []
    solved = cost._radius
    monkeypatch.setattr(cost, "_radius", lambda *given: calls.append(1) or solved(*given))
    v = np.random.default_rng(0).standard_normal(24)
    before = cost.prox(v, 0.7)
    cost.prox_derivative(v, 0.7), cost.pieces(v, 0.7), cost.margins(v, 0.7)
    assert len(calls) == 1
    cost.prox(v, 0.8)
    assert len(calls) == 2
    v *= 3.0
    assert not np.array_equal(cost.prox(v, 0.8), before) and len(calls) == 3
    again = ssn.GroupSparseCost(0.5, shape=(6, 4), axis=0, lower=-0.5, upper=0.8)
    np.testing.assert_array_equal(cost.prox(v, 0.8), again.prox(v, 0.8))


@pytest.mark.parametrize("eps", [1e-1, 1e-3, 1e-6])
def test_smoothed_bounded_groups_solve_their_equation(eps):
    """||u_g|| is the smoothed shrinkage of x and v_i = u_i x/s + barrier'(u_i): 200 random groups, few evaluations."""
    rng = np.random.default_rng(3)
    n, number = 1000, 200
    lower = rng.choice([-np.inf, -1.0, 0.0, 0.5], n)
    upper = np.where(np.isfinite(lower), lower, -1.0) + rng.choice([np.inf, 0.5, 3.0, 0.0], n)
    inner, beta = rng.uniform(0.3, 2.0, n), rng.choice([0.3, 2.0], number)
    labels = np.concatenate([np.arange(number), rng.integers(0, number, n - number)])
    cost = ssn.GroupSparseCost(beta, labels, inner_weights=inner, lower=lower, upper=upper)
    v = rng.choice([1e-3, 1.0, 30.0], n) * rng.standard_normal(n)
    calls = []
    barrier = cost._barrier
    cost._barrier = lambda *given: calls.append(1) or barrier(*given)
    u, e, _ = cost._smoothed_parts(v, 0.7, eps)
    assert len(calls) <= 80
    free = np.isfinite(e)
    force = np.zeros(n)
    for bound, sign in ((lower, -1.0), (upper, 1.0)):
        there = np.isfinite(bound) & free
        force[there] += sign * eps**2 / np.abs(bound - u)[there]
    ratio = (v - force)[free] / u[free]
    sure = (np.abs(u) > 1e-3) & (
        np.minimum(u - lower, upper - u) > 1e-3
    )  # else the barrier's digits are lost
    sure = sure[free]
    x = np.array([np.median(ratio[(labels[free] == g) & sure]) if ((labels[free] == g) & sure).any() else np.nan
                  for g in range(number)])  # fmt: skip
    length, t = cost.norms(u), 0.7 * beta
    x = x * length  # x = ratio s
    a, b = np.hypot(x - t, 2 * eps), np.hypot(x + t, 2 * eps)
    s = 0.5 * (2 * x + a - b)
    known = np.isfinite(x)
    assert known.mean() > 0.2
    np.testing.assert_allclose(s[known], length[known], rtol=1e-6, atol=1e-9)
