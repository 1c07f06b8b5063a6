"""Costs against software from outside: a general conic solver, and scikit-learn."""

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from sklearn.linear_model import ElasticNet, HuberRegressor, QuantileRegressor
from sklearn.svm import LinearSVC, LinearSVR

import ssn

SETTINGS = clarabel.DefaultSettings()
SETTINGS.verbose = False
SETTINGS.tol_gap_abs = SETTINGS.tol_gap_rel = SETTINGS.tol_feas = 1e-12
CONES = {
    "zero": clarabel.ZeroConeT,
    "nonnegative": clarabel.NonnegativeConeT,
    "soc": clarabel.SecondOrderConeT,
}


def solve_conic(p, q, blocks):
    """minimise 1/2 x'Px + q'x, b - A x in a cone for each block (cone, A, b)."""
    a = sp.csc_array(sp.vstack([sp.csc_array(a) for _, a, _ in blocks]))
    b = np.concatenate([b for _, _, b in blocks])
    cones = [CONES[cone](b.size) for cone, _, b in blocks]
    quadratic = sp.triu(sp.csc_matrix(p), format="csc")
    found = clarabel.DefaultSolver(quadratic, q, sp.csc_matrix(a), b, cones, SETTINGS).solve()
    assert str(found.status) in ("Solved", "AlmostSolved")
    return np.array(found.x), 0.5 * (found.obj_val + found.obj_val_dual)


def selection(columns, total, sign=1.0):
    return sp.csr_array(
        (np.full(columns.size, sign), (np.arange(columns.size), columns)), (columns.size, total)
    )


class Model:
    """Unknowns u and one epigraph variable a term; rows are added term by term."""

    def __init__(self, n, extra):
        self.n, self.total = n, n + extra
        self.p, self.q = np.zeros((self.total, self.total)), np.zeros(self.total)
        self.blocks = []

    def add(self, cone, a, b):
        self.blocks.append((cone, a, np.asarray(b, dtype=float)))

    def bound(self, lower, upper):
        u = np.arange(self.n)
        for limit, sign in ((lower, -1.0), (upper, 1.0)):
            limit = np.broadcast_to(limit, (self.n,))
            rows = np.flatnonzero(np.isfinite(limit))
            if rows.size:
                self.add("nonnegative", selection(u[rows], self.total, sign), sign * limit[rows])


# each: (cost, n, extra unknowns, model -> None adds step g(u))


def quadratic_pieces(cost_slopes, breakpoints, curvature, n):
    """phi = max of affine functions + curvature/2 u^2: the affine maximum by one row a piece."""

    def add(model, step):
        constants = np.concatenate([[0.0], -np.cumsum(np.diff(cost_slopes) * breakpoints)])
        t = n + np.arange(n)
        model.q[t] += step
        model.p[np.arange(n), np.arange(n)] += step * curvature
        for slope, constant in zip(cost_slopes, constants, strict=True):
            rows = slope * selection(np.arange(n), model.total) - selection(t, model.total)
            model.add("nonnegative", rows, np.full(n, -constant))

    return add


def huber_pieces(beta, width, n):
    """beta (w^2/(2 width) + |u - w|) at the best w: unknowns w and t >= |u - w|."""

    def add(model, step):
        w, t = n + np.arange(n), 2 * n + np.arange(n)
        model.p[w, w] += step * beta / width
        model.q[t] += step * beta
        for sign in (1.0, -1.0):
            rows = sign * (selection(np.arange(n), model.total) - selection(w, model.total))
            model.add("nonnegative", rows - selection(t, model.total), np.zeros(n))

    return add


def norms(labels, beta, outer, inner):
    def add(model, step):
        for g in range(max(labels) + 1):
            members = np.flatnonzero(labels == g)
            t = model.n + g
            model.q[t] += step * beta * outer[g]
            rows = sp.vstack([
                selection(np.array([t]), model.total, -1.0),
                sp.diags_array(-np.sqrt(inner[members])) @ selection(members, model.total),
            ])  # fmt: skip
            model.add("soc", rows, np.zeros(members.size + 1))

    return add


def squared_sums(shape, beta, inner):
    """Unknowns t >= |u| and s = sum of a t at each instant."""

    def add(model, step):
        n, t, s = model.n, model.n + np.arange(model.n), 2 * model.n + np.arange(shape[0])
        model.p[s, s] += step * beta
        for sign in (1.0, -1.0):
            model.add(
                "nonnegative",
                sign * selection(np.arange(n), model.total) - selection(t, model.total),
                np.zeros(n),
            )
        sums = sp.csr_array((np.tile(inner, shape[0]), (np.repeat(np.arange(shape[0]), shape[1]), t)),
                            (shape[0], model.total))  # fmt: skip
        model.add("zero", sums - selection(s, model.total), np.zeros(shape[0]))

    return add


def mixtures(settings, beta):
    """u at each of three points a mean of the settings at the least mean of beta/2 |u_i|^2."""

    def add(model, step):
        d = len(settings)
        shares = model.n + np.arange(3 * d).reshape(3, d)
        for point in range(3):
            model.q[shares[point]] += step * 0.5 * beta * (settings**2).sum(axis=1)
            for k in range(2):
                u = selection(np.array([3 * k + point]), model.total)
                mean = sp.csr_array((settings[:, k], (np.zeros(d, int), shares[point])), (1, model.total))
                model.add("zero", u - mean, np.zeros(1))
            whole = sp.csr_array((np.ones(d), (np.zeros(d, int), shares[point])), (1, model.total))
            model.add("zero", whole, np.ones(1))
        model.add("nonnegative", selection(shares.ravel(), model.total, -1.0), np.zeros(3 * d))

    return add


def instances(seed):
    rng = np.random.default_rng(seed)
    n = 6
    slopes, points = np.sort(rng.standard_normal(4)), np.sort(rng.standard_normal(3))
    lower, upper = -rng.uniform(0.2, 1.5, n), rng.uniform(0.2, 1.5, n)
    beta, width = rng.uniform(0.3, 1.5), rng.uniform(0.2, 1.0)
    labels, inner = np.array([0, 0, 0, 1, 1, 2]), rng.uniform(0.4, 2.0, n)
    across = rng.uniform(0.4, 2.0, 3)
    settings = np.sort(rng.uniform(-2, 2, 4))
    ones = np.ones(3)
    plane = rng.uniform(-1.5, 1.5, (5, 2))
    return [
        (
            ssn.PiecewiseQuadraticCost(points, slopes, np.full(4, 0.7), lower=lower, upper=upper),
            n,
            quadratic_pieces(slopes, points, 0.7, n),
        ),
        (
            ssn.ElasticNetCost(beta, 0.4, lower, upper),
            n,
            quadratic_pieces(np.array([-beta, beta]), np.zeros(1), 0.4, n),
        ),
        (ssn.HuberCost(beta, width), 2 * n, huber_pieces(beta, width, n)),
        (ssn.HingeLoss(-1.0, beta), n, quadratic_pieces(np.array([0, beta]), np.array([-1.0]), 0.0, n)),
        (
            ssn.QuantileLoss(0.8, 0.5, beta),
            n,
            quadratic_pieces(beta * np.array([-0.8, 0.2]), np.array([0.5]), 0.0, n),
        ),
        (
            ssn.InsensitiveLoss(width, 0.0, beta),
            n,
            quadratic_pieces(np.array([-beta, 0, beta]), np.array([-width, width]), 0.0, n),
        ),
        (
            ssn.MultiBangCost(settings, beta),
            n,
            quadratic_pieces(beta / 2 * (settings[1:] + settings[:-1]), settings[1:-1], 0.0, n),
        ),
        (ssn.PlanarMultiBangCost(plane, beta), 15, mixtures(plane, beta)),
        (ssn.GroupSparseCost(beta, labels, inner_weights=inner), 3, norms(labels, beta, ones, inner)),
        (
            ssn.GroupSparseCost(beta, labels, inner_weights=inner, lower=-0.3, upper=upper),
            3,
            norms(labels, beta, ones, inner),
        ),
        (ssn.SwitchingCost(beta, (2, 3), across), n + 2, squared_sums((2, 3), beta, across)),
        (
            ssn.SumWithQuadratic(ssn.SparseCost(beta), 0.9),
            n,
            quadratic_pieces(np.array([-beta, beta]), np.zeros(1), 0.9, n),
        ),
        (
            ssn.ScaledCost(ssn.HingeLoss(1.0), beta, -0.5),
            n,
            quadratic_pieces(np.array([0, beta / 2]), np.array([-2.0]), 0.0, n),
        ),
        (
            ssn.TranslatedCost(ssn.SparseCost(beta), 0.25),
            n,
            quadratic_pieces(np.array([-beta, beta]), np.array([0.25]), 0.0, n),
        ),
    ]


KINDS = len(instances(0))


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("kind", range(KINDS))
def test_proximal_maps(kind, seed):
    """As a quadratic or second-order cone programme, in the inner product of the cost."""
    cost, extra, add = instances(seed)[kind]
    rng = np.random.default_rng(1000 + seed)
    v, step = 1.5 * rng.standard_normal(6), 0.8
    weights = np.broadcast_to(getattr(cost, "inner_weights", 1.0), (6,))
    model = Model(6, extra)
    model.p[np.arange(6), np.arange(6)] += weights
    model.q[:6] -= weights * v
    add(model, step)
    model.bound(getattr(cost, "lower", -np.inf), getattr(cost, "upper", np.inf))
    x, _ = solve_conic(model.p, model.q, model.blocks)
    np.testing.assert_allclose(cost.prox(v, step), x[:6], atol=1e-6)


def test_every_convex_family_is_there():
    seen = {type(cost) for cost, _, _ in instances(0)}
    here = (
        "piecewise",
        "elastic_net",
        "huber",
        "losses",
        "group",
        "switching",
        "multibang",
        "planar",
        "operations",
    )
    ours = {c for c in ssn.costs.CATALOGUE if c.__module__.rsplit(".", 1)[1] in here}
    assert ours - seen == {ssn.ConjugateCost}  # below, as the dual of a support vector machine


# solved problems


def data(seed, shape=(12, 6)):
    rng = np.random.default_rng(seed)
    return rng.standard_normal(shape), rng.standard_normal(shape[0])


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("kind", [0, 1, 6, 7, 8, 9, 10])
@pytest.mark.parametrize("shape", [(12, 6), (4, 6)])
def test_least_squares_with_a_cost(kind, shape, seed):
    cost, extra, add = instances(seed)[kind]
    a, b = data(seed, shape)
    model = Model(6, extra)
    model.p[:6, :6] += a.T @ a
    model.q[:6] -= a.T @ b
    add(model, 1.0)
    model.bound(getattr(cost, "lower", -np.inf), getattr(cost, "upper", np.inf))
    x, _ = solve_conic(model.p, model.q, model.blocks)
    weights = np.broadcast_to(getattr(cost, "inner_weights", 1.0), (6,))
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost, weights=weights)
    solution = ssn.solve(problem).require()
    reference = problem.objective(cost.prox(x[:6], 1e-12))
    assert solution.objective <= reference + 1e-9 * (1 + abs(reference))
    if shape[0] > 6:  # unique
        np.testing.assert_allclose(solution.x, x[:6], atol=1e-6)


def control(cost, inner, outer, alpha=1e-3):
    rng = np.random.default_rng(7)
    n = inner.size
    laplace = 50 * sp.diags_array([-np.ones(19), 2.2 * np.ones(20), -np.ones(19)], offsets=[-1, 0, 1])
    b, z = rng.standard_normal((20, n)), np.sin(np.arange(20))
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(sp.csc_array(laplace)), target=z, cost=cost, control_weight=alpha,
        control_operator=b, control_mass=inner * outer,
    )  # fmt: skip
    return problem, np.linalg.solve(laplace.toarray(), b), z


@pytest.mark.parametrize("alpha", [1e-2, 1e-4])
@pytest.mark.parametrize("bounded", [False, True])
def test_control_with_group_sparsity(bounded, alpha):
    """Groups along the first axis of (3, 4): weights outer (place) times inner (time)."""
    inner, outer = np.repeat([0.5, 1.0, 0.8], 4), np.tile([1.0, 0.3, 2.0, 0.7], 3)
    limits = {"lower": -0.5, "upper": 2.0} if bounded else {}
    cost = ssn.GroupSparseCost(0.02, shape=(3, 4), axis=0, inner_weights=[0.5, 1.0, 0.8], **limits)
    problem, s, z = control(cost, inner, outer, alpha)
    model = Model(12, 4)
    model.p[:12, :12] += s.T @ s + alpha * np.diag(inner * outer)
    model.q[:12] -= s.T @ z
    norms(np.tile(np.arange(4), 3), 0.02, outer[:4], inner)(model, 1.0)
    model.bound(limits.get("lower", -np.inf), limits.get("upper", np.inf))
    x, value = solve_conic(model.p, model.q, model.blocks)
    solution = ssn.solve(problem).require()
    np.testing.assert_allclose(solution.x, x[:12], atol=1e-6 * max(1.0, np.abs(x[:12]).max()))
    assert solution.objective == pytest.approx(value + 0.5 * z @ z, rel=1e-8)
    assert solution.certificate.relative < 1e-6


@pytest.mark.parametrize("alpha", [1e-2, 1e-4])
def test_control_with_switching(alpha):
    inner, outer = np.ones(12), np.repeat([0.5, 1.0, 0.8], 4)
    cost = ssn.SwitchingCost(0.05, (3, 4))
    problem, s, z = control(cost, inner, outer, alpha)
    model = Model(12, 15)
    model.p[:12, :12] += s.T @ s + alpha * np.diag(outer)
    model.q[:12] -= s.T @ z
    squared_sums((3, 4), 0.05, np.ones(4))(model, 1.0)
    model.p[24:, 24:] *= np.array([0.5, 1.0, 0.8])[:, None] * np.eye(3)
    x, value = solve_conic(model.p, model.q, model.blocks)
    solution = ssn.solve(problem).require()
    np.testing.assert_allclose(solution.x, x[:12], atol=1e-6 * max(1.0, np.abs(x[:12]).max()))
    assert solution.objective == pytest.approx(value + 0.5 * z @ z, rel=1e-8)
    assert 0 < np.count_nonzero(solution.x) < 12


# scikit-learn


@pytest.mark.parametrize("seed", range(3))
def test_elastic_net_regression(seed):
    a, b = data(seed, (30, 8))
    m = a.shape[0]
    reference = ElasticNet(alpha=0.2, l1_ratio=0.6, fit_intercept=False, tol=1e-13, max_iter=100000).fit(a, b)
    cost = ssn.ElasticNetCost(m * 0.2 * 0.6, m * 0.2 * 0.4)
    ours = ssn.solve(ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost)).require()
    np.testing.assert_allclose(ours.x, reference.coef_, atol=1e-7)


def dual_of_ridge(a, loss):
    """minimise 1/2 ||w||^2 + loss(A w) by its dual: 1/2 ||A' q||^2 + loss*(-q), w = -A' (-q)."""
    dual = ssn.ScaledCost(ssn.ConjugateCost(loss), 1.0, -1.0)
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a.T, np.zeros(a.shape[1])), cost=dual)
    return a.T @ ssn.solve(problem).require().x


@pytest.mark.parametrize("seed", range(3))
def test_support_vector_machine(seed):
    a, b = data(seed, (20, 5))
    labels = np.sign(b + a[:, 0])
    reference = LinearSVC(C=0.7, loss="hinge", fit_intercept=False, tol=1e-10, max_iter=10**7, random_state=0)
    reference.fit(a, labels)
    w = dual_of_ridge(a, ssn.HingeLoss(labels, 0.7))
    np.testing.assert_allclose(w, reference.coef_[0], atol=1e-5)


@pytest.mark.parametrize("seed", range(3))
def test_support_vector_regression(seed):
    a, b = data(seed, (20, 5))
    reference = LinearSVR(C=0.7, epsilon=0.3, fit_intercept=False, tol=1e-10, max_iter=10**7, random_state=0)
    w = dual_of_ridge(a, ssn.InsensitiveLoss(0.3, b, 0.7))
    np.testing.assert_allclose(w, reference.fit(a, b).coef_, atol=1e-5)


@pytest.mark.parametrize("level", [0.2, 0.5, 0.9])
def test_quantile_loss_of_a_sample(level):
    """The minimiser over constants is the empirical quantile; value and loss as in scikit-learn's regression."""
    b = np.random.default_rng(4).standard_normal(31)
    ones = np.ones((31, 1))
    constant = QuantileRegressor(quantile=level, alpha=0.0, solver="highs").fit(ones, b).predict(ones[:1])[0]
    loss = ssn.QuantileLoss(level, b)
    values = [loss.value(np.full(31, c)) for c in b]
    assert constant == pytest.approx(b[int(np.argmin(values))], abs=1e-9)
    assert loss.value(np.full(31, constant)) == pytest.approx(min(values), rel=1e-9)


def test_huber_loss_of_a_regression():
    """sum sigma + h(r/sigma) sigma + ...: at the scale found, the coefficients are stationary for our loss."""
    a, b = data(5, (40, 3))
    b = a @ np.array([1.0, -2.0, 0.5]) + 0.1 * b
    b[:4] += 5.0
    reference = HuberRegressor(epsilon=1.35, alpha=0.0, fit_intercept=False, tol=1e-10, max_iter=10000).fit(
        a, b
    )
    width = 1.35 * reference.scale_
    left, right = ssn.HuberCost(width, width, b).one_sided_derivatives(a @ reference.coef_)
    np.testing.assert_allclose(left, right, atol=1e-12)
    assert np.abs(a.T @ left).max() < 1e-5 * np.abs(a.T @ b).max()
