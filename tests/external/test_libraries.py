"""Convex problems against reference libraries: SciPy, scikit-learn and a general interior-point method."""

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from scipy.optimize import lsq_linear, nnls
from sklearn.datasets import load_diabetes
from sklearn.linear_model import Lasso

import ssn

SHAPES = [(30, 10), (10, 25), (20, 20)]


def least_squares(a, b, cost, **options):
    return ssn.solve(ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost), **options).require()


@pytest.mark.parametrize("sparse", [False, True])
@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("seed", range(4))
def test_bounded_least_squares(seed, shape, sparse):
    """scipy.optimize.lsq_linear, method bvls (P. Stark and R. Parker, Comput. Statist. 10 (1995) 129-141)."""
    rng = np.random.default_rng(seed)
    a, b = rng.standard_normal(shape), rng.standard_normal(shape[0])
    lower = rng.uniform(-0.5, 0.1, shape[1])
    upper = lower + rng.uniform(0.05, 0.4, shape[1])
    reference = lsq_linear(a, b, (lower, upper), method="bvls", tol=1e-14, max_iter=1000)
    ours = least_squares(sp.csr_array(a) if sparse else a, b, ssn.Bounds(lower, upper))
    assert ours.objective == pytest.approx(reference.cost, rel=1e-9, abs=1e-14)
    if shape[0] >= shape[1]:  # unique
        np.testing.assert_allclose(ours.x, reference.x, atol=1e-7)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("seed", range(4))
def test_nonnegative_least_squares(seed, shape):
    """scipy.optimize.nnls (C. Lawson and R. Hanson, Solving Least Squares Problems, 1974)."""
    rng = np.random.default_rng(100 + seed)
    a, b = rng.standard_normal(shape), rng.standard_normal(shape[0])
    x, misfit = nnls(a, b)
    ours = least_squares(a, b, ssn.Bounds(0.0, np.inf))
    assert np.sqrt(2 * ours.objective) == pytest.approx(misfit, rel=1e-8, abs=1e-7)
    if shape[0] >= shape[1]:
        np.testing.assert_allclose(ours.x, x, atol=1e-7)
        np.testing.assert_array_equal(ours.x > 0, x > 0)


# classical diabetes data: B. Efron, T. Hastie, I. Johnstone, R. Tibshirani, Ann. Statist. 32 (2004) 407-499

NAMES = ["age", "sex", "bmi", "bp", "s1", "s2", "s3", "s4", "s5", "s6"]

# |y - X b|^2 / 2 + lambda |b|_1, columns of unit length, y centred: where the support changes as lambda falls.
# Computed with scikit-learn's copy of the data; a printout of the authors' R package, from memory, agrees to 2e-4.
KNOTS = [
    (949.43526, "bmi"), (889.31379, "s5"), (452.89570, "bp"), (316.07338, "s3"), (130.12954, "sex"),
    (88.78430, "s6"), (68.96479, "s1"), (19.98117, "s4"), (5.47754, "s2"), (5.08824, "age"),
    (2.18227, "s3"), (1.31044, "s3"),
]  # fmt: skip


def diabetes():
    x, y = load_diabetes(return_X_y=True)
    np.testing.assert_allclose(np.linalg.norm(x, axis=0), 1.0, rtol=1e-10)
    return x, y - y.mean()


@pytest.mark.parametrize("weight", [900.0, 500.0, 100.0, 10.0, 3.0, 1.0])
def test_lasso_on_the_diabetes_data(weight):
    """scikit-learn's coordinate descent minimises the same objective divided by the number of rows."""
    x, y = diabetes()
    model = Lasso(alpha=weight / len(y), fit_intercept=False, tol=1e-14, max_iter=1_000_000).fit(x, y)
    ours = least_squares(x, y, ssn.SparseCost(weight), tolerance=1e-11)
    assert np.linalg.norm(ours.x - model.coef_) <= 1e-8 * np.linalg.norm(model.coef_)
    np.testing.assert_array_equal(ours.x != 0, model.coef_ != 0)


@pytest.mark.parametrize("k", range(len(KNOTS)))
def test_the_support_changes_at_the_published_knots(k):
    x, y = diabetes()
    support = set()
    for _, name in KNOTS[:k]:
        support ^= {name}
    value, name = KNOTS[k]
    for side, expected in ((1 + 1e-6, support), (1 - 1e-6, support ^ {name})):
        cost = ssn.SparseCost(value * side + np.sign(side - 1) * 1e-5)
        ours = least_squares(x, y, cost)
        assert {NAMES[i] for i in np.flatnonzero(ours.x)} == expected


def test_the_end_of_the_path():
    """sum |b| = 3459.978 at lambda = 0 (from memory, confirmed by computation)."""
    x, y = diabetes()
    ours = least_squares(x, y, ssn.SparseCost(1e-7), tolerance=1e-10)
    assert np.abs(ours.x).sum() == pytest.approx(3459.978, abs=1e-3)


# random quadratic programs against an interior-point method (P. Goulart and Y. Chen, arXiv:2405.12762, the solver)


def interior_point(h, b, beta, lower, upper):
    """min 1/2 u'Hu - b'u + beta'|u| over lower <= u <= upper, as a cone program in u and its modulus."""
    n = b.size
    p = sp.block_diag([sp.csc_matrix(h), sp.csc_matrix((n, n))]).tocsc()
    eye, zero = sp.eye_array(n), sp.csc_array((n, n))
    a = sp.vstack(
        [sp.hstack([eye, -eye]), sp.hstack([-eye, -eye]), sp.hstack([eye, zero]), sp.hstack([-eye, zero])]
    )
    limit = np.concatenate([np.zeros(2 * n), upper, -lower])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    q, cones = np.concatenate([-b, beta]), [clarabel.NonnegativeConeT(4 * n)]
    result = clarabel.DefaultSolver(sp.triu(p).tocsc(), q, a.tocsc(), limit, cones, settings).solve()
    assert str(result.status) in ("Solved", "AlmostSolved")
    return np.array(result.x)[:n], result.obj_val


@pytest.mark.parametrize("condition", [1e1, 1e3, 1e5])
@pytest.mark.parametrize("seed", range(5))
def test_quadratic_programs_with_l1_and_bounds(seed, condition):
    rng = np.random.default_rng(seed)
    n = 40
    q, _ = np.linalg.qr(rng.standard_normal((n, n)))
    h = (q * np.geomspace(1.0, 1 / condition, n)) @ q.T
    h = 0.5 * (h + h.T)
    b, beta = 0.3 * rng.standard_normal(n), rng.uniform(0, 0.3, n)
    lower = rng.uniform(-2, 0.5, n)
    upper = lower + rng.uniform(0.1, 3, n)
    x, objective = interior_point(h, b, beta, lower, upper)
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=ssn.SparseCost(beta, lower, upper))
    ours = ssn.solve(problem).require()
    assert ours.objective <= objective + 1e-8
    assert ours.objective == pytest.approx(objective, rel=1e-7, abs=1e-8)
    np.testing.assert_allclose(ours.x, x, atol=1e-3 * np.sqrt(condition) * 1e-1)


def test_the_smooth_part_of_scikit_learn_is_scaled_otherwise():
    """Guards the factor: without it the solutions differ grossly."""
    x, y = diabetes()
    unscaled = Lasso(alpha=100.0, fit_intercept=False).fit(x, y)
    assert not unscaled.coef_.any()
    assert least_squares(x, y, ssn.SparseCost(100.0)).x.any()
