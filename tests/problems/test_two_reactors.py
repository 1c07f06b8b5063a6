"""Two reactors on one coolant supply: when just one valve is open and why, tariffs, independent methods."""

import numpy as np
import pytest

import ssn
from ssn.evidence.library_methods import lbfgsb

from .loading import load

problem_file = load("two_reactors")


@pytest.fixture(scope="module")
def solved():
    problem = problem_file.build(80)
    return problem, ssn.solve(problem).require()


def test_switching_really_occurs(solved):
    _, solution = solved
    assert len(solution.steps) <= 14
    assert sum(step.evaluations for step in solution.steps) <= 26
    assert solution.steps[-1].contraction < 1e-3
    assert problem_file.one_open(solution) > 0.85
    open_one = solution.x.reshape(-1, 2) != 0
    assert open_one.any(axis=0).all()  # both tanks have their turn
    assert np.abs(np.diff(open_one.astype(int), axis=0)).sum() >= 4


def test_known_values_hold_and_reject_another_flow(solved):
    problem, solution = solved
    known = problem_file.known(problem, solution)
    assert len(known) == 4 and [check for check in known if not check["holds"]] == []
    other = ssn.solve(problem_file.build(80, alpha=0.03)).require()
    wrong = problem_file.known(problem, other)
    assert not wrong[0]["holds"]


def test_the_share_with_one_valve_open_grows_with_the_weight():
    shares = [
        problem_file.one_open(ssn.solve(problem_file.build(80, beta=beta)).require())
        for beta in (0.0, 0.05, 2.0)
    ]
    assert shares[0] == 0.0 and shares[0] < shares[1] < 0.5 and shares[2] > 0.9


def test_dear_hours_have_less_coolant(solved):
    problem, even = solved
    dear_problem = problem_file.build(80, tariff="day and night")
    dear = ssn.solve(dear_problem).require()
    hours = dear_problem.mesh_data.beta > problem.mesh_data.beta
    assert hours.any() and not hours.all()
    flow = [s.x.reshape(-1, 2)[hours].sum() for s in (even, dear)]
    assert flow[1] < 0.8 * flow[0]
    assert dict(problem_file.summary(dear_problem, dear))["instants with exactly one valve open"].endswith(
        "%"
    )
    assert problem_file.picture(dear_problem, dear) is not None


def test_another_method_finds_no_lower_objective():
    """L-BFGS-B on the split problem, where it has no proximal map and no second derivative."""
    problem = problem_file.build(80, alpha=0.1)
    solution = ssn.solve(problem).require()
    found = lbfgsb(problem, budget=8.0)
    assert problem.objective(found.x) >= solution.objective * (1.0 - 1e-9)
    if found.converged:
        assert problem.controls.norm(found.x - solution.x) <= 1e-4 * problem.controls.norm(solution.x)


def test_with_the_valves_shut_a_tank_runs_away():
    problem = problem_file.build(240)
    shut = problem.state_of(np.zeros(problem.unknowns)).reshape(-1, 4)[:, 2:]
    exact = problem_file.integrated(problem, np.zeros(problem.unknowns))[:, 2:]
    assert exact.max() > 8.0 and shut.max() == pytest.approx(exact.max(), rel=0.05)


def test_derivatives_of_the_model():
    rng = np.random.default_rng(3)
    y, q, t = rng.uniform(0.1, 1.0, 4), rng.standard_normal(4), 0.7
    h = 1e-6
    for i in range(4):
        e = h * np.eye(4)[i]
        slope = (problem_file.balance(t, y + e) - problem_file.balance(t, y - e)) / (2 * h)
        np.testing.assert_allclose(problem_file.jacobian(t, y)[:, i], slope, atol=1e-8)
        bend = (problem_file.jacobian(t, y + e) - problem_file.jacobian(t, y - e)).T @ q / (2 * h)
        np.testing.assert_allclose(problem_file.hessian(t, y, q)[:, i], bend, atol=1e-8)


def test_input():
    for wrong in ({"n": 5}, {"alpha": 0.0}, {"beta": -1.0}, {"tariff": "free"}):
        with pytest.raises(ssn.InputError, match=next(iter(wrong))):
            problem_file.build(**wrong)
