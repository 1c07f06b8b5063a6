"""The published complementarity problems one by one; their statements are checked in tests/external."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

published = load("complementarity_set")


@pytest.mark.parametrize("name", list(published.ENTRIES))
def test_the_known_solution_is_found(name):
    problem = published.build(name)
    solution = ssn.solve(problem).require()
    checks = published.known(problem, solution)
    assert len(checks) == 2
    assert [check for check in checks if not check["holds"]] == []


@pytest.mark.parametrize(("name", "size"), [("murty", 200), ("fathi", 200), ("ahn", 500), ("cyclic", 101)])
def test_families_of_any_order(name, size):
    problem = published.build(name, size)
    assert problem.unknowns == size
    solution = ssn.solve(problem).require()
    assert all(check["holds"] for check in published.known(problem, solution))
    assert len(solution.steps) <= 10


def test_every_entry_of_the_module_is_reached_by_name():
    made = {entry.name for entry in vars(published).values() if isinstance(entry, published.Published)}
    reached = {published.build(name).published.name for name in published.ENTRIES}
    assert made <= reached


def test_known_values_reject_another_solution():
    for name in ("kojima-shindo", "nash-cournot-5", "murty", "mathiesen"):
        problem = published.build(name)
        F = ssn.SmoothMap(lambda x, p=problem: p.value(x) + 0.01, problem.derivative)
        other = ssn.ComplementarityProblem(F, problem.lower, problem.upper)
        solution = ssn.solve(other, ssn.solve(problem).x)
        assert [check["holds"] for check in published.known(problem, solution)] == [False, False]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"name": "wilson"}, "name must be one of 'kojima-shindo'"),
        ({"name": "murty", "size": 2}, "size must be 0 or"),
        ({"name": "murty", "size": 5.0}, "size must be 0 or"),
        ({"name": "gould", "size": 5}, "size=5 has no effect"),
        ({"name": "cyclic", "size": 4}, "size must be odd"),
    ],
)
def test_unusable_parameters_are_named(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        published.build(**arguments)


@pytest.mark.parametrize("name", ["billups", "mathiesen", "murty"])
def test_picture_is_drawn(name):
    problem = published.build(name)
    buffer = io.BytesIO()
    published.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")


def test_the_unit_of_account_is_fixed():
    problem = published.build("mathiesen")
    solution = ssn.solve(problem).require()
    np.testing.assert_allclose(solution.x, [3, 6, 1, 5], atol=1e-7)
    assert abs(problem.value(solution.x)[2]) < 1e-7  # the market of the fixed price clears, too
