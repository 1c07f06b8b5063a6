"""Several nonsmooth terms with linear operators."""

from __future__ import annotations

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st
from scipy.sparse.linalg import aslinearoperator

import ssn
from ssn.status import Outcome


def differences(n):
    return sp.csr_array(sp.diags_array([-np.ones(n - 1), np.ones(n - 1)], offsets=[0, 1], shape=(n - 1, n)))


def denoising(y, weight, operator=None):
    y = np.asarray(y, dtype=float)
    k = differences(y.size) if operator is None else operator
    return ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(y.size), y), terms=[ssn.Term(ssn.SparseCost(weight), k)]
    )


def grid_differences(n):
    d, one = differences(n), sp.eye_array(n)
    return sp.csr_array(sp.vstack([sp.kron(one, d), sp.kron(d, one)]))


@pytest.mark.parametrize(
    ("weight", "expected"),
    [
        (0.5, [1.5, 2.25, 2.25, 4.25, 4.25, 4, 1, 1]),
        (2.0, [2.5, 2.5, 2.5, 19 / 6, 19 / 6, 19 / 6, 1.75, 1.75]),
    ],
)
def test_eight_point_total_variation(weight, expected):
    """Values recomputed by a general QP solver (collected figures of the field, section on variation)."""
    solution = ssn.solve(denoising([1, 2.5, 2, 5, 4.5, 4, 0.5, 1], weight)).require()
    np.testing.assert_allclose(solution.x, expected, atol=1e-8)
    assert (np.abs(solution.multipliers["term 0"]) <= weight * (1 + 1e-9)).all()


@given(st.integers(2, 12), st.integers(2, 12), st.floats(0.0, 0.9), st.integers(0, 100))
def test_two_levels_move_together(n1, n2, share, seed):
    """Closed form: c1 + weight/n1 and c2 - weight/n2 until they meet."""
    low, high = np.random.default_rng(seed).uniform([-1, 2], [1, 4])
    meet = (high - low) / (1 / n1 + 1 / n2)
    weight = max(share, 1e-3) * meet
    solution = ssn.solve(denoising([low] * n1 + [high] * n2, weight)).require()
    np.testing.assert_allclose(solution.x[:n1], low + weight / n1, atol=1e-8)
    np.testing.assert_allclose(solution.x[n1:], high - weight / n2, atol=1e-8)


def test_total_variation_on_a_grid_agrees_with_the_first_order_method():
    n = 24
    x, y = np.meshgrid(np.linspace(-1, 1, n), np.linspace(-1, 1, n))
    picture = ((x**2 + y**2 < 0.4) + 0.1 * np.random.default_rng(0).standard_normal((n, n))).ravel()
    problem = denoising(picture, 0.1, grid_differences(n))
    solution = ssn.solve(problem, max_steps=200).require()
    reference = ssn.primal_dual(problem)
    assert reference.converged
    assert np.linalg.norm(reference.x - solution.x) <= 1e-5 * np.linalg.norm(solution.x)
    assert solution.objective <= reference.objective + 1e-8
    jumps = solution.pieces.sizes()["term 0: control"]
    assert 0 < jumps["zero"] < problem.operators[0].shape[0]
    assert len(solution.steps) <= 100


def isotropic(n, picture, weight):
    """sum over pixels of the length of the difference vector, Neumann rows at the far edges."""
    d = sp.csr_array(sp.vstack([differences(n), sp.csr_array((1, n))]))
    one = sp.eye_array(n)
    across, down = sp.kron(one, d), sp.kron(d, one)
    operator = sp.csr_array(sp.vstack([across, down]))
    cost = ssn.GroupSparseCost(weight, shape=(2, n * n), axis=0)
    return ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n * n), picture), terms=[ssn.Term(cost, operator)]
    )


def test_isotropic_variation_lowers_a_disc_by_twice_the_weight_over_the_radius():
    """Strong and Chan (Inverse Problems 19, 2003, from memory): a disc of radius R keeps its edge and sinks by 2 w / R.

    On a grid the edge is a staircase: the height at the centre is compared to first order in the mesh width.
    """
    errors = []
    for n in (24, 48):
        h = 2.0 / n
        x, y = np.meshgrid(-1 + h * (np.arange(n) + 0.5), -1 + h * (np.arange(n) + 0.5))
        radius, weight = 0.6, 0.05
        disc = (np.hypot(x, y) < radius).astype(float)
        # u and its difference quotients, integrated: weight h |Du| against 1/2 h^2 (u - b)^2
        solution = ssn.solve(isotropic(n, disc.ravel(), weight / h), tolerance=1e-7).require()
        u = solution.x.reshape(n, n)
        expected = 1.0 - 2.0 * weight / radius
        errors.append(abs(u[n // 2, n // 2] - expected))
    assert errors[1] < 2e-3 and errors[1] < errors[0]


def test_isotropic_variation_agrees_with_the_first_order_method():
    rng = np.random.default_rng(2)
    problem = isotropic(16, rng.standard_normal(256), 0.4)
    solution = ssn.solve(problem, max_steps=300).require()
    reference = ssn.primal_dual(problem)
    assert reference.converged
    assert np.linalg.norm(reference.x - solution.x) <= 1e-5 * np.linalg.norm(solution.x)


def quadratic_program(h, b, a_equal, c_equal, lower, upper, weight, operator):
    """The same by clarabel: variables (u, t), |operator u| <= t."""
    n, m = h.shape[0], operator.shape[0]
    zero = sp.csc_array((m, m))
    p = sp.block_diag([sp.csc_array(h), zero], format="csc")
    q = np.concatenate([-b, np.full(m, weight)])
    rows = [
        sp.hstack([sp.csc_array(a_equal), sp.csc_array((a_equal.shape[0], m))]),
        sp.hstack([sp.eye_array(n), sp.csc_array((n, m))]),
        sp.hstack([-sp.eye_array(n), sp.csc_array((n, m))]),
        sp.hstack([operator, -sp.eye_array(m)]),
        sp.hstack([-operator, -sp.eye_array(m)]),
    ]
    rhs = np.concatenate([c_equal, np.full(n, upper), np.full(n, -lower), np.zeros(2 * m)])
    cones = [clarabel.ZeroConeT(a_equal.shape[0]), clarabel.NonnegativeConeT(2 * n + 2 * m)]
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    result = clarabel.DefaultSolver(
        sp.csc_matrix(p), q, sp.csc_matrix(sp.vstack(rows)), rhs, cones, settings
    ).solve()
    return np.array(result.x)[:n], result.obj_val


@given(st.integers(0, 10**6))
def test_budget_bounds_and_variation_together_agree_with_an_interior_point_method(seed):
    rng = np.random.default_rng(seed)
    n = 12
    root = rng.standard_normal((n, n))
    h, b = root @ root.T / n + 0.1 * np.eye(n), rng.standard_normal(n)
    budget = np.ones((1, n))
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(h, b),
        terms=[
            ssn.Term(ssn.Bounds(-0.4, 0.6)),
            ssn.Term(ssn.Bounds(0.0, 0.0), budget, [1.0]),  # sum u = 1
            ssn.Term(ssn.SparseCost(0.1), differences(n)),
        ],
    )
    solution = ssn.solve(problem, max_steps=300).require()
    exact, objective = quadratic_program(h, b, budget, np.ones(1), -0.4, 0.6, 0.1, differences(n))
    np.testing.assert_allclose(solution.x, exact, atol=2e-6)
    assert solution.objective == pytest.approx(objective, abs=1e-7)
    assert solution.x.sum() == pytest.approx(1.0, abs=1e-7)


def test_multipliers_are_the_prices():
    """Moving the budget by h changes the optimal value by minus the multiplier times h."""
    h, b = np.diag([1.0, 2.0, 4.0]), np.array([1.0, 1.0, 1.0])

    def optimum(budget):
        terms = [ssn.Term(ssn.Bounds(0.0, 0.0), np.ones((1, 3)), [budget]), ssn.Term(ssn.Bounds(0.0, np.inf))]
        return ssn.solve(ssn.SumProblem(smooth=ssn.Quadratic(h, b), terms=terms), tolerance=1e-11).require()

    slope = (optimum(0.8 + 1e-4).objective - optimum(0.8 - 1e-4).objective) / 2e-4
    assert -optimum(0.8).multipliers["term 0"][0] == pytest.approx(slope, abs=1e-6)


def test_a_linear_objective_is_allowed():
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(np.zeros((3, 3)), [1.0, 2.0, 3.0]),
        terms=[ssn.Term(ssn.Bounds(0.0, 1.0)), ssn.Term(ssn.Bounds(-np.inf, 0.0), np.ones((1, 3)), [1.5])],
    )
    np.testing.assert_allclose(ssn.solve(problem).require().x, [0.0, 0.5, 1.0], atol=1e-8)


def test_operators_need_no_matrix():
    y = [1, 2.5, 2, 5, 4.5, 4, 0.5, 1]
    free = denoising(y, 0.5, aslinearoperator(differences(8)))
    np.testing.assert_allclose(
        ssn.solve(free).require().x, ssn.solve(denoising(y, 0.5)).require().x, atol=1e-7
    )


def test_constraints_that_exclude_each_other():
    ones = np.ones((1, 2))
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(np.eye(2), np.ones(2)),
        terms=[ssn.Term(ssn.Bounds(0.0, 0.0), ones, [1.0]), ssn.Term(ssn.Bounds(0.0, 0.0), ones, [2.0])],
    )
    solution = ssn.solve(problem)
    assert solution.outcome is Outcome.INFEASIBLE and not solution.converged
    assert "cannot hold together" in solution.message


def test_step_limit_is_honest():
    solution = ssn.solve(denoising(np.random.default_rng(0).standard_normal(100), 0.3), max_steps=3)
    assert solution.outcome is Outcome.STEP_LIMIT and not solution.converged and len(solution.steps) <= 3


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.SumProblem(smooth=ssn.Quadratic(np.eye(2), np.ones(2)), terms=[]), "terms is empty"),
        (
            lambda: ssn.SumProblem(smooth=ssn.Quadratic(np.eye(2), np.ones(2)), terms=[ssn.Bounds()]),
            r"terms\[0\]",
        ),
        (
            lambda: ssn.SumProblem(
                smooth=ssn.Quadratic(np.eye(2), np.ones(2)), terms=[ssn.Term(ssn.Bounds(), np.ones((1, 3)))]
            ),
            r"terms\[0\]\.operator has shape 1x3",
        ),
        (lambda: ssn.primal_dual("nothing"), "SumProblem"),
        (lambda: ssn.solve(denoising([1, 2], 1.0), globalization="residual"), "does not fit several terms"),
    ],
)
def test_refused(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
