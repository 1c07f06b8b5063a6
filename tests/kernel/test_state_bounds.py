"""State bounds: the penalty path, what it returns, what it refuses, and what the evidence makes of it."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

import ssn
from ssn.equations.full_space import FullSpaceEquation
from ssn.evidence import assess, check_derivative, mesh_study, rate
from ssn.linear import FullSpaceSolver
from ssn.moreau_yosida import first_penalty
from tests.problems.loading import load

BOUNDARY = load("boundary_control")


def line_problem(n=15, *, alpha=1e-3, cost=None, **options):
    """-y'' = u with zero ends, target 1: the state wants to rise above 0.5."""
    h = 1.0 / (n + 1)
    matrix = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h
    data = {
        "state": ssn.SteadyState(sp.csr_array(matrix)),
        "target": np.ones(n),
        "cost": ssn.Bounds(-40.0, 40.0) if cost is None else cost,
        "control_weight": alpha,
        "state_mass": np.full(n, h),
        "control_mass": np.full(n, h),
    }
    return ssn.ControlProblem(**(data | options))


def check_conditions(problem, solution):
    """The optimality conditions of the penalised problem, formed here."""
    y, p, u = solution.state, solution.adjoint, solution.x
    gamma, density = solution.problem.state_penalty, solution.multipliers["state"]
    c = np.eye(y.size) if problem.observation is None else problem.observation
    e = problem.state.matrix
    source = 0.0 if problem.source is None else problem.source
    np.testing.assert_allclose(e @ y, problem.control_operator @ u + source, atol=1e-9)
    load = c.T @ problem.observations.apply(problem.target - c @ y) - problem.bound_mass * density
    tolerance = max(1e-9, solution.tolerance)
    np.testing.assert_allclose(e.T @ p, load, atol=10 * tolerance * max(1.0, abs(load).max()))
    v = problem.control_operator.T @ p / problem.weights / problem.alpha
    moved = problem.cost.prox(v, 1.0 / problem.alpha)
    np.testing.assert_allclose(u, moved, rtol=0, atol=100 * tolerance * abs(u).max())
    excess = np.maximum(y - problem.state_upper, 0) - np.maximum(problem.state_lower - y, 0)
    np.testing.assert_allclose(density, gamma * excess, rtol=1e-12)
    assert solution.violation == pytest.approx(abs(excess).max(), rel=1e-12)


@pytest.mark.parametrize("bounds", [{"state_upper": 0.5}, {"state_lower": -0.2, "state_upper": 0.3}])
@pytest.mark.parametrize("alpha", [1e-3, 1e-4, 1e-6])
@pytest.mark.parametrize("cost", [ssn.Bounds(-40.0, 40.0), ssn.SparseCost(1e-3, -40.0, 40.0)])
def test_conditions_hold_at_the_end_of_the_path(bounds, alpha, cost):
    problem = line_problem(alpha=alpha, cost=cost, target=3 * np.sin(9 * np.linspace(0, 1, 15)), **bounds)
    solution = ssn.solve(problem).require()
    assert solution.violation <= problem.state_tolerance
    assert solution.tolerance <= 1e-5
    check_conditions(problem, solution)


def test_signs_of_the_multiplier():
    target = np.where(np.arange(15) < 7, 1.0, -1.0)
    solution = ssn.solve(line_problem(target=target, state_lower=-0.3, state_upper=0.3)).require()
    density, labels = solution.multipliers["state"], solution.pieces["state"]
    assert (density[labels == 2] > 0).all() and (labels[:7] == 2).any()
    assert (density[labels == 0] < 0).all() and (labels[8:] == 0).any()
    assert (density[labels == 1] == 0).all()


def test_observation_operators_masses_and_arrays_of_bounds():
    rng = np.random.default_rng(3)
    n, m, k = 12, 5, 4
    e = sp.csr_array(np.diag(4 + rng.random(n)) + rng.uniform(-0.3, 0.3, (n, n)))  # not symmetric
    full = rng.standard_normal((m, m))
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(e),
        control_operator=rng.standard_normal((n, k)),
        observation=rng.standard_normal((m, n)),
        observation_mass=full @ full.T + np.eye(m),
        state_mass=rng.uniform(0.5, 2, n),
        control_mass=rng.uniform(0.5, 2, k),
        source=rng.standard_normal(n),
        target=3 * rng.standard_normal(m),
        cost=ssn.SparseCost(0.01, -8, 8),
        control_weight=1e-2,
        state_lower=np.where(np.arange(n) % 3 == 0, -0.4, -np.inf),
        state_upper=np.where(np.arange(n) % 2 == 0, 0.5, np.inf),
    )
    solution = ssn.solve(problem).require()
    assert (solution.multipliers["state"] != 0).any()
    check_conditions(problem, solution)
    assert solution.work.symbolic_analyses <= 2  # the state matrix and the Newton matrix


def test_the_newton_matrix_is_the_derivative():
    problem = line_problem(
        observation=sp.csr_array(sp.eye_array(15))[::2], target=np.ones(8), state_upper=0.5
    )
    equation = FullSpaceEquation(problem, 50.0)
    solver = FullSpaceSolver(equation)
    x = np.random.default_rng(0).standard_normal(30)
    at = equation.evaluate(x)
    d = solver.solve(at, 0.0).vector
    image = equation.linearize(x).derivative @ d
    np.testing.assert_allclose(image, -at.residual, atol=1e-9 * abs(at.residual).max())


def test_bounds_that_do_not_act_change_nothing():
    free = ssn.solve(line_problem())
    bounded = ssn.solve(line_problem(state_upper=10.0)).require()
    assert bounded.violation == 0.0 and not bounded.multipliers["state"].any()
    np.testing.assert_allclose(bounded.x, free.x, rtol=1e-7, atol=1e-7)
    assert bounded.objective == pytest.approx(free.objective, rel=1e-9)


def test_violation_falls_like_one_over_the_penalty():
    problem = BOUNDARY.build(20)
    gammas = 10.0 ** np.arange(3, 8)
    violations = [ssn.solve(problem.penalised(g)).require().violation for g in gammas]
    slopes = np.diff(np.log(violations)) / np.diff(np.log(gammas))
    assert (slopes < -0.5).all()
    assert abs(slopes[-1] + 1.0) < 0.01


def test_the_certificate_bounds_the_distance():
    problem = BOUNDARY.build(20).penalised(1e4)
    exact = ssn.solve(problem)
    equation = FullSpaceEquation(problem, 1e4)
    rng = np.random.default_rng(5)
    for size in (1e-1, 1e-3, 1e-5):
        at = equation.evaluate(exact.iterate * (1 + size * rng.standard_normal(exact.iterate.size)))
        gap = problem.controls.norm(at.data.control - exact.x)
        assert gap <= at.norm / np.sqrt(problem.alpha)
    assert exact.certificate.relative < 1e-9


def test_stages_choices_and_message_tell_the_path():
    solution = ssn.solve(BOUNDARY.build(10))
    stages = list(dict.fromkeys(step.stage for step in solution.steps))
    assert stages[0] == "penalty 0" and all(stage.startswith("penalty ") for stage in stages)
    gammas = [float(stage.split()[1]) for stage in stages]
    assert gammas == sorted(gammas)
    assert f"penalty {solution.problem.state_penalty:.3g}" in solution.message
    assert "Moreau-Yosida" in solution.choices["path"]
    assert [s.index for s in solution.steps] == list(range(1, len(solution.steps) + 1))


def test_the_same_path_twice_and_from_the_solution():
    problem = BOUNDARY.build(15)
    one, two = ssn.solve(problem), ssn.solve(problem)
    assert (one.x == two.x).all() and one.steps == two.steps
    warm = ssn.solve(problem, one.x).require()
    np.testing.assert_allclose(warm.x, one.x, rtol=1e-6)


def test_step_limit_and_callback_keep_the_best_point():
    problem = BOUNDARY.build(15)
    for limit in range(7):
        solution = ssn.solve(problem, max_steps=limit)
        assert len(solution.steps) <= limit and solution.x.shape == (56,)
        if not solution.converged:
            assert solution.outcome is ssn.Outcome.STEP_LIMIT

    def stop(record):
        if record.index == 4:
            raise ssn.StopSolve("enough")

    assert ssn.solve(problem, callback=stop).outcome is ssn.Outcome.STOPPED


def test_bounds_that_no_control_satisfies():
    problem = line_problem(cost=ssn.Bounds(30.0, 40.0), state_upper=0.1)
    solution = ssn.solve(problem)
    assert solution.outcome is ssn.Outcome.INFEASIBLE and not solution.converged
    assert solution.violation > 1.0 and "no control" in solution.message


def test_dual_search_takes_over_where_the_quick_steps_fail():
    problem = line_problem(alpha=1e-5, target=3 * np.sin(9 * np.linspace(0, 1, 15)), state_upper=0.5)
    assert len(ssn.solve(problem, globalization="residual").steps) > 40
    for choice in ("auto", "dual"):
        solution = ssn.solve(problem, globalization=choice).require()
        assert len(solution.steps) <= 20
        assert any(step.action == "exact search" and step.stage != "penalty 0" for step in solution.steps)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"state_lower": 1.0, "state_upper": 0.5}, "state_lower 1.0 > state_upper 0.5"),
        ({"state_upper": np.zeros(3)}, "state_upper has shape"),
        ({"state_upper": np.nan}, "state_upper"),
        ({"state_upper": 0.5, "alpha": 0.0}, "control_weight > 0"),
        ({"state_tolerance": 1e-3}, "no effect"),
        ({"state_upper": 0.5, "state_tolerance": 0.0}, "state_tolerance must be positive"),
    ],
)
def test_refused_when_stated(options, words):
    with pytest.raises(ssn.InputError, match=words):
        line_problem(**options)


class Hidden:
    """A state model without an explicit matrix."""

    def __init__(self, inner):
        self._inner, self.size = inner, inner.size
        self.attach, self.solve, self.adjoint_solve = inner.attach, inner.solve, inner.adjoint_solve
        self.residual, self.adjoint_residual = inner.residual, inner.adjoint_residual


def test_refused_when_solved():
    with pytest.raises(ssn.InputError, match="Hidden hides"):
        ssn.solve(line_problem(state=Hidden(line_problem().state), state_upper=0.5))
    eye = LinearOperator((15, 15), matvec=lambda x: x, rmatvec=lambda x: x, dtype=float)
    with pytest.raises(ssn.InputError, match="observation as a matrix"):
        ssn.solve(line_problem(observation=eye, state_upper=0.5))
    for choice in ("envelope", "smoothing"):
        with pytest.raises(ssn.InputError, match="globalization"):
            ssn.solve(line_problem(state_upper=0.5), globalization=choice)
    with pytest.raises(ssn.InputError, match="linear="):
        ssn.solve(line_problem(state_upper=0.5), linear="subspace")
    with pytest.raises(ssn.InputError, match="penalised needs"):
        line_problem().penalised(1.0)
    assert ssn.solve(line_problem(state_upper=0.5), globalization="full", linear="full space").converged


def test_hard_bounds_have_no_gradient():
    problem = line_problem(state_upper=0.5)
    with pytest.raises(ssn.InputError, match="penalised"):
        ssn.proximal_gradient(problem)
    assert problem.objective(np.full(15, 39.0)) == np.inf
    assert np.isfinite(problem.penalised(10.0).objective(np.full(15, 39.0)))


def test_the_reference_agrees_on_the_penalised_problem():
    problem = BOUNDARY.build(12, penalty=100.0)
    assessment = assess(problem, known=BOUNDARY.known)
    assert assessment.holds, assessment.failures()
    assert assessment.solution.violation > 1e-3


def test_evidence_at_a_large_penalty_is_undecided_and_true_otherwise():
    """No first-order method gets anywhere there; without libraries that is said, and nothing else fails."""
    assessment = assess(BOUNDARY.build(12), known=BOUNDARY.known, budget=0.5, libraries=False)
    assert assessment.agreement == "undecided"
    assert [check.name for check in assessment.checks if not check.holds] == ["agreement"]


def test_an_interior_point_method_on_the_hard_bounds_decides():
    assessment = assess(BOUNDARY.build(12), known=BOUNDARY.known, budget=0.5)
    assert assessment.agreement == "holds" and assessment.holds, assessment.failures()
    names = [method.name for method in assessment.methods]
    assert "interior point" in names and "L-BFGS-B" not in names


def test_rate_and_derivative():
    problem = line_problem(state_upper=0.5).penalised(1e3)
    assert rate(problem).verdict == "exact"
    assert all(check.holds for check in check_derivative(problem))


def test_mesh_study():
    study = mesh_study(BOUNDARY.build, (10, 20), known=BOUNDARY.known)
    assert all(row.converged for row in study.rows), study.note


def test_first_penalty_is_the_ratio_of_the_masses():
    assert first_penalty(line_problem(state_upper=0.5)) == pytest.approx(1.0)
    dense = line_problem(observation=2.0 * np.eye(15), target=np.ones(15), state_upper=0.5)
    assert first_penalty(dense) == pytest.approx(4.0 * 16)
