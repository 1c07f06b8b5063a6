"""Viscous eikonal equation and time-optimal double integrator against their exact solutions."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

minimum = load("minimum_time")


@pytest.fixture(scope="module", params=["corridor", "cart"])
def solved(request):
    problem = minimum.build(32, request.param)
    return problem, ssn.solve(problem).require()


def test_known_values_hold(solved):
    known = minimum.known(*solved)
    assert len(known) == 2
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_other_values(solved):
    problem, solution = solved
    solution = ssn.solve(lambda v: v - 1.3 * solution.x, start=solution.x)
    assert not minimum.known(problem, solution)[0]["holds"]


@pytest.mark.parametrize("eps", [0.02, 0.1, 1.0])
def test_exact_exit_time_solves_its_equation(eps):
    """-eps u'' + |u'| = 1 by differencing, and no kink at 0."""
    x = np.linspace(0.05, 0.95, 19)
    d = 1e-4
    u = [minimum.exit_time(x + k * d, eps) for k in (-1, 0, 1)]
    second, slope = (u[0] - 2 * u[1] + u[2]) / d**2, (u[2] - u[0]) / (2 * d)
    assert np.abs(-eps * second + np.abs(slope) - 1.0).max() <= 1e-5
    assert abs(minimum.exit_time(d, eps) - minimum.exit_time(0.0, eps)) <= d**2 / eps


def test_exact_time_to_rest_by_hand_and_by_simulation():
    assert minimum.time_to_rest(np.array(1.0), np.array(0.0)) == pytest.approx(2.0)
    assert minimum.time_to_rest(np.array(0.5), np.array(-1.0)) == pytest.approx(1.0)  # on the switching curve
    x1, x2, u = 0.7, 0.4, -1.0  # thrust backwards, then brake when on the curve
    dt, elapsed = 1e-4, 0.0
    while np.hypot(x1, x2) > 2e-3 and elapsed < 5.0:
        if u < 0 and x2 < 0 and x1 <= x2**2 / 2:
            u = 1.0
        x1, x2, elapsed = x1 + dt * x2, x2 + dt * u, elapsed + dt
    assert elapsed == pytest.approx(float(minimum.time_to_rest(np.array(0.7), np.array(0.4))), abs=5e-3)


def test_noise_free_scheme_is_exact_and_noisy_one_of_first_order():
    errors = []
    for n in (32, 64, 128):
        quiet, noisy = minimum.build(n, eps=0.0), minimum.build(n, eps=0.1)
        assert np.abs(ssn.solve(quiet).require().x - quiet.setting.exact).max() <= 1e-12
        errors.append(np.abs(ssn.solve(noisy).require().x - noisy.setting.exact).max())
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    assert (rates > 0.8).all() and errors[-1] < 0.01


def test_error_of_the_cart_falls_slowly_and_is_largest_where_it_switches():
    errors = []
    for n in (16, 32, 64):
        problem = minimum.build(n, "cart")
        error = np.abs(ssn.solve(problem).require().x.reshape(n + 1, n + 1) - problem.setting.exact)
        errors.append(error.max())
        i, j = np.unravel_index(error.argmax(), error.shape)
        x1, x2 = problem.setting.line[i], problem.setting.line[j]
        assert abs(x1 + x2 * abs(x2) / 2) <= 0.15
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    assert (rates > 0.15).all() and (rates < 0.6).all()


def test_value_iteration_agrees(solved):
    problem, solution = solved
    found = minimum.reference(problem, 20.0)
    assert found.converged
    assert np.abs(found.x - solution.x).max() <= 1e-10


def test_a_policy_that_leads_inwards_is_singular_and_not_taken_for_a_solution():
    """Where the start suggests no way out, full steps stop and say so; the default finds the solution all the same."""
    problem = minimum.build(32, eps=0.0)
    inwards = problem.setting.line**2 - 1.0
    full = ssn.solve(problem, start=inwards, globalization="full")
    assert not full.converged and full.outcome is ssn.Outcome.SINGULAR
    found = ssn.solve(problem, start=inwards)
    assert not found.converged or np.abs(found.x - problem.setting.exact).max() <= 1e-8


def test_one_ended_start_takes_a_step_a_cell_and_no_more():
    """From zero all ties say "left": the point of no return moves by one cell a step."""
    problem = minimum.build(32, eps=0.0)
    solution = ssn.solve(problem, start=np.zeros(33), globalization="full").require()
    assert 16 <= len(solution.steps) <= 33
    again = ssn.solve(problem, start=np.zeros(33), globalization="full")
    assert (again.x == solution.x).all() and again.steps == solution.steps


@pytest.mark.parametrize("case", ["corridor", "cart"])
def test_nested_meshes_take_few_steps(case):
    coarse, fine = minimum.build(32, case), minimum.build(64, case)
    start = minimum.transfer(coarse, fine)(ssn.solve(coarse).require().x)
    assert len(ssn.solve(fine, start=start).require().steps) <= 6


@pytest.mark.parametrize(
    ("parameters", "words"),
    [({"n": 7}, "n must be"), ({"n": 2}, "n must be"), ({"eps": -1.0}, "eps"), ({"case": "x"}, "case")],
)
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        minimum.build(**parameters)


def test_picture(solved):
    buffer = io.BytesIO()
    minimum.picture(*solved).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
