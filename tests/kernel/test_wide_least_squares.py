"""Least squares with many more unknowns than rows and a loss's conjugate: the dual of a regularised fit."""

from __future__ import annotations

import numpy as np
import pytest

import ssn


def dual_of_ridge(samples, ridge, loss_of):
    """minimise ridge/2 ||w||^2 + loss(X w) by its dual; returns solution, X, and w."""
    rng = np.random.default_rng(5)
    table = np.column_stack([rng.standard_normal((samples, 5)), np.ones(samples)])
    target = table @ rng.standard_normal(6) + 0.5 * rng.standard_normal(samples)
    problem = ssn.CompositeProblem(
        smooth=ssn.LeastSquares(np.ascontiguousarray(table.T) / np.sqrt(ridge), np.zeros(6)),
        cost=ssn.ScaledCost(ssn.ConjugateCost(loss_of(target)), stretch=-1.0),
    )
    solution = ssn.solve(problem)
    return solution, table, target, table.T @ solution.x / ridge


LOSSES = [
    lambda target: ssn.HingeLoss(np.sign(target), 0.05),
    lambda target: ssn.InsensitiveLoss(0.3, target, 0.05),
    lambda target: ssn.QuantileLoss(0.8, target, 0.05),
]


@pytest.mark.parametrize("loss_of", LOSSES)
@pytest.mark.parametrize("samples", [300, 3000])  # explicit Hessian, and operator
def test_duals_of_losses_are_solved_to_rounding_with_few_products(samples, loss_of):
    solution, table, target, w = dual_of_ridge(samples, 1.0, loss_of)
    assert solution.converged
    # plain steps on singular systems took tens of thousands of products
    assert solution.work.operator_products <= 500
    loss = loss_of(target)
    value = 0.5 * float(w @ w) + loss.value(table @ w)
    dual = 0.5 * float(w @ w) + loss.conjugate_value(-solution.x)
    assert abs(value + dual) <= 1e-10 * value


@pytest.mark.parametrize("ridge", [2e-1, 2e-2, 2e-3])
def test_a_small_ridge_does_not_pass_for_converged_too_early(ridge):
    """With the step 1/L ~ ridge the natural residual is small far from the solution; the last exact step is not."""
    rng = np.random.default_rng(0)
    table = np.column_stack([rng.standard_normal((2000, 9)), np.ones(2000)])
    noise = (0.3 + np.abs(table[:, 0])) * rng.standard_normal(2000)
    target = table @ rng.standard_normal(10) + noise
    problem = ssn.CompositeProblem(
        smooth=ssn.LeastSquares(np.ascontiguousarray(table.T) / np.sqrt(ridge), np.zeros(10)),
        cost=ssn.ScaledCost(ssn.ConjugateCost(ssn.QuantileLoss(0.9, target)), stretch=-1.0),
    )
    solution = ssn.solve(problem)
    w = table.T @ solution.x / ridge
    assert solution.converged and solution.accuracy <= 1e-12
    misfit = target - table @ w
    on_plane = np.sort(np.abs(misfit))[:10]
    assert on_plane.max() <= 1e-9  # a vertex of the linear program: ten observations met exactly


@pytest.mark.parametrize("ridge", [1e-2, 1e-3])
def test_points_of_the_path_end_where_rounding_is_left(ridge):
    """Small proximal weights magnify rounding; steps that change no piece and gain nothing are not repeated."""
    solution, table, target, w = dual_of_ridge(
        1000, ridge, lambda target: ssn.QuantileLoss(0.8, target, 0.05)
    )
    assert solution.converged and solution.accuracy <= 1e-12
    assert np.sort(np.abs(target - table @ w))[5] <= 1e-9


def test_zero_misfit_with_more_free_unknowns_than_rows_is_found():
    """For an indicator the singular plain system has a solution."""
    rng = np.random.default_rng(2)
    a, b = rng.standard_normal((20, 60)), rng.standard_normal(20)
    solution = ssn.solve(
        ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=ssn.Bounds(0.0, np.inf))
    ).require()
    assert np.linalg.norm(a @ solution.x - b) <= 1e-8 * np.linalg.norm(b)
