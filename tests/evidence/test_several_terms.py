"""Evidence about several terms: right problems hold, and each mistake is caught by the check that is for it."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.evidence import assess, check_derivative, rate
from ssn.evidence.judge import accuracy
from ssn.evidence.library_methods import conic_interior_point
from ssn.gate.figures import statement
from ssn.linear import PrimalDualSolver
from ssn.primal_dual_path import PrimalDualPath
from ssn.protocols import Direction


def differences(n):
    return sp.csr_array(sp.diags_array([-np.ones(n - 1), np.ones(n - 1)], offsets=[0, 1], shape=(n - 1, n)))


N = 24
DATA = np.repeat([0.0, 1.0, 0.3], 8) + 0.1 * np.random.default_rng(6).standard_normal(N)


def variation(part=None):
    fit = ssn.Quadratic(sp.eye_array(N), DATA) if part is None else part
    return ssn.SumProblem(
        smooth=fit, terms=[ssn.Term(ssn.GroupSparseCost(0.2, groups=np.arange(N - 1) // 2), differences(N))]
    )


def budget():
    return ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(N), DATA),
        terms=[ssn.Term(ssn.Bounds(0.1, 0.9)), ssn.Term(ssn.Bounds(0.0, 0.0), np.ones((1, N)), [12.0])],
    )


def control():
    h = 1.0 / (N + 1)
    e = sp.diags_array([-np.ones(N - 1), 2.0 * np.ones(N), -np.ones(N - 1)], offsets=[-1, 0, 1]) / h
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(e), target=0.1 * DATA, cost=ssn.SparseCost(1e-3), control_weight=1e-3,
        state_mass=np.full(N, h), control_mass=np.full(N, h),
    )  # fmt: skip
    return ssn.SumProblem(smooth=problem, terms=[ssn.Term(ssn.SparseCost(1e-3), differences(N))])


@pytest.mark.parametrize("make", [variation, budget, control])
def test_right_problems_have_all_evidence(make):
    assessment = assess(make())
    assert assessment.failures() == []
    assert assessment.methods[1].name == "first-order primal-dual"
    assert assessment.rate.holds and assessment.agreement == "holds"
    names = {check.name for check in assessment.checks}
    assert {
        "residual",
        "proximal map",
        "newton derivative",
        "newton step",
        "adjoint",
        "gradient",
        "hessian",
    } <= names
    assert ("certificate" in names) == (assessment.solution.certificate is not None)
    json.dumps(assessment.as_dict(), allow_nan=False)


class Wrong:
    """A quadratic part of which one member is wrong."""

    affine_gradient = True
    size = N

    def __init__(self, scale=1.0, bend=1.0, convexity=None):
        self.scale, self.bend = scale, bend
        if convexity is not None:
            self.strong_convexity = convexity

    def value(self, u):
        return 0.5 * float((u - DATA) @ (u - DATA))

    def gradient(self, u):
        return self.scale * (u - DATA)

    def hessian(self, u):
        return self.bend * sp.eye_array(N)


class HalfStep(PrimalDualSolver):
    def solve(self, at, forcing):
        d = super().solve(at, forcing)
        return Direction(0.5 * d.vector, d.relative_residual, d.inner_iterations, d.status)


def test_wrong_derivatives_are_caught():
    failing = {c.name for c in check_derivative(variation(Wrong(scale=1.1))) if not c.holds}
    assert "gradient" in failing
    failing = {c.name for c in check_derivative(variation(Wrong(bend=1.1))) if not c.holds}
    assert {"hessian", "newton derivative"} <= failing


def test_a_wrong_adjoint_is_caught():
    problem = variation()
    problem.adjoint = lambda y: 1.01 * ssn.SumProblem.adjoint(problem, y)
    failing = {c.name for c in check_derivative(problem) if not c.holds}
    assert "adjoint" in failing


def test_a_wrong_newton_step_is_caught(monkeypatch):
    monkeypatch.setattr("ssn.plans.sums.PrimalDualSolver", HalfStep)
    problem = variation()
    solution = ssn.solve(problem).require()
    failing = {c.name for c in check_derivative(problem, solution.x) if not c.holds}
    assert "newton step" in failing
    assert not rate(problem, solution).holds


def test_overstated_convexity_is_caught():
    assessment = assess(variation(Wrong(convexity=50.0)))
    assert not assessment.check("certificate").holds


def test_another_point_is_caught():
    problem = variation()
    solution = ssn.solve(problem).require()
    moved = replace(solution, x=solution.x + 1e-4)
    assessment = assess(problem, solution=moved)
    failing = {check.name for check in assessment.checks if not check.holds}
    assert {"agreement", "residual"} <= failing


def test_accuracy_is_a_figure_of_the_unknown_alone():
    problem = variation()
    exact = ssn.solve(problem, tolerance=1e-11).require().x
    assert accuracy(problem, exact) <= 1e-9
    for size in (1e-2, 1e-4, 1e-6):
        u = exact * (1.0 + size * np.cos(np.arange(N)))
        assert 0.1 * size <= accuracy(problem, u) <= 10.0 * size


def offsets():
    """Every kind of term the conic program knows, all with an offset and weights."""
    d, c, w = differences(N), np.linspace(-0.5, 0.5, N - 1), np.linspace(0.5, 1.5, N - 1)
    group = ssn.GroupSparseCost(0.1, groups=np.arange(N - 1) // 3, inner_weights=w)
    return ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(N), DATA),
        terms=[
            ssn.Term(ssn.SparseCost(0.1), d, c, w),
            ssn.Term(group, d, -c, 2.0 * w),
            ssn.Term(ssn.ElasticNetCost(0.0, 0.5), d, 0.3 + c, w),
            ssn.Term(ssn.Bounds(-0.3, 0.9), None, np.full(N, 0.05)),
        ],
    )


@pytest.mark.parametrize("make", [variation, budget, control, offsets])
def test_the_interior_point_method_agrees(make):
    pytest.importorskip("clarabel")
    problem = make()
    ours = ssn.solve(problem).require()
    theirs = conic_interior_point(problem, budget=20.0)
    assert problem.controls.norm(ours.x - theirs.x) <= 1e-7 * problem.controls.norm(ours.x)


def test_the_statement_of_the_gate_shows_every_part():
    told = {
        str(statement(problem, N))
        for problem in (
            variation(),
            variation(ssn.Quadratic(sp.eye_array(N), 1.01 * DATA)),
            ssn.SumProblem(
                smooth=ssn.Quadratic(sp.eye_array(N), DATA),
                terms=[ssn.Term(ssn.SparseCost(0.2), differences(N))],
            ),
            control(),
        )
    }
    assert len(told) == 4 and not any("None" in text for text in told)


def test_the_path_ends_where_it_is_told():
    assert PrimalDualPath().max_points >= 50
    solution = ssn.solve(variation(), max_steps=4)
    assert not solution.converged and len(solution.steps) == 4
    assert solution.outcome is ssn.Outcome.STEP_LIMIT


def test_multipliers_on_the_edge_of_their_balls_do_not_hide_the_rate():
    """Here the path may end with multipliers on the edge of a ball though the gradient vanishes: kinks."""
    n = 16
    x, y = np.meshgrid(np.linspace(-1, 1, n), np.linspace(-1, 1, n))
    data = ((x**2 + y**2 < 0.4) + 0.1 * np.random.default_rng(0).standard_normal((n, n))).ravel()
    line = sp.csr_array(sp.vstack([differences(n), sp.csr_array((1, n))]))
    operator = sp.vstack([sp.kron(sp.eye_array(n), line), sp.kron(line, sp.eye_array(n))])
    cost = ssn.GroupSparseCost(0.1, shape=(2, n * n), axis=0)
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n * n), data), terms=[ssn.Term(cost, operator)]
    )
    solution = ssn.solve(problem).require()
    prices = np.hypot(*solution.multipliers["term 0"].reshape(2, -1))
    lengths = np.hypot(*(operator @ solution.x).reshape(2, -1))
    assert np.any((prices >= 0.1 * (1 - 1e-12)) & (lengths < 1e-10))
    assert rate(problem, solution).holds
