"""The detour by a larger control weight: taken where the dual search creeps, and nowhere else."""

import pytest

import ssn
from ssn import easier_weight
from tests.problems.loading import load

sparse_elliptic = load("sparse_elliptic")


def stages(solution):
    return {step.stage for step in solution.steps if "larger" in step.stage}


@pytest.mark.parametrize("linear", ["subspace", "coupled"])
def test_it_shortens_the_way_where_the_search_creeps(linear, monkeypatch):
    problem = sparse_elliptic.build(31, 1e-8, 0.0, 30.0)
    by_detour = ssn.solve(problem, linear=linear).require()
    assert stages(by_detour)
    assert len(by_detour.steps) <= 32
    assert [step.index for step in by_detour.steps] == list(range(1, len(by_detour.steps) + 1))
    monkeypatch.setattr(easier_weight, "TRIED", 0)  # never pauses
    monkeypatch.setattr("ssn.plans.control.TINY", 0.0)
    directly = ssn.solve(sparse_elliptic.build(31, 1e-8, 0.0, 30.0), linear=linear).require()
    assert not stages(directly)
    assert len(directly.steps) > 32
    assert problem.controls.norm(directly.x - by_detour.x) <= 1e-6 * problem.controls.norm(directly.x)


@pytest.mark.parametrize("alpha", [1e-4, 1e-5, 1e-6])
def test_it_is_not_taken_where_the_way_is_short(alpha):
    assert not stages(ssn.solve(sparse_elliptic.build(40, alpha)).require())


def test_limits_and_callbacks_hold_on_it():
    problem = sparse_elliptic.build(31, 1e-8, 0.0, 30.0)
    for most in (3, 12):
        solution = ssn.solve(problem, linear="coupled", max_steps=most)
        assert solution.outcome is ssn.Outcome.STEP_LIMIT
        assert len(solution.steps) == most

    def stop_in_the_detour(record):
        if "larger" in record.stage:
            raise ssn.StopSolve("enough")

    solution = ssn.solve(problem, linear="subspace", callback=stop_in_the_detour)
    assert solution.outcome is ssn.Outcome.STOPPED
    assert "larger" in solution.steps[-1].stage
