"""Sparse control of the Poisson equation: known values, mesh independence, and where plain steps fail."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load
from .quadratic_program import interior_point

sparse_elliptic = load("sparse_elliptic")

MANUFACTURED = {"case": "manufactured", "alpha": 0.01, "beta": 0.3, "bound": 50.0}
PLAIN_FAILURES = (ssn.Outcome.CYCLING, ssn.Outcome.STEP_LIMIT)


@pytest.mark.parametrize(
    ("parameters", "checks"),
    [
        ({"n": 31}, 3),
        ({"n": 64}, 3),
        ({"n": 40, "alpha": 1e-7}, 3),
        ({"n": 40, "alpha": 1e-3, "beta": 0.0, "bound": np.inf}, 3),
        ({"n": 33} | MANUFACTURED, 2),
        ({"n": 64, "case": "manufactured"}, 2),
        ({"n": 32, "case": "manufactured", "alpha": 1e-3, "beta": 0.0, "bound": np.inf}, 2),
        ({"n": 13, "dimension": 3}, 3),
        ({"n": 11, "dimension": 3} | MANUFACTURED, 2),
    ],
)
def test_known_values_hold(parameters, checks):
    problem = sparse_elliptic.build(**parameters)
    known = sparse_elliptic.known(problem, ssn.solve(problem).require())
    assert len(known) == checks
    assert [check for check in known if not check["holds"]] == []


def test_vanishing_weights_are_those_of_the_closed_form():
    """S* z = X(x1) times sines of the other coordinates, -X'' + (d - 1) 4 pi^2 X = sin(2 pi x) exp(2 x) / 6."""
    x = np.linspace(0.5, 1.0, 200001)
    for d, value in ((2, sparse_elliptic.VANISHING_BETA), (3, sparse_elliptic.VANISHING_BETA_3D)):
        c, rate = 4 * np.pi**2 * (d - 1), 2 + 2j * np.pi
        k = np.sqrt(c)
        left, right, inside = ((np.exp(rate * at) / 6 / (c - rate**2)).imag for at in (0.0, 1.0, x))
        X = inside - (left * np.sinh(k * (1 - x)) + right * np.sinh(k * x)) / np.sinh(k)
        assert np.abs(X).max() == pytest.approx(value, rel=2e-8)


def test_known_values_reject_another_control():
    problem = sparse_elliptic.build(48, **MANUFACTURED)
    wrong = ssn.solve(sparse_elliptic.build(48, **MANUFACTURED | {"beta": 0.31}))
    assert [check["holds"] for check in sparse_elliptic.known(problem, wrong)] == [True, False]


def test_manufactured_control_converges_at_order_h2():
    errors, widths = [], []
    for n in (16, 32, 64, 128, 256):
        problem = sparse_elliptic.build(n, **MANUFACTURED)
        data = problem.mesh_data
        solution = ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2, 3, 4}  # bounds, both signs, zero
        errors.append(problem.controls.norm(solution.x - data.exact_control))
        widths.append(data.h)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.9 < slope < 2.1
    assert errors[-1] < 2e-3  # of a control between -50 and 50


def test_manufactured_control_converges_at_order_h2_in_a_cube():
    errors, widths = [], []
    for n in (7, 11, 17):
        problem = sparse_elliptic.build(n, dimension=3, **MANUFACTURED)
        solution = ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2, 3, 4}
        errors.append(problem.controls.norm(solution.x - problem.mesh_data.exact_control))
        widths.append(problem.mesh_data.h)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.7 < slope < 2.3
    assert errors[-1] < 1.0  # of a control between -50 and 50


def test_steps_from_zero_do_not_grow_with_the_mesh_in_a_cube():
    for alpha in (1e-4, 1e-6):
        steps = [
            len(ssn.solve(sparse_elliptic.build(n, alpha, dimension=3)).require().steps) for n in (7, 11, 17)
        ]
        assert max(steps) <= 14 and steps[-1] <= steps[0] + 3


def test_transfer_in_a_cube():
    coarse, fine = (sparse_elliptic.build(n, dimension=3) for n in (7, 15))
    hats = [np.minimum(p.mesh_data.points, 1 - p.mesh_data.points).prod(axis=1) for p in (coarse, fine)]
    assert np.abs(sparse_elliptic.transfer(coarse, fine)(hats[0]) - hats[1]).max() <= 1e-14


@pytest.mark.parametrize("alpha", [1e-4, 1e-5, 1e-6, 1e-7])
def test_steps_from_zero_do_not_grow_with_the_mesh(alpha):
    steps = []
    for n in (32, 64, 128, 256):
        problem = sparse_elliptic.build(n, alpha)
        solution = ssn.solve(problem, tolerance=1e-9).require()
        assert solution.accuracy <= 1e-9, f"n = {n}"
        assert problem.accuracy(solution.x) <= 1e-9, f"n = {n}"
        steps.append(len(solution.steps))
    assert max(steps) <= 16
    assert max(steps[2:]) <= max(steps[:2]) + 1


def _draw(cases: int) -> list[tuple[int, float, float, float]]:
    random = np.random.default_rng(2024)
    return [
        (
            int(random.integers(31, 131)),
            float(10 ** random.uniform(-7, -3)),
            float(random.uniform(0, 9e-3)),
            float(10 ** random.uniform(np.log10(5), 3)),
        )
        for _ in range(cases)
    ]


@pytest.mark.parametrize(("n", "alpha", "beta", "bound"), _draw(20))
def test_drawn_cases_converge(n, alpha, beta, bound):
    problem = sparse_elliptic.build(n, alpha, beta, bound)
    solution = ssn.solve(problem, tolerance=1e-9).require()
    assert len(solution.steps) <= 30
    assert solution.accuracy <= 1e-9


def test_plain_failures_are_listed():
    assert len(sparse_elliptic.PLAIN_STEPS_FAIL) >= 8
    assert {alpha for _, alpha in sparse_elliptic.PLAIN_STEPS_FAIL} == {1e-5, 1e-6, 1e-7}


@pytest.mark.parametrize(("n", "alpha"), sparse_elliptic.PLAIN_STEPS_FAIL)
def test_plain_steps_fail_where_the_default_converges(n, alpha):
    problem = sparse_elliptic.build(n, alpha)
    plain = ssn.solve(problem, globalization="full", max_steps=100)
    assert not plain.converged
    assert plain.outcome in PLAIN_FAILURES
    shipped = ssn.solve(problem, max_steps=100)
    assert shipped.converged
    assert len(shipped.steps) <= 16


@pytest.mark.parametrize(
    "parameters",
    [{}, {"alpha": 1e-4}, {"alpha": 1e-6, "bound": 200.0}, {"beta": 0.0, "bound": 100.0}, MANUFACTURED],
)
def test_agrees_with_an_interior_point_solver(parameters):
    problem = sparse_elliptic.build(32, **parameters)
    solution = ssn.solve(problem).require()
    objective, control, state = interior_point(problem)
    assert solution.objective == pytest.approx(objective, rel=1e-9)
    assert problem.controls.norm(solution.x - control) <= 1e-6 * problem.controls.norm(solution.x)
    assert np.abs(solution.state - state).max() <= 1e-7 * np.abs(state).max()


def test_control_follows_from_the_adjoint():
    problem = sparse_elliptic.build(48, alpha=2e-5, beta=2e-3, bound=25.0)
    solution = ssn.solve(problem).require()
    p = solution.adjoint
    expected = np.clip(np.sign(p) * np.maximum(np.abs(p) - 2e-3, 0.0) / 2e-5, -25.0, 25.0)
    assert np.abs(solution.x - expected).max() <= 1e-6


def test_control_appears_below_the_threshold():
    problem = sparse_elliptic.build(64)
    threshold = np.abs(problem.adjoint(problem.reduced_target())).max()
    below = ssn.solve(sparse_elliptic.build(64, beta=threshold * 0.999)).require()
    assert 0 < np.count_nonzero(below.x) < 20


@pytest.mark.parametrize(("coarse_n", "fine_n"), [(31, 63), (40, 96)])
def test_transfer_carries_the_solution_to_a_finer_mesh(coarse_n, fine_n):
    coarse, fine = sparse_elliptic.build(coarse_n), sparse_elliptic.build(fine_n)
    carry = sparse_elliptic.transfer(coarse, fine)
    data = coarse.mesh_data
    smooth = np.sin(np.pi * data.x1) * np.sin(3 * np.pi * data.x2)
    expected = np.sin(np.pi * fine.mesh_data.x1) * np.sin(3 * np.pi * fine.mesh_data.x2)
    assert np.abs(carry(smooth) - expected).max() < 1.3 * 10 * np.pi**2 * data.h**2 / 8
    started = ssn.solve(fine, start=carry(ssn.solve(coarse).require().x)).require()
    cold = ssn.solve(fine).require()
    assert len(started.steps) < len(cold.steps)
    assert fine.controls.norm(started.x - cold.x) <= 1e-8 * fine.controls.norm(cold.x)


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 1}, "n must"),
        ({"n": 8.0}, "n must"),
        ({"n": True}, "n must"),
        ({"alpha": 0.0}, "alpha must"),
        ({"alpha": np.nan}, "alpha must"),
        ({"alpha": np.inf}, "alpha must"),
        ({"beta": -1e-3}, "beta must"),
        ({"beta": np.nan}, "beta"),
        ({"bound": 0.0}, "bound must"),
        ({"bound": np.nan}, "bound must"),
        ({"case": "other"}, "case must"),
        ({"dimension": 1}, "dimension must be 2 or 3"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        sparse_elliptic.build(**parameters)


@pytest.mark.parametrize(
    "parameters", [{}, {"beta": 1.0}, {"bound": np.inf}, MANUFACTURED, {"n": 8, "dimension": 3}]
)
def test_picture_is_drawn(parameters):
    problem = sparse_elliptic.build(**{"n": 16} | parameters)
    buffer = io.BytesIO()
    sparse_elliptic.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
