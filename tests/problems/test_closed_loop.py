"""Policy iteration for a discounted control problem: exact values, monotone steps, thresholds of the feedback."""

from __future__ import annotations

import io
from itertools import pairwise

import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

loop = load("closed_loop")


@pytest.fixture(scope="module", params=[2.0, 1.0, 0.5])
def solved(request):
    problem = loop.build(32, request.param)
    return problem, ssn.solve(problem).require()


def test_known_values_hold(solved):
    known = loop.known(*solved)
    assert len(known) == 7
    assert [check for check in known if not check["holds"]] == []


def test_known_values_hold_with_another_bound():
    problem = loop.build(32, 0.5, bound=0.5)
    assert [c for c in loop.known(problem, ssn.solve(problem)) if not c["holds"]] == []


def test_known_values_can_fail(solved, monkeypatch):
    monkeypatch.setattr(loop, "saving", lambda s, slope: np.minimum(0.0, 0.7 * s.weight + s.bound * slope))
    holds = [check["holds"] for check in loop.known(*solved)]
    assert not all(holds) and not holds[-2]


@pytest.mark.parametrize("power", [2.0, 1.0, 0.5])
def test_error_falls_with_the_mesh(power):
    errors = []
    for n in (16, 32, 64):
        problem = loop.build(n, power, case="basin", bound=1.0 if power < 2 else 2.0)
        exact = loop.exact_basin(problem.setting).ravel()
        errors.append(np.abs(ssn.solve(problem).require().x - exact).max())
    rates = np.log2(np.array(errors[:-1]) / errors[1:])
    assert (rates > 0.75).all() and (rates < 1.3).all()  # first order


def test_value_iteration_agrees(solved):
    problem, solution = solved
    found = loop.reference(problem, 20.0)
    assert found.converged
    assert np.linalg.norm(found.x - solution.x) <= min(1.01 * found.bound, 1e-7)


def test_values_fall_from_step_to_step(solved):
    """Each policy is better than the last everywhere (Howard 1960)."""
    problem, solution = solved
    iteration = ssn.Iteration(problem)
    values = []
    while not iteration.finished and len(values) < 30:
        iteration.step()
        values.append(iteration.x.copy())
    assert len(values) == len(solution.steps)
    for before, after in pairwise(values):
        assert (after <= before + 1e-12).all()


@pytest.mark.parametrize("bound", [1.0, 4.0])
def test_powers_coincide_for_the_unit_bound_only(bound):
    """For p <= 1 the least slope that moves the point is weight bound^(p - 1)."""
    values = {p: ssn.solve(loop.build(32, p, bound=bound)).require().x for p in (1.0, 0.5)}
    apart = np.abs(values[1.0] - values[0.5]).max()
    assert apart <= 1e-12 if bound == 1.0 else apart > 1e-2
    cheaper = ssn.solve(loop.build(32, 1.0, weight=0.2 / np.sqrt(bound), bound=bound)).require().x
    assert np.abs(cheaper - values[0.5]).max() <= 1e-12


def test_sparse_feedback_is_at_rest_near_the_centre():
    resting = {}
    for power in (2.0, 1.0):
        problem = loop.build(32, power, case="basin", bound=2.0)
        u = loop.feedback(problem, ssn.solve(problem).require().x)
        resting[power] = np.mean((u == 0).all(axis=0))
    assert resting[2.0] <= 2 / 33**2 and resting[1.0] == pytest.approx(0.2**2, abs=0.01)


@pytest.mark.parametrize("n", [10, 40, 100])
def test_two_actions_take_at_most_one_step_more_than_unknowns(n):
    """Stop or go on: at most N + 1 policy iterations (Bokanowski, Maroso, Zidani 2009, theorem from memory)."""
    h = 2.0 / (n + 1)
    x = np.linspace(-1, 1, n + 2)[1:-1]
    ones = np.ones(n - 1)
    minus = sp.csr_array(sp.diags_array([-ones, 2 * np.ones(n), -ones], offsets=[-1, 0, 1])) / h**2
    psi = 0.5 - 2.0 * x**2 + 0.2 * np.cos(9 * x)
    for start in (psi, np.zeros(n), np.full(n, 3.0)):
        solution = ssn.solve(
            lambda v: np.minimum(minus @ v + 1.0, v - psi), start=start, globalization="full", max_steps=n + 1
        )
        assert solution.converged and len(solution.steps) <= n + 1
        assert (solution.x >= psi - 1e-10).all() and np.count_nonzero(solution.x <= psi + 1e-10) > 0


def test_transfer_carries_bilinear_values_exactly():
    coarse, fine = loop.build(8), loop.build(32)
    plane = (1.0 + coarse.setting.x1 - 2.0 * coarse.setting.x2).ravel()
    expected = (1.0 + fine.setting.x1 - 2.0 * fine.setting.x2).ravel()
    assert np.abs(loop.transfer(coarse, fine)(plane) - expected).max() <= 1e-12


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"n": 7}, "n must be"), ({"n": 2}, "n must be"), ({"power": 1.5}, "power"), ({"weight": 0.0}, "weight"),
        ({"bound": np.inf}, "bound"), ({"discount": -1.0}, "discount"), ({"case": "x"}, "case"),
    ],
)  # fmt: skip
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        loop.build(**parameters)


def test_picture_and_summary(solved):
    buffer = io.BytesIO()
    loop.picture(*solved).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert "of the square" in dict(loop.summary(*solved))["at rest"]
