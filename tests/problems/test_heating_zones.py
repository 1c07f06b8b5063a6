"""Heating zones: the pointwise condition, a general solver, closed forms, and what decides how often one zone is on."""

from __future__ import annotations

import dataclasses
import io

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

heating_zones = load("heating_zones")


@pytest.mark.parametrize(
    "parameters",
    [
        {},
        {"zones": 2},
        {"zones": 8},
        {"n": 8, "zones": 8, "alpha": 1e-3, "beta": 0.0},
        {"n": 8, "steps": 13, "beta": 0.4},
    ],
)
def test_known_values_hold(parameters):
    problem = heating_zones.build(**parameters)
    known = heating_zones.known(problem, ssn.solve(problem).require())
    assert len(known) == 3
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_answer():
    problem = heating_zones.build(8)
    wrong = ssn.solve(heating_zones.build(8, beta=0.004))
    assert [check["holds"] for check in heating_zones.known(problem, wrong)] == [False, True, True]
    solution = ssn.solve(problem)
    wrong = dataclasses.replace(solution, x=solution.x * 1.001)
    assert [check["holds"] for check in heating_zones.known(problem, wrong)] == [True, False, True]


def test_even_heating_converges_at_order_one(monkeypatch):
    errors = []
    for steps in (20, 40, 80):
        problem = heating_zones.build(4, steps)
        end = problem.response(np.ones(problem.unknowns)).reshape(steps, -1)[-1]
        assert np.ptp(end) < 1e-12
        errors.append(abs(end[0] - (1 - np.exp(-1.0))))
    assert 0.9 < np.log2(errors[0] / errors[1]) < 1.1 and 0.9 < np.log2(errors[1] / errors[2]) < 1.1
    monkeypatch.setattr(heating_zones, "LOSS", 0.9)
    assert not heating_zones.known(problem, ssn.solve(problem))[2]["holds"]


def _by_interior_point(problem):
    """Objective and powers by Clarabel: state y, parts p, m >= 0 of the powers, and their sums s; assembled afresh."""
    mesh = problem.mesh_data
    (steps, zones), n = mesh.shape, mesh.n
    h, tau, area = 1.0 / n, 1.0 / steps, 1.0 / zones
    K = np.zeros((n * n, n * n))
    for i in range(n):
        for j in range(n):
            for k, m in ((i + 1, j), (i, j + 1)):
                if k < n and m < n:
                    one, two = i * n + j, k * n + m
                    K[[one, two], [one, two]] += 1.0
                    K[[one, two], [two, one]] -= 1.0
    A = heating_zones.KAPPA * K + heating_zones.LOSS * h * h * np.eye(n * n)
    step, mass = h * h * np.eye(n * n) + tau * A, h * h * np.eye(n * n)
    E = sp.kron(sp.eye_array(steps), step) - sp.kron(sp.eye_array(steps, k=-1), mass)
    columns, rows = {2: (2, 1), 4: (2, 2), 8: (4, 2)}[zones]
    chi = np.zeros((n * n, zones))
    for i in range(n):
        for j in range(n):
            chi[i * n + j, int((i + 0.5) * h * columns) * rows + int((j + 0.5) * h * rows)] = h * h
    B = sp.kron(tau * sp.eye_array(steps), chi)
    points, powers = steps * n * n, steps * zones
    curvature = problem.alpha * tau * area * sp.eye_array(powers)
    # (p - m)^2, with p m = 0 at a solution
    P = sp.block_diag(
        [
            tau * h * h * sp.eye_array(points),
            curvature,
            curvature,
            mesh.parameters["beta"] * tau * sp.eye_array(steps),
        ],
        format="csc",
    )
    q = np.concatenate([-tau * h * h * problem.target, np.zeros(2 * powers + steps)])
    total = sp.kron(sp.eye_array(steps), area * np.ones((1, zones)))
    A = sp.vstack(
        [
            sp.hstack([E, -B, B, sp.csr_array((points, steps))]),
            sp.hstack([sp.csr_array((steps, points)), total, total, -sp.eye_array(steps)]),
            sp.hstack([sp.csr_array((2 * powers, points)), -sp.eye_array(2 * powers, 2 * powers + steps)]),
        ],
        format="csc",
    )  # fmt: skip
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    cones = [clarabel.ZeroConeT(points + steps), clarabel.NonnegativeConeT(2 * powers)]
    found = clarabel.DefaultSolver(
        sp.triu(P, format="csc"), q, A, np.zeros(points + steps + 2 * powers), cones, settings
    ).solve()
    assert str(found.status) in ("Solved", "AlmostSolved", "InsufficientProgress")
    x = np.asarray(found.x)
    constant = 0.5 * tau * h * h * float(problem.target @ problem.target)
    return found.obj_val + constant, x[points : points + powers] - x[points + powers : points + 2 * powers]


@pytest.mark.parametrize("zones", [2, 4, 8])
def test_agrees_with_an_interior_point_solver(zones):
    problem = heating_zones.build(8, 12, zones=zones, alpha=1e-3)
    solution = ssn.solve(problem).require()
    objective, power = _by_interior_point(problem)
    assert solution.objective == pytest.approx(objective, rel=1e-8)
    assert problem.controls.norm(solution.x - power) <= 1e-4 * problem.controls.norm(power)


@pytest.mark.parametrize("zones", [2, 4, 8])
def test_share_of_one_is_decided_by_the_size_of_s(zones):
    shares = []
    for weight, expected in heating_zones.SHARES[zones].items():
        problem = heating_zones.build(zones=zones, alpha=1e-4, beta=weight * zones)
        solution = ssn.solve(problem).require()
        shares.append(heating_zones.share_of_one(problem, solution.x))
        assert shares[-1] == pytest.approx(expected, abs=0.02)
        assert (heating_zones.zones_on(problem, solution.x) >= 1).all()
    assert shares == sorted(shares) and shares[0] < 0.35 and shares[-1] > 0.9
    # the ratio to alpha alone does not decide: 100 times smaller alpha and beta, other shares
    problem = heating_zones.build(zones=zones, alpha=1e-5, beta=0.001 * zones)
    rare = heating_zones.share_of_one(problem, ssn.solve(problem).require().x)
    assert rare < shares[1] - 0.2
    # and alpha alone hardly matters
    problem = heating_zones.build(zones=zones, alpha=1e-5, beta=0.01 * zones)
    assert heating_zones.share_of_one(problem, ssn.solve(problem).require().x) == pytest.approx(
        shares[1], abs=0.1
    )


@pytest.mark.parametrize("zones", [2, 4, 8])
def test_steps_from_zero_do_not_grow_with_the_mesh(zones):
    steps, solves = [], []
    for n in (8, 16, 24):
        solution = ssn.solve(heating_zones.build(n, zones=zones)).require()
        steps.append(len(solution.steps))
        solves.append(solution.work.state_solves)
    assert max(steps) <= 20 and steps[-1] <= steps[0] + 2
    assert max(solves) <= 200


def test_following_alpha_down_serves_where_steps_run_out():
    beta = 8e-4
    plain = ssn.solve(heating_zones.build(8, zones=8, alpha=1e-6, beta=beta))
    assert plain.outcome is ssn.Outcome.STEP_LIMIT
    path = ssn.follow(
        lambda alpha: heating_zones.build(8, zones=8, alpha=alpha, beta=beta), [1e-3, 1e-4, 1e-5, 1e-6]
    )
    assert path.converged
    assert all(check["holds"] for check in heating_zones.known(path.solution.problem, path.solution))


def test_transfer_keeps_powers_constant_on_steps():
    coarse, fine = (heating_zones.build(8, steps) for steps in (10, 20))
    power = np.arange(40.0)
    carried = heating_zones.transfer(coarse, fine)(power).reshape(20, 4)
    assert (carried == np.repeat(power.reshape(10, 4), 2, axis=0)).all()


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 10}, "n must be a multiple of 4"),
        ({"n": 8.0}, "n must be a multiple of 4"),
        ({"steps": -1}, "steps must be"),
        ({"zones": 3}, "zones must be 2, 4 or 8"),
        ({"alpha": 0.0}, "alpha must"),
        ({"beta": -1.0}, "beta must"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        heating_zones.build(**parameters)


@pytest.mark.parametrize("zones", [2, 8])
def test_picture_is_drawn(zones):
    problem = heating_zones.build(8, zones=zones)
    buffer = io.BytesIO()
    heating_zones.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
