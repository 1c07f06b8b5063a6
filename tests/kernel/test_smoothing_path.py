"""The smoothing path: step counts, ways to go on, honest ends, starts where F is not defined."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.equations.complementarity import fischer_burmeister, mid_residual
from ssn.newton import Limits
from ssn.prepare import prepare
from ssn.smoothing_path import PLAIN_STEPS, SmoothingPath, follow_smoothing
from ssn.status import Outcome


def murty(n):
    return np.triu(2.0 * np.ones((n, n)), 1) + np.eye(n)


def fathi(n):
    lower = np.tril(2.0 * np.ones((n, n)), -1) + np.eye(n)
    return lower @ lower.T


@pytest.mark.parametrize("make", [murty, fathi])
@pytest.mark.parametrize("n", [10, 100, 1000])
def test_exponential_examples_take_ten_steps(make, n):
    solution = ssn.solve(ssn.ComplementarityProblem(ssn.AffineMap(make(n), -np.ones(n)))).require()
    assert len(solution.steps) <= 10


def scalar_problem(value, derivative, lower=0.0, **options):
    F = ssn.SmoothMap(value, lambda x: np.diag(derivative(x)))
    return ssn.ComplementarityProblem(F, lower, size=1, **options)


def billups(**options):
    return scalar_problem(lambda x: (x - 1) ** 2 - 1.01, lambda x: 2 * (x - 1), **options)


@pytest.mark.parametrize("form", ["mid", "fischer-burmeister"])
@pytest.mark.parametrize("start", [-1.0, 0.0, 0.5, 1.0])
def test_a_path_from_inside_the_bounds_leaves_a_local_minimiser(start, form):
    """S. Billups, thesis, Wisconsin, 1995."""
    solution = ssn.solve(billups(form=form), [start]).require()
    assert solution.x[0] == pytest.approx(1 + np.sqrt(1.01), abs=1e-8)


def test_the_history_tells_the_ways():
    solution = ssn.solve(billups(), [0.0])
    stages = [record.stage for record in solution.steps]
    assert stages[0] == "eps = 0"
    assert any(s == "plain steps from the start" for s in stages)
    assert any(s.startswith("Fischer-Burmeister, eps") for s in stages)
    assert any(s.startswith("Fischer-Burmeister from inside the bounds") for s in stages)
    assert [record.index for record in solution.steps] == list(range(1, len(stages) + 1))


@pytest.mark.parametrize("form", ["mid", "fischer-burmeister"])
def test_a_local_minimiser_is_called_so(form):
    problem = scalar_problem(lambda x: x**2 + 1, lambda x: 2 * x, lower=-np.inf, form=form)
    solution = ssn.solve(problem, [2.0])
    assert not solution.converged
    assert solution.outcome is Outcome.NO_ROOT_NEARBY


@pytest.mark.parametrize("search", ["auto", "residual", "full"])
@pytest.mark.parametrize("lower", [0.0, -np.inf])
def test_iterates_that_run_away_are_not_called_a_root(lower, search):
    """F <= -1: relative to a huge x any residual looks small."""
    problem = scalar_problem(lambda x: -1 - np.exp(-(x**2)), lambda x: 2 * x * np.exp(-(x**2)), lower=lower)
    solution = ssn.solve(problem, [2.0], globalization=search)
    assert not solution.converged


def test_starts_where_f_is_not_defined_are_moved():
    problem = scalar_problem(lambda x: np.sqrt(x) - 2, lambda x: 0.5 / np.sqrt(x))
    solution = ssn.solve(problem, [-3.0]).require()
    assert solution.x[0] == pytest.approx(4.0, abs=1e-8)
    assert "moved to 0.001 inside the bounds" in solution.choices["start"]
    assert "start" not in ssn.solve(problem, [3.0]).choices


def test_nan_everywhere_is_not_finite():
    problem = scalar_problem(lambda x: x * np.nan, lambda x: np.ones(1))
    assert ssn.solve(problem, [1.0]).outcome is Outcome.NOT_FINITE


def test_unknown_form_is_refused():
    with pytest.raises(ssn.InputError, match="form must be one of 'mid', 'fischer-burmeister'"):
        billups(form="minimum")


@pytest.mark.parametrize("form", ["mid", "fischer-burmeister"])
def test_newton_direction_solves_the_system_of_its_form(form):
    rng = np.random.default_rng(3)
    n = 6
    matrix, q = rng.standard_normal((n, n)) + 4 * np.eye(n), rng.standard_normal(n)
    lower = np.array([0, 0, -np.inf, -np.inf, -1, 0])
    upper = np.array([np.inf, 1, 1, np.inf, 1, 0.5])
    problem = ssn.ComplementarityProblem(ssn.AffineMap(matrix, q), lower, upper, form=form)
    plan = prepare(problem, 3 * rng.standard_normal(n))
    for equation in (plan.equation, plan.equation.smoothed(0.3)):
        plan.solver.equation = equation
        at = equation.evaluate(plan.start)
        d = plan.solver.solve(at, 1e-12).vector
        h = 1e-7
        moved = equation.evaluate(plan.start + h * d).norm
        assert (moved - at.norm) / h == pytest.approx(-at.norm, rel=1e-4)


def test_fischer_burmeister_has_the_roots_of_mid_and_no_cancellation():
    low, high = np.zeros(4), np.array([np.inf, np.inf, 2.0, 2.0])
    x, f = np.array([0.0, 1.0, 2.0, 1.0]), np.array([3.0, 0.0, -1.0, 0.0])
    assert not mid_residual(x, f, low, high).any()
    assert not fischer_burmeister(x, f, low, high)[0].any()
    x, f = np.array([1e100]), np.array([-1.0])
    assert fischer_burmeister(x, f, np.zeros(1), np.full(1, np.inf))[0] == pytest.approx(-1.0)


def test_plain_steps_go_on_while_the_pieces_settle():
    """From a coarser mesh few pieces are wrong, the norm falls slowly at first; a smoothed step would unsettle them."""

    def membrane(n):
        line = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
        stiffness = sp.csr_array(sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line))
        t = np.linspace(0, 1, n + 2)[1:-1]
        load = 80.0 * np.outer(np.sin(2 * np.pi * t), np.sin(np.pi * t)).ravel() / (n + 1) ** 2
        return ssn.ComplementarityProblem(ssn.AffineMap(stiffness, -load), -0.3, 0.3)

    coarse = ssn.solve(membrane(64)).require().x.reshape(64, 64)
    line = np.linspace(0, 1, 66)
    points = np.stack(np.meshgrid(*[np.linspace(0, 1, 130)[1:-1]] * 2, indexing="ij"), axis=-1)
    start = RegularGridInterpolator((line, line), np.pad(coarse, 1))(points).ravel()
    plain = ssn.solve(membrane(128), start, globalization="full").require()
    assert plain.steps[0].contraction > SmoothingPath().contraction
    solution = ssn.solve(membrane(128), start).require()
    assert len(solution.steps) == len(plain.steps)
    assert {s.stage for s in solution.steps} == {"eps = 0"}


def test_plain_steps_may_settle_one_layer_a_step():
    """Where the path fails on an affine equation, plain steps go on as long as they move the contact set."""
    n = 200
    second = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    x = np.linspace(0, 1, n + 2)[1:-1]
    F = ssn.AffineMap(sp.csr_array(second), np.zeros(n))
    problem = ssn.ComplementarityProblem(F, lower=0.5 - 8 * (x - 0.5) ** 2)
    plan = prepare(problem, None)
    blocked = SmoothingPath(point_steps=1, patience=0, contraction=0.0, interior=())
    result = follow_smoothing(plan.equation, type(plan.solver), plan.start, Limits(), blocked, None)
    plain = [step for step in result.steps if step.stage == "plain steps from the start"]
    assert result.outcome is Outcome.CONVERGED
    assert len(plain) > PLAIN_STEPS
    assert result.steps[-1] is plain[-1]
