"""State bounds against printed values and a general convex solver with the hard constraint."""

import itertools

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from tests.problems.loading import load

BOUNDARY = load("boundary_control")
SOLUTIONS: dict[int, tuple[ssn.ControlProblem, ssn.Solution]] = {}


def solved(n):
    if n not in SOLUTIONS:
        problem = BOUNDARY.build(n)
        SOLUTIONS[n] = problem, ssn.solve(problem)
    return SOLUTIONS[n]


@pytest.mark.parametrize("n", BOUNDARY.SIZES)
def test_few_steps_a_path_point_on_every_mesh(n):
    solution = solved(n)[1]
    solution.require()
    assert solution.violation <= 1e-6
    counts = [len(list(group)) for _, group in itertools.groupby(solution.steps, key=lambda s: s.stage)]
    assert np.mean(counts) <= 4, counts
    assert len(solution.steps) <= 16


@pytest.mark.parametrize(("n", "count"), [(50, 2), (100, 5)])
def test_printed_values(n, count):
    checks = BOUNDARY.known(*solved(n))
    assert len(checks) == count
    for check in checks:
        assert check["holds"], check


def hard_constraint(problem):
    """The problem with y <= ceiling as a quadratic program in (y, u)."""
    size, n = problem.state.size, problem.unknowns
    quadratic = sp.block_diag(
        [sp.diags_array(problem.observations.vector), sp.diags_array(problem.alpha * problem.weights)]
    )
    linear = np.concatenate([-problem.observations.vector * problem.target, np.zeros(n)])
    equations = sp.hstack([problem.state.matrix, -problem.control_operator])
    eye_y = sp.hstack([sp.eye_array(size), sp.csr_array((size, n))])
    eye_u = sp.hstack([sp.csr_array((n, size)), sp.eye_array(n)])
    rows = sp.csc_matrix(sp.vstack([equations, eye_y, eye_u, -eye_u]))
    right = np.concatenate([problem.source, problem.state_upper, np.full(n, 10.0), np.zeros(n)])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    cones = [clarabel.ZeroConeT(size), clarabel.NonnegativeConeT(size + 2 * n)]
    found = clarabel.DefaultSolver(sp.csc_matrix(quadratic), linear, rows, right, cones, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved")
    x, dual = np.array(found.x), np.array(found.z)
    return x[:size], x[size:], dual[size : 2 * size], float(found.obj_val)


@pytest.mark.parametrize("n", [10, 15])
def test_against_the_hard_constraint(n):
    problem, solution = solved(n)
    y, u, force, value = hard_constraint(problem)
    constant = 0.5 * problem.observations.dot(problem.target, problem.target)
    assert BOUNDARY.functional(problem, solution) == pytest.approx(value + constant, abs=1e-6)
    np.testing.assert_allclose(solution.state, y, atol=1e-4)
    assert problem.controls.norm(solution.x - u) <= 1e-4 * problem.controls.norm(u)
    ours = problem.bound_mass * solution.multipliers["state"]
    assert ours.sum() == pytest.approx(force.sum(), rel=1e-4)
    np.testing.assert_allclose(ours, force, atol=1e-4)
