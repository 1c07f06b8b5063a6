"""Leaks of a tunnel: the model, a closed form, the weight, and what the second stage repairs."""

from __future__ import annotations

import dataclasses
import io

import numpy as np
import pytest

import ssn

from .loading import load

tunnel_leak = load("tunnel_leak")


@pytest.fixture(scope="module")
def solved():
    problem = tunnel_leak.build()
    return problem, ssn.solve(problem).require()


def test_known_values_hold(solved):
    for problem, solution in (solved, _solved(16, alpha=0.3, beta=1.0)):
        known = tunnel_leak.known(problem, solution)
        assert len(known) == (4 if problem is solved[0] else 3)
        assert [check for check in known if not check["holds"]] == []


def _solved(*arguments, **parameters):
    problem = tunnel_leak.build(*arguments, **parameters)
    return problem, ssn.solve(problem).require()


def test_known_values_reject_another_answer(solved):
    problem, solution = solved
    # rates of a smaller weight, where this one allows none
    _, wrong = _solved(beta=0.1)
    assert [check["holds"] for check in tunnel_leak.known(problem, wrong)] == [False, False, True, True]
    doubled = dataclasses.replace(solution, state=2.0 * solution.state)
    assert not tunnel_leak.known(problem, doubled)[0]["holds"]


def test_plug_flow_notices_another_speed(monkeypatch):
    computed, exact = tunnel_leak.plug_flow(24)
    assert computed == pytest.approx(exact, rel=1e-9)
    monkeypatch.setattr(tunnel_leak, "SPREAD_X", 5.0)
    assert tunnel_leak.plug_flow(24)[0] == pytest.approx(tunnel_leak.plug_flow(24)[1], rel=1e-9)
    monkeypatch.setattr(tunnel_leak, "SPEED", 1.1)
    assert tunnel_leak.plug_flow(24)[0] == pytest.approx(tunnel_leak.plug_flow(24)[1], rel=1e-9)
    monkeypatch.setattr(tunnel_leak, "grad", lambda c: (1.01 * c.grad[0], c.grad[1]))
    computed, exact = tunnel_leak.plug_flow(24)
    assert computed != pytest.approx(exact, rel=1e-3)


def test_concentration_drifts_and_spreads_as_a_gaussian():
    """A puff in plug flow: mean place v t, variance 2 K_x t, amount kept, long before it meets the ends."""
    x, z, state, length = tunnel_leak.tunnel(100, 4, 50, lambda heights: np.full_like(heights, 1.0))
    start = np.exp(-((x - 50.0) ** 2) / (2 * 8.0**2))
    levels = state.solve(state.source(initial=np.repeat(start, z.size))).reshape(50, x.size, z.size)
    t = 48.0
    profile = levels[5, :, 2]
    amount = length @ profile
    mean = length @ (x * profile) / amount
    variance = length @ ((x - mean) ** 2 * profile) / amount
    assert amount == pytest.approx(length @ start, rel=1e-3)
    assert mean == pytest.approx(50.0 + t, abs=0.3)
    assert variance == pytest.approx(64.0 + 2 * tunnel_leak.SPREAD_X * t, rel=0.01)


def test_readings_are_made_on_another_mesh_and_repeat():
    first, again, other = (tunnel_leak.build(20, seed=seed) for seed in (1, 1, 2))
    assert (first.target == again.target).all() and (first.target != other.target).any()
    data = first.mesh_data
    assert np.std(data.readings - data.clean) == pytest.approx(data.noise, rel=0.15)
    # the model at the true leaks differs from them, by less than the noise
    rates = np.zeros(data.shape)
    for place, rate, opens, closes in tunnel_leak.LEAKS:
        node = int(np.abs(data.x - place).argmin())
        ends = np.clip(np.arange(tunnel_leak.BLOCKS + 1) * tunnel_leak.BLOCK, opens, closes)
        rates[:, node] += rate * np.diff(ends) / tunnel_leak.BLOCK / data.width[node]
    off = first.forward(rates.ravel()) - data.clean.ravel()
    assert 1e-3 * data.noise < np.sqrt(np.mean(off**2)) < 1.5 * data.noise


def test_second_stage_mends_places_and_amounts(solved):
    leaks, again = tunnel_leak.refit_leaks(*solved)
    assert len(leaks) == 2 and again.converged
    for leak, (place, rate, opens, closes) in zip(leaks, tunnel_leak.LEAKS, strict=True):
        total = rate * (closes - opens)
        assert abs(leak.place - place) < 15.0
        assert abs(leak.refitted_place - place) < 10.0
        assert abs(leak.refitted_amount / total - 1) < 0.1
        assert abs(leak.refitted_amount / total - 1) < 0.5 * abs(leak.amount / total - 1)
        assert abs(leak.opens - opens) <= 10.0 and abs(leak.closes - closes) <= 10.0
    # gas is kept: the total is right before the second stage already
    total = sum(rate * (closes - opens) for _, rate, opens, closes in tunnel_leak.LEAKS)
    assert tunnel_leak.amount(solved[0], solved[1].x).sum() == pytest.approx(total, rel=0.03)


def test_weight_by_discrepancy(solved):
    path, point = tunnel_leak.weight_by_discrepancy(solved[0], np.array([0.1, 0.01]))
    assert path.converged and [p.misfit <= 0.5 for p in path.points] == [False, True]
    assert point is path.points[1]
    assert point.misfit == pytest.approx(tunnel_leak.misfit(solved[0], point.solution), rel=1e-6)


def test_no_leak_is_a_case_of_its_own():
    problem, solution = _solved(12, beta=1000.0)
    assert (solution.x == 0).all()
    assert tunnel_leak.refit_leaks(problem, solution)[0] == []
    assert dict(tunnel_leak.summary(problem, solution))["leaks found"].startswith("0;")
    _draw(problem, solution)


def test_agrees_with_the_reference():
    problem, solution = _solved(12, alpha=3.0, beta=1.0)
    reference = ssn.proximal_gradient(problem, tolerance=1e-4)
    assert reference.converged
    assert problem.controls.norm(solution.x - reference.x) <= 1e-4 * problem.controls.norm(solution.x)


def test_transfer_is_linear_along_the_floor():
    coarse, fine = tunnel_leak.build(16), tunnel_leak.build(32)
    carried = tunnel_leak.transfer(coarse, fine)(np.tile(coarse.mesh_data.x, tunnel_leak.BLOCKS))
    expected = np.maximum(fine.mesh_data.x, coarse.mesh_data.x[0])
    assert np.abs(carried.reshape(fine.mesh_data.shape) - expected).max() < 1e-10


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 11}, "n must be a whole number of at least 12"),
        ({"steps": 75}, "steps must be a multiple of the 50 readings"),
        ({"seed": -1}, "seed must be"),
        ({"alpha": 0.0}, "alpha must"),
        ({"noise": np.nan}, "noise must"),
        ({"beta": -1.0}, "beta must"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        tunnel_leak.build(**parameters)


def test_picture_is_drawn(solved):
    _draw(*solved)


def _draw(problem, solution):
    buffer = io.BytesIO()
    tunnel_leak.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
