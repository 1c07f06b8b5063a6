"""Total variation, graphs, budgets and control against a general conic solver, each assembled independently here."""

from __future__ import annotations

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn


def conic(p, q, equal, below, cones):
    """Minimise 1/2 v'Pv + q'v with A v = b, A v <= b and (t, x) in second-order cones; v and the optimal value.

    `cones` is a list of (rows, rhs): rhs - rows v lies in the cone.
    """
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    parts = [part for part in (equal, below) if part is not None]
    kinds = [clarabel.ZeroConeT(equal[1].size)] if equal is not None else []
    kinds += [clarabel.NonnegativeConeT(below[1].size)] if below is not None else []
    kinds += [clarabel.SecondOrderConeT(right.size) for _, right in cones]
    rows = sp.csc_matrix(sp.vstack([part[0] for part in (*parts, *cones)]))
    right = np.concatenate([part[1] for part in (*parts, *cones)])
    found = clarabel.DefaultSolver(sp.csc_matrix(sp.triu(p)), q, rows, right, kinds, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved")
    return np.array(found.x), found.obj_val


def pixel_differences(n):
    """Loops over pixels: row 2 k and 2 k + 1 are the differences to the right and down of pixel k."""
    rows = sp.lil_array((2 * n * n, n * n))
    for i in range(n):
        for j in range(n):
            k = i * n + j
            for shift, (a, b) in enumerate([(i, j + 1), (i + 1, j)]):
                if a < n and b < n:
                    rows[2 * k + shift, a * n + b] += 1.0
                    rows[2 * k + shift, k] -= 1.0
    return sp.csr_array(rows)


def split(d, total, number, start):
    """[d, 0] and the selection of epigraph variables `start` .. `start + number - 1`."""
    wide = sp.csr_array((d.data, d.indices, d.indptr), shape=(d.shape[0], total))
    return wide, sp.eye_array(number, total, k=start, format="csr")


def variation_cost(weight, d, isotropic):
    pixels = d.shape[0] // 2
    return (
        ssn.GroupSparseCost(weight, groups=np.repeat(np.arange(pixels), 2))
        if isotropic
        else ssn.SparseCost(weight)
    )


def by_cones(p, q, d, weight, isotropic, equal=None):
    """The optimum with weight times the variation of the first unknowns added."""
    base, rows = q.size, d.shape[0]
    number = rows // 2 if isotropic else rows
    wide, pick = split(d, base + number, number, base)
    big = sp.block_diag([p, sp.csc_array((number, number))])
    long = np.concatenate([q, np.full(number, weight)])
    if equal is not None:
        equal = (sp.hstack([equal[0], sp.csr_array((equal[0].shape[0], number))]), equal[1])
    if not isotropic:
        below = (sp.vstack([wide - pick, -wide - pick]), np.zeros(2 * rows))
        return conic(big, long, equal, below, [])
    cones = [(-sp.vstack([pick[[k]], wide[[2 * k, 2 * k + 1]]]), np.zeros(3)) for k in range(number)]
    return conic(big, long, equal, None, cones)


@pytest.mark.parametrize("isotropic", [False, True])
@pytest.mark.parametrize(("n", "weight"), [(8, 0.3), (14, 0.1), (14, 1.0)])
def test_denoising(n, weight, isotropic):
    b = np.random.default_rng(n).standard_normal(n * n)
    d = pixel_differences(n)
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n * n), b),
        terms=[ssn.Term(variation_cost(weight, d, isotropic), d)],
    )
    solution = ssn.solve(problem).require()
    exact, value = by_cones(sp.eye_array(n * n), -b, d, weight, isotropic)
    assert solution.objective == pytest.approx(value, abs=1e-8)
    distance = np.linalg.norm(solution.x - exact[: n * n])
    assert distance <= 1e-6
    assert distance <= solution.certificate.bound + 1e-6
    assert solution.certificate.relative <= 1e-5
    assert len(solution.steps) <= 40


def five_point(n):
    second = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    one = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, one) + sp.kron(one, second))


@pytest.mark.parametrize("isotropic", [False, True])
def test_control(isotropic):
    """The state is a variable of the conic program; weights are chosen so that values are of order one."""
    n, alpha, weight = 10, 1e-2, 0.02
    size = n * n
    e = five_point(n) / 4.0
    target = np.random.default_rng(1).standard_normal(size).cumsum() / 10
    d = pixel_differences(n)
    control = ssn.ControlProblem(
        state=ssn.SteadyState(e),
        target=target,
        cost=ssn.SparseCost(0.0),
        control_weight=alpha,
        control_operator=sp.eye_array(size),
    )
    problem = ssn.SumProblem(smooth=control, terms=[ssn.Term(variation_cost(weight, d, isotropic), d)])
    solution = ssn.solve(problem).require()
    p = sp.block_diag([alpha * sp.eye_array(size), sp.eye_array(size)])
    q = np.concatenate([np.zeros(size), -target])
    equal = (sp.hstack([-sp.eye_array(size), e]), np.zeros(size))
    exact, value = by_cones(p, q, d, weight, isotropic, equal)
    assert solution.objective == pytest.approx(value + 0.5 * target @ target, abs=1e-8)
    assert np.linalg.norm(solution.x - exact[:size]) <= 1e-5 * np.linalg.norm(solution.x)
    np.testing.assert_allclose(e @ solution.state, solution.x, atol=1e-10)
    assert len(solution.steps) <= 60


def test_control_with_an_l1_cost_bounds_and_variation():
    n, alpha, beta, weight, bound = 8, 1e-3, 0.02, 0.02, 0.8
    size = n * n
    e = five_point(n) / 4.0
    target = 2.0 * np.sin(np.arange(size) / 5.0)
    d = pixel_differences(n)
    control = ssn.ControlProblem(
        state=ssn.SteadyState(e),
        target=target,
        cost=ssn.SparseCost(beta, -bound, bound),
        control_weight=alpha,
        control_operator=sp.eye_array(size),
    )
    problem = ssn.SumProblem(smooth=control, terms=[ssn.Term(ssn.SparseCost(weight), d)])
    solution = ssn.solve(problem).require()
    # v = (u, y, s, t): |u| <= s, |d u| <= t, |u| <= bound
    rows = d.shape[0]
    total = 3 * size + rows
    u, _ = split(sp.eye_array(size, format="csr"), total, 1, 0)
    du, _ = split(d, total, 1, 0)
    s, t = (sp.eye_array(k, total, k=at, format="csr") for k, at in ((size, 2 * size), (rows, 3 * size)))
    p = sp.block_diag(
        [alpha * sp.eye_array(size), sp.eye_array(size), sp.csc_array((size + rows, size + rows))]
    )
    q = np.concatenate([np.zeros(size), -target, np.full(size, beta), np.full(rows, weight)])
    equal = (sp.hstack([-sp.eye_array(size), e, sp.csr_array((size, size + rows))]), np.zeros(size))
    below = (
        sp.vstack([u - s, -u - s, du - t, -du - t, u, -u]),
        np.concatenate([np.zeros(2 * size + 2 * rows), np.full(2 * size, bound)]),
    )
    exact, value = conic(p, q, equal, below, [])
    assert solution.objective == pytest.approx(value + 0.5 * target @ target, abs=1e-8)
    assert np.linalg.norm(solution.x - exact[:size]) <= 1e-5 * np.linalg.norm(solution.x)
    assert np.abs(solution.x).max() <= bound + 1e-9 and np.count_nonzero(np.abs(solution.x) > bound - 1e-7)
    assert set(solution.multipliers) == {"term 0", "cost", "cost bounds"}


def test_variation_on_a_graph_with_a_budget():
    """A ring with chords, sum of the values held; the multiplier of the budget is the conic solver's."""
    rng = np.random.default_rng(4)
    n = 60
    edges = [(k, (k + 1) % n) for k in range(n)] + [tuple(rng.choice(n, 2, replace=False)) for _ in range(40)]
    d = sp.lil_array((len(edges), n))
    for row, (a, b) in enumerate(edges):
        d[row, a], d[row, b] = -1.0, 1.0
    d = sp.csr_array(d)
    b = np.repeat(rng.standard_normal(6), 10) + 0.3 * rng.standard_normal(n)
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n), b),
        terms=[
            ssn.Term(ssn.SparseCost(0.2), d),
            ssn.Term(ssn.Bounds(0.0, 0.0), np.ones((1, n)), [5.0]),
        ],
    )
    solution = ssn.solve(problem).require()
    equal = (np.ones((1, n)), np.array([5.0]))
    exact, value = by_cones(sp.eye_array(n), -b, d, 0.2, False, equal)
    assert solution.objective == pytest.approx(value, abs=1e-8)
    assert solution.x.sum() == pytest.approx(5.0, abs=1e-8)
    np.testing.assert_allclose(solution.x, exact[:n], atol=1e-6)


@pytest.mark.parametrize("isotropic", [False, True])
def test_a_heavy_weight_leaves_the_mean(isotropic):
    n = 12
    b = np.random.default_rng(5).standard_normal(n * n)
    d = pixel_differences(n)
    problem = ssn.SumProblem(
        smooth=ssn.Quadratic(sp.eye_array(n * n), b), terms=[ssn.Term(variation_cost(50.0, d, isotropic), d)]
    )
    np.testing.assert_allclose(ssn.solve(problem).require().x, b.mean(), atol=1e-9)
