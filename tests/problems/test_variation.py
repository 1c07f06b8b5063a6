"""Total variation denoising and the four costs of one control problem: known values, structure, pictures."""

from __future__ import annotations

import io
import itertools

import numpy as np
import pytest

import ssn
from ssn.problem_file import load as load_file

from .loading import FOLDER, load

denoising, four = load("variation_denoising"), load("four_costs")


@pytest.mark.parametrize(
    ("parameters", "count"),
    [
        ({"n": 24}, 4),
        ({"n": 24, "isotropic": False}, 4),
        ({"n": 24, "weight": 0.4}, 4),
        ({"n": 60, "case": "step", "weight": 0.1}, 5),
        ({"n": 60, "case": "step", "weight": 0.9}, 5),
        ({"n": 24, "case": "scene", "noise": 0.1}, 3),
    ],
)
def test_denoising_known_values(parameters, count):
    problem = denoising.build(**parameters)
    known = denoising.known(problem, ssn.solve(problem).require())
    assert len(known) == count
    failing = [row["what"] for row in known if not row["holds"]]
    # the formula of the disc is for the Euclidean norm, and for a disc that has not vanished into the square
    disc = parameters.get("isotropic", True) and parameters.get("weight", 0.05) < 0.3
    assert all("disc" in what and not disc for what in failing)


def test_disc_height_converges():
    errors = []
    for n in (16, 32, 64):
        problem = denoising.build(n)
        row = denoising.known(problem, ssn.solve(problem).require())[1]
        errors.append(abs(row["computed"] - row["expected"]))
    assert errors[-1] <= 2e-3 and errors[-1] < errors[0]


def test_known_values_reject_another_weight():
    problem = denoising.build(24)
    wrong = ssn.solve(denoising.build(24, weight=0.06)).require()
    assert [row["holds"] for row in denoising.known(problem, wrong)] == [True, False, True, True]


def test_noise_goes():
    problem = denoising.build(32, case="scene", noise=0.1, weight=0.006)
    solution = ssn.solve(problem).require()
    clean = problem.mesh_data.clean
    before, after = (np.linalg.norm(u - clean) for u in (problem.mesh_data.data, solution.x))
    assert after < 0.6 * before


@pytest.mark.parametrize(("cost", "dimension"), list(itertools.product(four.COSTS, (2, 3))))
def test_four_costs_known_values(cost, dimension):
    problem = four.build(8 if dimension == 3 else 16, cost, dimension=dimension)
    known = four.known(problem, ssn.solve(problem, max_steps=200).require())
    assert len(known) == (2 if cost == "sparse" else 1)
    assert [row for row in known if not row["holds"]] == []


def test_known_values_reject_another_control():
    for cost in ("squared", "gradient", "sparse"):
        problem = four.build(12, cost)
        wrong = ssn.solve(four.build(12, cost, alpha=2e-6, beta=1e-4, theta=2e-7)).require()
        if cost == "sparse":
            wrong = ssn.solve(four.build(12, "squared")).require()
        assert not four.known(problem, wrong)[0]["holds"]


def test_each_cost_shows_its_structure():
    n = 24
    controls = {cost: ssn.solve(four.build(n, cost)).require().x for cost in four.COSTS}
    zero = {cost: np.mean(np.abs(u) <= 1e-9) for cost, u in controls.items()}
    assert zero["squared"] == zero["gradient"] == 0.0
    assert zero["sparse"] > 0.6
    steps = {cost: np.abs(four.gradient(n, 2) @ u) for cost, u in controls.items()}
    flat = {cost: np.mean(s <= 1e-6 * s.max()) for cost, s in steps.items()}
    assert flat["variation"] > 0.4 and max(flat["squared"], flat["gradient"]) < 0.2
    assert steps["gradient"].max() < 0.5 * steps["squared"].max()
    assert steps["variation"].sum() < 0.7 * steps["squared"].sum()


def test_gradient_belongs_to_the_laplacian():
    for dimension in (2, 3):
        k, h = four.gradient(5, dimension), 1.0 / 6
        assert abs(k.T @ k - four.laplacian(5, dimension)).max() <= 1e-12 / h**2


def test_transfer_is_linear_interpolation():
    coarse, fine = four.build(7, "squared"), four.build(15, "squared")
    line = np.linspace(0, 1, 9)[1:-1]
    hat = np.minimum(line, 1 - line)
    carried = four.transfer(coarse, fine)(np.outer(hat, hat).ravel()).reshape(15, 15)
    assert carried[7, 7] == pytest.approx(0.25)
    np.testing.assert_allclose(carried[1::2, 1::2], np.outer(hat, hat), atol=1e-12)


@pytest.mark.parametrize(
    ("name", "parameters"),
    [
        ("variation_denoising", {"n": 12, "case": "scene"}),
        ("variation_denoising", {"n": 12, "case": "step"}),
        ("four_costs", {"n": 6}),
        ("four_costs", {"n": 4, "cost": "sparse", "dimension": 3}),
    ],
)
def test_pictures_are_drawn(name, parameters):
    file = load_file(FOLDER / f"{name}.py")
    problem = file.build(**parameters)
    solution = ssn.solve(problem, max_steps=200)
    buffer = io.BytesIO()
    file.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert all(isinstance(text, str) for row in file.summary(problem, solution) for text in row)


@pytest.mark.parametrize(
    ("build", "parameters", "message"),
    [
        (denoising.build, {"n": 3}, "n must be a whole number"),
        (denoising.build, {"weight": -1.0}, "weight must not be negative"),
        (denoising.build, {"noise": np.nan}, "noise must not be negative"),
        (denoising.build, {"case": "cat"}, "case must be"),
        (four.build, {"n": 2.0}, "n must be a whole number"),
        (four.build, {"cost": "free"}, "cost must be one of"),
        (four.build, {"alpha": 0.0}, "alpha must be positive"),
        (four.build, {"weight": -1.0}, "weight must not be negative"),
        (four.build, {"dimension": 4}, "dimension must be 2 or 3"),
    ],
)
def test_unusable_parameters_are_named(build, parameters, message):
    with pytest.raises(ssn.InputError, match=message):
        build(**parameters)
