"""Choosing a weight, splitting a support into places, and the refit."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import scipy.sparse as sp
from sklearn.datasets import load_diabetes

import ssn
from tests.kernel.examples import control


def diabetes():
    data, y = load_diabetes(return_X_y=True)
    data = data - data.mean(axis=0)
    return data / np.linalg.norm(data, axis=0), y - y.mean()


def lasso(weight):
    a, b = diabetes()
    return ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=ssn.SparseCost(weight))


def test_path_on_the_diabetes_data():
    """Support sizes between the published knots (Efron et al., Ann. Statist. 32, 2004; knots recomputed)."""
    path = ssn.weight_path(lasso, [800.0, 10.0, 400.0, 950.0, 100.0, 2.0])
    assert path.converged
    assert [p.weight for p in path.points] == [950.0, 800.0, 400.0, 100.0, 10.0, 2.0]
    # above 949.4 none; 949.4 bmi, 889.3 s5, 452.9 bp, 316.1 s3, 130.1 sex, 88.8 s6, 69.0 s1, 20.0 s4, 5.48 s2,
    # 5.09 age, between 2.18 and 1.31 s3 is out
    assert [p.support for p in path.points] == [0, 2, 3, 5, 8, 9]
    misfits = [p.misfit for p in path.points]
    assert all(b < a for a, b in itertools.pairwise(misfits))  # a smaller weight fits better
    assert "nonzeros" in path.table()


def test_vanishing_weight_is_sharp():
    assert ssn.vanishing_weight(lasso(1.0)) == pytest.approx(949.43526, rel=1e-7)  # first published knot
    problem = control(24, alpha=1e-5)
    threshold = ssn.vanishing_weight(problem)
    assert not ssn.solve(control(24, alpha=1e-5, beta=threshold * (1 + 1e-9))).require().x.any()
    assert ssn.solve(control(24, alpha=1e-5, beta=threshold * (1 - 1e-4))).require().x.any()
    one_sided = problem.with_cost(ssn.SparseCost(1.0, 0.0, 30.0))
    assert 0 < ssn.vanishing_weight(one_sided) <= threshold


def test_discrepancy_principle_takes_the_largest_sufficient_weight():
    path = ssn.weight_path(lasso, [500.0, 100.0, 20.0])
    level = path.points[1].misfit * 1.0001
    assert path.discrepancy(level).weight == 100.0
    with pytest.raises(ssn.InputError, match="no weight reaches"):
        path.discrepancy(path.points[-1].misfit * 0.9)


def test_refit_removes_the_bias_and_keeps_the_support():
    rng = np.random.default_rng(0)
    a = rng.standard_normal((80, 30))
    truth = np.zeros(30)
    truth[[3, 11, 20]] = [2.0, -1.5, 1.0]
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, a @ truth), cost=ssn.SparseCost(10.0))
    sparse = ssn.solve(problem).require()
    assert (np.flatnonzero(sparse.x) == [3, 11, 20]).all()
    assert (
        np.abs(sparse.x[[3, 11, 20]]) < np.abs(truth[[3, 11, 20]])
    ).all()  # amplitudes too low before the refit
    amplitudes = ssn.solve(ssn.refit(problem, sparse)).require()
    np.testing.assert_allclose(amplitudes.x, truth, atol=1e-8)
    one = ssn.solve(ssn.refit(problem, np.arange(30) == 3)).require()
    assert (np.flatnonzero(one.x) == [3]).all()


def test_refit_of_a_control_shares_the_factor():
    problem = control(20, alpha=1e-5)
    sparse = ssn.solve(problem).require()
    again = ssn.solve(ssn.refit(problem, sparse)).require()
    assert again.work.factorizations == 0
    assert (again.x[sparse.x == 0] == 0).all()
    assert problem.smooth_value(again.x) <= problem.smooth_value(sparse.x)
    assert (
        isinstance(problem.cost, ssn.SparseCost) and problem.cost.beta > 0
    )  # the first problem is as it was


def test_placements_are_connected():
    line = sp.diags_array([np.ones(9), np.ones(10), np.ones(9)], offsets=[-1, 0, 1])
    support = np.array([0, 1, 1, 1, 0, 1, 0, 0, 1, 1], dtype=bool)
    assert [p.tolist() for p in ssn.placements(support, line)] == [[1, 2, 3], [8, 9], [5]]
    assert ssn.placements(np.zeros(10, dtype=bool), line) == []


def test_plot(tmp_path):
    ssn.weight_path(lasso, [500.0, 50.0]).plot(tmp_path / "weights.png")
    assert (tmp_path / "weights.png").stat().st_size > 5000


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: ssn.weight_path(lasso, []), "weights is empty"),
        (lambda: ssn.weight_path(lasso, [1.0, -1.0]), r"weights\[1\] must be positive"),
        (lambda: ssn.vanishing_weight(control(cost=ssn.SparseCost(1.0, 1.0, 2.0))), "zero is not within"),
        (lambda: ssn.refit(control(), np.ones(3, dtype=bool)), "booleans"),
        (lambda: ssn.placements(np.ones(3, dtype=bool), sp.eye_array(4)), "graph has shape"),
    ],
)
def test_refused(call, message):
    with pytest.raises(ssn.InputError, match=message):
        call()


def test_group_costs_have_a_vanishing_weight_and_a_refit():
    rng = np.random.default_rng(5)
    A, b = rng.standard_normal((12, 9)), rng.standard_normal(12)
    profile = np.array([1.0, 0.5, 0.8])

    def problem(weight, lower=-np.inf, upper=np.inf):
        cost = ssn.GroupSparseCost(
            weight * profile, shape=(3, 3), axis=0, inner_weights=0.5, lower=lower, upper=upper
        )
        return ssn.CompositeProblem(smooth=ssn.LeastSquares(A, b), cost=cost)

    for bounds in ({}, {"lower": 0.0}, {"upper": 0.0}):
        largest = ssn.vanishing_weight(problem(0.7, **bounds))
        assert np.count_nonzero(ssn.solve(problem(largest * (1 + 1e-9), **bounds)).x) == 0
        assert np.count_nonzero(ssn.solve(problem(largest * (1 - 1e-3), **bounds)).x) > 0
    sparse = ssn.solve(problem(0.5 * largest, upper=0.0)).require()
    again = ssn.solve(ssn.refit(problem(0.5 * largest, upper=0.0), sparse)).require()
    on = sparse.x != 0
    assert (again.x[~on] == 0).all() and (again.x <= 0).all()
    assert np.linalg.norm(A @ again.x - b) < np.linalg.norm(A @ sparse.x - b)
    with pytest.raises(ssn.InputError, match="zero is not within the bounds"):
        ssn.vanishing_weight(problem(1.0, lower=0.1))
    with pytest.raises(ssn.InputError, match="needs a SparseCost or a GroupSparseCost, got HuberCost"):
        ssn.vanishing_weight(
            ssn.CompositeProblem(smooth=ssn.LeastSquares(A, b), cost=ssn.HuberCost(1.0, 1.0))
        )
