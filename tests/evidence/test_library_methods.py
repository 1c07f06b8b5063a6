"""Methods of general libraries: which problems they are asked about, and that they agree there."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import aslinearoperator

import ssn
from ssn.evidence import assess
from ssn.evidence.library_methods import library_methods, quadratic_program
from tests.kernel.examples import Contact, control

LBFGSB, INTERIOR, DESCENT = (
    "L-BFGS-B",
    "interior point",
    "coordinate descent",
)


def least_squares(cost, operator=False):
    rng = np.random.default_rng(0)
    a = rng.standard_normal((30, 8))
    return ssn.CompositeProblem(
        smooth=ssn.LeastSquares(aslinearoperator(a) if operator else a, rng.standard_normal(30)), cost=cost
    )


def quadratic(cost):
    h = np.diag(np.arange(1.0, 7.0)) + 0.3
    return ssn.CompositeProblem(
        smooth=ssn.Quadratic(h, np.linspace(-1, 2, 6)), cost=cost, weights=np.arange(1.0, 7.0)
    )


def observed():
    """A nonsymmetric state with partial observation, a source and a mass matrix."""
    n = 12
    e = sp.diags_array([-np.ones(n - 1), 2.5 * np.ones(n), -0.5 * np.ones(n - 1)], offsets=[-1, 0, 1])
    mass = sp.diags_array([np.ones(4), 4 * np.ones(5), np.ones(4)], offsets=[-1, 0, 1])
    rng = np.random.default_rng(1)
    return ssn.ControlProblem(
        state=ssn.SteadyState(e), control_operator=rng.standard_normal((n, 5)), observation=np.eye(n)[:5],
        source=np.ones(n), target=np.arange(5.0), observation_mass=mass, control_mass=np.arange(1.0, 6.0),
        control_weight=1e-1, cost=ssn.SparseCost(0.3, -0.5, 1.0),
    )  # fmt: skip


CASES = [
    (control(10), {LBFGSB, INTERIOR}),
    (observed(), {LBFGSB, INTERIOR}),
    (quadratic(ssn.SparseCost(0.4, -0.2, 0.3)), {LBFGSB, INTERIOR}),
    (quadratic(ssn.Bounds(-0.1, 0.1)), {LBFGSB, INTERIOR}),
    (quadratic(ssn.Bounds()), {LBFGSB, INTERIOR}),
    (least_squares(ssn.SparseCost(2.0)), {LBFGSB, INTERIOR, DESCENT}),
    (least_squares(ssn.SparseCost(2.0, lower=0.0)), {LBFGSB, INTERIOR, DESCENT}),
    (least_squares(ssn.SparseCost(2.0, upper=1.0)), {LBFGSB, INTERIOR}),
    (least_squares(ssn.SparseCost(2.0), operator=True), {LBFGSB}),
    (ssn.ComplementarityProblem(ssn.AffineMap(np.eye(3) + 0.5, [1.0, -1.0, 0.2])), {LBFGSB, INTERIOR}),
    (ssn.ComplementarityProblem(ssn.AffineMap([[1.0, 2.0], [0.0, 1.0]], [-1.0, -1.0])), set()),
    (Contact(), set()),
]


@pytest.mark.parametrize(("problem", "wanted"), CASES)
def test_who_is_asked(problem, wanted):
    assert set(library_methods(problem)) == wanted


@pytest.mark.parametrize(("problem", "wanted"), [case for case in CASES if case[1]])
def test_they_agree_with_ours(problem, wanted):
    """Their own accuracies differ; a wrong statement of the problem would be off by far more."""
    solution = ssn.solve(problem, tolerance=1e-10).require()
    for name, method in library_methods(problem).items():
        result = method(problem, budget=20.0)
        assert result.converged, name
        np.testing.assert_allclose(
            result.x, solution.x, atol=3e-4 * max(1.0, np.abs(solution.x).max()), err_msg=name
        )


def test_the_table_shows_their_rule_and_our_judgement():
    assessment = assess(control(10), libraries=True)
    assert assessment.holds, assessment.failures()
    others = {method.name: method for method in assessment.methods[2:]}
    assert set(others) == {LBFGSB, INTERIOR}
    assert all(m.converged and m.accuracy < 1e-2 and m.distance < 1e-3 for m in others.values())
    assert [m.name for m in assess(control(10)).methods[2:]] == []


def test_a_budget_ends_them():
    result = library_methods(control(40, alpha=1e-7))[LBFGSB](control(40, alpha=1e-7), budget=0.0)
    assert not result.converged and result.outcome == "budget used up"
    assert (np.abs(result.x) <= 30.0).all()


def test_a_large_problem_is_no_quadratic_program_in_passing():
    assert quadratic_program(control(10)) is not None
    assert quadratic_program(control(90)) is None
