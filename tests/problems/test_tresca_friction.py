"""Friction with a given bound: exact solution, the problem stated in the displacement, the laws of stick and slip."""

from __future__ import annotations

import io

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import spsolve

import ssn

from .loading import load

friction = load("tresca_friction")


@pytest.fixture(scope="module", params=friction.CASES)
def solved(request):
    problem = friction.build(32, case=request.param)
    return problem, ssn.solve(problem).require()


def test_exact_solution_is_harmonic_and_obeys_the_law():
    x, y = np.meshgrid(np.linspace(-0.9, 0.9, 13), np.linspace(0.2, 0.8, 5))
    h, g = 1e-3, 1.0

    def u(a, b):
        return friction.exact_displacement(a, b, g)

    laplacian = (u(x + h, y) + u(x - h, y) + u(x, y + h) + u(x, y - h) - 4 * u(x, y)) / h**2
    assert np.abs(laplacian).max() < 1e-4
    line = np.linspace(-0.95, 0.95, 39)
    line = line[np.abs(line - friction.EDGE) > 0.01]
    slope = (-3 * u(line, 0 * line) + 4 * u(line, 0 * line + h) - u(line, 0 * line + 2 * h)) / (2 * h)
    exact = friction.exact_friction(line, g)
    np.testing.assert_allclose(slope, exact, atol=1e-4)
    assert (np.abs(exact) <= g).all()
    slips = u(line, 0 * line)
    assert slips[line < friction.EDGE] == pytest.approx(0.0, abs=1e-12)
    assert (slips[line > friction.EDGE] > 0).all()
    assert (exact[line > friction.EDGE] == g).all()


@pytest.mark.parametrize("n", [8, 16, 31, 64])
@pytest.mark.parametrize("case", friction.CASES)
def test_known_values_hold(case, n):
    problem = friction.build(n, case=case)
    checks = friction.known(problem, ssn.solve(problem).require())
    assert len(checks) == 3
    assert [check for check in checks if not check["holds"]] == []


def test_friction_and_slip_obey_the_law(solved):
    problem, solution = solved
    slip, g = friction.slip(problem, solution), problem.mesh_data.bound
    assert (np.abs(solution.x) <= g).all()
    size = np.abs(slip).max()
    assert np.abs(slip[np.abs(solution.x) < g]).max() < 1e-10 * size
    assert (slip[solution.x == g] >= -1e-10 * size).all()
    np.testing.assert_allclose(
        problem.map.M @ solution.x + problem.map.q, -problem.mesh_data.length * slip, atol=1e-12 * size
    )


def test_statement_in_the_displacement_has_the_same_solution(solved):
    """min energy - work + sum of length g |slip|: solved by an interior-point library where it is installed."""
    clarabel = pytest.importorskip("clarabel")
    problem, solution = solved
    mesh = problem.mesh_data
    n, m = mesh.load.size, mesh.contact.size
    pick = sp.csc_array((np.ones(m), (np.arange(m), mesh.slips)), shape=(m, n))
    # variables (u, t) with |slip| <= t
    hessian = sp.block_diag([sp.triu(mesh.stiffness), sp.csc_array((m, m))], format="csc")
    linear = np.concatenate([-mesh.load, mesh.bound * mesh.length])
    rows = sp.block_array([[pick, -sp.eye_array(m)], [-pick, -sp.eye_array(m)]], format="csc")
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(hessian), linear, sp.csc_matrix(rows), np.zeros(2 * m),
        [clarabel.NonnegativeConeT(2 * m)], settings,
    )  # fmt: skip
    result = solver.solve()
    u = np.array(result.x)[:n]
    slip = friction.slip(problem, solution)
    np.testing.assert_allclose(u[mesh.slips], slip, atol=1e-5 * np.abs(slip).max())
    assert result.obj_val == pytest.approx(-solution.objective - _offset(problem), rel=1e-6)


def _offset(problem):
    """What the dual objective leaves out: minus the least energy without friction."""
    mesh = problem.mesh_data
    return 0.5 * float(mesh.load @ spsolve(mesh.stiffness, mesh.load))


def test_known_values_reject_another_solution(solved):
    problem, _ = solved
    other = ssn.ComplementarityProblem(problem.map, 0.7 * problem.lower, 0.7 * problem.upper)
    checks = friction.known(problem, ssn.solve(other).require())
    # the whole friction is in equilibrium with the pull, whatever the bound
    holding = [check["what"] for check in checks if check["holds"]]
    assert all("whole contact" in what for what in holding), holding


def test_a_large_bound_sticks_and_a_small_one_slips():
    stuck = friction.build(16, case="strip", bound=10.0)
    assert friction.slip_length(stuck, ssn.solve(stuck).require()) == 0.0
    loose = friction.build(16, case="strip", bound=1e-5)
    assert friction.slip_length(loose, ssn.solve(loose).require()) == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize("case", friction.CASES)
def test_steps_do_not_grow_with_the_mesh(case):
    path = ssn.follow_meshes(friction.build, (16, 32, 64), friction.transfer, parameters={"case": case})
    assert path.converged
    assert max(len(point.solution.steps) for point in path.points[1:]) <= 5


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"n": 7}, "n must be a whole number"),
        ({"n": 8.0}, "n must be a whole number"),
        ({"case": "coulomb"}, "case must be one of"),
        ({"bound": -1.0}, "bound must be positive"),
        ({"bound": np.inf}, "bound must be positive"),
    ],
)
def test_unusable_parameters_are_named(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        friction.build(**{"n": 8, **arguments})


def test_picture_is_drawn(solved):
    buffer = io.BytesIO()
    friction.picture(*solved).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
