"""A pump with three and five speeds: published staircase, an independent assembly, the share on a setting."""

from __future__ import annotations

import io
from itertools import pairwise

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

pump_settings = load("pump_settings")

CASES = [(speeds, set_point) for speeds in (3, 5) for set_point in ("schedule", "reachable")]


def independent_objective(n, speeds, set_point, alpha=1e-2, points=24):
    """The least objective by Clarabel: state, speed and an epigraph variable a step, assembled without ssn."""
    h, tau = 1 / (points - 1), 1 / n
    mass = h * np.concatenate([[0.5], np.ones(points - 2), [0.5]])
    flow = np.zeros((points, points))
    for k in range(points - 1):  # element by element
        flow[k : k + 2, k : k + 2] += 4.0 / h * np.array([[1.0, -1.0], [-1.0, 1.0]])
    flow[-1, -1] += 4.0  # the weir
    inflow = np.zeros(points)
    inflow[0] = 4.0
    look = np.interp(0.6 * (points - 1), np.arange(points), np.arange(points))
    gauge = np.maximum(0.0, 1.0 - np.abs(np.arange(points) - look))
    step = np.diag(mass) + tau * flow
    evolve = sp.kron(sp.eye_array(n), step) - sp.kron(sp.eye_array(n, k=-1), np.diag(mass))
    drive = tau * sp.kron(sp.eye_array(n), inflow[:, None])
    measure = sp.kron(sp.eye_array(n), gauge[None])
    times = np.arange(1, n + 1) / n
    if set_point == "schedule":
        z = np.where(
            times <= 0.25,
            0.4,
            np.where(times <= 0.5, 0.9, np.where(times <= 0.7, 0.2, np.where(times <= 0.9, 0.7, 0.4))),
        )
    else:
        wish = 0.5 + 0.45 * np.sin(4 * np.pi * times) * np.cos(2 * np.pi * times)
        y, z = np.zeros(points), np.zeros(n)
        for k in range(n):
            y = np.linalg.solve(step, mass * y + tau * inflow * wish[k])
            z[k] = gauge @ y
    settings = np.linspace(0, 1, speeds)
    size = n * points
    p = sp.block_diag([measure.T @ measure, sp.csr_array((2 * n, 2 * n))], format="csc")
    q = np.concatenate([-(measure.T @ z), np.zeros(n), np.ones(n)])
    eye, empty = sp.eye_array(n), sp.csr_array((n, size))
    rows, right = [sp.hstack([evolve, -drive, sp.csr_array((size, n))])], [np.zeros(size)]
    for sign, end in ((-1.0, 0.0), (1.0, 1.0)):
        rows.append(sp.hstack([empty, sign * eye, sp.csr_array((n, n))]))
        right.append(np.full(n, sign * end))
    for low, high in pairwise(settings):  # chords of alpha/2 u^2
        rows.append(sp.hstack([empty, 0.5 * alpha * (low + high) * eye, -eye]))
        right.append(np.full(n, 0.5 * alpha * low * high))
    a, b = sp.vstack(rows, format="csc"), np.concatenate(right)
    options = clarabel.DefaultSettings()
    options.verbose = False
    options.tol_gap_abs = options.tol_gap_rel = options.tol_feas = 1e-12
    cones = [clarabel.ZeroConeT(size), clarabel.NonnegativeConeT(b.size - size)]
    found = clarabel.DefaultSolver(sp.triu(p, format="csc"), q, a, b, cones, options).solve()
    assert str(found.status) in ("Solved", "AlmostSolved", "InsufficientProgress")
    return tau * (0.5 * (found.obj_val + found.obj_val_dual) + 0.5 * z @ z)


@pytest.mark.parametrize(("speeds", "set_point"), CASES)
def test_reference_objectives_are_those_of_an_independent_assembly(speeds, set_point):
    expected = independent_objective(48, speeds, set_point)
    assert pump_settings.REFERENCE_OBJECTIVE[speeds, set_point] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("speeds", "set_point"), CASES)
def test_known_values_hold(speeds, set_point):
    problem = pump_settings.build(48, speeds, set_point)
    solution = ssn.solve(problem).require()
    known = pump_settings.known(problem, solution)
    assert len(known) == 5
    assert [check for check in known if not check["holds"]] == []
    assert solution.accuracy <= 1e-12 and len(solution.steps) <= 35


def test_known_values_reject_another_control():
    problem = pump_settings.build(48)
    solution = ssn.solve(pump_settings.build(48, alpha=1.2e-2)).require()
    assert [check["holds"] for check in pump_settings.known(problem, solution)] == [
        False,
        False,
        True,
        True,
        False,
    ]


def test_between_settings_only_where_the_set_point_can_be_met():
    """Out of reach the instants between settings are few, fewer the shorter the steps; within reach they stay."""
    off = {}
    for set_point in ("schedule", "reachable"):
        for n in (48, 96, 192):
            problem = pump_settings.build(n, set_point=set_point)
            solution = ssn.solve(problem).require()
            off[set_point, n] = problem.cost.share_between(solution.x)
            assert len(solution.steps) <= 60
    assert off["schedule", 48] > off["schedule", 96] > off["schedule", 192]
    assert off["schedule", 192] <= 0.02
    assert off["reachable", 192] >= 0.6
    assert abs(off["reachable", 192] - off["reachable", 96]) <= 0.06


def test_share_on_a_setting_rises_along_the_path():
    problem = pump_settings.build(48)
    path = pump_settings.shares(problem)
    assert [gamma for gamma, _, _ in path] == list(pump_settings.GAMMAS)
    shares = [share for _, share, _ in path]
    assert shares == sorted(shares)
    assert shares[0] < 0.5 and shares[-1] > 0.9


def test_transfer_keeps_the_speed_of_an_instant():
    coarse, fine = pump_settings.build(8), pump_settings.build(24)
    carried = pump_settings.transfer(coarse, fine)(np.arange(8.0))
    np.testing.assert_array_equal(carried, np.repeat(np.arange(8.0), 3))


def test_picture_and_summary():
    problem = pump_settings.build(24, 5)
    solution = ssn.solve(problem).require()
    buffer = io.BytesIO()
    pump_settings.picture(problem, solution).savefig(buffer, format="png")
    assert len(buffer.getvalue()) > 10_000
    assert sum(what.startswith("speed ") for what, _ in pump_settings.summary(problem, solution)) == 5


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({"n": 4}, "n must be a whole number of at least 8"),
        ({"speeds": 4}, "speeds must be 3 or 5"),
        ({"set_point": "high"}, "set_point must be"),
        ({"alpha": 0.0}, "alpha must be positive"),
        ({"points": 2}, "points must be a whole number of at least 3"),
    ],
)
def test_bad_parameters(parameters, message):
    with pytest.raises(ssn.InputError, match=message):
        pump_settings.build(**parameters)
