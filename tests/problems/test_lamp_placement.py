"""Curing lamps: identities of physics, a closed form, a general solver, mesh, and the second stage."""

from __future__ import annotations

import dataclasses
import io

import numpy as np
import pytest

import ssn

from .loading import load
from .quadratic_program import interior_point

lamp_placement = load("lamp_placement")


@pytest.mark.parametrize(
    "parameters",
    [
        {"n": 32},
        {"n": 64},
        {"n": 32, "price": 15.0, "control_weight": 0.1},
        {"n": 24, "max_irradiance": np.inf},
    ],
)
def test_known_values_hold(parameters):
    problem = lamp_placement.build(**parameters)
    known = lamp_placement.known(problem, ssn.solve(problem).require())
    assert len(known) == 5
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_answer():
    problem = lamp_placement.build(24)
    cheap = ssn.solve(lamp_placement.build(24, price=2.0))
    assert [c["holds"] for c in lamp_placement.known(problem, cheap)] == [True, True, False, True, True]
    solution = ssn.solve(problem)
    shifted = dataclasses.replace(solution, state=solution.state - 1.0)
    assert [c["holds"] for c in lamp_placement.known(problem, shifted)] == [False, False, True, True, True]


def test_light_of_an_annulus_converges_at_order_h2(monkeypatch):
    errors, widths = [], []
    for n in (20, 40, 80):
        computed, exact, h = lamp_placement.annulus_light(n)
        errors.append(abs(computed / exact - 1))
        widths.append(h)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.7 < slope < 2.4
    assert errors[-1] < 2e-4
    # a wrong surface condition is noticed by the known value
    problem = lamp_placement.build(24)
    monkeypatch.setattr(lamp_placement, "_edge_length", lambda mesh, facets: np.zeros(mesh.nvertices) + 0.1)
    assert not lamp_placement.known(problem, ssn.solve(problem))[-1]["holds"]


def test_agrees_with_an_interior_point_solver():
    problem = lamp_placement.build(24)
    solution = ssn.solve(problem).require()
    objective, control, _ = interior_point(problem)
    assert solution.objective == pytest.approx(objective, rel=1e-7)
    assert problem.controls.norm(solution.x - control) <= 1e-4 * problem.controls.norm(control)


@pytest.mark.parametrize("n", [12, 20, 33, 64])
def test_mesh_resolves_all_curves(n):
    mesh, surface = lamp_placement.casting_mesh(n)
    a, b = lamp_placement.HALF_AXES
    corner = mesh.p[:, mesh.t]
    one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    area = 0.5 * np.abs(one[0] * two[1] - one[1] * two[0])
    exact = np.pi * (a * b - lamp_placement.INSERT_RADIUS**2)
    assert area.sum() == pytest.approx(exact, rel=20.0 / n**2)
    assert np.abs((mesh.p[0, surface] / a) ** 2 + (mesh.p[1, surface] / b) ** 2 - 1).max() < 1e-6
    # one closed curve outside, one inside, and the ring's circle made of edges
    edges = mesh.boundary_facets()
    radius = np.hypot(*(mesh.p - np.array(lamp_placement.INSERT)[:, None]))
    inner = int((np.abs(radius - lamp_placement.INSERT_RADIUS) < 1e-9).sum())
    assert edges.size == surface.size + inner
    on_ring = np.abs(radius - lamp_placement.RING_RADIUS) < 1e-9
    assert on_ring[mesh.facets].all(axis=0).sum() == on_ring.sum()
    assert np.unique(mesh.t).size == mesh.nvertices


def test_steps_from_zero_do_not_grow_with_the_mesh():
    for price, alpha in ((4.0, 0.02), (4.0, 0.002), (30.0, 0.02)):
        steps = [len(ssn.solve(lamp_placement.build(n, price, alpha)).require().steps) for n in (20, 40, 80)]
        assert max(steps) <= 40
        assert steps[-1] <= steps[0] + 2


def test_second_stage_brightens_the_lamps_and_evens_the_dose():
    problem = lamp_placement.build(32)
    solution = ssn.solve(problem).require()
    stage = lamp_placement.refit_lamps(problem, solution)
    assert 2 <= len(stage.lamps) <= 6
    nodes = np.concatenate([lamp.nodes for lamp in stage.lamps])
    assert sorted(nodes) == list(np.flatnonzero(solution.x))
    for lamp in stage.lamps:
        assert lamp.refitted > lamp.sparse
        assert 0 <= lamp.even <= 15.0
        # one piece of surface: neighbours are a mesh width apart
        x = problem.mesh_data.mesh.p[:, problem.mesh_data.lit[lamp.nodes]]
        assert lamp.width == pytest.approx(problem.weights[lamp.nodes].sum())
        assert np.ptp(x, axis=1).max() <= lamp.width * 1.1
    errors = stage.errors
    assert errors["refitted"] < errors["with the price"]
    assert errors["refitted"] <= errors["one lamp a place"]
    # the amplitudes are the best ones: least squares on the lamps, written down afresh
    lit = [0 < lamp.even < 15.0 for lamp in stage.lamps]
    columns = []
    for lamp in stage.lamps:
        unit = np.zeros(problem.unknowns)
        unit[lamp.nodes] = 1.0
        columns.append(problem.forward(unit))
    A, x = np.array(columns).T, np.array([lamp.even for lamp in stage.lamps])
    mass, widths = problem.observations.vector, np.array([lamp.width for lamp in stage.lamps])
    gradient = A.T @ (mass * (A @ x - problem.target)) + problem.alpha * widths * x
    assert np.abs(gradient[lit]).max() <= 1e-6 * np.abs(A.T @ (mass * problem.target)).max()


def test_no_lamps_have_no_second_stage():
    problem = lamp_placement.build(20, price=1000.0)
    solution = ssn.solve(problem).require()
    stage = lamp_placement.refit_lamps(problem, solution)
    assert stage.lamps == () and stage.errors == {"with the price": 1.0}
    assert dict(lamp_placement.summary(problem, solution))["lamps"].startswith("0;")


def test_summary_lists_every_lamp():
    problem = lamp_placement.build(24)
    solution = ssn.solve(problem).require()
    rows = dict(lamp_placement.summary(problem, solution))
    count = len(lamp_placement.refit_lamps(problem, solution).lamps)
    assert [k for k in rows if k.startswith("lamp ")] == [f"lamp {k}" for k in range(1, count + 1)]


def test_transfer_carries_a_smooth_irradiance():
    coarse, fine = (lamp_placement.build(n) for n in (40, 80))
    angle = [lamp_placement._angle(p.mesh_data.mesh, p.mesh_data.lit) for p in (coarse, fine)]
    carried = lamp_placement.transfer(coarse, fine)(1.0 + np.cos(angle[0]))
    # beside the holder the coarse field falls to zero
    off = np.abs(angle[1] - np.pi) > 1.0
    assert np.abs(carried - 1.0 - np.cos(angle[1]))[off].max() < 5e-3


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 11}, "n must be a whole number of at least 12"),
        ({"n": 32.0}, "n must be a whole number"),
        ({"price": -1.0}, "beta must"),
        ({"control_weight": 0.0}, "control_weight must"),
        ({"max_irradiance": 0.0}, "max_irradiance must"),
        ({"wanted": np.inf}, "wanted must"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        lamp_placement.build(**parameters)


@pytest.mark.parametrize("parameters", [{"n": 24}, {"n": 16, "price": 1000.0}])
def test_picture_is_drawn(parameters):
    problem = lamp_placement.build(**parameters)
    buffer = io.BytesIO()
    lamp_placement.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
