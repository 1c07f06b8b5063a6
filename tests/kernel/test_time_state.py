"""Time-dependent states: the stacked equation, its adjoint, orders of convergence, and what controls are built with."""

from __future__ import annotations

import doctest
import itertools
import math
import tracemalloc

import numpy as np
import pytest
import scipy.integrate
import scipy.linalg as sla
import scipy.sparse as sp

import ssn
import ssn.time_state
from ssn.checkpoints import Checkpoints

THETAS = {"implicit Euler": 1.0, 0.75: 0.75, "Crank-Nicolson": 0.5}
GRIDS = {
    "equal": np.linspace(0.3, 1.7, 12),
    "two sizes": np.concatenate([np.arange(5) * 0.1, 0.4 + 0.25 * np.arange(1, 5)]),
    "graded": 1.5 * np.linspace(0, 1, 10) ** 2,
    "one step": np.array([0.0, 0.5]),
}


def stiffness(n):
    """Linear elements on (0, 1) with n interior points."""
    ones = np.ones(n - 1)
    return sp.csr_array(sp.diags_array([-ones, 2 * np.ones(n), -ones], offsets=[-1, 0, 1]) * (n + 1))


def consistent_mass(n):
    ones = np.ones(n - 1)
    return sp.csr_array(sp.diags_array([ones, 4 * np.ones(n), ones], offsets=[-1, 0, 1]) / (6 * (n + 1)))


def wind(n):
    """Convection: makes A nonsymmetric."""
    ones = np.ones(n - 1)
    return sp.csr_array(sp.diags_array([-3 * ones, 3 * ones], offsets=[-1, 1]))


N = 7
MODELS = {
    "lumped, symmetric": (np.full(N, 1 / (N + 1)), stiffness(N)),
    "full mass, symmetric": (consistent_mass(N), stiffness(N)),
    "lumped, nonsymmetric": (np.linspace(0.1, 0.2, N), stiffness(N) + wind(N)),
    "full mass, nonsymmetric": (consistent_mass(N), sp.csc_matrix(stiffness(N) + wind(N))),
    "nonsymmetric mass": (consistent_mass(N) + 0.01 * wind(N), stiffness(N)),
    "dense": (consistent_mass(N).toarray(), (stiffness(N) + wind(N)).toarray()),
    "dense mass": (consistent_mass(N).toarray(), stiffness(N)),
    "dense A": (np.full(N, 1 / (N + 1)), stiffness(N).toarray()),
}
CASES = list(itertools.product(MODELS, GRIDS, THETAS))


def assembled(M, A, times, theta):
    """E by its definition, entry by entry of the blocks."""
    M = np.diag(M) if np.ndim(M) == 1 else sp.csr_array(M).toarray()
    A = sp.csr_array(A).toarray()
    steps, n = len(times) - 1, len(M)
    E = np.zeros((steps * n, steps * n))
    for k in range(steps):
        tau = times[k + 1] - times[k]
        rows = slice(k * n, (k + 1) * n)
        E[rows, rows] = M + theta * tau * A
        if k:
            E[rows, (k - 1) * n : k * n] = -M + (1 - theta) * tau * A
    return E


def test_there_are_cases_enough():
    assert len(CASES) == 96


@pytest.mark.parametrize(("model", "grid", "scheme"), CASES)
def test_sweeps_solve_the_stacked_equation_and_its_transpose(model, grid, scheme):
    M, A = MODELS[model]
    times = GRIDS[grid]
    state = ssn.TimeDependentState(M, A, times, scheme=scheme)
    E = assembled(M, A, times, THETAS[scheme])
    assert isinstance(state, ssn.StateModel)
    assert state.size == len(E)
    assert np.abs(state.matrix.toarray() - E).max() <= 1e-14 * np.abs(E).max()
    random = np.random.default_rng(5)
    x, w, other = random.standard_normal((3, state.size))
    y, p = state.solve(x), state.adjoint_solve(w)
    size = np.linalg.norm
    assert abs(y @ w - x @ p) <= 1e-12 * max(size(y) * size(w), size(x) * size(p))
    assert size(y - np.linalg.solve(E, x)) <= 1e-11 * size(y)
    assert size(p - np.linalg.solve(E.T, w)) <= 1e-11 * size(p)
    assert size(state.residual(other, x) - (x - E @ other)) <= 1e-13 * size(E) * size(other)
    assert size(state.adjoint_residual(other, w) - (w - E.T @ other)) <= 1e-13 * size(E) * size(other)
    assert size(state.residual(y, x)) <= 1e-12 * size(x)
    assert size(state.adjoint_residual(p, w)) <= 1e-12 * size(w)


@pytest.mark.parametrize(
    ("times", "distinct"),
    [
        (np.linspace(0, 0.7, 101), 1),
        (np.cumsum(np.full(50, 0.1)), 1),
        (1e3 + np.linspace(0, 1, 33), 1),
        (GRIDS["two sizes"], 2),
        (GRIDS["graded"], 9),
        (np.array([0.0, 1.0, 2.0, 2.0 + 1e-6]), 2),
    ],
)
def test_one_factorisation_for_each_distinct_step(times, distinct):
    state = ssn.TimeDependentState(np.ones(N), stiffness(N), times)
    work = ssn.WorkCounts()
    state.attach(work)
    assert work.factorizations == 0  # made when needed
    y = state.solve(np.ones(state.size))
    for k in range(4):
        state.adjoint_solve(y) if k % 2 else state.solve(y)
    assert work.factorizations == distinct
    assert work.state_solves == 5  # one a sweep
    assert len(set(state.step_sizes)) == distinct
    assert np.abs(state.step_sizes - np.diff(times)).max() <= 1e-15 * np.abs(times).max() * 2
    again = ssn.WorkCounts()
    state.attach(again)
    state.residual(state.solve(y), y)
    assert (again.factorizations, again.state_solves, again.operator_products) == (0, 1, 1)


def test_steps_and_duration_make_the_equidistant_grid():
    state = ssn.TimeDependentState(np.ones(N), stiffness(N), steps=7, duration=0.9)
    assert state.steps == 7
    assert state.times[-1] == 0.9
    assert np.allclose(state.times, np.linspace(0, 0.9, 8), atol=1e-15)


@pytest.mark.parametrize("scheme", THETAS)
@pytest.mark.parametrize("grid", GRIDS)
def test_level_weights_are_the_quadrature_of_the_scheme(grid, scheme):
    times, theta = GRIDS[grid], THETAS[scheme]
    state = ssn.TimeDependentState(np.ones(N), stiffness(N), times, scheme=scheme)
    values = np.cos(times)
    values[0] = 0.0
    steps = np.diff(times) * (theta * values[1:] + (1 - theta) * values[:-1])
    assert state.level_weights @ values[1:] == pytest.approx(steps.sum(), rel=1e-13)


# convergence in time


def _fitted(widths, errors):
    return np.polyfit(np.log(widths), np.log(errors), 1)[0]


@pytest.mark.parametrize(
    ("scheme", "order", "last"), [("implicit Euler", 1, 7e-2), (0.75, 1, 4e-2), ("Crank-Nicolson", 2, 3e-4)]
)
@pytest.mark.parametrize("graded", [False, True])
@pytest.mark.parametrize("convected", [False, True])
def test_order_in_time_from_an_initial_state_with_a_load(scheme, order, last, graded, convected):
    n = 6
    M, A = consistent_mass(n), stiffness(n) * 0.05 + (0.1 * wind(n) if convected else 0.0)
    initial, profile = np.sin(np.pi * np.arange(1, n + 1) / (n + 1)), np.linspace(0.1, 0.4, n)
    G = -np.linalg.solve(M.toarray(), A.toarray())
    # y' = G y + cos(3 t) d through the exponential of an augmented matrix: no time stepping
    big = np.zeros((n + 2, n + 2))
    big[:n, :n], big[:n, n] = G, np.linalg.solve(M.toarray(), profile)
    big[n, n + 1], big[n + 1, n] = -3.0, 3.0
    exact = (sla.expm(big) @ np.concatenate([initial, [1.0, 0.0]]))[:n]
    errors, widths = [], []
    for steps in (20, 40, 80, 160):
        t = np.linspace(0, 1, steps + 1)
        times = t + 0.5 * t * (1 - t) if graded else t
        state = ssn.TimeDependentState(M, A, times, scheme=scheme)
        y = state.solve(state.source(lambda t: np.cos(3 * t) * profile, initial))
        errors.append(np.linalg.norm(y[-n:] - exact) / np.linalg.norm(exact))
        widths.append(1 / steps)
    assert order - 0.1 < _fitted(widths, errors) < order + 0.1
    assert errors[-1] < last


@pytest.mark.parametrize(
    ("scheme", "order", "last"), [("implicit Euler", 1, 2e-2), ("Crank-Nicolson", 2, 3e-5)]
)
@pytest.mark.parametrize("graded", [False, True])
def test_adjoint_tends_to_the_continuous_adjoint_state(scheme, order, last, graded):
    # -p' + a p = cos(2 t), p(1) = 0
    a = 3.0

    def exact(t):
        tail = scipy.integrate.quad(lambda s: np.exp(-a * (s - t)) * np.cos(2 * s), t, 1.0, epsabs=1e-13)
        return tail[0]

    errors, widths = [], []
    for steps in (20, 40, 80, 160):
        t = np.linspace(0, 1, steps + 1)
        times = t + 0.4 * t * (1 - t) if graded else t
        state = ssn.TimeDependentState(np.ones(1), np.array([[a]]), times, scheme=scheme)
        p = state.adjoint_solve(state.observation_mass() * np.cos(2 * state.times[1:]))
        expected = np.array([exact(t) for t in state.load_times])
        errors.append(np.sqrt(state.step_sizes @ (p - expected) ** 2))
        widths.append(1 / steps)
    assert order - 0.15 < _fitted(widths, errors) < order + 0.15
    assert errors[-1] < last


@pytest.mark.parametrize(("scheme", "order"), [("implicit Euler", 1), ("Crank-Nicolson", 2)])
def test_manufactured_solution_of_the_heat_equation(scheme, order):
    # y = exp(-t) sin(pi x1) sin(pi x2) + t x1 (1 - x1) x2 (1 - x2); tau = h^(2 / order), so that the error is O(h^2)
    errors, widths = [], []
    for n in (7, 15, 31):
        h = 1 / (n + 1)
        steps = {1: (n + 1) ** 2 // 8, 2: n + 1}[order]
        line = np.arange(1, n + 1) * h
        a, b = (v.ravel() for v in np.meshgrid(line, line))
        mode, bubble = np.sin(np.pi * a) * np.sin(np.pi * b), a * (1 - a) * b * (1 - b)
        K = sp.kron(stiffness(n) * h, sp.eye_array(n)) + sp.kron(sp.eye_array(n), stiffness(n) * h)
        state = ssn.TimeDependentState(np.full(n * n, h * h), K, steps=steps, duration=1.0, scheme=scheme)

        def load(t, mode=mode, bubble=bubble, a=a, b=b, h=h):
            heat = (2 * np.pi**2 - 1) * np.exp(-t) * mode + bubble + 2 * t * (a * (1 - a) + b * (1 - b))
            return h * h * heat

        y = state.solve(state.source(load, initial=mode)).reshape(steps, -1)
        t = state.times[1:, None]
        exact = np.exp(-t) * mode + t * bubble
        errors.append(np.abs(y - exact).max())
        widths.append(h)
    assert 1.85 < _fitted(widths, errors) < 2.15
    assert errors[-1] < 1e-3  # of a state between 0 and 1


# source, controls, observations


def test_source_from_arrays_and_functions():
    times = GRIDS["graded"]
    state = ssn.TimeDependentState(consistent_mass(N), stiffness(N), times, scheme=0.6)
    load, initial = np.linspace(1, 2, N), np.linspace(-1, 1, N)
    tau = np.diff(times)
    steady = np.kron(tau, load)
    assert np.allclose(state.source(load), steady, atol=1e-14)
    assert np.allclose(state.source(lambda t: load), steady, atol=1e-14)
    assert np.allclose(state.source(np.tile(load, (9, 1))), steady, atol=1e-14)
    start = state.source(initial=initial)
    first = (consistent_mass(N) - 0.4 * tau[0] * stiffness(N)) @ initial
    assert np.allclose(start[:N], first, atol=1e-14)
    assert not start[N:].any()
    assert np.allclose(state.source(load, initial), steady + start, atol=1e-14)
    assert not state.source().any()


def _patches():
    mass = np.full(N, 1 / (N + 1))
    shapes = np.zeros((N, 2))
    shapes[1:3, 0], shapes[4:6, 1] = mass[1:3], mass[4:6]
    return shapes, shapes.sum(axis=0)


@pytest.mark.parametrize("scheme", THETAS)
def test_control_operators_apply_what_they_say(scheme):
    times = GRIDS["graded"]
    M = consistent_mass(N)
    state = ssn.TimeDependentState(M, stiffness(N), times, scheme=scheme)
    lumped, tau = M.sum(axis=1), np.diff(times)
    random = np.random.default_rng(3)

    u = random.standard_normal((9, N))  # distributed in space and time
    expected = np.concatenate([tau[k] * lumped * u[k] for k in range(9)])
    assert np.allclose(state.control_operator() @ u.ravel(), expected, atol=1e-14)
    assert np.allclose(state.control_operator() @ u.ravel(), state.source(lumped * u), atol=1e-14)
    assert np.allclose(state.control_mass(), np.kron(tau, lumped), atol=1e-15)

    shapes, areas = _patches()  # amplitudes of two patches
    a = random.standard_normal((9, 2))
    expected = np.concatenate([tau[k] * (shapes @ a[k]) for k in range(9)])
    assert np.allclose(state.control_operator(shapes) @ a.ravel(), expected, atol=1e-14)
    assert np.allclose(state.control_mass(areas), np.kron(tau, areas), atol=1e-15)

    c = random.standard_normal(2)  # constant in time
    B = state.control_operator(sp.csr_array(shapes), amplitudes=np.ones((9, 1)))
    assert B.shape == (9 * N, 2)
    assert np.allclose(B @ c, np.kron(tau, shapes @ c), atol=1e-14)
    assert np.allclose(state.control_mass(areas, amplitudes=np.ones((9, 1))), 1.5 * areas, atol=1e-14)

    T = sp.csr_array(np.kron(np.eye(3), np.ones((3, 1))))  # constant on three intervals
    long = state.control_operator(shapes, T) @ np.arange(6.0)
    assert np.allclose(long, state.source(np.repeat(np.arange(6.0).reshape(3, 2), 3, axis=0) @ shapes.T))
    assert state.control_mass(areas, T).sum() == pytest.approx(1.5 * areas.sum())


def test_observations_take_what_they_say():
    state = ssn.TimeDependentState(np.full(N, 0.125), stiffness(N), GRIDS["graded"], scheme="Crank-Nicolson")
    y = np.random.default_rng(2).standard_normal((9, N))
    final = state.observation_operator(levels=[-1])
    assert np.array_equal(final @ y.ravel(), y[-1])
    assert np.array_equal(state.observation_mass(levels=[-1]), np.full(N, 0.125))
    sensors = sp.csr_array((np.ones(2), ([0, 1], [2, 5])), shape=(2, N))
    assert np.array_equal(state.observation_operator(sensors) @ y.ravel(), y[:, [2, 5]].ravel())
    assert np.array_equal(state.observation_mass([1.0, 3.0]), np.kron(state.level_weights, [1.0, 3.0]))
    some = state.observation_operator(sensors, levels=[1, 4, -2])
    assert np.array_equal(some @ y.ravel(), y[[0, 3, 7]][:, [2, 5]].ravel())
    assert np.array_equal(state.observation_operator() @ y.ravel(), y.ravel())


def _problem(control, scheme, **changes):
    n, h = N, 1 / (N + 1)
    state = ssn.TimeDependentState(
        np.full(n, h), stiffness(n) * 0.2 + 0.05 * wind(n), GRIDS["graded"], scheme=scheme
    )
    shapes, areas = _patches()
    constant = np.ones((state.steps, 1))
    B, mass = {
        "distributed": (state.control_operator(), state.control_mass()),
        "patches": (state.control_operator(shapes), state.control_mass(areas)),
        "constant in time": (
            state.control_operator(amplitudes=constant),
            state.control_mass(amplitudes=constant),
        ),
    }[control]
    x, t = np.arange(1, n + 1) * h, state.times[1:, None]
    arguments = {
        "state": state,
        "target": (np.sin(np.pi * x) * (1 + np.sin(5 * t))).ravel(),
        "cost": ssn.SparseCost(5e-3, -4.0, 4.0),
        "control_weight": 1e-3,
        "control_operator": B,
        "control_mass": mass,
        "observation_mass": state.observation_mass(),
        "source": state.source(initial=x * (1 - x)),
    }
    return ssn.ControlProblem(**(arguments | changes))


CONTROLS = ("distributed", "patches", "constant in time")


@pytest.mark.parametrize("scheme", THETAS)
@pytest.mark.parametrize("control", CONTROLS)
def test_gradient_passes_the_taylor_test(control, scheme):
    problem = _problem(control, scheme)
    random = np.random.default_rng(1)
    u, d = random.standard_normal((2, problem.unknowns))
    value, gradient = problem.smooth(u)
    slope = problem.controls.dot(gradient, d)
    # quadratic: value(u + t d) - value - t slope = t^2 c exactly
    rest = [problem.smooth(u + t * d)[0] - value - t * slope for t in (1.0, 0.5, 0.25)]
    assert rest[0] / rest[1] == pytest.approx(4.0, rel=1e-9)
    assert rest[1] / rest[2] == pytest.approx(4.0, rel=1e-9)
    hessian = problem.adjoint(problem.forward(d)) + problem.alpha * d
    assert rest[0] == pytest.approx(0.5 * problem.controls.dot(hessian, d), rel=1e-10)


@pytest.mark.parametrize("scheme", THETAS)
@pytest.mark.parametrize("control", CONTROLS)
def test_solves_agree_with_the_reference(control, scheme):
    problem = _problem(control, scheme)
    solution = ssn.solve(problem).require()
    reference = ssn.proximal_gradient(problem, tolerance=1e-6)
    assert reference.converged
    assert problem.controls.norm(solution.x - reference.x) <= 1e-6 * problem.controls.norm(solution.x)
    assert 0.0 < np.abs(solution.x).max() <= 4.0
    assert problem.state.work.factorizations == 9


def test_state_bounds_use_the_assembled_matrix():
    problem = _problem("distributed", "implicit Euler")
    free = ssn.solve(problem).require()
    highest = 0.9 * free.state.max()
    state = problem.state
    bounded = _problem(
        "distributed",
        "implicit Euler",
        state_mass=state.observation_mass(),
        observation_mass=None,
        state_upper=highest,
    )
    solution = ssn.solve(bounded).require()
    assert solution.state.max() <= highest * (1 + 1e-5)
    assert solution.state.max() >= highest * (1 - 1e-3)
    assert solution.objective > free.objective


# input


def test_input_is_neither_changed_nor_shared():
    M, A, times = np.full(N, 0.1), stiffness(N).toarray(), np.linspace(0, 1, 5)
    copies = [v.copy() for v in (M, A, times)]
    state = ssn.TimeDependentState(M, A, times)
    before = state.solve(np.ones(state.size))
    for value, kept in zip((M, A, times), copies, strict=True):
        assert np.array_equal(value, kept)
        value *= 2.0
    rhs = np.ones(state.size)
    assert np.array_equal(state.solve(rhs), before)
    assert np.array_equal(rhs, np.ones(state.size))
    with pytest.raises(ValueError, match="read-only"):
        state.times[0] = 1.0


GRID = {"times": np.linspace(0, 1, 5)}


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"A": np.ones((2, 3))}, "A must be square"),
        ({"M": np.ones(N + 1)}, r"M has shape \(8,\), expected \(7,\)"),
        ({"M": np.eye(N + 1)}, "M has shape 8x8, expected 7x7"),
        ({"A": sp.linalg.aslinearoperator(np.eye(N))}, "explicit M and A"),
        ({"M": sp.linalg.aslinearoperator(np.eye(N))}, "explicit M and A"),
        ({"scheme": "leap frog"}, "scheme must be"),
        ({"scheme": 0.4}, "theta must lie between"),
        ({"scheme": np.nan}, "scheme"),
        ({"times": None}, "give either times"),
        ({"steps": 3}, "give either times"),
        ({"times": None, "steps": 3}, "duration is missing"),
        ({"times": None, "duration": 1.0}, "steps is missing"),
        ({"times": None, "steps": 0, "duration": 1.0}, "steps must be at least 1"),
        ({"times": None, "steps": 2, "duration": -1.0}, "duration must be positive"),
        ({"times": [0.0]}, "at least two"),
        ({"times": [0.0, 0.5, 0.5]}, r"times must rise: times\[2\]"),
        ({"times": [0.0, np.nan]}, r"times\[1\] is nan"),
    ],
)
def test_unusable_arguments_are_named(changes, complaint):
    arguments = {"M": np.ones(N), "A": stiffness(N)} | GRID | changes
    with pytest.raises(ssn.InputError, match=complaint):
        ssn.TimeDependentState(**arguments)


@pytest.mark.parametrize(
    ("call", "complaint"),
    [
        (lambda s: s.source(np.ones(3)), r"load has shape \(3,\), expected \(7,\)"),
        (lambda s: s.source(np.ones((3, N))), r"load has shape \(3, 7\), expected \(4, 7\)"),
        (lambda s: s.source(lambda t: np.ones(2)), r"load\(0\) has shape"),
        (lambda s: s.source(initial=np.ones(2)), "initial has shape"),
        (lambda s: s.control_operator(np.ones((3, 2))), "shapes has shape 3x2, expected 7xany"),
        (
            lambda s: s.control_operator(amplitudes=np.ones((3, 1))),
            "amplitudes has shape 3x1, expected 4xany",
        ),
        (lambda s: s.control_operator(sp.linalg.aslinearoperator(np.eye(N))), "shapes must be an explicit"),
        (lambda s: s.control_mass(amplitudes=np.array([[1.0], [-1], [1], [-1]])), "integral of amplitudes"),
        (lambda s: s.control_mass(np.array([1.0, 0.0])), r"mass\[1\] is 0.0"),
        (lambda s: s.observation_operator(np.ones((1, 3))), "observation has shape 1x3, expected anyx7"),
        (lambda s: s.observation_operator(levels=[0]), "levels has 0, expected 1 to 4"),
        (lambda s: s.observation_operator(levels=[-5]), "levels has -5"),
        (lambda s: s.observation_mass(levels=[0.5]), "whole numbers"),
    ],
)
def test_unusable_parts_are_named(call, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        call(ssn.TimeDependentState(np.ones(N), stiffness(N), **GRID))


def test_mass_that_cannot_be_lumped_is_refused():
    M = sp.csr_array(np.eye(N) - np.eye(N, k=1) * 1.5)
    state = ssn.TimeDependentState(M, stiffness(N), **GRID)
    with pytest.raises(ssn.InputError, match=r"row sums of M\[0\] is -0.5"):
        state.control_mass()


def test_singular_step_matrix_is_named():
    state = ssn.TimeDependentState(np.ones(2), -np.diag([2.0, 1.0]), np.array([0.0, 0.5, 1.5]))
    with pytest.raises(ssn.InputError, match=r"M \+ theta tau A is singular for tau = 0.5"):
        state.solve(np.ones(4))


def test_the_example_of_the_docstring_runs():
    results = doctest.testmod(ssn.time_state)
    assert results.attempted >= 5
    assert results.failed == 0


# trajectories kept at checkpoints


@pytest.mark.parametrize("steps", [1, 2, 7, 40, 123])
@pytest.mark.parametrize("stored", [1, 2, 3, 5, 200])
def test_checkpoints_give_all_levels_backwards(steps, stored):
    """The same bits, for a recursion that is not linear, and no more levels alive than allowed."""
    alive = 0
    most = 0

    class Level(np.ndarray):
        def __del__(self):
            nonlocal alive
            alive -= 1

    def advance(k, level):
        nonlocal alive, most
        result = np.array(np.cos(3.0 * np.asarray(level)) + 1.0 / k).view(Level)
        alive += 1
        most = max(most, alive)
        return result

    start = np.linspace(0.0, 1.0, 11)
    expected = [start]
    for k in range(1, steps + 1):
        expected.append(np.cos(3.0 * expected[-1]) + 1.0 / k)
    found = Checkpoints(advance, start, steps, stored * start.nbytes)
    numbers = []
    for k, level in found.backward():
        numbers.append(k)
        np.testing.assert_array_equal(level, expected[k])
        del level
    assert numbers == list(range(steps, 0, -1))
    assert most <= found.stored + 3  # those in store, the one that is read, and the ends of an advance
    repeats = next(r for r in range(1, steps + 1) if math.comb(found.stored + r, r) >= steps)
    assert steps <= found.advances <= (repeats + 1) * steps


@pytest.mark.parametrize("levels", [1, 3, 9])
@pytest.mark.parametrize("scheme", THETAS)
@pytest.mark.parametrize("lasting", [False, True])
def test_gradients_from_checkpoints_are_those_from_the_whole_trajectory(lasting, scheme, levels):
    n, grid = 12, np.concatenate([np.linspace(0.0, 0.4, 12), np.linspace(0.5, 1.0, 9)])

    def problem(memory):
        state = ssn.TimeDependentState(
            np.full(n, 0.1), stiffness(n) + wind(n), grid, scheme=scheme, memory=memory
        )
        amplitudes = np.ones((20, 1)) if lasting else None
        return ssn.ControlProblem(
            state=state, target=np.sin(np.arange(state.size)), cost=ssn.SparseCost(0.01), control_weight=1e-3,
            control_operator=state.control_operator(amplitudes=amplitudes), source=np.cos(np.arange(state.size)) / 50,
            control_mass=state.control_mass(amplitudes=amplitudes), observation_mass=state.observation_mass(),
        )  # fmt: skip

    whole, short = problem(None), problem(levels * n * 8)
    u = np.random.default_rng(3).standard_normal(whole.unknowns)
    value, gradient = whole.smooth(u)
    before = short.work.state_solves
    found, slope = short.smooth(u)
    assert short.work.state_solves > before + 2  # levels were computed again
    assert found == pytest.approx(value, rel=1e-13)
    np.testing.assert_allclose(slope, gradient, rtol=1e-11, atol=1e-13 * abs(gradient).max())
    solutions = [ssn.solve(one) for one in (whole, short)]
    np.testing.assert_array_equal(solutions[0].x, solutions[1].x)


def test_checkpoints_need_less_memory():
    n, steps = 400, 600
    state = ssn.TimeDependentState(
        np.full(n, 0.1), stiffness(n), steps=steps, duration=1.0, memory=20 * n * 8
    )
    problem = ssn.ControlProblem(
        state=state, target=np.zeros(state.size), cost=ssn.SparseCost(0.01), control_weight=1e-3,
        control_operator=state.control_operator(amplitudes=np.ones((steps, 1))),
        control_mass=state.control_mass(amplitudes=np.ones((steps, 1))), observation_mass=state.observation_mass(),
    )  # fmt: skip
    u = np.ones(problem.unknowns)
    problem.smooth(u)  # factorises
    peaks = []
    for memory in (state.memory, None):
        state.memory = memory
        tracemalloc.start()
        problem.smooth(u)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[0] < 60 * n * 8
    assert peaks[0] < 0.05 * peaks[1]


def test_memory_is_a_whole_number():
    with pytest.raises(ssn.InputError, match="memory"):
        ssn.TimeDependentState(np.ones(3), stiffness(3), steps=2, duration=1.0, memory=0)
