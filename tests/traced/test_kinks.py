"""At kinks: the defining quotient, the documented selection, and smoothed forms that converge."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ssn.traced import TracedEquation
from tests.traced.helpers import KINKS, N, Real, build, derivatives, differences, points, trees

# On small integers these give exact ties often.
INTEGER = ("add", "subtract", "multiply", "roll", "slices", "fancy", "where", "diff", *KINKS)

lattice = st.lists(st.integers(-1, 1).map(float), min_size=N, max_size=N).map(np.array)
directions = st.tuples(points, lattice).map(lambda pair: pair[0] * np.abs(pair[1]))


@given(trees(INTEGER, leaves=6), lattice, directions)
def test_defining_quotient(tree, x, h):
    """||F(x + h) - F(x) - G(x + h) h|| / ||h|| falls with ||h||, along directions that stay on kinks too."""
    if not h.any():
        return
    function = build(tree)
    equation = TracedEquation(lambda u: function(Real, u), x)
    f = equation.residual(x)
    quotients = []
    for t in (1e-3, 1e-5):
        at = equation.linearize(x + t * h)
        size = t * np.linalg.norm(h)
        quotients.append(np.linalg.norm(at.residual - f - at.derivative @ (t * h)) / size)
    scale = 1.0 + np.abs(f).max()
    assert quotients[1] <= 1e-9 * scale + 0.05 * quotients[0], (tree, quotients)


SELECTIONS = [
    ("maximum with a constant first", lambda u: np.maximum(0.0, u), 0.0),
    ("maximum with a constant second", lambda u: np.maximum(u, 0.0), 0.0),
    ("minimum with a constant", lambda u: np.minimum(u, 0.0), 0.0),
    ("maximum of two", lambda u: np.maximum(2.0 * u, 3.0 * u), 2.0),
    ("minimum of two", lambda u: np.minimum(3.0 * u, 2.0 * u), 3.0),
    ("abs", lambda u: np.abs(u), 1.0),
    ("clip at its lower bound", lambda u: np.clip(u, 0.0, 1.0), 0.0),
    ("clip at its upper bound", lambda u: np.clip(u, -1.0, 0.0), 0.0),
    ("norm", lambda u: np.linalg.norm(u) * np.ones(1), 0.0),
    ("hypot", lambda u: np.hypot(u, u), 0.0),
    ("largest", lambda u: np.max(np.stack([5.0 * u, 7.0 * u]), axis=0), 5.0),
    ("interp", lambda u: np.interp(u, [-1.0, 0.0, 1.0], [0.0, 1.0, 4.0]), 1.0),
]


@pytest.mark.parametrize(("name", "function", "slope"), SELECTIONS)
def test_selection(name, function, slope):
    assert derivatives(function, np.zeros(1)) == slope
    left, right = ((function(np.full(1, h)) - function(np.zeros(1))) / h for h in (-1e-6, 1e-6))
    assert abs(right - left) > 0.5  # it is a kink


def test_sums_can_cancel_at_a_kink():
    equation = TracedEquation(lambda u: np.maximum(0.0, u) - np.maximum(0.0, -u), np.zeros(1))
    assert equation.linearize(np.zeros(1)).derivative.toarray() == 0.0
    assert equation.linearize(np.full(1, 1e-300)).derivative.toarray() == 1.0


@given(trees(leaves=6), points)
def test_smoothed_forms_converge(tree, x):
    function = build(tree)
    equation = TracedEquation(lambda u: function(Real, u), x)
    with np.errstate(all="ignore"):
        exact = equation.residual(x)
        errors = [np.abs(equation.smoothed(eps).residual(x) - exact).max() for eps in (1e-2, 1e-5)]
    if np.isfinite(exact).all():
        assert errors[1] <= 3e-2 * errors[0] + 1e-4 * max(1.0, np.abs(exact).max()), (tree, errors)


@given(trees(leaves=6), points)
def test_smoothed_derivatives(tree, x):
    function = build(tree)
    equation = TracedEquation(lambda u: function(Real, u), x).smoothed(0.3)
    with np.errstate(all="ignore"):
        expected = differences(equation.residual, x, 1e-5)
    if not np.isfinite(expected).all() or np.abs(expected).max() > 1e4:
        return
    found = derivatives(lambda u: function(Real, u), x, eps=0.3)
    assert np.abs(found - expected).max() <= 1e-6 * max(1.0, np.abs(expected).max()), tree


FORMULAS = [
    (lambda u: np.maximum(0.0, u), lambda u, e: (u + np.sqrt(u * u + 4 * e * e)) / 2),
    (lambda u: np.minimum(u, 0.0), lambda u, e: (u - np.sqrt(u * u + 4 * e * e)) / 2),
    (lambda u: np.abs(u), lambda u, e: np.sqrt(u * u + e * e)),
    (lambda u: np.linalg.norm(u, axis=0, keepdims=True) * np.ones(3), lambda u, e: np.sqrt(u @ u + e * e) * np.ones(3)),
    (lambda u: np.maximum(u, -np.inf), lambda u, e: u),
    (lambda u: np.clip(u, -np.inf, np.inf), lambda u, e: u),
    (lambda u: np.interp(u, [0.0, 1.0], [0.0, 1.0]),
     lambda u, e: (np.sqrt(u * u + 4 * e * e) + u - (u - 1) - np.sqrt((u - 1) ** 2 + 4 * e * e)) / 2),
]  # fmt: skip


@pytest.mark.parametrize(("function", "formula"), FORMULAS)
def test_smoothed_formulas(function, formula):
    u = np.array([-0.3, 0.0, 1.2])
    equation = TracedEquation(function, u)
    for eps in (1e-8, 1e-3, 0.5):
        np.testing.assert_allclose(
            equation.smoothed(eps).residual(u), formula(u, eps), rtol=1e-12, atol=1e-15
        )


def test_smoothing_keeps_its_digits_far_from_the_kink():
    equation = TracedEquation(lambda u: np.maximum(0.0, u), np.full(1, -1.0)).smoothed(1e-9)
    at = equation.linearize(np.full(1, -1.0))
    np.testing.assert_allclose(at.residual, 1e-18, rtol=1e-12)
    np.testing.assert_allclose(at.derivative.toarray(), 1e-18, rtol=1e-12)


def test_eps_zero_is_the_equation_itself_and_others_are_refused():
    equation = TracedEquation(np.abs, np.ones(2))
    assert equation.smoothed(0.0).residual(-np.ones(2)).tolist() == [1.0, 1.0]
    assert equation.smoothed(1.0).smoothed(0.0).residual(np.zeros(2)).tolist() == [0.0, 0.0]
    for eps in (-1.0, np.nan):
        with pytest.raises(ValueError, match="eps"):
            equation.smoothed(eps)
