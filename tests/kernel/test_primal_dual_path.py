"""Primal-dual Newton steps for several terms: step counts, safeguards, weights, certificates."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.duality_gap import certify, duality_gap
from ssn.equations.primal_dual import PrimalDualEquation
from ssn.linear import PrimalDualSolver
from ssn.norm_terms import NormRows
from ssn.prepare import prepare
from ssn.status import Outcome
from tests.problems.loading import load

denoising = load("variation_denoising")


def scene(n, isotropic, weight=0.02, noise=0.1):
    return denoising.build(n, weight=weight, case="scene", noise=noise, isotropic=isotropic)


@pytest.mark.parametrize("isotropic", [False, True])
@pytest.mark.parametrize(("n", "weight"), [(32, 0.05), (64, 0.02)])
def test_few_steps_to_a_small_duality_gap(n, weight, isotropic):
    """Collected figures of the field: 31 to 56 steps at 64^2; the method of multipliers took 83 here."""
    problem = scene(n, isotropic, weight)
    solution = ssn.solve(problem).require()
    assert len(solution.steps) <= 56
    gap, certificate = certify(
        problem, solution.x, np.concatenate([solution.multipliers[k] for k in problem.names])
    )
    assert gap.relative <= 1e-9 and certificate is not None
    assert solution.lower_bound <= solution.objective and solution.gap <= 1e-9
    assert certificate.relative == pytest.approx(solution.certificate.relative)
    assert solution.work.symbolic_analyses == 1  # the pattern of the Newton matrix stays


def test_certificate_bounds_the_distance_at_any_point():
    problem = scene(16, True)
    solution = ssn.solve(problem, tolerance=1e-11).require()
    y = solution.iterate[problem.unknowns :]
    rng = np.random.default_rng(0)
    for size in (1e-1, 1e-3, 1e-5):
        u = solution.x + size * rng.standard_normal(solution.x.size)
        for multipliers in (y, 1.5 * y, y + size * rng.standard_normal(y.size), 0.0 * y):
            gap, certificate = certify(problem, u, multipliers)
            assert (NormRows(problem).lengths(gap.multipliers) <= 0.02 * (1 + 1e-12)).all()
            distance = problem.controls.norm(u - solution.x)
            assert distance <= certificate.bound
            assert problem.objective(u) - solution.objective <= gap.value * (1 + 1e-9) + 1e-14
    sharp = certify(problem, u, y)[1]
    assert sharp.bound <= 100 * distance


def random_point(problem, rng, scale=2.0):
    rows = NormRows(problem)
    y = scale * rng.standard_normal(int(problem.splits[-1])) * np.maximum(rows.beta, 0.1)
    return rows, np.concatenate([rng.standard_normal(problem.unknowns), y])


def several_kinds():
    n = 10
    d = denoising.differences(n)
    return ssn.SumProblem(
        smooth=ssn.Quadratic(0.5 * sp.eye_array(n), np.ones(n)),
        terms=[
            ssn.Term(
                ssn.GroupSparseCost(0.3, groups=np.arange(18) % 9, inner_weights=np.repeat([1.0, 2.0], 9)),
                sp.vstack([d, 2.0 * d]),
                weights=np.repeat([0.5, 1.0], 9),
            ),
            ssn.Term(ssn.SparseCost(0.2), d, np.linspace(-1, 1, n - 1)),
            ssn.Term(ssn.ElasticNetCost(0.0, 0.7), d, weights=np.full(n - 1, 0.3)),
            ssn.Term(ssn.SparseCost(0.1, -0.5, 1.0)),
        ],
    )


def test_the_solver_solves_the_system_of_the_derivative_where_the_safeguards_do_not_act():
    rng = np.random.default_rng(1)
    problem = several_kinds()
    rows, x = random_point(problem, rng)
    assert rows.kinds == ["norm", "norm", "quadratic", "norm", "other"]
    equation = PrimalDualEquation(problem, rows, [0.5, 0.3, 1.0, 0.4, 0.6], 0.1 * x[problem.unknowns :])
    at = equation.evaluate(equation.consistent(x))
    d = PrimalDualSolver(equation).solve(at, 1e-12).vector
    left = equation.linearize(at.x).derivative @ d + at.residual
    assert np.linalg.norm(left) <= 1e-12 * np.linalg.norm(at.residual)


def test_the_matrix_is_positive_for_multipliers_outside_their_balls():
    """Without projection and symmetrisation it is not: that is what they are for."""
    rng = np.random.default_rng(2)
    problem = scene(6, True, weight=0.5)
    lowest, unsafe = [], []
    for _ in range(10):
        rows, x = random_point(problem, rng, scale=3.0)
        equation = PrimalDualEquation(problem, rows, [0.01], 0.0 * x[problem.unknowns :])
        at = equation.evaluate(x)
        solver = PrimalDualSolver(equation)
        diagonal, coupling = solver._curvatures(at)
        matrix, _ = solver._matrix(solver._explicit_hessian(at), diagonal, coupling, at.data)
        hessian = problem.part.hessian(x).toarray()
        lowest.append(np.linalg.eigvalsh(matrix.toarray() - hessian)[0] / abs(matrix).max())
        k = problem.operators[0].toarray()
        w, y = at.data.w, x[problem.unknowns :]
        long = (at.data.length > equation.gamma * rows.beta) / np.maximum(at.data.length, 1e-300)
        same = rows.labels[:, None] == rows.labels
        exact = np.diag(rows.beta / at.data.divisor) - same * np.outer(long * y / at.data.divisor, w)
        unsafe.append(np.linalg.eigvalsh(k.T @ (exact + exact.T) @ k)[0])
    assert min(lowest) >= -1e-12
    assert min(unsafe) < -1e-3


def test_all_kinds_of_terms_together_agree_with_the_first_order_method():
    problem = several_kinds()
    solution = ssn.solve(problem).require()
    reference = ssn.primal_dual(problem, tolerance=1e-9)
    assert reference.converged and reference.bound is not None
    assert np.linalg.norm(solution.x - reference.x) <= reference.bound + solution.certificate.bound
    np.testing.assert_allclose(solution.x, reference.x, atol=1e-7)
    assert set(solution.multipliers) == {"term 0", "term 1", "term 2", "term 3", "term 3 bounds"}
    np.testing.assert_allclose(
        solution.multipliers["term 2"], 0.7 * problem.operators[2] @ solution.x, atol=1e-8
    )


def test_weights_of_a_term_are_its_inner_product():
    rng = np.random.default_rng(3)
    n, d = 30, denoising.differences(30)
    w, b = rng.uniform(0.5, 2.0, n - 1), rng.standard_normal(n)
    fit = ssn.Quadratic(sp.eye_array(n), b)
    weighted = ssn.solve(
        ssn.SumProblem(smooth=fit, terms=[ssn.Term(ssn.SparseCost(0.4), d, weights=w)])
    ).require()
    folded = ssn.solve(ssn.SumProblem(smooth=fit, terms=[ssn.Term(ssn.SparseCost(0.4 * w), d)])).require()
    np.testing.assert_allclose(weighted.x, folded.x, atol=1e-8)
    np.testing.assert_allclose(w * weighted.multipliers["term 0"], folded.multipliers["term 0"], atol=1e-7)
    assert (np.abs(weighted.multipliers["term 0"]) <= 0.4 * (1 + 1e-12)).all()


def control(n=12, **options):
    h = 1.0 / (n + 1)
    state = ssn.SteadyState(
        sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h
    )
    return ssn.ControlProblem(
        state=state,
        target=np.where(np.arange(n) < n // 2, 0.1, 0.05),
        cost=ssn.SparseCost(1e-3, -2.0, 2.0),
        control_weight=1e-4,
        state_mass=np.full(n, h),
        control_mass=np.full(n, h),
        **options,
    )


def test_a_control_problem_brings_its_own_cost_and_state():
    d = denoising.differences(12)
    alone = control()
    problem = ssn.SumProblem(smooth=alone, terms=[ssn.Term(ssn.SparseCost(1e-3), d)])
    assert problem.names == ["term 0", "cost", "cost bounds"]
    solution = ssn.solve(problem).require()
    expected = alone.objective(solution.x) + 1e-3 * np.abs(np.diff(solution.x)).sum()
    assert solution.objective == pytest.approx(expected, rel=1e-12)
    y, p = alone.state_and_adjoint(solution.x)
    np.testing.assert_allclose(solution.state, y, rtol=1e-12)
    np.testing.assert_allclose(solution.adjoint, p, rtol=1e-12)
    assert solution.work.state_solves > 0
    without = ssn.solve(ssn.SumProblem(smooth=alone, terms=[ssn.Term(ssn.SparseCost(0.0), d)])).require()
    np.testing.assert_allclose(without.x, ssn.solve(alone).require().x, atol=1e-6)


def test_infeasible_bounds_are_found_out():
    n = 6
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n), np.ones(n)),
        terms=[
            ssn.Term(ssn.SparseCost(0.1), denoising.differences(n)),
            ssn.Term(ssn.Bounds(0.0, 1.0)),
            ssn.Term(ssn.Bounds(0.0, 0.0), np.ones((1, n)), [20.0]),
        ],
    )
    solution = ssn.solve(problem, max_steps=200)
    assert solution.outcome is Outcome.INFEASIBLE and "cannot hold together" in solution.message
    assert solution.certificate is None


def test_no_certificate_without_strong_convexity():
    n = 8
    problem = ssn.SumProblem(
        smooth=ssn.LeastSquares(np.ones((1, n)), [1.0]),
        terms=[ssn.Term(ssn.SparseCost(0.1), denoising.differences(n))],
    )
    solution = ssn.solve(problem).require()
    assert solution.certificate is None and problem.strong_convexity == 0.0
    assert duality_gap(problem, solution.x, solution.multipliers["term 0"]).terms <= 1e-12


def test_what_auto_decided_is_told():
    n = 300
    norm = ssn.Term(ssn.SparseCost(0.1), denoising.differences(n))
    fit = ssn.Quadratic(sp.eye_array(n), np.ones(n))
    fits = prepare(ssn.SumProblem(smooth=fit, terms=[norm])).choices["equation"]
    assert fits.startswith("primal-dual: norms") and "term 0" in fits
    many = ssn.Term(ssn.Bounds(-1.0, 1.0), np.ones((30, n)))
    told = prepare(ssn.SumProblem(smooth=fit, terms=[norm, many])).choices["equation"]
    assert "augmented Lagrangian" in told and "300 entries" in told


def test_a_budget_over_the_whole_picture_does_not_fill_the_matrix():
    """The optimum without the budget has the mean of the data: asked for another, all values move alike."""
    plain = scene(32, True)
    n = plain.unknowns
    terms = [
        ssn.Term(plain.costs[0], plain.operators[0], weights=plain.term_weights),
        ssn.Term(ssn.Bounds(0.0, 0.0), np.ones((1, n)) / n, [0.5]),
    ]
    problem = ssn.SumProblem(smooth=plain.part, terms=terms)
    assert prepare(problem).equation.rows.kinds == ["norm", "other"]
    solution = ssn.solve(problem).require()
    free = ssn.solve(plain).require().x
    np.testing.assert_allclose(solution.x, free + 0.5 - free.mean(), atol=1e-7)
    assert len(solution.steps) <= 56
    far = ssn.Term(ssn.SparseCost(1.0), np.ones((1, n)) / n, [0.5])  # a norm over all pixels
    drawn = ssn.solve(ssn.SumProblem(smooth=plain.part, terms=[terms[0], far])).require()
    np.testing.assert_allclose(drawn.x, solution.x, atol=1e-6)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (
            lambda: ssn.SumProblem(smooth=control(state_upper=1.0), terms=[ssn.Term(ssn.SparseCost(1.0))]),
            "state bounds",
        ),
        (
            lambda: ssn.SumProblem(
                smooth=ssn.Quadratic(np.eye(2), np.ones(2)),
                terms=[ssn.Term(ssn.SparseCost(1.0), weights=[1.0, -1.0])],
            ),
            r"terms\[0\]\.weights",
        ),
        (lambda: ssn.Iteration(scene(6, True)), "path of multipliers"),
    ],
)
def test_refused(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
