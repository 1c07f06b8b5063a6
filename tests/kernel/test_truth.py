"""What the kernel claims is true: solutions, certificates, multipliers, and no false "converged"."""

import itertools

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st
from scipy.sparse.linalg import LinearOperator

import ssn
from tests.kernel.examples import control


def draw_quadratic(seed, n, *, low_rank=False):
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((n, n))
    h = a @ a.T + 0.1 * np.eye(n)
    return h, 3 * rng.standard_normal(n), rng


def draw_cost(rng, n, kind):
    if kind == "l1":
        return ssn.SparseCost(rng.uniform(0, 2, n))
    lower = rng.uniform(-1.0, 0.3, n)
    upper = lower + rng.uniform(0.1, 1.0, n)
    return (
        ssn.Bounds(lower, upper) if kind == "bounds" else ssn.SparseCost(rng.uniform(0, 2, n), lower, upper)
    )


def by_enumeration(h, b, cost, n):
    """min 1/2 u'Hu - b'u + g(u) by trying every combination of pieces: fixed at a bound, at 0, or of one sign."""
    beta = np.broadcast_to(cost.beta, n)
    lower, upper = np.broadcast_to(cost.lower, n), np.broadcast_to(cost.upper, n)
    best, best_value = None, np.inf
    for choice in itertools.product(("lower", "negative", "zero", "positive", "upper"), repeat=n):
        u, slope, free = np.zeros(n), np.zeros(n), np.zeros(n, dtype=bool)
        for i, c in enumerate(choice):
            if c in ("lower", "upper"):
                u[i] = lower[i] if c == "lower" else upper[i]
            elif c != "zero":
                free[i], slope[i] = True, beta[i] if c == "positive" else -beta[i]
        if not np.isfinite(u).all():
            continue
        if free.any():
            rhs = (b - slope - h @ u)[free]
            u[free] = np.linalg.solve(h[np.ix_(free, free)], rhs)
        value = 0.5 * u @ h @ u - b @ u + cost.value(u)
        if value < best_value:
            best, best_value = u, value
    return best


@pytest.mark.parametrize("kind", ["l1", "bounds", "both"])
@pytest.mark.parametrize("sparse", [False, True])
@given(seed=st.integers(0, 10**6), n=st.integers(1, 4))
def test_quadratic_against_enumeration(kind, sparse, seed, n):
    h, b, rng = draw_quadratic(seed, n)
    cost = draw_cost(rng, n, kind)
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(sp.csc_array(h) if sparse else h, b), cost=cost)
    solution = ssn.solve(problem).require()
    expected = by_enumeration(h, b, cost, n)
    np.testing.assert_allclose(solution.x, expected, atol=1e-7 * (1 + np.abs(expected).max()))
    assert np.linalg.norm(solution.x - expected) <= solution.certificate.bound + 1e-12 * (
        1 + np.linalg.norm(b)
    )
    parts = solution.multipliers
    np.testing.assert_allclose(sum(parts.values()), b - h @ solution.x, atol=1e-6)
    assert solution.objective == pytest.approx(
        0.5 * expected @ h @ expected - b @ expected + cost.value(expected), abs=1e-8
    )


def clarabel_solution(h, b, beta, lower, upper):
    """min 1/2 u'Hu - b'u + beta'|u|, lower <= u <= upper, split into u and its modulus t."""
    n = b.size
    p = sp.block_diag([sp.csc_matrix(h), sp.csc_matrix((n, n))]).tocsc()
    eye, zero = sp.eye_array(n), sp.csc_array((n, n))
    rows = [sp.hstack([eye, -eye]), sp.hstack([-eye, -eye])]
    limits = [np.zeros(n), np.zeros(n)]
    for sign, bound in ((1.0, upper), (-1.0, lower)):
        finite = np.isfinite(bound)
        rows.append(sp.hstack([sign * eye, zero]).tocsr()[finite])
        limits.append(sign * bound[finite])
    a, limit = sp.vstack(rows).tocsc(), np.concatenate(limits)
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    q = np.concatenate([-b, beta])
    result = clarabel.DefaultSolver(
        sp.triu(p).tocsc(), q, a, limit, [clarabel.NonnegativeConeT(limit.size)], settings
    ).solve()
    return np.array(result.x)[:n]


@pytest.mark.parametrize("weighted", [False, True])
@given(
    seed=st.integers(0, 10**6),
    shape=st.sampled_from([(30, 12), (8, 20), (15, 15)]),
    kind=st.sampled_from(["l1", "both"]),
)
def test_least_squares_against_an_interior_point_method(weighted, seed, shape, kind):
    rng = np.random.default_rng(seed)
    a, b = rng.standard_normal(shape), rng.standard_normal(shape[0])
    weights = rng.uniform(0.5, 2, shape[0]) if weighted else None
    cost = draw_cost(rng, shape[1], kind)
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b, weights), cost=cost)
    solution = ssn.solve(problem).require()
    w = np.ones(shape[0]) if weights is None else weights
    lower, upper = (np.broadcast_to(x, shape[1]) for x in (cost.lower, cost.upper))
    expected = clarabel_solution(
        (a.T * w) @ a, a.T @ (w * b), np.broadcast_to(cost.beta, shape[1]), lower, upper
    )

    def objective(u):
        return 0.5 * np.sum(w * (a @ u - b) ** 2) + np.sum(cost.beta * np.abs(u))

    assert (solution.x >= lower).all() and (solution.x <= upper).all()
    assert objective(solution.x) <= objective(expected) + 1e-7 * (1 + abs(objective(expected)))
    assert solution.objective == pytest.approx(objective(solution.x), rel=1e-12)


@given(seed=st.integers(0, 10**6), n=st.sampled_from([3, 12]), sparse=st.booleans())
def test_logistic_is_stationary(seed, n, sparse):
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((25, n))
    labels = np.where(rng.random(25) < 0.5, -1.0, 1.0)
    problem = ssn.CompositeProblem(
        smooth=ssn.Logistic(sp.csr_array(a) if sparse else a, labels), cost=ssn.SparseCost(0.8, -2.0, 2.0)
    )
    u = ssn.solve(problem).require().x
    gradient = -a.T @ (labels / (1 + np.exp(labels * (a @ u))))
    shrunk = np.sign(u - gradient) * np.maximum(np.abs(u - gradient) - 0.8, 0)
    np.testing.assert_allclose(u, np.clip(shrunk, -2, 2), atol=1e-6)


def test_operators_give_the_same_as_matrices():
    h, b, rng = draw_quadratic(3, 25)
    a = rng.standard_normal((40, 25))
    rhs = rng.standard_normal(40)

    def operator(m):
        return LinearOperator(m.shape, matvec=lambda x: m @ x, rmatvec=lambda x: m.T @ x, dtype=float)

    for part in (ssn.Quadratic, ssn.LeastSquares):
        data, right = (h, b) if part is ssn.Quadratic else (a, rhs)
        found = [
            ssn.solve(
                ssn.CompositeProblem(smooth=part(kind(data), right), cost=ssn.SparseCost(0.5, -0.3, 0.4))
            ).require()
            for kind in (np.asarray, sp.csr_array, operator)
        ]
        for other in found[1:]:
            np.testing.assert_allclose(other.x, found[0].x, atol=1e-7)


def test_weights_do_not_move_an_unweighted_minimiser():
    """Weighted cost and weighted product: min f + sum w_i beta |u_i|."""
    h, b, rng = draw_quadratic(11, 6)
    weights = rng.uniform(0.3, 3, 6)
    weighted = ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=ssn.SparseCost(0.7), weights=weights)
    plain = ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=ssn.SparseCost(0.7 * weights))
    np.testing.assert_allclose(ssn.solve(weighted).require().x, ssn.solve(plain).require().x, atol=1e-8)


# certificates


@given(seed=st.integers(0, 10**6), steps=st.integers(0, 3), alpha=st.sampled_from([1e2, 1.0, 1e-2]))
def test_certificates_of_control_problems_are_true(seed, steps, alpha):
    """Also where the solve was cut short; ||S||^2 is about 1e3."""
    rng = np.random.default_rng(seed)
    n, m, k = 20, 9, 12
    e = sp.csr_array(
        sp.diags_array([-np.ones(n - 1), 2.1 * np.ones(n), -0.8 * np.ones(n - 1)], offsets=[-1, 0, 1])
    )
    arguments = {
        "control_operator": rng.standard_normal((n, k)),
        "observation": rng.standard_normal((m, n)),
        "target": rng.standard_normal(m),
        "source": rng.standard_normal(n),
        "control_mass": rng.uniform(0.5, 2, k),
        "observation_mass": rng.uniform(0.5, 2, m),
        "cost": ssn.SparseCost(0.05, -0.4, 0.5),
        "control_weight": alpha,
    }
    problem = ssn.ControlProblem(state=ssn.SteadyState(e), **arguments)
    tight = ssn.solve(problem, tolerance=1e-12)
    rough = ssn.solve(problem, rng.standard_normal(k), max_steps=steps)
    s = arguments["observation"] @ np.linalg.solve(e.toarray(), arguments["control_operator"])
    z = arguments["target"] - arguments["observation"] @ np.linalg.solve(e.toarray(), arguments["source"])
    wy, wu = arguments["observation_mass"], arguments["control_mass"]
    h = (s.T * wy) @ s + alpha * np.diag(wu)
    exact = clarabel_solution(h, s.T @ (wy * z), 0.05 * wu, np.full(k, -0.4), np.full(k, 0.5))
    slack = 1e-6 * np.sqrt(np.sum(wu))
    for solution in (tight, rough):
        distance = np.sqrt(np.sum(wu * (solution.x - exact) ** 2))
        assert distance <= solution.certificate.bound + slack
        assert (
            solution.certificate.relative
            == pytest.approx(
                solution.certificate.bound / max(np.sqrt(np.sum(wu * solution.x**2)), 1e-300), rel=1e-6
            )
            or not solution.x.any()
        )
    assert tight.certificate.bound < 1e-4
    assert np.sqrt(np.sum(wu * (tight.x - exact) ** 2)) < 1e-4


@given(seed=st.integers(0, 10**6), size=st.sampled_from([1e-3, 1.0, 100.0]), weighted=st.booleans())
def test_certificates_of_composite_problems_are_true_anywhere(seed, size, weighted):
    """At points far from the solution the bound is neither violated nor void."""
    h, b, rng = draw_quadratic(seed, 6)
    cost = draw_cost(rng, 6, "both")
    weights = rng.uniform(0.3, 3, 6) if weighted else np.ones(6)
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=cost, weights=weights)
    exact = ssn.solve(problem, tolerance=1e-12).require().x
    for _ in range(10):
        point, certificate = problem.certify(exact + size * rng.standard_normal(6))
        distance = np.sqrt(np.sum(weights * (point - exact) ** 2))
        assert distance <= certificate.bound * (1 + 1e-9) + 1e-9
        assert certificate.bound <= 1e6 * max(size, 1e-9)


@given(seed=st.integers(0, 10**6), alpha=st.sampled_from([1.0, 1e-2, 1e-4]))
def test_certificates_of_tracking_problems_are_true_anywhere(seed, alpha):
    """||z - u*|| <= ||S (z - u)|| / (2 sqrt(alpha)), z the proximal map of the normal map at any u."""
    rng = np.random.default_rng(seed)
    k, n = 6, 8
    e = rng.standard_normal((n, n)) + 5 * np.eye(n)
    b, z = rng.standard_normal((n, k)), rng.standard_normal(n)
    cost = ssn.SparseCost(0.02, -0.5, 0.3)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(e), control_operator=b, target=z, cost=cost, control_weight=alpha
    )
    s = np.linalg.solve(e, b)
    exact = clarabel_solution(
        s.T @ s + alpha * np.eye(k), s.T @ z, np.full(k, 0.02), np.full(k, -0.5), np.full(k, 0.3)
    )
    for _ in range(10):
        u = exact + 0.1 * rng.standard_normal(k)
        moved = cost.prox(-s.T @ (s @ u - z) / alpha, 1 / alpha)
        certificate = problem.certify(s @ (moved - u), 1.0, 0.0)
        assert np.linalg.norm(moved - exact) <= certificate.bound + 1e-5


def test_control_solution_satisfies_its_own_equations():
    problem = control(16, alpha=1e-5)
    solution = ssn.solve(problem).require()
    e, mass = problem.state.matrix, problem.weights
    np.testing.assert_allclose(e @ solution.state, mass * solution.x, atol=1e-12)
    np.testing.assert_allclose(e.T @ solution.adjoint, mass * (problem.target - solution.state), atol=1e-12)
    p = solution.adjoint  # B' p / Wu
    shrunk = np.sign(p) * np.maximum(np.abs(p) - 1e-3, 0) / 1e-5
    np.testing.assert_allclose(solution.x, np.clip(shrunk, -30, 30), atol=1e-6 * 30)
    parts = solution.multipliers
    np.testing.assert_allclose(parts["sparsity"] + parts["bounds"], p - 1e-5 * solution.x, atol=1e-12)
    assert (parts["bounds"][solution.x == 30] >= 0).all() and (parts["bounds"][solution.x == -30] <= 0).all()
    assert (np.abs(solution.x) == 30).any() and (solution.x == 0).any()


# no false "converged"


class Wrapped:
    """A state model with an error in its answers."""

    def __init__(self, inner, *, solve=None, adjoint=None):
        self.inner, self.size = inner, inner.size
        self.wrong_solve, self.wrong_adjoint = solve, adjoint

    def attach(self, work):
        self.inner.attach(work)

    def solve(self, rhs):
        y = self.inner.solve(rhs)
        return y if self.wrong_solve is None else self.wrong_solve(y)

    def adjoint_solve(self, rhs):
        p = self.inner.adjoint_solve(rhs)
        return p if self.wrong_adjoint is None else self.wrong_adjoint(p)

    def residual(self, y, rhs):
        return self.inner.residual(y, rhs)

    def adjoint_residual(self, p, rhs):
        return self.inner.adjoint_residual(p, rhs)


def independent_accuracy(problem, u, alpha, beta, bound):
    """||u - prox(normal map)|| / ||u|| with dense exact state solves."""
    inner = problem.state.inner if isinstance(problem.state, Wrapped) else problem.state
    e, mass = inner.matrix.toarray(), problem.weights
    y = np.linalg.solve(e, mass * u)
    p = np.linalg.solve(e.T, mass * (problem.target - y))
    moved = np.clip(np.sign(p) * np.maximum(np.abs(p) - beta, 0) / alpha, -bound, bound)
    return np.linalg.norm(u - moved) / np.linalg.norm(moved)


def noisy(level):
    """Noise that repeats from run to run and differs from call to call."""
    rng = np.random.default_rng(0)
    return lambda y: y * (1 + level * rng.standard_normal(y.shape))


@pytest.mark.parametrize("where", ["solve", "adjoint"])
@pytest.mark.parametrize(
    ("level", "alpha"), [(1e-3, 1e-3), (1e-6, 1e-3), (1e-3, 1e-6), (1e-6, 1e-6), (1e-8, 1e-6)]
)
def test_a_noisy_state_model_is_never_called_converged(where, level, alpha):
    exact = control(10, alpha=alpha)
    problem = control(10, alpha=alpha, state=Wrapped(exact.state, **{where: noisy(level)}))
    solution = ssn.solve(problem)
    error = independent_accuracy(problem, solution.x, alpha, 1e-3, 30.0)
    assert error > 1e-8  # otherwise the noise has no effect and this tests nothing
    assert not solution.converged, f"true accuracy {error:.1e}"
    assert solution.outcome in (ssn.Outcome.INACCURATE, ssn.Outcome.STALLED, ssn.Outcome.STEP_LIMIT)


@pytest.mark.parametrize("factor", [1 + 1e-3, 1 + 1e-5])
def test_a_wrong_adjoint_is_never_called_converged(factor):
    """A systematic error of the adjoint: only the state model's own adjoint residual can tell."""
    exact = control(10)
    problem = control(10, state=Wrapped(exact.state, adjoint=lambda p: factor * p))
    solution = ssn.solve(problem)
    error = independent_accuracy(problem, solution.x, 1e-4, 1e-3, 30.0)
    assert error > 1e-8
    assert not solution.converged, f"true accuracy {error:.1e}"


@pytest.mark.parametrize("globalization", ["auto", "residual", "full"])
def test_an_operator_with_a_wrong_adjoint(globalization):
    rng = np.random.default_rng(1)
    a, b = rng.standard_normal((30, 12)), rng.standard_normal(30)
    wrong = a + 1e-2 * rng.standard_normal(a.shape)
    operator = LinearOperator(a.shape, matvec=lambda x: a @ x, rmatvec=lambda x: wrong.T @ x, dtype=float)
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(operator, b), cost=ssn.SparseCost(0.5))
    solution = ssn.solve(problem, globalization=globalization)
    gradient = a.T @ (a @ solution.x - b)
    shrunk = np.sign(solution.x - gradient) * np.maximum(np.abs(solution.x - gradient) - 0.5, 0)
    error = np.linalg.norm(solution.x - shrunk) / np.linalg.norm(shrunk)
    assert error > 1e-6
    assert not solution.converged, f"true residual {error:.1e}"


@given(seed=st.integers(0, 10**6))
def test_a_wrong_derivative_never_gives_a_false_root(seed):
    rng = np.random.default_rng(seed)
    m = rng.standard_normal((5, 5)) + 4 * np.eye(5)
    q = rng.standard_normal(5)

    class Wrong:
        def residual(self, x):
            return m @ x + np.abs(x) - q

        def linearize(self, x):
            return ssn.Linearization(self.residual(x), m + rng.standard_normal((5, 5)))

    solution = ssn.solve(Wrong(), np.zeros(5), max_steps=30)
    true = np.sqrt(np.mean((m @ solution.x + np.abs(solution.x) - q) ** 2))
    assert solution.converged == (true <= 1e-9) or not solution.converged
    assert solution.accuracy == pytest.approx(true, rel=1e-6, abs=1e-14)
