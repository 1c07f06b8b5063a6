"""Sums with a quadratic, scaling, translation, conjugates: against costs that say the same in one formula."""

import numpy as np
import pytest

import ssn

V = np.linspace(-5, 5, 81)
STEPS = (0.3, 1.0, 2.5)
SAME = [
    (ssn.SumWithQuadratic(ssn.SparseCost(0.7), 1.3), ssn.ElasticNetCost(0.7, 1.3)),
    (
        ssn.SumWithQuadratic(ssn.Bounds(-1.0, 2.0), 0.5, 1.0),
        ssn.PiecewiseQuadraticCost([], [-0.5], [0.5], lower=-1.0, upper=2.0, value_at=(1.0, 0.0)),
    ),
    (ssn.ScaledCost(ssn.SparseCost(0.7), 2.0, -1.5), ssn.SparseCost(2.1)),
    (ssn.ScaledCost(ssn.Bounds(-1.0, 2.0), 3.0, -2.0), ssn.Bounds(-1.0, 0.5)),
    (ssn.ScaledCost(ssn.HingeLoss(1.0), 1.0, -1.0), ssn.HingeLoss(-1.0)),
    (ssn.TranslatedCost(ssn.InsensitiveLoss(0.5), 1.25), ssn.InsensitiveLoss(0.5, 1.25)),
    (ssn.TranslatedCost(ssn.HuberCost(2.0, 0.5), -1.0), ssn.HuberCost(2.0, 0.5, -1.0)),
    (ssn.ConjugateCost(ssn.PiecewiseQuadraticCost([0.0], [-0.7, 0.7])), ssn.Bounds(-0.7, 0.7)),
    (
        ssn.ConjugateCost(ssn.PiecewiseQuadraticCost([], [0.0], lower=-0.5, upper=2.0)),
        ssn.PiecewiseQuadraticCost([0.0], [-0.5, 2.0]),
    ),
    (ssn.ConjugateCost(ssn.ConjugateCost(ssn.QuantileLoss(0.8, 1.0))), ssn.QuantileLoss(0.8, 1.0)),
    (
        ssn.ConjugateCost(ssn.ElasticNetCost(0.5, 2.0)),
        ssn.PiecewiseQuadraticCost([-0.5, 0.5], [0.25, 0.0, -0.25], [0.5, 0.0, 0.5]),
    ),
]


@pytest.mark.parametrize(("made", "plain"), SAME, ids=[repr(s[0]) for s in SAME])
def test_same_cost_in_one_formula(made, plain):
    away = np.ones(V.size, dtype=bool)
    for step in STEPS:
        np.testing.assert_allclose(made.prox(V, step), plain.prox(V, step), atol=1e-14)
        away &= np.minimum(made.margins(V, step), plain.margins(V, step)) > 1e-9
        np.testing.assert_allclose(
            made.prox_derivative(V, step).diagonal[away],
            plain.prox_derivative(V, step).diagonal[away],
            atol=1e-14,
        )
        np.testing.assert_allclose(made.margins(V, step), plain.margins(V, step), atol=1e-13)
        u = plain.prox(V, step)
        assert made.value(made.prox(V, step)) == pytest.approx(plain.value(u), rel=1e-12, abs=1e-12)


def test_conjugates_of_conjugates_have_the_value_of_the_cost():
    cost = ssn.SwitchingCost([0.5, 2.0], (2, 3))
    u = np.array([1.0, -2.0, 0.5, 0.0, 3.0, 1.0])
    dual = ssn.ConjugateCost(cost)
    assert dual.conjugate_value(u) == cost.value(u)
    # sup over y of <u, y> - max|y|^2/(2 beta), attained at y = beta ||u||_1 sign(u)
    y = np.array([1.0, -1.0, 1.0, 1.0, 1.0, 1.0]) * np.repeat([0.5 * 3.5, 2.0 * 4.0], 3)
    assert u @ y - dual.value(y) == pytest.approx(cost.value(u), rel=1e-14)


def test_the_conjugate_of_a_sum_is_an_envelope():
    """(g + gamma/2 u^2)* has the derivative prox_{g/gamma}(y/gamma): the regularised staircase."""
    bang = ssn.MultiBangCost([-1.0, 0.0, 2.0], 1.0)
    summed, h = ssn.SumWithQuadratic(bang, 0.1), 1e-6
    for y in (-0.7, -0.55, 0.3, 1.05, 1.12, 3.0):
        slope = (summed.conjugate_value(np.array([y + h])) - summed.conjugate_value(np.array([y - h]))) / (
            2 * h
        )
        assert slope == pytest.approx(bang.regularised_staircase(np.array([y]), 0.1)[0], abs=1e-5)


def test_operations_on_operations_and_coupled_costs():
    inside = ssn.GroupSparseCost(0.8, [0, 0, 1, 1], inner_weights=[1.0, 2.0, 1.0, 0.5], upper=1.0)
    cost = ssn.TranslatedCost(
        ssn.ScaledCost(ssn.SumWithQuadratic(inside, 0.5), 2.0, -0.5), [1.0, 0.0, 2.0, -1.0]
    )
    assert not cost.separable and not cost.piecewise_affine and cost.size == 4
    np.testing.assert_array_equal(cost.lower, [-1.0, -2.0, 0.0, -3.0])
    rng = np.random.default_rng(0)
    v, step, w = rng.standard_normal(4), 0.9, inside.inner_weights
    u = cost.prox(v, step)
    least = step * cost.value(u) + 0.5 * w @ (u - v) ** 2
    for _ in range(200):
        other = u + 10.0 ** rng.uniform(-5, 0) * rng.standard_normal(4)
        value = step * cost.value(other) + 0.5 * w @ (other - v) ** 2
        assert value >= least + 0.499999 * w @ (other - u) ** 2 - 1e-14


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.SumWithQuadratic(3.0, 1.0), "cost must have the members of ssn.Cost, got float"),
        (lambda: ssn.SumWithQuadratic(ssn.SparseCost(1.0), -1.0), "gamma must not be negative"),
        (
            lambda: ssn.SumWithQuadratic(ssn.SparseCost(1.0), 1.0, [0.0, 0.0]).check_size(3),
            "centre has shape",
        ),
        (lambda: ssn.ScaledCost(ssn.SparseCost(1.0), -1.0), "factor must be positive"),
        (lambda: ssn.ScaledCost(ssn.SparseCost(1.0), 1.0, 0.0), "stretch must not be zero"),
        (lambda: ssn.TranslatedCost(ssn.SparseCost(1.0), [[1.0]]), "shift must be a number or"),
        (lambda: ssn.TranslatedCost(ssn.SparseCost([1.0, 1.0]), 0.0).check_size(3), "3 unknowns"),
        (
            lambda: ssn.ConjugateCost(ssn.GroupSparseCost(1.0, [0, 0], upper=1.0)).value(np.ones(2)),
            "conjugate of .* is not known",
        ),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
