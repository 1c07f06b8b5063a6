"""Sources on points and lines: solutions made to order, a conic solver, the threshold by sine series."""

from __future__ import annotations

import io

import numpy as np
import pytest
from scipy.fft import dstn, idstn
from scipy.interpolate import RectBivariateSpline
from scipy.optimize import minimize

import ssn

from .loading import load
from .quadratic_program import interior_point

measure_sources = load("measure_sources")


@pytest.mark.parametrize(
    ("parameters", "checks", "steps"),
    [
        ({"n": 15}, 4, 15),
        ({"n": 31}, 4, 25),
        ({"n": 31, "beta": 1e-5}, 4, 55),
        ({"n": 7, "dimension": 3}, 4, 15),
        ({"n": 15, "case": "lines"}, 4, 20),
        ({"n": 7, "case": "lines", "dimension": 3}, 4, 20),
        ({"n": 20, "case": "survey"}, 3, 30),
        ({"n": 20, "case": "benchmark"}, 4, 25),
    ],
)
def test_known_values_hold(parameters, checks, steps):
    problem = measure_sources.build(**parameters)
    solution = ssn.solve(problem).require()
    known = measure_sources.known(problem, solution)
    assert len(known) == checks
    assert [check for check in known if not check["holds"]] == []
    assert len(solution.steps) <= steps
    assert solution.accuracy <= 1e-12


def test_known_values_reject_another_control():
    problem = measure_sources.build(15)
    wrong = ssn.solve(problem.with_cost(ssn.SparseCost(1.01e-3)))
    assert [check["holds"] for check in measure_sources.known(problem, wrong)] == [False, False, True, False]


@pytest.mark.parametrize("case", measure_sources.CASES)
def test_objective_from_outside(case):
    problem = measure_sources.build(11, case=case)
    solution = ssn.solve(problem).require()
    assert solution.objective == pytest.approx(interior_point(problem)[0], rel=1e-8)


def test_threshold_of_the_benchmark_by_sine_series():
    n = 512
    line, wave = np.arange(1, n) / n, np.pi * np.arange(1, n)
    x1, x2 = np.meshgrid(line, line, indexing="ij")
    z = np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2) * np.exp(2 * x1) / 6
    p = np.abs(idstn(dstn(z, 1) / (wave[:, None] ** 2 + wave**2), 1))
    peak = np.unravel_index(p.argmax(), p.shape)
    smooth = RectBivariateSpline(line, line, p, kx=5, ky=5)
    found = minimize(
        lambda x: -smooth(*x)[0, 0], line[list(peak)], method="Nelder-Mead", options={"xatol": 1e-10}
    )
    assert -found.fun == pytest.approx(measure_sources.BENCHMARK_THRESHOLD, abs=5e-11)


def test_joints_between_mesh_points_are_found():
    """One source a joint, within one mesh size of it, and weaker than it is: beta costs strength."""
    for n in (20, 31):
        problem = measure_sources.build(n, case="survey")
        found = measure_sources.sources(problem, ssn.solve(problem).require())
        assert len(found) == len(measure_sources.JOINTS)
        for place, strength in measure_sources.JOINTS:
            nearest, held = min(found, key=lambda source: np.linalg.norm(source[0] - place[:2]))
            assert np.linalg.norm(nearest - place[:2]) < problem.mesh_data.h
            assert 0.5 < held / strength < 1.0


def test_transfer_moves_every_source_to_its_place():
    coarse, fine = measure_sources.build(15), measure_sources.build(31)
    carry = measure_sources.transfer(coarse, fine)
    moved = carry(coarse.mesh_data.exact)
    np.testing.assert_allclose(moved, fine.mesh_data.exact, atol=1e-14)
    assert len(ssn.solve(fine, moved).require().steps) == 0


def test_picture_and_summary():
    for parameters in ({"n": 15}, {"n": 7, "dimension": 3}, {"n": 15, "case": "survey"}):
        problem = measure_sources.build(**parameters)
        solution = ssn.solve(problem).require()
        buffer = io.BytesIO()
        measure_sources.picture(problem, solution).savefig(buffer, format="png")
        assert len(buffer.getvalue()) > 10_000
        told = dict(measure_sources.summary(problem, solution))
        assert any("sources at" in what for what in told)


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({"n": 2}, "n must be a whole number of at least 3"),
        ({"n": 30}, "n \\+ 1 a multiple of 4"),
        ({"dimension": 4}, "dimension must be 2 or 3"),
        ({"case": "clouds"}, "case must be one of points, lines"),
        ({"case": "benchmark", "dimension": 3}, "dimension must be 2"),
        ({"beta": 0.0}, "beta must be positive"),
    ],
)
def test_bad_parameters(parameters, message):
    with pytest.raises(ssn.InputError, match=message):
        measure_sources.build(**parameters)
