"""Radial obstacle problem: solution, contact radius and contact force against exact values under refinement."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

obstacle = load("obstacle")

NUMBERS = (32, 64, 128, 256)


@pytest.fixture(scope="module")
def refined():
    """Problem and solution by n, each started from the mesh before."""
    results = {}
    start = previous = None
    for n in NUMBERS:
        problem = obstacle.build(n)
        if previous is not None:
            start = obstacle.transfer(previous[0], problem)(previous[1].x)
        previous = results[n] = (problem, ssn.solve(problem, start=start).require())
    return results


def test_constants_fit_their_equations():
    a, slope = obstacle.CONTACT_RADIUS, obstacle.SLOPE
    assert a**2 * (np.log(2) - np.log(a)) == pytest.approx(1 - a**2, rel=1e-14)
    assert slope == pytest.approx(a**2 / np.sqrt(1 - a**2), rel=1e-14)
    assert np.pi * a**2 == pytest.approx(obstacle.CONTACT_AREA, rel=1e-10)
    assert 2 * np.pi * slope == pytest.approx(obstacle.CONTACT_FORCE, rel=1e-12)
    assert obstacle.exact_solution(np.array([np.sqrt(8)]))[0] == pytest.approx(
        obstacle.CORNER_VALUE, abs=1e-12
    )


def test_obstacle_goes_on_along_its_tangent():
    r = np.array([0.0, 0.6, 0.8, 0.9, 1.0, 2.0])
    expected = [
        1.0,
        0.8,
        0.6,
        np.sqrt(0.19),
        np.sqrt(0.19) - 0.09 / np.sqrt(0.19),
        np.sqrt(0.19) * (1 - 0.99 / 0.19),
    ]
    assert obstacle.obstacle(r) == pytest.approx(expected, rel=1e-13)
    assert (obstacle.exact_solution(r) >= obstacle.obstacle(r) - 1e-15).all()


@pytest.mark.parametrize("n", NUMBERS)
def test_known_values_hold(refined, n):
    known = obstacle.known(*refined[n])
    assert len(known) == 4
    assert [check for check in known if not check["holds"]] == []


def test_solution_converges_in_l2(refined):
    widths, errors = [], []
    for problem, solution in refined.values():
        data = problem.mesh_data
        widths.append(data.h)
        errors.append(data.h * np.linalg.norm(solution.x - data.exact))
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.8 <= slope < 2.3
    assert errors[-1] < 6e-5


def test_contact_force_at_128(refined):
    force = refined[128][1].multipliers["contact"].sum()
    assert force == pytest.approx(4.274195941869, rel=0.01)


def test_contact_radius_within_one_mesh_width(refined):
    for problem, solution in refined.values():
        area = problem.mesh_data.h**2 * np.count_nonzero(obstacle.in_contact(solution))
        assert abs(np.sqrt(area / np.pi) - 0.6979651482233735) <= problem.mesh_data.h


def test_known_values_reject_another_solution(refined):
    problem, solution = refined[64]
    lifted = ssn.ComplementarityProblem(problem.map, lower=problem.lower - 0.4)
    known = obstacle.known(problem, ssn.solve(lifted, start=solution.x).require())
    assert [check["holds"] for check in known] == [False, False, False, False]


def test_nested_meshes_keep_the_steps_few(refined):
    assert max(len(solution.steps) for n, (_, solution) in refined.items() if n > 32) <= 5


def test_transfer_interpolates():
    coarse, fine = obstacle.build(30), obstacle.build(77)
    carry = obstacle.transfer(coarse, fine)
    inner = np.abs([fine.mesh_data.x1, fine.mesh_data.x2]).max(axis=0) < 2 - coarse.mesh_data.h
    plane = 3.0 + coarse.mesh_data.x1 - 2.0 * coarse.mesh_data.x2
    expected = 3.0 + fine.mesh_data.x1 - 2.0 * fine.mesh_data.x2
    assert np.abs(carry(plane) - expected)[inner].max() <= 1e-12
    # the boundary values are those of the problem
    assert np.abs(carry(coarse.mesh_data.exact) - fine.mesh_data.exact).max() <= coarse.mesh_data.h**2


def test_start_from_below_finds_the_same_solution(refined):
    _, solution = refined[64]
    cold = ssn.solve(obstacle.build(64)).require()
    assert np.abs(cold.x - solution.x).max() <= 1e-12


@pytest.mark.parametrize("n", [1, 16.0, True, "16"])
def test_unusable_n_is_named(n):
    with pytest.raises(ssn.InputError, match="n must be a whole number"):
        obstacle.build(n)


@pytest.mark.parametrize("n", [2, 3, 16])
def test_picture_is_drawn(n):
    problem = obstacle.build(n)
    buffer = io.BytesIO()
    obstacle.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
