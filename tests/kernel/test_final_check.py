"""The check at the returned point, and the least-squares form behind complementarity, each on its own."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import ssn
from ssn.equations.complementarity import FischerBurmeister
from ssn.finish import finish
from ssn.newton import Limits, LoopResult
from ssn.prepare import prepare
from ssn.status import Outcome
from tests.kernel.examples import Contact, control, cyclic


@pytest.mark.parametrize(
    ("problem", "start"),
    [
        (Contact(), np.full(40, 0.3)),
        (control(), np.full(144, 3.0)),
        (cyclic(3, 0.5), np.full(3, 2.0)),
        (
            ssn.CompositeProblem(smooth=ssn.Quadratic(np.eye(2), np.ones(2)), cost=ssn.Bounds()),
            np.full(2, 5.0),
        ),
    ],
    ids=["equation", "control", "complementarity", "composite"],
)
def test_an_iteration_that_claims_too_much_is_found_out(problem, start):
    """The loop says converged, at a point that is no root: the fresh evaluation decides."""
    plan = prepare(problem, start)
    at = replace(plan.equation.evaluate(plan.start), accuracy=0.0)
    claimed = LoopResult(at, at, Outcome.CONVERGED, "", start_norm=at.norm)
    solution = finish(plan, claimed, Limits(), None)
    assert solution.outcome is Outcome.INACCURATE
    assert not solution.converged
    assert solution.accuracy > 1e-3


@pytest.mark.parametrize("bounds", [(0.0, np.inf), (-np.inf, 1.0), (-0.5, 0.7), (-np.inf, np.inf)])
def test_fischer_burmeister_derivative_is_the_difference_quotient(bounds):
    rng = np.random.default_rng(3)
    matrix = rng.standard_normal((5, 5)) + 5 * np.eye(5)
    problem = ssn.ComplementarityProblem(ssn.AffineMap(matrix, rng.standard_normal(5)), *bounds)
    form = FischerBurmeister(prepare(problem, np.zeros(5)).equation)
    for _ in range(10):
        x, d = rng.standard_normal(5), rng.standard_normal(5)
        quotient = (form.evaluate(x + 1e-6 * d).residual - form.evaluate(x - 1e-6 * d).residual) / 2e-6
        np.testing.assert_allclose(form.derivative(x) @ d, quotient, atol=1e-7, rtol=1e-7)


def test_fischer_burmeister_has_the_roots_of_the_problem():
    rng = np.random.default_rng(4)
    root = rng.standard_normal((6, 6))
    problem = ssn.ComplementarityProblem(
        ssn.AffineMap(root @ root.T + np.eye(6), rng.standard_normal(6)), -0.1, 0.2
    )
    x = ssn.solve(problem).require().x
    form = FischerBurmeister(prepare(problem, x).equation)
    assert np.abs(form.evaluate(x).residual).max() < 1e-12
    assert np.abs(form.evaluate(x + 0.05).residual).max() > 1e-3


def test_a_plain_function_serves_as_the_map_of_complementarity():
    """Kojima and Shindo (J. Oper. Res. Soc. Japan 29, 1986), written as a function."""

    def force(x):
        a, b, c, d = x[0], x[1], x[2], x[3]
        return np.stack(
            [
                3 * a**2 + 2 * a * b + 2 * b**2 + c + 3 * d - 6,
                2 * a**2 + a + b**2 + 10 * c + 2 * d - 2,
                3 * a**2 + a * b + 2 * b**2 + 2 * c + 9 * d - 9,
                a**2 + 3 * b**2 + 2 * c + 3 * d - 3,
            ]
        )

    solution = ssn.solve(
        ssn.ComplementarityProblem(force, 0.0, size=4), np.array([1.0, 0.0, 1.0, 0.0])
    ).require()
    known = [np.array([np.sqrt(6) / 2, 0, 0, 0.5]), np.array([1.0, 0, 3, 0])]
    assert min(np.abs(solution.x - k).max() for k in known) < 1e-7
