"""Each assertion passes where it should, and fails with what was measured in its message."""

from __future__ import annotations

import numpy as np
import pytest

import ssn
from ssn.evidence.rate import RateVerdict
from ssn.testing import (
    assert_matches_reference,
    assert_mesh_independent,
    assert_newton_differentiable,
    assert_superlinear,
)
from tests.evidence import cases


def doubled(derivative):
    return lambda x: 2.0 * derivative(x)


def slope_forgotten(derivative):
    return lambda x: derivative(np.zeros_like(x))


def message(error: pytest.ExceptionInfo[AssertionError]) -> str:
    return str(error.value)


def test_right_derivatives_pass():
    names = {check.name for check in assert_newton_differentiable(cases.kinked())}
    assert "newton derivative" in names
    assert len(assert_newton_differentiable(cases.control())) > len(names)


@pytest.mark.parametrize("change", [doubled, slope_forgotten])
def test_a_wrong_derivative_fails_and_is_named(change):
    with pytest.raises(AssertionError, match="derivative checks fail") as error:
        assert_newton_differentiable(cases.kinked(change=change))
    assert "fails  newton derivative: " in message(error)
    assert "holds  newton step: " in message(error)


def test_the_place_of_the_derivative_check_is_taken():
    forgotten = cases.kinked(change=slope_forgotten)
    assert_newton_differentiable(cases.kinked(), at=np.full(20, 5.0))
    with pytest.raises(AssertionError):
        assert_newton_differentiable(forgotten, at=np.full(20, 5.0))
    with pytest.raises(ssn.InputError):
        assert_newton_differentiable(forgotten, at=np.ones((2, 2)))


def test_exact_and_superlinear_convergence_pass():
    assert assert_superlinear(cases.kinked(), least_order=2.0).converged  # exact: any order
    assert assert_superlinear(cases.powers(1.5), least_order=1.4).converged
    problem = cases.control()
    solution = ssn.solve(problem)
    assert assert_superlinear(problem, solution) is solution


def test_too_low_an_order_fails_with_the_contractions():
    with pytest.raises(AssertionError, match=r"observed order 1\.2\d is below 1\.5") as error:
        assert_superlinear(cases.powers(1.25), least_order=1.5)
    text = message(error)
    assert "delta  worst contraction" in text
    assert "1e-06" in text
    assert "outcome: converged after" in text
    assert "contractions of the run: " in text
    assert "accuracy  length" in text  # the history


def test_linear_convergence_fails():
    with pytest.raises(AssertionError, match="rate is 'linear', not superlinear") as error:
        assert_superlinear(cases.fixed_slope())
    assert "3.0e-01" in message(error)  # the contraction it was built with


def test_an_undecided_rate_is_not_a_pass(monkeypatch):
    undecided = RateVerdict(
        "undecided", None, ((1e-1, 1e-3),), None, 1e-2, "rounding leaves too little to see"
    )
    monkeypatch.setattr("ssn.testing.rate", lambda *_, **__: undecided)
    with pytest.raises(AssertionError, match="'undecided'") as error:
        assert_superlinear(cases.kinked())
    assert "rounding leaves too little to see" in message(error)


def test_no_root_fails_with_outcome_and_advice():
    rootless = cases.Given(lambda x: x**2 + 1.0, lambda x: np.diag(2.0 * x), np.ones(3))
    with pytest.raises(AssertionError, match="not solved") as error:
        assert_superlinear(rootless)
    outcome = ssn.solve(rootless).outcome
    assert f"outcome: {outcome.value}" in message(error)
    assert outcome.advice in message(error)
    with pytest.raises(AssertionError, match="not solved"):
        assert_matches_reference(rootless)


@pytest.mark.parametrize(
    "build", [cases.control, cases.least_squares, cases.obstacle, cases.linear_complementarity, cases.kinked]
)
def test_independent_methods_agree(build):
    assert assert_matches_reference(build()).converged


def test_disagreement_fails_with_a_table_of_methods():
    problem = cases.control(alpha=1e-2)
    wrong = ssn.solve(cases.control(alpha=2e-2))
    with pytest.raises(AssertionError, match="agreement fails: proximal gradient") as error:
        assert_matches_reference(problem, solution=wrong)
    text = message(error)
    assert "semismooth Newton" in text
    assert "proven to" in text
    assert "contractions of the run: " in text


def test_a_reference_without_time_is_undecided_and_not_a_pass():
    with pytest.raises(AssertionError, match="agreement undecided: proximal gradient") as error:
        assert_matches_reference(cases.control(alpha=1e-7), budget=0.0)
    assert "budget used up" in message(error)


def test_methods_and_values_of_the_user_are_judged():
    problem = cases.control()

    def broken(problem):
        raise ValueError("no licence")

    with pytest.raises(AssertionError, match="method broken raised ValueError: no licence"):
        assert_matches_reference(problem, methods=[broken])

    def known(problem, solution):
        size = float(np.abs(solution.x).max())
        return [dict(what="largest control", expected=99.0, computed=size, tolerance=0.1, source="made up")]

    with pytest.raises(AssertionError, match="known values: largest control: expected 99") as error:
        assert_matches_reference(problem, known=known)
    assert "fails  largest control" in message(error)
    assert_matches_reference(problem, methods={"again": lambda p: ssn.solve(p).x})


def test_mesh_independence():
    study = assert_mesh_independent(cases.control, [8, 16, 32], parameters={"alpha": 1e-3})
    assert [row.n for row in study.rows] == [8, 16, 32]


def test_steps_that_grow_with_the_mesh_fail_with_a_row_a_mesh():
    def harder(n):
        """x^n = 1 from 3: about n log 3 steps."""
        return cases.Given(lambda x: x**n - 1.0, lambda x: np.diag(n * x ** (n - 1.0)), [3.0])

    with pytest.raises(AssertionError, match="steps grow") as error:
        assert_mesh_independent(harder, [2, 8, 16])
    text = message(error)
    assert "harder" in text
    assert all(f"\n{n:>6}" in text for n in (2, 8, 16))


def test_values_on_a_mesh_count():
    def known(problem, solution):
        return [dict(what="size", expected=64, computed=solution.x.size, tolerance=0, source="made up")]

    with pytest.raises(AssertionError, match="n = 16: size: expected 64, computed 256"):
        assert_mesh_independent(cases.control, [8, 16], known=known)


def test_arguments_without_effect_are_refused():
    problem = cases.control()
    solution = ssn.solve(problem)
    start = np.zeros(problem.unknowns)
    for refused in (
        lambda: assert_superlinear(problem, solution, start=start),
        lambda: assert_superlinear(problem, solution, least_order=1.0),
        lambda: assert_matches_reference(problem, solution=solution, start=start),
        lambda: assert_matches_reference(problem, agreement_tolerance=0.1),
        lambda: assert_mesh_independent(cases.control, [8]),
    ):
        with pytest.raises(ssn.InputError):
            refused()
