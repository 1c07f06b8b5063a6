"""Second-order and semidefinite cones: values by hand, structure of the derivatives, smoothing, refused input."""

import numpy as np
import pytest

import ssn
from ssn.costs.semidefinite import divided_differences


@pytest.mark.parametrize(
    ("v", "u", "label"),
    [
        ([5.0, 3.0, 4.0], [5.0, 3.0, 4.0], 1),  # eigenvalues 0 and 10: 0 counts as negative
        ([6.0, 3.0, 4.0], [6.0, 3.0, 4.0], 2),
        ([0.0, 3.0, 4.0], [2.5, 1.5, 2.0], 1),
        ([1.0, 3.0, 4.0], [3.0, 1.8, 2.4], 1),
        ([-5.0, 3.0, 4.0], [0.0, 0.0, 0.0], 0),
        ([-6.0, 3.0, 4.0], [0.0, 0.0, 0.0], 0),
        ([0.0, 0.0, 0.0], [0.0, 0.0, 0.0], 0),
        ([0.0, 3e-200, 4e-200], [2.5e-200, 1.5e-200, 2e-200], 1),  # no underflow in the norm
    ],
)
def test_second_order_cone_by_hand(v, u, label):
    cone, v = ssn.SecondOrderCone(3), np.array(v)
    np.testing.assert_allclose(cone.prox(v, 1.0), u, rtol=1e-14, atol=0)
    assert cone.pieces(v, 1.0)["control"].tolist() == [label] * 3


def test_blocks_do_not_touch():
    cone = ssn.SecondOrderCone(3)
    v = np.random.default_rng(0).standard_normal(30)
    together = cone.prox_derivative(v, 1.0).apply(np.eye(30))
    for k in range(0, 30, 3):
        rows = slice(k, k + 3)
        np.testing.assert_allclose(cone.prox(v, 1.0)[rows], cone.prox(v[rows], 1.0))
        alone = cone.prox_derivative(v[rows], 1.0).apply(np.eye(3))
        np.testing.assert_allclose(together[rows, rows], alone)
        together[rows, rows] = 0.0
    assert not together.any()


def test_block_of_one_is_a_bound():
    v = np.linspace(-2, 2, 9)
    cone, bound = ssn.SecondOrderCone(1), ssn.Bounds(0.0, np.inf)
    np.testing.assert_array_equal(cone.prox(v, 1.0), bound.prox(v, 1.0))
    np.testing.assert_array_equal(cone.margins(v, 1.0), np.abs(v))
    np.testing.assert_array_equal(
        cone.prox_derivative(v, 1.0).apply(np.eye(9)), np.diag(bound.prox_derivative(v, 1.0).diagonal)
    )


@pytest.mark.parametrize("order", [1, 2, 5, 20])
def test_semidefinite_projection_is_that_of_the_eigenvalues(order):
    rng = np.random.default_rng(order)
    cone = ssn.PositiveSemidefiniteCone(order)
    for shift in (-3.0, -1.0, 0.0, 1.0, 3.0):  # few and many positive eigenvalues
        a = rng.standard_normal((order, order))
        a = a + a.T + shift * np.sqrt(order) * np.eye(order)
        values, vectors = np.linalg.eigh(a)
        expected = vectors @ np.diag(np.maximum(values, 0.0)) @ vectors.T
        v = cone.to_vector(a)
        np.testing.assert_allclose(cone.to_matrix(cone.prox(v, 1.0)), expected, atol=1e-12 * order)
        assert cone.pieces(v, 1.0).sizes()["eigenvalues"]["positive"] == (values > 0).sum()
        np.testing.assert_allclose(cone.margins(v, 1.0), np.abs(values).min())
        # Moreau: the projection onto the polar cone is minus that of -a
        np.testing.assert_allclose(v - cone.prox(v, 1.0), -cone.prox(-v, 1.0), atol=1e-12 * order)


def test_vectors_keep_the_inner_product():
    rng = np.random.default_rng(2)
    cone = ssn.PositiveSemidefiniteCone(6)
    a, b = (m + m.T for m in rng.standard_normal((2, 6, 6)))
    assert cone.to_vector(a) @ cone.to_vector(b) == pytest.approx(np.trace(a @ b), rel=1e-13)
    np.testing.assert_allclose(cone.to_matrix(cone.to_vector(a)), a, rtol=1e-15)
    np.testing.assert_allclose(cone.to_vector(np.stack([a, b]))[1], cone.to_vector(b))
    assert cone.size == 21


def test_the_semidefinite_derivative_at_a_diagonal_matrix():
    """Divided differences by hand: 2 and -1 give 2/3, 2 and 1 give 1, -1 and -1 give 0."""
    cone = ssn.PositiveSemidefiniteCone(4)
    v = cone.to_vector(np.diag([2.0, 1.0, -1.0, -1.0]))
    h = np.arange(16.0).reshape(4, 4)
    h = h + h.T
    expected = h * np.array([[1, 1, 2 / 3, 2 / 3], [1, 1, 0.5, 0.5], [2 / 3, 0.5, 0, 0], [2 / 3, 0.5, 0, 0]])
    found = cone.to_matrix(cone.prox_derivative(v, 1.0).apply(cone.to_vector(h)))
    np.testing.assert_allclose(found, expected, atol=1e-13)


def test_selection_at_an_eigenvalue_zero():
    """As a negative one: slope 0, and the derivative at zero vanishes."""
    cone = ssn.PositiveSemidefiniteCone(3)
    assert not cone.prox_derivative(np.zeros(6), 1.0).apply(np.eye(6)).any()
    assert not ssn.SecondOrderCone(3).prox_derivative(np.zeros(3), 1.0).apply(np.eye(3)).any()


def test_divided_differences_do_not_cancel():
    a, b = np.array([1.0, 1.0, -1.0, 2.0, 0.0]), np.array([1.0 + 1e-15, -1e-15, -2.0, -1.0, 0.0])
    np.testing.assert_allclose(divided_differences(a, b, 0.0), [1.0, 1.0, 0.0, 2.0 / 3.0, 0.0], atol=1e-14)
    for eps in (1.0, 1e-3):
        x, y = 0.3, 0.3 + 1e-4
        slope = 0.5 * (1 + 0.30005 / np.sqrt(0.30005**2 + 4 * eps**2))
        assert divided_differences(np.array(x), np.array(y), eps) == pytest.approx(slope, rel=1e-6)


@pytest.mark.parametrize("cone", [ssn.SecondOrderCone(4), ssn.PositiveSemidefiniteCone(4)], ids=repr)
def test_the_smoothed_map_stays_inside(cone):
    v = np.random.default_rng(3).standard_normal(cone.size or 20)
    for eps in (1.0, 1e-2, 1e-6):
        assert cone.value(cone.smoothed_prox(v, 1.0, eps)) == 0.0


def test_the_eigenvalue_decomposition_is_not_that_of_another_point():
    cone = ssn.PositiveSemidefiniteCone(3)
    v = cone.to_vector(np.diag([1.0, -2.0, 3.0]))
    first = cone.prox(v, 1.0)
    v *= -1.0  # in place: the array is the same object
    np.testing.assert_allclose(cone.prox(v, 1.0), v + first, atol=1e-15)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.SecondOrderCone(0), "block must be at least 1"),
        (lambda: ssn.SecondOrderCone(2.5), "block must be a whole number"),
        (lambda: ssn.SecondOrderCone(3).check_size(7), "do not fill 7 unknowns"),
        (lambda: ssn.SecondOrderCone(3).check_size(0), "do not fill 0 unknowns"),
        (lambda: ssn.SecondOrderCone(2).check_weights(np.array([1.0, 1.0, 1.0, 2.0])), "block 1"),
        (lambda: ssn.PositiveSemidefiniteCone(3).check_size(9), "9 unknowns"),
        (lambda: ssn.PositiveSemidefiniteCone(2).check_weights(np.array([1.0, 2.0, 1.0])), "equal weights"),
        (lambda: ssn.PositiveSemidefiniteCone(True), "order must be a whole number"),
    ],
)
def test_unusable_input_is_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()


def test_weights_that_differ_between_blocks_only():
    ssn.SecondOrderCone(2).check_weights(np.array([1.0, 1.0, 5.0, 5.0]))
