"""Support vector machines against scikit-learn, weak duality and a case by hand."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

support = load("support_vector")
CASES = ("parts", "wear", "tumours")


@pytest.fixture(scope="module", params=CASES)
def solved(request):
    problem = support.build(400, request.param)
    return problem, ssn.solve(problem).require()


def test_known_values_hold(solved):
    known = support.known(*solved)
    assert len(known) == 3
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_penalty(solved):
    problem, _ = solved
    other = ssn.solve(support.build(400, problem.samples.case, strength=300.0)).require()
    assert [check["holds"] for check in support.known(problem, other)] == [False, False, True]


def test_unknowns_are_within_the_penalty_and_of_the_right_sign(solved):
    problem, solution = solved
    data = problem.samples
    assert np.abs(solution.x).max() <= data.penalty * (1 + 1e-12)
    if data.case != "wear":
        assert (solution.x * data.target >= -1e-12 * data.penalty).all()
    w = support.coefficients(problem, solution.x)
    error = data.target - data.table @ w
    if data.case == "wear":
        beyond = np.abs(error) > data.width * (1 + 1e-9)
    else:
        beyond = data.target * (data.table @ w) < 1 - 1e-9
    assert np.allclose(np.abs(solution.x[beyond]), data.penalty, rtol=1e-9)


@pytest.mark.parametrize("case", ["parts", "wear"])
def test_many_samples(case):
    problem = support.build(10_000, case)
    solution = ssn.solve(problem).require()
    w, other = support.coefficients(problem, solution.x), support.library(problem)
    assert np.linalg.norm(w - other) <= 1e-5 * np.linalg.norm(other)
    assert solution.work.operator_products <= 2000  # each reads the samples once


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"samples": 5}, "samples"),
        ({"case": "x"}, "case"),
        ({"strength": 0.0}, "strength"),
        ({"width": -1.0}, "width"),
    ],
)
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        support.build(**parameters)


def test_picture_and_summary(solved):
    buffer = io.BytesIO()
    support.picture(*solved).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert "on the margin" in dict(support.summary(*solved))["support vectors"]
