"""Heaters under a greenhouse bench: physics, mesh, optimality and an independent solver."""

from __future__ import annotations

import io

import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load
from .quadratic_program import interior_point

frost_bench = load("frost_bench")

BENCH_AREA = 4.8 * 1.8 - 0.8 * 0.6
BAY_AREA = 1.2 * 1.4 + 1.6 * 0.8 + 1.2 * 1.4
PLANT_AREA = 1.8 * 0.4 + 0.4 * 0.4 + 0.4 * 0.2 + 1.2 * 0.6


@pytest.fixture(scope="module")
def demo():
    problem = frost_bench.build(64)
    return problem, ssn.solve(problem).require()


@pytest.mark.parametrize("n", [8, 20, 24, 32, 50, 77, 128])
def test_mesh_is_sound_and_resolves_the_outlines(n):
    problem = frost_bench.build(n)
    data = problem.mesh_data
    assert frost_bench.smallest_angle(data.mesh) > 15
    assert data.area.sum() == pytest.approx(BENCH_AREA, rel=1e-12)
    assert data.area[data.in_bay].sum() == pytest.approx(BAY_AREA, rel=1e-12)
    assert problem.weights.sum() == pytest.approx(BAY_AREA, rel=1e-12)
    assert problem.observations.vector.sum() == pytest.approx(PLANT_AREA, rel=1e-12)
    assert np.unique(data.mesh.t).size == data.mesh.nvertices
    # what the discrete maximum principle needs
    matrix = problem.state.matrix
    off_diagonal = matrix - sp.diags_array(matrix.diagonal())
    assert off_diagonal.max() <= 1e-12


def test_surroundings_of_one_temperature_leave_the_bench_at_it():
    problem = frost_bench.build(32, air=3.0, outside=3.0)
    assert np.abs(problem.offset() - 3.0).max() <= 1e-11


def test_losses_are_those_of_the_statement():
    data = frost_bench.build(32).mesh_data
    rim = 4.8 + 2 * 1.8 + 2 * 0.6
    assert data.losses.sum() == pytest.approx(6.0 * BENCH_AREA + 0.5 * rim + 1.5 * 4.8, rel=1e-12)
    # a third of each triangle for each of its corners
    share = np.bincount(data.mesh.t.ravel(), weights=np.tile(data.area / 3, 3))
    inner = np.setdiff1d(np.arange(share.size), data.mesh.boundary_nodes())
    assert data.losses[inner] == pytest.approx(6.0 * share[inner], rel=1e-12)


def test_temperature_far_from_the_ends_is_that_of_a_fin():
    """Without heaters, two spread lengths and more from sides and notch, T depends on y alone: a fin in cold air."""
    air, outside, conductance, loss, rim, sill = 2.0, -8.0, 0.48, 6.0, 0.5, 1.5
    spread, chill, width = np.sqrt(conductance / loss), 5.0, 0.3

    def parts(y):
        """Columns exp(-y / spread), exp((y - 1.8) / spread) and the part due to the draught, with slopes."""
        draught = -chill / (1 - (spread / width) ** 2) * np.exp(-y / width)
        values = np.array([np.exp(-y / spread), np.exp((y - 1.8) / spread), draught])
        slopes = np.array([-values[0] / spread, values[1] / spread, -draught / width])
        return values, slopes

    # k d T' = sill (T - outside) at y = 0, -k d T' = rim (T - T_air) at y = 1.8, T = air + parts
    (v0, s0), (v1, s1) = parts(0.0), parts(1.8)
    left, right = conductance * s0 - sill * v0, conductance * s1 + rim * v1
    known = [sill * (air - outside) - left[2], -right[2] - rim * chill * np.exp(-1.8 / width)]
    amplitudes = np.linalg.solve(np.array([left[:2], right[:2]]), known)
    problem = frost_bench.build(128)
    mesh = problem.mesh_data.mesh
    line = np.flatnonzero(np.abs(mesh.p[0] - 1.1) < 0.08)
    values, _ = parts(mesh.p[1, line])
    expected = air + amplitudes @ values[:2] + values[2]
    assert line.size > 100
    assert expected.max() - expected.min() > 5
    assert np.abs(problem.offset()[line] - expected).max() < 0.05


@pytest.mark.parametrize(
    "parameters",
    [
        {},
        {"n": 32},
        {"price": 0.0},
        {"price": 0.3, "control_weight": 1e-5},
        {"price": 0.3, "control_weight": 1e-6},
        {"set_point": -20.0},
        {"max_power": np.inf},
        {"outside": 2.0},
    ],
)
def test_known_values_hold(parameters):
    problem = frost_bench.build(**{"n": 48} | parameters)
    known = frost_bench.known(problem, ssn.solve(problem).require())
    assert len(known) == 4
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_control(demo):
    problem, _ = demo
    other = frost_bench.build(64, price=0.0, outside=-5.0)
    known = frost_bench.known(problem, ssn.solve(other).require())
    assert [check["holds"] for check in known][:3] == [False, True, False]


def test_heaters_are_sparse_bounded_and_between(demo):
    problem, solution = demo
    area, power = problem.weights, solution.x
    assert power.min() == 0.0
    assert power.max() == 150.0
    parts = [area[power == 0].sum(), area[(power > 0) & (power < 150)].sum(), area[power == 150].sum()]
    assert min(parts) > 0.05 * BAY_AREA
    places, place = frost_bench.heater_places(problem, solution)
    assert 2 <= places <= 8
    assert np.count_nonzero(place >= 0) == np.count_nonzero(power)
    without = problem.offset()[problem.mesh_data.planted]
    with_heaters = solution.state[problem.mesh_data.planted]
    assert without.min() < 0 < 3 < with_heaters.min()
    assert with_heaters.max() < 12


def test_power_follows_from_worth_and_price():
    problem = frost_bench.build(48, price=0.07, control_weight=3e-4, max_power=130.0)
    solution = ssn.solve(problem).require()
    data = problem.mesh_data
    # worth of a watt: mean of the adjoint over the triangle
    worth = solution.adjoint[data.mesh.t[:, data.heated]].mean(axis=0)
    assert np.abs(solution.x - np.clip((worth - 0.07) / 3e-4, 0.0, 130.0)).max() <= 1e-5


def test_a_higher_price_buys_less_power():
    powers = []
    for price in (0.0, 0.05, 0.2, 0.6, 1.0):
        problem = frost_bench.build(32, price=price)
        powers.append(float(problem.weights @ ssn.solve(problem).require().x))
    assert powers == sorted(powers, reverse=True)
    assert powers[0] > 200
    assert powers[-1] == 0.0


@pytest.mark.parametrize("parameters", [{}, {"price": 0.3}, {"control_weight": 1e-5}, {"price": 0.0}])
def test_agrees_with_an_interior_point_solver(parameters):
    problem = frost_bench.build(frost_bench.SIZES[0], **parameters)
    solution = ssn.solve(problem).require()
    objective, power, temperature = interior_point(problem)
    assert solution.objective == pytest.approx(objective, rel=1e-9)
    assert problem.controls.norm(solution.x - power) <= 1e-6 * problem.controls.norm(solution.x)
    assert np.abs(solution.state - temperature).max() <= 1e-5


@pytest.mark.parametrize("n", [64, 128])
def test_plain_steps_cycle_where_the_default_converges(n):
    problem = frost_bench.build(n)
    assert not ssn.solve(problem, globalization="full", max_steps=100).converged
    assert len(ssn.solve(problem).require().steps) <= 12


def test_transfer_carries_the_powers(demo):
    coarse, solution = demo
    fine = frost_bench.build(100)
    carry = frost_bench.transfer(coarse, fine)
    assert (carry(np.full(coarse.unknowns, 7.0)) == 7.0).all()
    power = carry(solution.x)
    assert fine.weights @ power == pytest.approx(coarse.weights @ solution.x, rel=0.01)
    started, cold = ssn.solve(fine, start=power).require(), ssn.solve(fine).require()
    assert len(started.steps) < len(cold.steps)
    assert fine.controls.norm(started.x - cold.x) <= 1e-8 * fine.controls.norm(cold.x)


def test_objective_settles_under_refinement():
    values = [ssn.solve(frost_bench.build(n)).require().objective for n in (32, 64, 128)]
    assert abs(values[2] - values[1]) < 0.5 * abs(values[1] - values[0])
    assert values[2] == pytest.approx(values[1], rel=0.03)


def test_summary_speaks_of_the_solution(demo):
    problem, solution = demo
    lines = dict(frost_bench.summary(problem, solution))
    installed = problem.weights @ solution.x
    assert lines["installed power"].startswith(f"{installed:.0f} W (")
    assert lines["heater places"].startswith(f"{frost_bench.heater_places(problem, solution)[0]}, together")
    assert "wanted 10 degC" in lines["under the plants"]


@pytest.mark.parametrize(
    "parameters", [{}, {"price": 2.0}, {"max_power": np.inf}, {"air": 20.0, "outside": 15.0}]
)
def test_picture_and_summary_of_extreme_cases(parameters):
    problem = frost_bench.build(24, **parameters)
    solution = ssn.solve(problem).require()
    assert all(isinstance(text, str) for line in frost_bench.summary(problem, solution) for text in line)
    buffer = io.BytesIO()
    frost_bench.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 7}, "n must"),
        ({"n": 32.0}, "n must"),
        ({"price": -1.0}, "beta must"),
        ({"control_weight": 0.0}, "control_weight must"),
        ({"control_weight": np.nan}, "control_weight must"),
        ({"max_power": 0.0}, "max_power must"),
        ({"set_point": np.nan}, "set_point must"),
        ({"air": np.inf}, "air must"),
        ({"outside": 5.0}, "outside"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        frost_bench.build(**{"n": 16} | parameters)
