"""Control between two bounds: exact solutions in two and three dimensions, orders of convergence, a general solver."""

from __future__ import annotations

import dataclasses
import io

import numpy as np
import pytest

import ssn

from .loading import load
from .quadratic_program import interior_point

bilateral_bounds = load("bilateral_bounds")


@pytest.mark.parametrize(
    ("parameters", "checks"),
    [
        ({"n": 33}, 1),
        ({"n": 65, "alpha": 1e-4}, 1),
        ({"n": 64, "alpha": 1e-3}, 1),
        ({"n": 65, "alpha": 0.0}, 1),
        ({"n": 20, "waves": 3, "alpha": 1e-6}, 1),
        ({"n": 24, "case": "boundary_term"}, 3),
        ({"n": 25, "case": "boundary_term"}, 3),
        ({"n": 13, "dimension": 3, "waves": 2}, 1),
        ({"n": 13, "dimension": 3, "waves": 2, "alpha": 1e-3}, 1),
        ({"n": 13, "dimension": 3, "waves": 2, "alpha": 0.0}, 1),
        ({"n": 9, "dimension": 3, "case": "boundary_term"}, 3),
    ],
)
def test_known_values_hold(parameters, checks):
    problem = bilateral_bounds.build(**parameters)
    known = bilateral_bounds.known(problem, ssn.solve(problem).require())
    assert len(known) == checks
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_control():
    problem = bilateral_bounds.build(65, alpha=1e-3)
    wrong = ssn.solve(bilateral_bounds.build(65, alpha=1e-4))
    assert [check["holds"] for check in bilateral_bounds.known(problem, wrong)] == [False]
    problem = bilateral_bounds.build(65, alpha=0.0)
    wrong = ssn.solve(bilateral_bounds.build(65, alpha=3e-4))
    assert [check["holds"] for check in bilateral_bounds.known(problem, wrong)] == [False]
    problem = bilateral_bounds.build(24, case="boundary_term")
    wrong = ssn.solve(problem.with_cost(ssn.Bounds(0.0, 0.2)))
    assert [check["holds"] for check in bilateral_bounds.known(problem, wrong)][:2] == [False, False]
    problem.mesh_data = dataclasses.replace(problem.mesh_data, constant=0.999 * problem.mesh_data.constant)
    assert not bilateral_bounds.known(problem, ssn.solve(problem))[2]["holds"]


@pytest.mark.parametrize(
    ("dimension", "waves", "sizes"), [(2, 8, (33, 65, 129)), (3, 2, (7, 13, 25))], ids=["2-D", "3-D"]
)
def test_control_converges_at_order_h2(dimension, waves, sizes):
    # p reaches 1 / (d k^2 pi^2): alpha below it leaves both bounds and a part between
    alpha = 0.4 / (dimension * (waves * np.pi) ** 2)
    errors, widths = [], []
    for n in sizes:
        problem = bilateral_bounds.build(n, alpha, waves, dimension)
        solution = ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2}
        errors.append(problem.controls.norm(solution.x - problem.mesh_data.exact_control))
        widths.append(1.0 / n)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.7 < slope < 2.3
    assert errors[-1] < 0.02  # of a control between -1 and 1


def test_bang_bang_limit():
    """Below alpha the part between the bounds shrinks in proportion: |p| < alpha is a strip along the lines p = 0."""
    between = []
    for alpha in (4e-5, 2e-5, 1e-5, 0.0):
        problem = bilateral_bounds.build(129, alpha)
        control = bilateral_bounds.build(129, alpha).mesh_data.exact_control
        between.append(problem.weights @ (np.abs(control) < 1))
        if alpha in (1e-5, 0.0):
            solution = ssn.solve(problem)
            assert solution.converged
            assert problem.weights @ np.abs(solution.x - control) < 2e-3
    assert between == sorted(between, reverse=True) and between[-1] == 0.0


def test_the_limit_ends_with_a_duality_gap_on_every_mesh():
    for n in (33, 65, 129):
        problem = bilateral_bounds.build(n, 0.0)
        solution = ssn.solve(problem).require()
        assert len(solution.steps) <= 6
        assert (np.abs(solution.x) == 1.0).mean() > 0.99
        assert solution.certificate is not None and solution.certificate.relative < 1e-9


def test_functional_of_the_exact_solution():
    """The integrals in closed form against a midpoint rule."""
    for d in (2, 3):
        m = 120
        line = (np.arange(m) + 0.5) / m
        r2 = sum((x - 0.5) ** 2 for x in np.meshgrid(*[line] * d, indexing="ij"))
        u = np.clip(12 * r2 - 1 / 3, 0, 1)
        z = 2 / 3 - 24 * d + 12 * r2
        rule = float(np.mean(0.5 * (1 - z) ** 2 + 0.5 * u**2)) - 12 * 2 * d
        assert bilateral_bounds.exact_functional(d) == pytest.approx(rule, rel=1e-4)


def test_adjoint_error_is_that_of_the_discrete_equations():
    for d, waves, n in ((2, 3, 12), (3, 2, 8)):
        problem = bilateral_bounds.build(n, 1e-3, waves, d)
        mesh = problem.mesh_data
        adjoint = problem.state_and_adjoint(mesh.exact_control)[1]
        assert np.abs(adjoint - mesh.exact_adjoint - bilateral_bounds.adjoint_error(mesh)).max() < 1e-11


@pytest.mark.parametrize(
    "parameters", [{"n": 12, "waves": 3, "alpha": 1e-4}, {"n": 8, "case": "boundary_term"}]
)
def test_agrees_with_an_interior_point_solver(parameters):
    problem = bilateral_bounds.build(**parameters)
    solution = ssn.solve(problem).require()
    objective, control, _ = interior_point(problem)
    assert solution.objective == pytest.approx(objective, rel=1e-7)
    assert problem.controls.norm(solution.x - control) <= 1e-4 * problem.controls.norm(control)


def test_transfer_carries_a_linear_control():
    for d in (2, 3):
        coarse, fine = (bilateral_bounds.build(n, case="boundary_term", dimension=d) for n in (4, 8))
        fields = []
        for problem in (coarse, fine):
            x = np.meshgrid(*[problem.mesh_data.line] * d, indexing="ij")
            fields.append(sum((k + 1) * c for k, c in enumerate(x)).ravel())
        assert np.abs(bilateral_bounds.transfer(coarse, fine)(fields[0]) - fields[1]).max() <= 1e-13


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 2}, "n must be a whole number of at least 3"),
        ({"n": 8.0}, "n must be a whole number"),
        ({"waves": 0}, "waves must be"),
        ({"alpha": -1.0}, "alpha must"),
        ({"alpha": np.nan}, "alpha must"),
        ({"dimension": 4}, "dimension must be 2 or 3"),
        ({"case": "other"}, "case must be"),
        ({"case": "boundary_term", "alpha": 0.5}, "known for alpha = 1 only"),
        ({"case": "boundary_term", "waves": 4}, "known for alpha = 1 only"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        bilateral_bounds.build(**parameters)


@pytest.mark.parametrize(
    "parameters", [{"n": 17}, {"n": 9, "dimension": 3, "waves": 2}, {"n": 9, "case": "boundary_term"}]
)
def test_picture_is_drawn(parameters):
    problem = bilateral_bounds.build(**parameters)
    buffer = io.BytesIO()
    bilateral_bounds.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
