"""ElasticNetCost, HuberCost and the losses against their formulas, written down independently."""

import numpy as np
import pytest

import ssn

U = np.linspace(-4, 4, 161)
CASES = [
    (ssn.ElasticNetCost(0.5, 2.0), lambda u: 0.5 * np.abs(u) + u**2),
    (
        ssn.ElasticNetCost(0.5, 0.0, -1.0, 2.0),
        lambda u: 0.5 * np.abs(u) + np.where((u < -1) | (u > 2), np.inf, 0),
    ),
    (
        ssn.ElasticNetCost(0.5, 1.0, 1.0, 2.0),
        lambda u: 0.5 * u + u**2 / 2 + np.where((u < 1) | (u > 2), np.inf, 0),
    ),
    (
        ssn.HuberCost(3.0, 0.5, 1.0),
        lambda u: 3 * np.where(np.abs(u - 1) <= 0.5, (u - 1) ** 2, np.abs(u - 1) - 0.25),
    ),
    (ssn.HingeLoss(1.0), lambda u: np.maximum(0, 1 - u)),
    (ssn.HingeLoss(-1.0, weight=2.0, margin=0.5), lambda u: 2 * np.maximum(0, 0.5 + u)),
    (ssn.QuantileLoss(0.9, 1.0), lambda u: np.maximum(0.9 * (1 - u), -0.1 * (1 - u))),
    (ssn.InsensitiveLoss(0.5, 1.0, 3.0), lambda u: 3 * np.maximum(0, np.abs(u - 1) - 0.5)),
]


@pytest.mark.parametrize(("cost", "formula"), CASES, ids=[repr(c[0]) for c in CASES])
def test_values(cost, formula):
    np.testing.assert_allclose(cost.terms(U), formula(U), atol=1e-13)


@pytest.mark.parametrize(("cost", "formula"), CASES, ids=[repr(c[0]) for c in CASES])
def test_proximal_map_against_a_grid(cost, formula):
    grid = np.linspace(-4, 4, 80001)
    for v in (-2.3, -0.4, 0.3, 1.1, 2.7):
        best = grid[np.argmin(0.6 * formula(grid) + 0.5 * (grid - v) ** 2)]
        assert cost.prox(np.array([v]), 0.6)[0] == pytest.approx(best, abs=2e-4)


def test_labels_and_levels_vary_by_component():
    u = np.array([0.3, 0.3, -2.0])
    hinge = ssn.HingeLoss([1.0, -1.0, -1.0], weight=[1.0, 2.0, 5.0])
    assert hinge.value(u) == pytest.approx(0.7 + 2 * 1.3)
    assert hinge.pieces(u, 1e-9).sizes()["control"] == {
        "lower": 0, "left": 2, "on the margin": 0, "right": 1, "upper": 0,
    }  # fmt: skip
    quantile = ssn.QuantileLoss([0.1, 0.5, 0.9], target=[0.0, 1.0, 0.0])
    assert quantile.value(u) == pytest.approx(0.9 * 0.3 + 0.5 * 0.7 + 0.9 * 2.0)


def test_the_elastic_net_is_l1_plus_a_quadratic():
    v = np.linspace(-5, 5, 41)
    net = ssn.ElasticNetCost(0.7, 1.3, -1.0, 2.0)
    summed = ssn.SumWithQuadratic(ssn.SparseCost(0.7, -1.0, 2.0), 1.3)
    np.testing.assert_allclose(net.prox(v, 0.9), summed.prox(v, 0.9), atol=1e-15)
    assert net.value(net.prox(v, 0.9)) == pytest.approx(summed.value(net.prox(v, 0.9)), rel=1e-14)


def test_huber_is_the_envelope_of_l1():
    """beta h(u) with half width beta s is min over x of beta |x| + (u - x)^2/(2 s)."""
    beta, s = 0.8, 0.6
    x = ssn.SparseCost(beta).prox(U, s)
    envelope = beta * np.abs(x) + (U - x) ** 2 / (2 * s)
    np.testing.assert_allclose(ssn.HuberCost(beta, beta * s).terms(U), envelope, atol=1e-14)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.ElasticNetCost(-1.0, 0.0), "beta must not be negative"),
        (lambda: ssn.ElasticNetCost(1.0, [0.0, -2.0]), "gamma must not be negative.*-2.0 at index 1"),
        (lambda: ssn.ElasticNetCost(1.0, 1.0, 2.0, 1.0), "no value lies between"),
        (lambda: ssn.HuberCost(1.0, 0.0), "width must be positive"),
        (lambda: ssn.HingeLoss([1.0, 0.0]), r"labels must be \+1 or -1, got 0.0 at index 1"),
        (lambda: ssn.QuantileLoss(1.5), "level must lie between 0 and 1"),
        (lambda: ssn.QuantileLoss(-0.5), "level must not be negative"),
        (lambda: ssn.InsensitiveLoss(0.0), "width must be positive"),
        (lambda: ssn.InsensitiveLoss([1.0, 1.0], [0.0, 0.0, 0.0]), "do not fit together"),
        (lambda: ssn.QuantileLoss([0.5, 0.5], weight=[1.0, 2.0, 3.0]), "do not fit together|broadcast"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises((ssn.InputError), match=message):
        make()
