"""Nonlinear states: models and their derivatives, the proximal Newton method, what it refuses, and how it fails."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.integrate import solve_ivp
from scipy.sparse.linalg import LinearOperator

import ssn
from ssn.evidence import assess, check_derivative, rate
from ssn.globalization import DualSearch
from ssn.linear.boundary import product
from ssn.newton import Limits, run
from ssn.nonlinear_control import LinearisedMap
from ssn.nonlinear_states import second_derivative
from ssn.proximal_newton import ControlEquation, ObjectiveSearch, ProximalNewtonSolver


def stiffness(n):
    h = 1.0 / (n + 1)
    return sp.csr_array(
        sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h
    )


def mass_matrix(n):
    h = 1.0 / (n + 1)
    return sp.csr_array(
        h / 6 * sp.diags_array([np.ones(n - 1), 4 * np.ones(n), np.ones(n - 1)], offsets=[-1, 0, 1])
    )


class Simulator:
    """A host's own model, without second derivatives: y_1 = load_1, y_2 - y_1^2 = load_2, for m pairs."""

    def __init__(self, m=1):
        self.m, self.size = m, 2 * m

    def attach(self, work):
        self.work = work

    def solve(self, load, start=None):
        self.work.state_solves += 1
        first, second = load[: self.m], load[self.m :]
        return np.concatenate([first, second + first**2])

    def residual(self, y, load):
        first, second = y[: self.m], y[self.m :]
        return load - np.concatenate([first, second - first**2])

    def linearize(self, y):
        zero, eye = np.zeros((self.m, self.m)), np.eye(self.m)
        state = ssn.SteadyState(np.block([[eye, zero], [-2 * np.diag(y[: self.m]), eye]]))
        state.attach(self.work)
        return state


def pendulum(steps=30, duration=4.0, initial=(2.5, 0.0), **options):
    return ssn.OrdinaryDifferentialSystem(
        lambda t, y: np.array([y[1], -np.sin(y[0]) + 0.1 * np.cos(t) * y[1] ** 2]),
        lambda t, y: np.array([[0.0, 1.0], [-np.cos(y[0]), 0.2 * np.cos(t) * y[1]]]),
        initial=initial, steps=steps, duration=duration, **options,
    )  # fmt: skip


def pendulum_hessian(t, y, q):
    return np.diag([q[1] * np.sin(y[0]), 0.2 * q[1] * np.cos(t)])


CUBE = (lambda y: 5 * y**3, lambda y: 15 * y**2, lambda y: 30 * y)
UNEVEN = np.array([0.0, 0.1, 0.15, 0.4, 0.5, 0.9, 1.0])
N = 9


def cubic(reaction=CUBE, n=N, K=None, mass=None, **options):
    mass = np.full(n, 1.0 / (n + 1)) if mass is None else mass
    return ssn.SemilinearState(stiffness(n) if K is None else K, *reaction, mass=mass, **options)


def heated(scheme, **options):
    return ssn.TimeDependentSemilinearState(
        options.pop("M", np.full(N, 0.1)), options.pop("A", 0.1 * stiffness(N)), *options.pop("reaction", CUBE),
        times=UNEVEN, scheme=scheme, initial=np.sin(np.pi * np.linspace(0.1, 0.9, N)), **options,
    )  # fmt: skip


def wind(n=N):
    return sp.csr_array(sp.diags_array([-3 * np.ones(n - 1), 3 * np.ones(n - 1)], offsets=[-1, 1]))


MODELS = {
    "steady": lambda: cubic(),
    "steady, not symmetric, mass matrix": lambda: cubic(K=stiffness(N) + wind(), mass=mass_matrix(N)),
    "steady, second derivative by differences": lambda: cubic(reaction=CUBE[:2]),
    "steady, exothermic": lambda: cubic(
        reaction=(lambda y: -np.exp(y), lambda y: -np.exp(y), lambda y: -np.exp(y))
    ),
    "heat, implicit Euler": lambda: heated("implicit Euler"),
    "heat, Crank-Nicolson, mass matrix": lambda: heated("Crank-Nicolson", M=mass_matrix(N)),
    "heat, wind, theta 0.7, reaction mass": lambda: heated(
        0.7, A=0.1 * stiffness(N) + wind(), reaction_mass=mass_matrix(N)
    ),
    "pendulum, implicit Euler": lambda: pendulum(hessian=pendulum_hessian),
    "pendulum, Crank-Nicolson, hessian by differences": lambda: pendulum(scheme="Crank-Nicolson"),
    "host": lambda: Simulator(4),
}


def control_problem(state, alpha=1e-2, cost=None, **options):
    """Every third unknown is controlled, all but the first is observed."""
    rng = np.random.default_rng(5)
    B = sp.csr_array(sp.eye_array(state.size, format="csr")[:, ::3])
    C = sp.csr_array(sp.eye_array(state.size, format="csr")[1:])
    n, m = B.shape[1], C.shape[0]
    data = {
        "target": 2.0 * rng.standard_normal(m),
        "control_operator": B,
        "observation": C,
        "source": 0.1 * rng.standard_normal(state.size),
        "control_mass": rng.uniform(0.5, 1.5, n),
        "observation_mass": rng.uniform(0.5, 1.5, m),
        "cost": ssn.SparseCost(0.02, -3.0, 3.0) if cost is None else cost,
    }
    return ssn.NonlinearControlProblem(state=state, control_weight=alpha, **(data | options))


def slopes(remainders, sizes):
    return np.log(np.array(remainders[:-1]) / np.array(remainders[1:])) / np.log(sizes[0] / sizes[1])


def test_how_many_models_are_tested():
    assert len(MODELS) == 10


@pytest.mark.parametrize("name", MODELS)
def test_state_solve_and_derivatives_of_the_state_equation(name):
    state, rng = MODELS[name](), np.random.default_rng(1)
    state.attach(ssn.WorkCounts())
    load = 0.3 * rng.standard_normal(state.size)
    y = state.solve(load)
    assert np.abs(state.residual(y, load)).max() <= 1e-13 * max(1.0, np.abs(y).max()) * state.size
    np.testing.assert_allclose(state.solve(load, y + 0.01), y, rtol=0, atol=1e-11)
    linear, zero, d = state.linearize(y), np.zeros(state.size), rng.standard_normal(state.size)
    assert isinstance(linear, ssn.StateModel) and isinstance(state, ssn.NonlinearStateModel)
    p = rng.standard_normal(state.size)
    image, lifted = -linear.residual(d, zero), -linear.adjoint_residual(p, zero)
    scale = np.linalg.norm(image) * np.linalg.norm(p) + np.linalg.norm(lifted) * np.linalg.norm(d)
    assert abs(image @ p - lifted @ d) <= 1e-12 * scale
    solved, dual = linear.solve(d), linear.adjoint_solve(p)
    scale = np.linalg.norm(solved) * np.linalg.norm(p) + np.linalg.norm(dual) * np.linalg.norm(d)
    assert abs(solved @ p - dual @ d) <= 1e-12 * scale
    np.testing.assert_allclose(-linear.residual(solved, zero), d, atol=1e-10)
    np.testing.assert_allclose(-linear.adjoint_residual(dual, zero), p, atol=1e-10)
    if hasattr(linear, "matrix"):
        np.testing.assert_allclose(linear.matrix @ d, image, atol=1e-12 * np.abs(image).max())
    sizes = 2.0 ** -np.arange(3, 6)
    base = -state.residual(y, zero)
    first = [np.linalg.norm(-state.residual(y + t * d, zero) - base - t * image) for t in sizes]
    assert slopes(first, sizes)[-1] == pytest.approx(2.0, abs=0.2)
    second = second_derivative(state, y, p)
    bend = product(second, d)
    np.testing.assert_allclose(bend @ p[: d.size], d @ product(second, p[: d.size]), rtol=1e-6, atol=1e-6)
    there = [-state.linearize(y + t * d).adjoint_residual(p, zero) - lifted - t * bend for t in sizes]
    left = [np.linalg.norm(r) for r in there]
    assert left[-1] <= 1e-6 * np.linalg.norm(bend) or min(slopes(left, sizes)) > 1.6


@pytest.mark.parametrize("name", MODELS)
def test_gradient_and_hessian_by_taylor_expansion_and_adjoint_of_the_linearised_map(name):
    problem, rng = control_problem(MODELS[name]()), np.random.default_rng(2)
    u, d = 0.3 * rng.standard_normal(problem.unknowns), rng.standard_normal(problem.unknowns)
    value, riesz = problem.smooth(u)
    assert problem.smooth_value(u) == value
    slope, bend = problem.controls.dot(riesz, d), d @ product(problem.hessian(u), d)
    np.testing.assert_allclose(problem.gradient(u), problem.weights * riesz)
    # symmetric differences would hide an error; small enough for the second order to be seen, large for the third
    sizes = 2.0 ** -np.arange(6, 9)
    values = [problem.smooth_value(u + t * d) for t in sizes]
    first = [abs(v - value - t * slope) for v, t in zip(values, sizes, strict=True)]
    second = [abs(v - value - t * slope - 0.5 * t * t * bend) for v, t in zip(values, sizes, strict=True)]
    assert slopes(first, sizes)[-1] == pytest.approx(2.0, abs=0.1)
    assert slopes(second, sizes)[-1] == pytest.approx(3.0, abs=0.3) or second[-1] < 1e-9 * abs(value)
    tangent = LinearisedMap(problem, problem.point(u).linear)
    q = rng.standard_normal(problem.observations.size)
    image, lifted = tangent.forward(d), tangent.adjoint(q)
    gap = abs(problem.observations.dot(image, q) - problem.controls.dot(d, lifted))
    assert gap <= 1e-12 * problem.observations.norm(image) * problem.observations.norm(q)


@pytest.mark.parametrize("name", MODELS)
def test_solutions_satisfy_the_conditions_and_no_first_order_method_is_better(name):
    problem = control_problem(MODELS[name]())
    solution = ssn.solve(problem).require()
    y, p, u = solution.state, solution.adjoint, solution.x
    load = problem.control_operator @ u + problem.source
    np.testing.assert_allclose(problem.state.residual(y, load), 0.0, atol=1e-10)
    C = problem.observation
    misfit = C.T @ problem.observations.apply(problem.target - C @ y)
    np.testing.assert_allclose(problem.state.linearize(y).adjoint_residual(p, misfit), 0.0, atol=1e-9)
    v = problem.control_operator.T @ p / problem.weights / problem.alpha
    np.testing.assert_allclose(u, np.clip(v - np.clip(v, -2.0, 2.0), -3.0, 3.0), atol=1e-7)
    assert solution.certificate is None
    few = 300 if name.startswith(("steady", "host")) else 3
    reference = ssn.proximal_gradient(problem, tolerance=1e-6, max_iterations=few)
    assert solution.objective <= reference.objective + 1e-9 * abs(reference.objective)
    assert solution.objective == pytest.approx(problem.objective(u), rel=1e-13)
    assert len(solution.steps) <= 14
    assert solution.steps[-1].inner_iterations > 0


def test_a_linear_reaction_gives_the_solution_of_the_linear_problem():
    state = cubic(reaction=(lambda y: 3 * y, lambda y: 0 * y + 3, lambda y: 0 * y))
    given = control_problem(state)
    linear = ssn.ControlProblem(
        state=ssn.SteadyState(state.derivative_matrix(np.zeros(N))), target=given.target, cost=given.cost,
        control_weight=given.alpha, control_operator=given.control_operator, observation=given.observation,
        source=given.source, control_mass=given.weights, observation_mass=given.observations.vector,
    )  # fmt: skip
    ours, theirs = ssn.solve(given).require(), ssn.solve(linear).require()
    np.testing.assert_allclose(ours.x, theirs.x, atol=1e-9)
    np.testing.assert_allclose(ours.adjoint, theirs.adjoint, atol=1e-9)
    assert len(ours.steps) == 1


@pytest.mark.parametrize("scheme", ["implicit Euler", "Crank-Nicolson"])
def test_a_linear_system_in_time_is_that_of_the_linear_model(scheme):
    A = np.array([[0.3, -1.0], [1.0, 0.2]])
    system = ssn.OrdinaryDifferentialSystem(
        lambda t, y: -A @ y, lambda t, y: -A, [1.0, 2.0], times=UNEVEN, scheme=scheme
    )
    linear = ssn.TimeDependentState(np.ones(2), A, times=UNEVEN, scheme=scheme)
    known = linear.solve(linear.source(np.array([1.0, -1.0]), [1.0, 2.0]))
    np.testing.assert_allclose(system.solve(system.source(np.array([1.0, -1.0]))), known, atol=1e-13)
    np.testing.assert_allclose(system.linearize(known).matrix.toarray(), linear.matrix.toarray(), atol=1e-14)


@pytest.mark.parametrize(("scheme", "order"), [("implicit Euler", 1), ("Crank-Nicolson", 2)])
def test_time_steps_have_their_order(scheme, order):
    exact = solve_ivp(
        lambda t, y: [y[1], -np.sin(y[0]) + 0.1 * np.cos(t) * y[1] ** 2 + np.sin(t)], (0.0, 4.0), [2.5, 0.0],
        rtol=1e-11, atol=1e-12,
    ).y[:, -1]  # fmt: skip
    # logistic growth, y' = y (1 - y): y = 1 / (1 + exp(-t)) from 1/2
    errors, grown = [], []
    for steps in (40, 80, 160):
        state = pendulum(steps, scheme=scheme)
        y = state.solve(state.source(lambda t: np.array([0.0, np.sin(t)])))
        errors.append(np.abs(y[-2:] - exact).max())
        growth = ssn.TimeDependentSemilinearState(
            np.ones(1), np.array([[-1.0]]), lambda y: y**2, lambda y: 2 * y, steps=steps, duration=2.0,
            scheme=scheme, initial=[0.5],
        )  # fmt: skip
        grown.append(abs(growth.solve(growth.source())[-1] - 1.0 / (1.0 + np.exp(-2.0))))
    for found in (errors, grown):
        assert slopes(found, (2.0, 1.0))[-1] == pytest.approx(order, abs=0.15)
    assert errors[-1] < 0.1 ** (order - 0.3)


def test_a_control_operator_that_changes_in_time():
    state = pendulum(6, scheme="Crank-Nicolson")
    B = state.control_operator(lambda t: np.array([[0.0], [t]]))
    t = state.times
    np.testing.assert_allclose(B @ np.ones(6), np.stack([np.zeros(6), 0.5 * np.diff(t**2)], 1).ravel())
    constant = state.control_operator([[0.0], [1.0]])
    np.testing.assert_allclose(
        state.control_operator(lambda t: np.array([[0.0], [1.0]])).toarray(), constant.toarray()
    )


def test_several_controls_with_different_costs():
    """B = [B1 B2] with a Product of costs: a sparse distributed control and two heaters between bounds."""
    state = cubic()
    heaters = np.zeros((N, 2))
    heaters[:3, 0] = heaters[6:, 1] = 0.1
    problem = ssn.NonlinearControlProblem(
        state=state,
        target=np.linspace(0.2, 0.8, N),
        cost=ssn.Product([ssn.SparseCost(0.004), ssn.Bounds(0.0, 2.0)], [N, 2], ["distributed", "heaters"]),
        control_weight=1e-3,
        control_operator=np.hstack([0.1 * np.eye(N), heaters]),
        control_mass=np.concatenate([np.full(N, 0.1), [0.3, 0.3]]),
        observation_mass=np.full(N, 0.1),
    )
    solution = ssn.solve(problem).require()
    distributed, powers = solution.x[:N], solution.x[N:]
    assert (distributed == 0).any() and (distributed != 0).any()
    assert ((powers >= 0) & (powers <= 2)).all() and (powers > 0).any()
    assert set(solution.pieces) == {"distributed: control", "heaters: control"}
    # the conditions of both parts, formed here
    gain = problem.control_operator.T @ solution.adjoint / problem.weights
    v = gain / 1e-3
    np.testing.assert_allclose(distributed, v[:N] - np.clip(v[:N], -4.0, 4.0), atol=1e-7)
    np.testing.assert_allclose(powers, np.clip(v[N:], 0.0, 2.0), atol=1e-7)
    reference = ssn.proximal_gradient(problem, tolerance=1e-7)
    assert problem.controls.norm(reference.x - solution.x) <= 1e-5 * problem.controls.norm(solution.x)


# the method


def swing(**options):
    """A pendulum that does not come to rest by itself, pushed with a force between bounds."""
    state = pendulum(20, 6.0, scheme="Crank-Nicolson", hessian=pendulum_hessian)
    data = {
        "target": np.zeros(state.size),
        "cost": ssn.SparseCost(0.05, -1.0, 1.0),
        "control_operator": state.control_operator([[0.0], [1.0]]),
        "control_mass": state.control_mass([1.0]),
        "observation_mass": state.observation_mass(),
        "control_weight": 1e-2,
    }
    return ssn.NonlinearControlProblem(state=state, **(data | options))


def test_the_end_is_superlinear_and_the_evidence_holds():
    problem = swing()
    solution = ssn.solve(problem).require()
    assert len(solution.steps) <= 14
    assert solution.steps[-1].contraction < 1e-2
    assert sum(step.evaluations for step in solution.steps) <= 26
    verdict = rate(problem, solution, samples=2)
    assert verdict.verdict in ("superlinear", "exact"), verdict
    checks = check_derivative(problem, solution.x)
    assert [check.name for check in checks if not check.holds] == []
    assert {"state derivative", "state second derivative", "hessian", "adjoint"} <= {c.name for c in checks}


def by_gauss_newton(problem, full_hessian=False, start=0.0):
    equation = ControlEquation(problem)
    solver = ProximalNewtonSolver(equation, full_hessian=full_hessian)
    return run(equation, solver, ObjectiveSearch(), np.full(problem.unknowns, start), Limits(1e-9, 90))


def test_gauss_newton_to_the_end_is_slow_at_a_large_residual():
    problem = hill(m=3, first=0.5, control_weight=0.5)
    slow, quick = (by_gauss_newton(problem, full, start=0.5) for full in (False, True))
    assert quick.outcome is slow.outcome is ssn.Outcome.CONVERGED
    assert len(slow.steps) >= 2 * len(quick.steps)
    assert min(step.contraction for step in slow.steps[-4:]) > 0.05 > 10 * quick.steps[-1].contraction


def test_the_objective_falls_from_step_to_step():
    problem = swing(control_weight=1e-3)
    objectives = [problem.objective(np.zeros(problem.unknowns))]
    iteration = ssn.Iteration(problem)
    while not iteration.finished:
        iteration.step()
        objectives.append(problem.objective(iteration.x))
    assert iteration.outcome is ssn.Outcome.CONVERGED
    assert (np.diff(objectives) <= 1e-12 * objectives[0]).all()


def test_records_limits_and_stops():
    problem = swing()
    short = ssn.solve(problem, max_steps=2)
    assert short.outcome is ssn.Outcome.STEP_LIMIT and not short.converged and len(short.steps) == 2
    assert short.state is not None and np.isfinite(short.accuracy)
    again = ssn.solve(problem, short.x).require()
    assert again.objective == pytest.approx(ssn.solve(problem).objective, rel=1e-9)
    seen = []

    def stop(record):
        seen.append(record)
        raise ssn.StopSolve("enough")

    assert ssn.solve(problem, callback=stop).outcome is ssn.Outcome.STOPPED and len(seen) == 1
    first, second = ssn.solve(problem), ssn.solve(problem)
    assert (first.x == second.x).all() and first.steps == second.steps
    assert "nonlinear state solves" in first.choices["states"]


def test_a_start_that_is_the_answer():
    problem = swing()
    solution = ssn.solve(problem, tolerance=1e-11)
    assert len(ssn.solve(problem, solution.x, tolerance=1e-9).require().steps) == 0


# what fails


def explosive(load=0.0, **options):
    """-y'' - 5 exp(y) = u on the unit interval: the zero control has no state, one below about -2 has two."""
    state = cubic(reaction=(lambda y: -5 * np.exp(y), lambda y: -5 * np.exp(y)))
    h = 0.1
    data = {
        "target": np.full(N, 0.5),
        "cost": ssn.Bounds(-20.0, 20.0),
        "control_weight": 1e-4,
        "state_mass": np.full(N, h),
        "control_mass": np.full(N, h),
        "source": np.full(N, h * load),
    }
    return ssn.NonlinearControlProblem(state=state, **(data | options))


def test_a_start_without_a_state_ends_with_the_reason():
    problem = explosive()
    with pytest.raises(ssn.StateSolveError, match="no step length"):
        problem.state_of(np.zeros(N))
    solution = ssn.solve(problem)
    assert solution.outcome is ssn.Outcome.NO_STATE and not solution.converged
    assert "no step length" in solution.message and solution.steps == ()
    assert "Start from a control with a known state" in solution.outcome.advice
    assert problem.objective(np.zeros(N)) == np.inf and np.isnan(problem.smooth(np.zeros(N))[1]).all()
    assert problem.accuracy(np.zeros(N)) == np.inf
    with pytest.raises(ssn.NotConverged, match="no state"):
        solution.require()


def test_steps_to_where_there_is_no_state_are_shortened_and_say_so():
    problem = explosive()
    solution = ssn.solve(problem, np.full(N, -8.0)).require()
    reasons = [step.reason for step in solution.steps if "had no state" in step.reason]
    assert reasons and "no step length" in reasons[0]
    assert solution.state.max() == pytest.approx(0.53, abs=0.01)


@pytest.mark.parametrize("where", [0, 1, 2])
def test_nan_from_the_users_reaction_is_a_reason(where):
    functions = [*CUBE]
    functions[where] = lambda y: np.where(y > -1.0, np.nan, y)
    problem = control_problem(cubic(reaction=functions))
    solution = ssn.solve(problem)
    assert solution.converged == (where == 2)  # without a second derivative the steps are Gauss-Newton ones
    told = solution.message + " ".join(step.reason for step in solution.steps)
    assert ("NaN" in told) if where == 0 else ("is nan at y[" in told), told


def test_nan_from_the_users_system_is_a_reason():
    state = ssn.OrdinaryDifferentialSystem(
        lambda t, y: np.sqrt(1.0 - t) - y, lambda t, y: np.array([[-1.0]]), [1.0], steps=10, duration=2.0
    )
    problem = control_problem(state)
    solution = ssn.solve(problem)
    assert solution.outcome is ssn.Outcome.NO_STATE and "at t = 1.2" in solution.message


WRONG = {
    "state derivative": (lambda y: 5 * y**3, lambda y: 16 * y**2, lambda y: 32 * y),
    "state second derivative": (lambda y: 5 * y**3, lambda y: 15 * y**2, lambda y: 31 * y),
}


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_derivative_is_caught(name):
    problem = control_problem(cubic(reaction=WRONG[name], n=3))
    point = np.full(problem.unknowns, 5.0)
    failing = [check.name for check in check_derivative(problem, point) if not check.holds]
    assert name in failing
    assert [c.name for c in check_derivative(control_problem(cubic(n=3)), point) if not c.holds] == []


def test_a_wrong_jacobian_and_a_wrong_hessian_of_a_system_are_caught():
    right = pendulum(4, 1.0, hessian=pendulum_hessian)
    assert [c.name for c in check_derivative(control_problem(right)) if not c.holds] == []
    wrong = pendulum(4, 1.0, hessian=lambda t, y, q: 1.1 * pendulum_hessian(t, y, q))
    failing = {check.name for check in check_derivative(control_problem(wrong)) if not check.holds}
    assert failing >= {"state second derivative", "hessian"}
    system = ssn.OrdinaryDifferentialSystem(
        lambda t, y: np.array([y[1], -np.sin(y[0])]), lambda t, y: np.array([[0.0, 1.0], [1.0, 0.0]]),
        [0.1, 0.0], steps=2, duration=0.2,
    )  # fmt: skip
    failing = {check.name for check in check_derivative(control_problem(system)) if not check.holds}
    assert "state derivative" in failing


def test_derivatives_are_checked_where_there_is_no_state_either():
    checks = {check.name: check for check in check_derivative(explosive())}
    assert not checks["state"].holds and "no step length" in checks["state"].detail
    assert checks["state derivative"].holds


def hill(first=0.1, m=1, **options):
    """y_2 = u^2 is wanted to be 1: the zero control is a stationary point, and no minimum."""
    return ssn.NonlinearControlProblem(
        state=Simulator(m),
        target=np.concatenate([np.zeros(m), np.ones(m)]),
        observation_mass=np.concatenate([np.full(m, first), np.ones(m)]),
        control_operator=np.eye(2 * m)[:, :m],
        control_weight=options.pop("control_weight", 0.1),
        cost=options.pop("cost", ssn.SparseCost(0.0)),
    )


def test_a_stationary_point_that_is_no_minimum_is_told():
    solution = ssn.solve(hill(m=3))
    assert solution.outcome is ssn.Outcome.SADDLE_POINT and not solution.converged
    # the reduced Hessian at zero is first + alpha - 2
    assert "-1.8" in solution.message
    better = ssn.solve(hill(m=3), np.full(3, 0.1)).require()
    np.testing.assert_allclose(better.x, np.sqrt(1.0 - 0.1), rtol=1e-9)
    assert better.objective < solution.objective
    # where the cost keeps the control at zero nothing is free to fall
    assert ssn.solve(hill(m=3, cost=ssn.SparseCost(0.01))).converged


def test_an_indefinite_hessian_leaves_the_step_to_gauss_newton():
    problem = hill(m=2)
    equation = ControlEquation(problem)
    solver = ProximalNewtonSolver(equation)
    at = equation.evaluate(np.array([0.05, 0.9]))
    full = solver.full(at, 1e-8)
    assert full.vector is None and "negative curvature" in full.message
    safe = solver.gauss_newton(at, 1e-8)
    assert safe.vector is not None and equation.slope(at, at.x + safe.vector) < 0
    solver._near = True
    taken = solver.solve(at, 1e-3)
    np.testing.assert_allclose(taken.vector, safe.vector, rtol=1e-4)
    assert taken.message.startswith("Gauss-Newton step: the full model has negative curvature")


def test_agreement_compares_objective_and_stationarity():
    found = assess(control_problem(cubic(n=5)), budget=5.0, libraries=True)
    assert found.holds, found.failures()
    names = [method.name for method in found.methods]
    assert names[:2] == ["semismooth Newton", "proximal gradient"] and "L-BFGS-B" in names
    problem = hill()
    best = ssn.solve(problem, [0.1])
    other = assess(problem, solution=best, budget=1.0, methods={"stay": lambda p: np.zeros(1)})
    stay = other.methods[-1]
    assert stay.objective > best.objective and other.check("objective").holds


# what is refused


def test_models_of_the_other_kind_and_arguments_that_do_not_fit_are_refused():
    state = cubic()
    with pytest.raises(ssn.InputError, match="a nonlinear one belongs into NonlinearControlProblem"):
        ssn.ControlProblem(
            state=state, target=np.ones(N), cost=ssn.Bounds(0, 1), control_weight=1.0, state_mass=np.ones(N)
        )
    with pytest.raises(ssn.InputError, match="a linear one belongs into ControlProblem"):
        control_problem(ssn.SteadyState(stiffness(N)))
    with pytest.raises(ssn.InputError, match="control_weight must be positive"):
        control_problem(state, alpha=0.0)
    with pytest.raises(ssn.InputError, match="CountCost is not convex"):
        control_problem(state, cost=ssn.CountCost(1.0))
    with pytest.raises(ssn.InputError, match="state bounds need a SemilinearState"):
        control_problem(pendulum(), state_upper=1.0)
    with pytest.raises(ssn.InputError, match="globalization='dual' does not fit"):
        ssn.solve(control_problem(state), globalization="dual")
    with pytest.raises(ssn.InputError, match="linear='subspace' does not fit"):
        ssn.solve(control_problem(state), linear="subspace")
    with pytest.raises(ssn.InputError, match="start has shape"):
        ssn.solve(control_problem(state), np.zeros(99))


def test_unusable_models_are_refused():
    with pytest.raises(ssn.InputError, match="reaction must be a function"):
        ssn.SemilinearState(stiffness(N), 1.0, CUBE[1])
    with pytest.raises(ssn.InputError, match="reaction_second must be a function"):
        ssn.SemilinearState(stiffness(N), *CUBE[:2], 3.0)
    with pytest.raises(ssn.InputError, match="explicit"):
        ssn.SemilinearState(LinearOperator((N, N), matvec=lambda x: x), *CUBE)
    with pytest.raises(ssn.InputError, match="mass"):
        ssn.SemilinearState(stiffness(N), *CUBE, np.ones(N + 1))
    with pytest.raises(ssn.InputError, match="start must be finite"):
        cubic(start=np.nan)
    with pytest.raises(ssn.InputError, match=r"reaction\(y\) has shape"):
        control_problem(cubic(reaction=(lambda y: np.ones(3), CUBE[1]))).state_of(np.zeros(3))
    with pytest.raises(ssn.InputError, match="initial has shape"):
        ssn.TimeDependentSemilinearState(
            np.ones(N), stiffness(N), *CUBE, steps=2, duration=1.0, initial=[1.0]
        )
    with pytest.raises(ssn.InputError, match="jacobian must be a function"):
        ssn.OrdinaryDifferentialSystem(lambda t, y: y, 1.0, [1.0], steps=2, duration=1.0)
    system = ssn.OrdinaryDifferentialSystem(
        lambda t, y: y[:1], lambda t, y: np.eye(2), [1.0, 1.0], steps=2, duration=1.0
    )
    with pytest.raises(ssn.InputError, match="rhs has shape"):
        system.solve(system.source())


def test_an_ignition_within_a_step_is_followed_by_small_steps():
    """y' = 50 y^2 (1 - y), from 0.1: the state jumps to 1 within a step, whose equation has no solution near 0.1."""
    state = ssn.OrdinaryDifferentialSystem(
        lambda t, y: 50 * y**2 * (1 - y), lambda t, y: np.array([[100 * y[0] - 150 * y[0] ** 2]]),
        [0.1], steps=2, duration=1.0,
    )  # fmt: skip
    y = state.solve(state.source())
    assert np.abs(state.residual(y, state.source())).max() < 1e-12
    assert 0.95 < y[0] < y[1] < 1.0


def test_dual_search_is_what_solves_the_inner_models():
    """The inner model of a step is the linear-quadratic problem of the linearised state, solved by the usual loop."""
    problem = control_problem(cubic())
    equation = ControlEquation(problem)
    at = equation.evaluate(np.full(problem.unknowns, 0.5))
    direction = ProximalNewtonSolver(equation).gauss_newton(at, 1e-11)
    linear = problem.state.linearize(at.data.point.y)
    y = at.data.point.y
    model = ssn.ControlProblem(
        state=linear, target=problem.target, cost=problem.cost, control_weight=problem.alpha,
        control_operator=problem.control_operator, observation=problem.observation,
        source=linear.matrix @ y - problem.control_operator @ at.x, control_mass=problem.weights,
        observation_mass=problem.observations.vector,
    )  # fmt: skip
    known = ssn.solve(model, tolerance=1e-11, globalization=DualSearch()).require()
    np.testing.assert_allclose(at.x + direction.vector, known.x, atol=1e-8)
