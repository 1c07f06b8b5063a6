"""Hertz contact: influence operator against quadrature and a dense matrix, closed form, many panels."""

from __future__ import annotations

import io
import itertools

import numpy as np
import pytest
from scipy.integrate import dblquad

import ssn

from .loading import load

hertz = load("hertz_contact")


@pytest.mark.parametrize(("x", "y"), [(0.0, 0.0), (0.4, 0.1), (1.0, -0.7)])
def test_panel_displacement_is_boussinesqs_integral(x, y):
    """1 / (pi E*) int 1 / distance over the panel; the panel is split at the pole."""
    half = 0.25
    expected = 0.0
    cuts_s = sorted({-half, half, float(np.clip(x, -half, half))})
    cuts_t = sorted({-half, half, float(np.clip(y, -half, half))})
    for a, b in itertools.pairwise(cuts_s):
        for c, d in itertools.pairwise(cuts_t):
            part, _ = dblquad(lambda t, s: 1 / np.hypot(x - s, y - t), a, b, c, d, epsabs=1e-8)
            expected += part / np.pi
    assert float(hertz.panel_displacement(np.array(x), np.array(y), half)) == pytest.approx(
        expected, abs=2e-7
    )


def test_operator_is_the_dense_matrix():
    n = 9
    problem = hertz.build(n)
    mesh = problem.mesh_data
    dense = hertz.panel_displacement(mesh.x1[:, None] - mesh.x1, mesh.x2[:, None] - mesh.x2, mesh.h / 2)
    product = problem.derivative(problem.start())
    np.testing.assert_allclose(product @ np.eye(n * n), dense, atol=1e-14)
    np.testing.assert_allclose(problem.map.diagonal, dense.diagonal(), rtol=1e-14)


def test_operator_and_dense_matrix_have_the_same_solution():
    problem = hertz.build(16)
    matrix = problem.map.M @ np.eye(256)
    dense = ssn.ComplementarityProblem(ssn.AffineMap(0.5 * (matrix + matrix.T), problem.map.q))
    np.testing.assert_allclose(ssn.solve(problem).require().x, ssn.solve(dense).require().x, atol=1e-9)


@pytest.mark.parametrize("n", [20, 33, 40, 64])
def test_known_values_hold(n):
    problem = hertz.build(n)
    solution = ssn.solve(problem).require()
    checks = hertz.known(problem, solution)
    assert len(checks) == (7 if n in hertz.DENSE else 6)
    assert [check for check in checks if not check["holds"]] == []
    # the linear solves are tight enough for the pieces, and tight once they stay
    assert len(solution.steps) <= 8
    assert solution.steps[-1].contraction < 1e-6


def test_force_converges_to_the_closed_form():
    errors = []
    for n in (16, 128):
        problem = hertz.build(n)
        errors.append(abs(hertz.figures(problem, ssn.solve(problem).require())[2] - 4 / 3))
    assert errors[1] < errors[0] / 8


def test_a_textbook_contact():
    """R = 8 mm, E = 1000 N/mm^2, nu = .3 on a rigid plane, 60 pi N: contact radius 1.010 mm, as printed."""
    problem = hertz.build(64)
    radius, _, force = hertz.figures(problem, ssn.solve(problem).require())
    modulus = 1000 / (1 - 0.3**2)
    approach = (60 * np.pi / (modulus * np.sqrt(8.0) * force)) ** (2 / 3)
    assert radius * np.sqrt(8.0 * approach) == pytest.approx(1.010, rel=problem.mesh_data.h / 2)


def test_ten_thousand_panels_from_mesh_to_mesh():
    path = ssn.follow_meshes(hertz.build, (25, 50, 100), hertz.transfer)
    assert path.converged
    assert max(len(point.solution.steps) for point in path.points[1:]) <= 4
    problem = hertz.build(100)
    assert [c for c in hertz.known(problem, path.points[-1].solution) if not c["holds"]] == []


def test_known_values_reject_another_solution():
    problem = hertz.build(40)
    F = ssn.AffineMap(problem.map.M, problem.map.q - 0.1, diagonal=problem.map.diagonal, symmetric=True)
    checks = hertz.known(problem, ssn.solve(ssn.ComplementarityProblem(F)).require())
    # a little more load changes neither the ratios nor, by the power 1/3, the balls by much
    assert sum(check["holds"] for check in checks) <= 2


@pytest.mark.parametrize("n", [3, 8.0, True])
def test_unusable_n_is_named(n):
    with pytest.raises(ssn.InputError, match="n must be a whole number"):
        hertz.build(n)


def test_picture_is_drawn():
    problem = hertz.build(9)
    buffer = io.BytesIO()
    hertz.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
