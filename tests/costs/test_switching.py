"""SwitchingCost: the pointwise condition, the known pair of actuators, inner products, refused input."""

import numpy as np
import pytest

import ssn


def test_two_actuators_by_hand():
    """Step beta = 1: the weaker one is off while |v_2| <= |v_1|/2."""
    cost = ssn.SwitchingCost(2.0, (4, 2))
    v = np.array([4.0, 1.0, 4.0, 2.0, -4.0, 3.5, 0.0, 0.0])
    u = cost.prox(v, 0.5)
    tau = 7.5 / 3.0
    np.testing.assert_allclose(u, [2.0, 0.0, 2.0, 0.0, -(4 - tau), 3.5 - tau, 0.0, 0.0])
    np.testing.assert_array_equal(cost.pieces(v, 0.5)["control"], [2, 1, 2, 1, 0, 2, 1, 1])
    assert cost.value(np.array([1.0, -2.0, 0, 0, 0, 0, 0, 3.0])) == 9.0 + 9.0


@pytest.mark.parametrize("actuators", [1, 2, 5, 30])
def test_off_exactly_where_the_pointwise_condition_says(actuators):
    """v - u in step beta ||u||_1 d||u||_1: equal shrinkage of all that are on, no more than it on the others."""
    rng = np.random.default_rng(actuators)
    shape = (200, actuators)
    beta = rng.uniform(0.01, 5, shape[0])
    v = rng.standard_normal(shape) * 10.0 ** rng.uniform(-3, 3, (shape[0], 1))
    u = ssn.SwitchingCost(beta, shape).prox(v.ravel(), 0.7).reshape(shape)
    total = (0.7 * beta * np.abs(u).sum(axis=1))[:, None]
    gap, scale = v - u, np.abs(v).max(axis=1, keepdims=True)
    on = u != 0
    assert np.abs(gap - np.sign(u) * total)[on].max() <= 1e-14 * scale.max()
    assert (np.abs(gap / scale)[on] - (total / scale + np.zeros(shape))[on]).max() <= 1e-14
    assert (np.abs(gap) <= total + 1e-14 * scale)[~on].all()
    assert on.any(axis=1).all()


def test_a_larger_weight_leaves_fewer_on():
    v = np.random.default_rng(5).standard_normal(400)
    counts = [
        np.count_nonzero(ssn.SwitchingCost(b, (100, 4)).prox(v, 1.0)) for b in (1e-3, 0.1, 1.0, 10.0, 1e3)
    ]
    assert counts == sorted(counts, reverse=True)
    assert counts[0] > 380 and counts[-1] == 100


def test_prox_minimises_the_weighted_functional():
    """Weights = (time step) x (weight of an actuator)."""
    rng = np.random.default_rng(6)
    inner, outer = np.array([0.5, 2.0, 1.0]), np.array([0.1, 0.3])
    weights = np.outer(outer, inner).ravel()
    cost = ssn.SwitchingCost([1.5, 0.4], (2, 3), inner)
    v, step = rng.standard_normal(6), 0.8

    def objective(u):
        sums = np.abs(u.reshape(2, 3)) @ inner
        return step * outer @ (np.array([0.75, 0.2]) * sums**2) + 0.5 * weights @ (u - v) ** 2

    u = cost.prox(v, step)
    assert step * cost.value(u, weights) + 0.5 * weights @ (u - v) ** 2 == pytest.approx(
        objective(u), rel=1e-14
    )
    for _ in range(300):
        other = u + 10.0 ** rng.uniform(-6, 0) * rng.standard_normal(6)
        assert objective(other) >= objective(u) + 0.4999999 * weights @ (other - u) ** 2 - 1e-15
    with pytest.raises(ssn.InputError, match="differ at index"):
        ssn.SwitchingCost(1.0, (2, 3)).value(u, weights)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.SwitchingCost(-1.0, (2, 2)), "beta must not be negative"),
        (lambda: ssn.SwitchingCost([1.0, 1.0, 1.0], (2, 2)), "beta has shape .* for 2 instants"),
        (lambda: ssn.SwitchingCost(1.0, (4,)), "instants, actuators"),
        (lambda: ssn.SwitchingCost(1.0, 4), "shape must be a tuple"),
        (lambda: ssn.SwitchingCost(1.0, (2, 2.5)), "shape must be a whole number"),
        (lambda: ssn.SwitchingCost(1.0, (2, 2), [1.0, 2.0, 3.0]), "inner_weights has shape"),
        (lambda: ssn.SwitchingCost(1.0, (2, 2)).check_size(5), "4 unknowns, not 5"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
