"""L1 and group regression on the diabetes data: the published path, and independent solvers."""

from __future__ import annotations

import io

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from sklearn.linear_model import Lasso

import ssn

from .loading import load

diabetes = load("diabetes_regression")


def test_known_values_hold():
    problem = diabetes.build()
    known = diabetes.known(problem, ssn.solve(problem))
    assert len(known) == 13
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_other_data(monkeypatch):
    table, score = diabetes.data()
    monkeypatch.setattr(diabetes, "data", lambda: (table, 1.001 * score))
    problem = diabetes.build()
    assert not any(check["holds"] for check in diabetes.known(problem, ssn.solve(problem)))


@pytest.mark.parametrize("weight", [900.0, 100.0, 10.0, 2.0, 1.0])
def test_lasso_agrees_with_coordinate_descent(weight):
    table, score = diabetes.data()
    ours = ssn.solve(diabetes.build(weight)).require().x
    model = Lasso(alpha=weight / score.size, fit_intercept=False, tol=1e-14, max_iter=10**6)
    theirs = model.fit(np.asfortranarray(table), score).coef_
    assert np.linalg.norm(ours - theirs) <= 1e-8 * np.linalg.norm(theirs)


def conic(weight):
    """Group regression as a second-order cone program: unknowns b, r = X b - y, one bound a group's length."""
    table, score = diabetes.data()
    scale = float(np.linalg.norm(score))
    score, weight = score / scale, weight / scale
    m, n = table.shape
    groups = list(diabetes.GROUPS.values())
    total = n + m + len(groups)
    q = np.zeros(total)
    q[n + m :] = weight * np.sqrt([len(g) for g in groups])
    rows = [np.hstack([table, -np.eye(m), np.zeros((m, len(groups)))])]
    right, cones = [score], [clarabel.ZeroConeT(m)]
    for k, members in enumerate(groups):
        block = np.zeros((1 + len(members), total))
        block[0, n + m + k] = -1.0
        block[1 + np.arange(len(members)), list(members)] = -1.0
        rows.append(block)
        right.append(np.zeros(1 + len(members)))
        cones.append(clarabel.SecondOrderConeT(1 + len(members)))
    p = sp.diags_array(np.concatenate([np.zeros(n), np.ones(m), np.zeros(len(groups))]))
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(p), q, sp.csc_matrix(np.vstack(rows)), np.concatenate(right), cones, settings
    )
    return scale * np.array(solver.solve().x)[:n]


@pytest.mark.parametrize("weight", [500.0, 100.0, 5.0])
def test_groups_agree_with_a_conic_solver_and_the_reference(weight):
    problem = diabetes.build(weight, "groups")
    solution = ssn.solve(problem).require()
    size = np.linalg.norm(solution.x)
    assert np.linalg.norm(solution.x - diabetes.reference(problem, 10.0)) <= 1e-7 * size
    # the cone program's gap bounds its distance by strong convexity, whose constant is 0.009
    other = conic(weight)
    least = problem.objective(solution.x)
    assert -1e-13 * least <= problem.objective(other) - least <= 1e-8 * least
    assert np.linalg.norm(solution.x - other) <= 1e-3 * size


def test_group_conditions_hold_and_can_fail():
    problem = diabetes.build(100.0, "groups")
    solution = ssn.solve(problem).require()
    assert [check["holds"] for check in diabetes.known(problem, solution)] == [True, True]
    other = ssn.solve(diabetes.build(101.0, "groups"))
    assert not diabetes.known(problem, other)[0]["holds"]


@pytest.mark.parametrize(
    ("parameters", "words"), [({"weight": -1.0}, "weight"), ({"weight": np.inf}, "weight"), ({"case": "l0"}, "case")]
)  # fmt: skip
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        diabetes.build(**parameters)


@pytest.mark.parametrize("case", ["lasso", "groups"])
def test_picture_and_summary(case):
    problem = diabetes.build(200.0, case)
    solution = ssn.solve(problem)
    buffer = io.BytesIO()
    diabetes.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert "bmi" in dict(diabetes.summary(problem, solution))["selected"]
