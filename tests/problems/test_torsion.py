"""Elastic-plastic torsion: published optimal values, the round bar's closed form, steps from mesh to mesh."""

from __future__ import annotations

import io

import numpy as np
import pytest
from scipy.integrate import trapezoid

import ssn

from .loading import load

torsion = load("torsion")


def mid_residual(problem, x):
    """Independent of the kernel: |mid(x - upper, x - lower, F(x))|."""
    force = problem.map.M @ x + problem.map.q
    return np.abs(np.maximum(np.minimum(force, x - problem.lower), x - problem.upper)).max()


@pytest.mark.parametrize(("across", "n"), [k for k in torsion.MINPACK2 if k[0] < 100])
def test_published_optimal_values(across, n):
    problem = torsion.build(n, across=across)
    solution = ssn.solve(problem).require()
    value = torsion.known(problem, solution)[0]
    assert "optimal value" in value["what"]
    assert value["holds"], value
    assert mid_residual(problem, solution.x) < 1e-9
    energy = 0.5 * solution.x @ (problem.map.M @ solution.x) + problem.map.q @ solution.x
    assert energy == pytest.approx(value["expected"], abs=value["tolerance"])


@pytest.mark.parametrize("n", list(torsion.HALF_WEIGHT))
def test_printed_values_with_half_weight_edges(n):
    problem = torsion.build(n, case="half weight")
    (check,) = torsion.known(problem, ssn.solve(problem).require())
    assert check["holds"], check


def test_elastic_bar_agrees_with_the_handbook():
    problem = torsion.build(40, c=2.5)
    solution = ssn.solve(problem).require()
    assert not torsion.yielded(solution).any()
    checks = torsion.known(problem, solution)
    assert ["elastic torque" in c["what"] for c in checks] == [True, False]
    assert all(c["holds"] for c in checks)


def test_torque_rises_to_the_plastic_limit():
    torques = []
    for c in (2.5, 5.0, 20.0, 400.0):
        problem = torsion.build(40, c=c)
        torques.append(torsion.torque(problem, ssn.solve(problem).require()))
    assert (np.diff(torques) > 0).all()
    assert torques[-1] == pytest.approx(1 / 3, abs=2e-3)
    assert max(torques) < 1 / 3


@pytest.mark.parametrize("c", [1.5, 5.0, 10.0])
def test_round_bar_converges_to_the_closed_form(c):
    errors = []
    for n in (15, 30):
        problem = torsion.build(n, c=c, case="round")
        solution = ssn.solve(problem).require()
        checks = torsion.known(problem, solution)
        assert len(checks) == (2 if c < 2 else 3)
        assert [check for check in checks if not check["holds"]] == []
        errors.append(abs(torsion.torque(problem, solution) - torsion.round_torque(c)))
    assert errors[1] < 0.35 * errors[0]


def test_closed_form_fits_together():
    r = np.linspace(0, 1, 2001)
    for c in (1.5, 2.0, 5.0):
        v = torsion.exact_round(r, c)
        assert np.abs(np.gradient(v, r)).max() <= max(1.0, c / 2) * (1 + 1e-9)
        torque = 4 * np.pi * trapezoid(v * r, r)
        assert torque == pytest.approx(torsion.round_torque(c), rel=1e-5)


def test_known_values_reject_another_solution():
    for case in ("square", "round"):
        problem = torsion.build(25, case=case)
        other = ssn.ComplementarityProblem(problem.map, problem.lower, 0.8 * problem.upper)
        checks = torsion.known(problem, ssn.solve(other).require())
        assert [c["what"] for c in checks if c["holds"] and "plastic limit" not in c["what"]] == []
    problem = torsion.build(25, c=50.0)
    wide = ssn.ComplementarityProblem(problem.map, -10.0, 10.0)
    (limit,) = torsion.known(problem, ssn.solve(wide).require())
    assert "plastic limit" in limit["what"]
    assert not limit["holds"]


@pytest.mark.parametrize("case", ["square", "round"])
def test_few_steps_from_mesh_to_mesh(case):
    path = ssn.follow_meshes(torsion.build, (15, 30, 60), torsion.transfer, parameters={"case": case})
    assert path.converged
    assert max(len(point.solution.steps) for point in path.points[1:]) <= 5


def test_both_signs_of_twist_are_mirror_images():
    problem = torsion.build(20)
    other = ssn.ComplementarityProblem(
        ssn.AffineMap(problem.map.M, -problem.map.q), problem.lower, problem.upper
    )
    np.testing.assert_allclose(ssn.solve(other).require().x, -ssn.solve(problem).require().x, atol=1e-12)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"n": 1}, "n must be a whole number"),
        ({"n": 8.0}, "n must be a whole number"),
        ({"c": 0.0}, "c must be positive"),
        ({"c": np.inf}, "c must be positive"),
        ({"case": "oval"}, "case must be one of"),
        ({"across": 1}, "across must be 0 or"),
        ({"across": 5, "case": "round"}, "across=5 has no effect"),
    ],
)
def test_unusable_parameters_are_named(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        torsion.build(**{"n": 8, **arguments})


@pytest.mark.parametrize("case", torsion.CASES)
def test_picture_is_drawn(case):
    problem = torsion.build(8, case=case)
    buffer = io.BytesIO()
    torsion.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
