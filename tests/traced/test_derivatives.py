"""Derivatives of generated expressions at smooth points: against complex steps, to 1e-12."""

import numpy as np
import pytest
from hypothesis import event, example, given

from tests.traced.helpers import OPERATIONS, Complex, N, Real, build, complex_step, derivatives, points, trees


def check(tree, x):
    function = build(tree)
    with np.errstate(all="ignore"):
        expected = complex_step(lambda z: function(Complex, z), x)
    if not np.isfinite(expected).all() or np.abs(expected).max() > 1e6:
        return False
    found = derivatives(lambda u: function(Real, u), x)
    error = np.abs(found - expected).max()
    assert error <= 1e-12 * max(1.0, np.abs(expected).max()), (tree, error)
    return True


@given(trees(), points)
@example(("maximum", ("dense", "x"), ("norm", "x", ("csr", "x"))), np.array([0.3, -1.2, 0.7, 1.9]))
def test_generated_expressions(tree, x):
    event(f"compared: {check(tree, x)}")


@pytest.mark.parametrize("name", OPERATIONS)
def test_each_operation(name):
    x = np.array([0.31, -1.27, 0.73, 1.9])
    assert check((name, ("add", "x", ("roll", "x")), ("dense", "x"))[: 1 + OPERATIONS[name][0]], x)
    if OPERATIONS[name][0] == 2:
        assert check((name, "x", 0.5), x)
        assert check((name, 0.5, "x"), x)
        assert check((name, "x", "x"), x)


def test_the_list_of_operations_is_whole():
    assert len(OPERATIONS) >= 40
    assert N == 4


@given(trees(), points)
def test_residuals_are_those_of_the_plain_function_and_inputs_stay(tree, x):
    function = build(tree)
    before = x.copy()
    from ssn.traced import TracedEquation

    equation = TracedEquation(lambda u: function(Real, u), x)
    with np.errstate(all="ignore"):
        plain = equation.residual(x)
        at, again = equation.linearize(x), equation.linearize(x)
    assert np.array_equal(plain, at.residual, equal_nan=True)
    assert np.array_equal(x, before)
    assert np.array_equal(at.derivative.toarray(), again.derivative.toarray(), equal_nan=True)
    assert at.pieces.digest() == again.pieces.digest()
    residual, pieces = equation.residual_and_pieces(x)
    assert np.array_equal(residual, plain, equal_nan=True)
    assert pieces.digest() == at.pieces.digest()
