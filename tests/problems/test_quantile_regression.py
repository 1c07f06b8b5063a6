"""Quantile regression: the linear program without a ridge, the printed median of the stack loss data, weak duality."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

quantile = load("quantile_regression")


def test_stack_loss_data_are_the_classical_ones():
    """Least squares, printed in many texts (from memory): -39.92, 0.7156, 1.2953, -0.1521."""
    rows = np.array(quantile.STACK_LOSS, dtype=float)
    table = np.column_stack([np.ones(21), rows[:, :3]])
    fitted = np.linalg.lstsq(table, rows[:, 3], rcond=None)[0]
    assert fitted == pytest.approx([-39.9197, 0.7156, 1.2953, -0.1521], abs=6e-5)


@pytest.mark.parametrize(
    "parameters",
    [
        {}, {"level": 0.5}, {"level": 0.05, "samples": 200}, {"samples": 2000, "ridge": 1e-6},
        {"case": "stack loss", "level": 0.5, "ridge": 1e-4}, {"case": "stack loss", "level": 0.75, "ridge": 1e-4},
    ],
)  # fmt: skip
def test_known_values_hold(parameters):
    problem = quantile.build(**parameters)
    known = quantile.known(problem, ssn.solve(problem).require())
    assert len(known) == 4
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_level():
    problem = quantile.build(200, level=0.8)
    known = quantile.known(problem, ssn.solve(quantile.build(200, level=0.9)).require())
    assert [check["holds"] for check in known] == [False, False, True, False]


def test_a_larger_ridge_is_not_exact():
    problem = quantile.build(200, ridge=1e-2)
    known = quantile.known(problem, ssn.solve(problem).require())
    assert known[0]["holds"] and not known[3]["holds"]


def test_many_samples():
    problem = quantile.build(20_000)
    solution = ssn.solve(problem).require()
    misfit = (
        problem.samples.target
        - problem.samples.table @ (problem.samples.table.T @ solution.x) / problem.samples.ridge
    )
    assert abs(np.mean(misfit > 0) - 0.1) <= 10 / 20_000
    assert np.count_nonzero(np.abs(misfit) < 1e-9) == 10  # a vertex of the linear program
    assert solution.work.operator_products <= 2000


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"samples": 5}, "samples"),
        ({"case": "x"}, "case"),
        ({"level": 1.0}, "level"),
        ({"ridge": 0.0}, "ridge"),
    ],
)
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        quantile.build(**parameters)


@pytest.mark.parametrize("case", ["load", "stack loss"])
def test_picture_and_summary(case):
    problem = quantile.build(300, case, ridge=1e-4)
    solution = ssn.solve(problem).require()
    buffer = io.BytesIO()
    quantile.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert "asked for 90%" in dict(quantile.summary(problem, solution))["samples not above"]
