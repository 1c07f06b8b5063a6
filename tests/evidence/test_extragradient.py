import numpy as np
import pytest

import ssn
from ssn.extragradient import extragradient

from . import cases


def exact(problem):
    solution = ssn.solve(problem, tolerance=1e-12)
    assert solution.converged
    return solution.x


@pytest.mark.parametrize("make", [cases.linear_complementarity, cases.complementarity, cases.obstacle])
def test_reaches_the_solution(make):
    problem = make()
    result = extragradient(problem)
    assert result.converged and result.outcome == "converged"
    assert result.x == pytest.approx(exact(problem), rel=1e-6, abs=1e-8)
    assert result.work.operator_products >= 2 * result.iterations


@pytest.mark.parametrize("iterations", [1, 3, 10, 30, 100])
def test_the_bound_is_true_at_any_time(iterations):
    problem = cases.linear_complementarity()
    x = exact(problem)
    result = extragradient(problem, max_iterations=iterations, tolerance=1e-12)
    assert result.bound is not None
    assert np.linalg.norm(result.x - x) <= result.bound + 1e-12


def test_the_bound_decides_about_stopping():
    problem = cases.linear_complementarity()
    result = extragradient(problem, tolerance=1e-8)
    assert result.bound <= 1e-8 * np.linalg.norm(result.x)
    assert np.linalg.norm(result.x - exact(problem)) <= result.bound


def test_rotation_is_monotone_and_needs_the_extra_step():
    # F(x) = J x + x/100 - b with J skew: plain projection steps of length 1/L spiral outwards
    J = np.array([[0.0, 1.0], [-1.0, 0.0]])
    problem = ssn.ComplementarityProblem(ssn.AffineMap(J + 1e-2 * np.eye(2), [-0.5, 0.2]), -10.0, 10.0)
    root = np.linalg.solve(J + 1e-2 * np.eye(2), [0.5, -0.2])
    assert extragradient(problem).x == pytest.approx(root, rel=1e-5)


def test_starts_at_the_solution():
    problem = cases.linear_complementarity()
    result = extragradient(problem, exact(problem), tolerance=1e-7)
    assert result.converged and result.iterations <= 2


def test_limits_are_outcomes():
    problem = cases.linear_complementarity()
    assert extragradient(problem, max_iterations=2).outcome == "iteration limit"
    late = extragradient(problem, budget=0.0, tolerance=1e-12)
    assert late.outcome == "budget used up" and not late.converged


def test_not_monotone_ends_without_a_claim():
    # F(x) = -x - 1 on x >= 0: no solution
    problem = ssn.ComplementarityProblem(ssn.AffineMap(-np.eye(3), -np.ones(3)))
    result = extragradient(problem, max_iterations=500)
    assert not result.converged


def test_nan_is_an_outcome():
    problem = ssn.ComplementarityProblem(
        ssn.SmoothMap(lambda x: np.where(x > 0.5, np.nan, -np.ones(2)), lambda x: np.eye(2)), size=2
    )
    result = extragradient(problem, max_iterations=200)
    assert not result.converged


def test_callback_and_refusals():
    seen = []
    extragradient(cases.obstacle(), callback=lambda k, figure: seen.append((k, figure)))
    assert [k for k, _ in seen] == list(range(1, len(seen) + 1))
    assert seen[-1][1] < seen[0][1]
    with pytest.raises(ssn.InputError, match="ComplementarityProblem"):
        extragradient(cases.control())
    with pytest.raises(ssn.InputError, match="tolerance"):
        extragradient(cases.obstacle(), tolerance=0.0)
