"""Membrane between two obstacles: exact solution, symmetry, printed optimal values, steps from mesh to mesh."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

double_obstacle = load("double_obstacle")

NUMBERS = (32, 64, 128)


@pytest.fixture(scope="module", params=double_obstacle.CASES)
def refined(request):
    """Case, and problem and solution by n, each started from the mesh before."""
    results = {}
    start = previous = None
    for n in NUMBERS:
        problem = double_obstacle.build(n, case=request.param)
        if previous is not None:
            start = double_obstacle.transfer(previous[0], problem)(previous[1].x)
        previous = results[n] = (problem, ssn.solve(problem, start).require())
    return request.param, results


def test_constants_fit_their_equations():
    c, outer = double_obstacle.INNER, double_obstacle.OUTER
    assert c**2 + outer**2 == pytest.approx(2.0, rel=1e-14)
    assert c**2 * np.log(c) + outer**2 * np.log(outer) == pytest.approx(4 / double_obstacle.LOAD, rel=1e-13)


def test_exact_solution_solves_the_radial_equation():
    r = np.linspace(0.05, 1.9, 38) + 0.003
    h = 1e-4
    u = double_obstacle.exact_solution
    laplacian = (u(r + h) - 2 * u(r) + u(r - h)) / h**2 + (u(r + h) - u(r - h)) / (2 * h * r)
    load = np.where(r <= 1, 12.0, -12.0)
    free = (r > double_obstacle.INNER) & (r < double_obstacle.OUTER)
    np.testing.assert_allclose(-laplacian[free], load[free], atol=1e-5)
    np.testing.assert_allclose(laplacian[~free], 0.0, atol=1e-6)
    assert (np.abs(u(r)) <= 1.0).all()
    line = np.array([double_obstacle.INNER, 1.0, double_obstacle.OUTER])  # value and slope fit
    np.testing.assert_allclose(u(line + 1e-9), u(line - 1e-9), atol=1e-7)


def test_known_values_hold(refined):
    case, results = refined
    for problem, solution in results.values():
        checks = double_obstacle.known(problem, solution)
        assert len(checks) == {"disc": 5, "symmetric": 3, "bilateral": 0}[case]
        assert [check for check in checks if not check["holds"]] == []


def test_few_steps_from_mesh_to_mesh(refined):
    _, results = refined
    assert max(len(results[n][1].steps) for n in NUMBERS[1:]) <= 5


def test_disc_converges_in_l2():
    errors = []
    numbers = (16, 32, 64)
    for n in numbers:
        problem = double_obstacle.build(n)
        x = ssn.solve(problem).require().x
        data = problem.mesh_data
        errors.append(data.h * np.linalg.norm(x - double_obstacle.exact_solution(np.hypot(data.x1, data.x2))))
    slope = np.polyfit(np.log([4.0 / (n + 1) for n in numbers]), np.log(errors), 1)[0]
    assert 1.8 <= slope < 2.5
    assert errors[-1] < 4e-3


@pytest.mark.parametrize("points", list(double_obstacle.PRINTED))
def test_printed_optimal_values(points):
    problem = double_obstacle.build(points - 2, case="bilateral")
    solution = ssn.solve(problem).require()
    (check,) = double_obstacle.known(problem, solution)
    assert check["holds"], check
    moved = ssn.ComplementarityProblem(problem.map, problem.lower - 1e-3, problem.upper - 1e-3)
    moved.mesh_data = problem.mesh_data
    assert not double_obstacle.known(problem, ssn.solve(moved))[0]["holds"]


def test_known_values_reject_another_solution(refined):
    case, results = refined
    if case == "bilateral":
        return
    problem, _ = results[64]
    moved = ssn.ComplementarityProblem(problem.map, problem.lower, 0.5 * problem.upper)
    checks = double_obstacle.known(problem, ssn.solve(moved).require())
    # the membrane leaves the floor where it did, nearly
    holding = [check["what"] for check in checks if check["holds"]]
    assert all("floor, one mesh width" in what for what in holding), holding


def test_transfer_interpolates():
    coarse, fine = double_obstacle.build(30), double_obstacle.build(77)
    carry = double_obstacle.transfer(coarse, fine)
    inner = np.abs([fine.mesh_data.x1, fine.mesh_data.x2]).max(axis=0) < 2 - coarse.mesh_data.h
    plane = 3.0 + coarse.mesh_data.x1 - 2.0 * coarse.mesh_data.x2
    expected = 3.0 + fine.mesh_data.x1 - 2.0 * fine.mesh_data.x2
    assert np.abs(carry(plane) - expected)[inner].max() <= 1e-12
    assert carry(np.full(900, -1.0)) == pytest.approx(np.full(77 * 77, -1.0))


@pytest.mark.parametrize("n", [1, 16.0, True, "16"])
def test_unusable_n_is_named(n):
    with pytest.raises(ssn.InputError, match="n must be a whole number"):
        double_obstacle.build(n)


def test_unknown_case_is_named():
    with pytest.raises(ssn.InputError, match="case must be one of 'disc'"):
        double_obstacle.build(8, case="square")


@pytest.mark.parametrize("case", double_obstacle.CASES)
def test_picture_is_drawn(case):
    for n in (2, 9):
        problem = double_obstacle.build(n, case=case)
        buffer = io.BytesIO()
        double_obstacle.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=20)
        assert buffer.getvalue().startswith(b"\x89PNG")
