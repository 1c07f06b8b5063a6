"""The exothermic state constraint: printed values, and an interior-point program on an assembly of its own."""

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.evidence import assess, rate

from .loading import load

problem_file = load("semilinear_state_bound")


def sequential_program(n, alpha=1e-3, ceiling=0.371):
    """F, state and control by sequential quadratic programs with exact bounds; shares no line with ssn."""
    h, m = 1.0 / n, n - 1
    size = m * m
    diagonal = 2.0 * np.ones(m)
    diagonal[[0, -1]] -= 1.0 / (1.0 + h)
    line = sp.diags_array([-np.ones(m - 1), diagonal, -np.ones(m - 1)], offsets=[-1, 0, 1])
    eye = sp.eye_array(m)
    laplacian = sp.csc_array(sp.kron(line, eye) + sp.kron(eye, line)) / h**2
    x1, x2 = np.meshgrid(np.arange(1, n) * h, np.arange(1, n) * h, indexing="ij")
    target = (np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2)).ravel()
    y, multiplier = np.zeros(size), np.zeros(size)
    eye, zero = sp.eye_array(size), sp.csr_array((size, size))
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    for _ in range(8):
        e = np.exp(y)
        weight = h * h - np.minimum(multiplier * e, 0.9 * h * h)
        p = sp.block_diag([sp.diags_array(weight), alpha * h * h * eye], format="csc")
        q = np.concatenate([h * h * (y - target) - weight * y, np.zeros(size)])
        rows = [[laplacian - sp.diags_array(e), -eye], [eye, zero], [zero, eye], [zero, -eye]]
        right = np.concatenate([e - e * y, np.full(size, ceiling), np.full(size, 9.0), np.full(size, 8.0)])
        cones = [clarabel.ZeroConeT(size), clarabel.NonnegativeConeT(3 * size)]
        a = sp.csc_matrix(sp.block_array(rows))
        result = clarabel.DefaultSolver(sp.csc_matrix(sp.triu(p)), q, a, right, cones, settings).solve()
        found = np.array(result.x)
        change = np.abs(found[:size] - y).max()
        y, u, multiplier = found[:size], found[size:], np.array(result.z)[:size]
        if change < 1e-11:
            break
    assert change < 1e-9
    return 0.5 * h * h * ((y - target) @ (y - target) + alpha * u @ u), y, u


def test_printed_values():
    problem = problem_file.build(50)
    solution = ssn.solve(problem).require()
    known = problem_file.known(problem, solution)
    assert len(known) == 6 and [check for check in known if not check["holds"]] == []
    assert len(solution.steps) <= 12
    assert solution.certificate is None and solution.violation <= 1e-7


def test_the_program_with_exact_bounds_agrees():
    functional, state, control = sequential_program(25)
    problem = problem_file.build(25)
    solution = ssn.solve(problem).require()
    assert problem_file.functional(problem, solution) == pytest.approx(functional, rel=1e-8)
    np.testing.assert_allclose(solution.state, state, atol=1e-6)
    assert problem.controls.norm(solution.x - control) <= 1e-4 * problem.controls.norm(control)
    values = {(what, source): value for what, value, _, source in problem_file.KNOWN_VALUES[25]}
    assert functional == pytest.approx(values["functional F", problem_file.COMPUTED], abs=1e-10)
    assert (solution.pieces["state"] == 2).any()


def test_a_tighter_bound_is_reached_and_multipliers_have_their_signs():
    problem = problem_file.build(16, ceiling=0.2)
    solution = ssn.solve(problem).require()
    density = solution.multipliers["state"]
    assert (density >= 0).all() and (density > 0).sum() >= 5
    y, p, u = solution.state, solution.adjoint, solution.x
    np.testing.assert_allclose(problem.state.residual(y, problem.load(u)), 0.0, atol=1e-9)
    load = problem.observations.apply(problem.target - y) - problem.bound_mass * density
    np.testing.assert_allclose(problem.state.linearize(y).adjoint_residual(p, load), 0.0, atol=1e-9)
    np.testing.assert_allclose(u, np.clip(p / problem.alpha, -8.0, 9.0), atol=1e-5)
    verdict = rate(solution.problem, solution, samples=2)
    assert verdict.holds, verdict


def test_the_penalised_problem_agrees_with_first_order_methods():
    problem = problem_file.build(10, penalty=20.0)
    found = assess(problem, budget=5.0)
    assert found.holds, found.failures()
    assert found.agreement == "holds"


def test_hard_bounds_are_judged_by_sequential_programming():
    found = assess(problem_file.build(10, ceiling=0.2), budget=2.0)
    assert found.agreement == "holds" and "sequential programming" in found.agreement_note
    assert found.check("objective").holds


def test_a_start_without_a_state_and_bounds_that_exclude_each_other():
    problem = problem_file.build(8)
    assert ssn.solve(problem, np.full(problem.unknowns, 9.0)).outcome is ssn.Outcome.NO_STATE
    # the state cannot get below about -2 with u >= -8
    cold = problem_file.build(8, ceiling=-5.0)
    assert not ssn.solve(cold, max_steps=60).converged


def test_known_rejects_another_control_and_input_is_checked():
    problem = problem_file.build(50)
    other = ssn.solve(problem_file.build(50, alpha=0.0011))
    assert not all(check["holds"] for check in problem_file.known(problem, other))
    assert problem_file.picture(problem, other) is not None
    for wrong in ({"n": 2}, {"alpha": 0.0}, {"penalty": -1.0}):
        with pytest.raises(ssn.InputError, match=next(iter(wrong))):
            problem_file.build(**wrong)
