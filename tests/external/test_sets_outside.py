"""Sets against a general conic interior-point method, and the nearest correlation matrix against published values."""

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

import ssn


def conic(quadratic, linear, rows, right, cones):
    """minimise 1/2 x'Px + q'x, right - rows x in the cones."""
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    result = clarabel.DefaultSolver(
        sp.csc_matrix(quadratic), linear, sp.csc_matrix(rows), right, cones, settings
    ).solve()
    assert "Solved" in str(result.status)
    return np.array(result.x), result.obj_val


def simplex(n, w):
    rows = np.vstack([w, -np.eye(n)])
    return ssn.Simplex(1.5, w), rows, np.concatenate([[1.5], np.zeros(n)]), [
        clarabel.ZeroConeT(1), clarabel.NonnegativeConeT(n)
    ], 0  # fmt: skip


def half_space(n, w):
    a = np.cos(np.arange(n))
    return ssn.HalfSpace(a, -1.0, w), a[None], np.array([-1.0]), [clarabel.NonnegativeConeT(1)], 0


def hyperplane(n, w):
    a = np.cos(np.arange(n))
    return ssn.Hyperplane(a, -1.0, w), a[None], np.array([-1.0]), [clarabel.ZeroConeT(1)], 0


def euclidean_ball(n, w):
    centre = np.sin(np.arange(n))
    root = np.sqrt(w)
    rows = np.vstack([np.zeros(n), -np.diag(root)])
    right = np.concatenate([[0.8], -root * centre])
    return ssn.EuclideanBall(0.8, centre, w), rows, right, [clarabel.SecondOrderConeT(n + 1)], 0


def l1_ball(n, w):
    """With sizes s as n more variables: |u| <= s, w's <= radius."""
    eye, zero = np.eye(n), np.zeros(n)
    rows = np.vstack([np.hstack([eye, -eye]), np.hstack([-eye, -eye]), np.concatenate([zero, w])[None]])
    right = np.concatenate([np.zeros(2 * n), [1.2]])
    return ssn.L1Ball(1.2, w), rows, right, [clarabel.NonnegativeConeT(2 * n + 1)], n


def second_order_cone(n, w):
    return ssn.SecondOrderCone(4), -np.eye(n), np.zeros(n), [clarabel.SecondOrderConeT(4)] * (n // 4), 0


def semidefinite(n, w):
    """Their triangle is the upper one by columns, which is ours: the lower one by rows."""
    order = int((np.sqrt(8 * n + 1) - 1) / 2)
    cone = ssn.PositiveSemidefiniteCone(order)
    return cone, -np.eye(n), np.zeros(n), [clarabel.PSDTriangleConeT(order)], 0


SETS = [simplex, half_space, hyperplane, euclidean_ball, l1_ball, second_order_cone, semidefinite]
SIZES = {second_order_cone: 12, semidefinite: 21}
WEIGHTED = {simplex, half_space, hyperplane, euclidean_ball, l1_ball}


def instance(family, seed):
    n = SIZES.get(family, 10)
    rng = np.random.default_rng(seed)
    w = rng.uniform(0.5, 2.0, n) if family in WEIGHTED else np.ones(n)
    return rng, n, w, *family(n, w)


@pytest.mark.parametrize("family", SETS, ids=lambda f: f.__name__)
@pytest.mark.parametrize("seed", range(4))
def test_projection(family, seed):
    rng, n, w, cost, rows, right, cones, extra = instance(family, seed)
    v = 1.5 * rng.standard_normal(n)
    padded = np.concatenate([np.diag(w), np.zeros((extra, n))])
    quadratic = np.hstack([padded, np.zeros((n + extra, extra))])
    x, _ = conic(quadratic, np.concatenate([-w * v, np.zeros(extra)]), rows, right, cones)
    u = cost.prox(v, 1.0)
    np.testing.assert_allclose(u, x[:n], atol=2e-6)
    ours, theirs = (0.5 * np.sum(w * (y - v) ** 2) for y in (u, x[:n]))
    assert ours == pytest.approx(theirs, rel=1e-8, abs=1e-9)


@pytest.mark.parametrize("family", SETS, ids=lambda f: f.__name__)
@pytest.mark.parametrize("seed", range(4))
def test_constrained_least_squares(family, seed):
    rng, n, w, cost, rows, right, cones, extra = instance(family, 50 + seed)
    a, b = rng.standard_normal((25, n)), 3.0 * rng.standard_normal(25)
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost, weights=w)
    solution = ssn.solve(problem, tolerance=1e-10).require()
    padded = np.concatenate([a.T @ a, np.zeros((extra, n))])
    quadratic = np.hstack([padded, np.zeros((n + extra, extra))])
    x, value = conic(quadratic, np.concatenate([-a.T @ b, np.zeros(extra)]), rows, right, cones)
    assert solution.objective == pytest.approx(value + 0.5 * b @ b, rel=1e-8)
    np.testing.assert_allclose(solution.x, x[:n], atol=1e-5)
    assert len(solution.steps) <= 60


def test_a_product_of_sets():
    rng = np.random.default_rng(9)
    a, b = rng.standard_normal((20, 8)), 3.0 * rng.standard_normal(20)
    cost = ssn.Product([ssn.Simplex(1.0), ssn.SecondOrderCone(3), ssn.Bounds(-0.1, 0.2)], [3, 3, 2])
    ours = ssn.solve(ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost)).require()
    eye = np.eye(8)
    rows = np.vstack([[1, 1, 1, 0, 0, 0, 0, 0], -eye[:3], eye[6:], -eye[6:], -eye[3:6]])
    right = np.array([1.0, 0, 0, 0, 0.2, 0.2, 0.1, 0.1, 0, 0, 0])
    cones = [clarabel.ZeroConeT(1), clarabel.NonnegativeConeT(7), clarabel.SecondOrderConeT(3)]
    x, value = conic(a.T @ a, -a.T @ b, rows, right, cones)
    assert ours.objective == pytest.approx(value + 0.5 * b @ b, rel=1e-8)
    np.testing.assert_allclose(ours.x, x, atol=1e-6)


# the nearest correlation matrix: minimise 1/2 ||X - A||^2, X positive semidefinite with unit diagonal


class NearestCorrelation:
    """The dual: F(y) = diag(P(A + Diag y)) - 1 = 0, P the projection onto the semidefinite cone; X = P(A + Diag y)."""

    def __init__(self, a):
        self.cone = ssn.PositiveSemidefiniteCone(len(a))
        self.a = self.cone.to_vector(a)
        self.diagonal = self.cone.to_vector(np.eye(len(a))) > 0
        self.start = 1.0 - np.diag(a)

    def point(self, y):
        v = self.a.copy()
        v[self.diagonal] += y
        return v

    def matrix(self, y):
        return self.cone.to_matrix(self.cone.prox(self.point(y), 1.0))

    def residual(self, y):
        return self.cone.prox(self.point(y), 1.0)[self.diagonal] - 1.0

    def linearize(self, y):
        v, m = self.point(y), y.size
        derivative = self.cone.prox_derivative(v, 1.0)

        def apply(h):
            lifted = np.zeros(v.size)
            lifted[self.diagonal] = np.ravel(h)
            return derivative.apply(lifted)[self.diagonal]

        jacobian = LinearOperator((m, m), matvec=apply, rmatvec=apply, dtype=float)
        return ssn.Linearization(self.residual(y), jacobian, self.cone.pieces(v, 1.0), True, True)


def test_nearest_correlation_matrix_of_order_three():
    """N. J. Higham, IMA J. Numer. Anal. 22 (2002) 329-343: 0.7607, 0.1573, distance 0.5278; digits computed."""
    a = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    equation = NearestCorrelation(a)
    solution = ssn.solve(equation, tolerance=1e-12).require()
    x = equation.matrix(solution.x)
    assert len(solution.steps) <= 5
    assert x[0, 1] == pytest.approx(0.7606898534, abs=1e-10)
    assert x[0, 2] == pytest.approx(0.1572981061, abs=1e-10)
    assert np.linalg.norm(x - a) == pytest.approx(0.5277904636, abs=1e-10)


def test_nearest_correlation_matrix_of_order_four():
    """tridiag(-1, 2, -1), n = 4: an example printed with a library routine, which takes 3 Newton steps."""
    equation = NearestCorrelation(2 * np.eye(4) - np.eye(4, k=1) - np.eye(4, k=-1))
    solution = ssn.solve(equation).require()
    x = equation.matrix(solution.x)
    assert len(solution.steps) == 3
    np.testing.assert_allclose(x[0, 1:], [-0.8084124981, 0.1915875019, 0.1067750490], atol=1e-8)
    assert x[1, 2] == pytest.approx(-0.6562326948, abs=1e-8)


def random_matrix(n, seed):
    a = np.tril(np.random.default_rng(seed).uniform(-1, 1, (n, n)), -1)
    return a + a.T + np.eye(n)


@pytest.mark.parametrize(("n", "steps"), [(50, 5), (200, 6)])
def test_random_matrices_take_the_published_number_of_steps(n, steps):
    """H. Qi and D. Sun, SIAM J. Matrix Anal. Appl. 28 (2006) 360-385: quadratic convergence; one step more allowed."""
    equation = NearestCorrelation(random_matrix(n, 1))
    solution = ssn.solve(equation).require()
    assert len(solution.steps) <= steps + 1
    assert all(step.action == "full step" for step in solution.steps)
    norms = [step.residual_norm for step in solution.steps]
    assert norms[-2] <= 0.05 * norms[-3]
    x = equation.matrix(solution.x)
    assert np.linalg.eigvalsh(x)[0] >= -1e-13 * n
    np.testing.assert_allclose(np.diag(x), 1.0, atol=1e-8)


def test_nearest_correlation_matrix_as_a_traced_function():
    """The same equation in plain NumPy: the derivative comes from the cone."""
    equation = NearestCorrelation(random_matrix(12, 3))
    lift = sp.csr_array(np.eye(equation.a.size)[:, equation.diagonal])

    def residual(y):
        return lift.T @ equation.cone.prox(equation.a + lift @ y, 1.0) - 1.0

    plain = ssn.solve(residual, start=equation.start).require()
    np.testing.assert_allclose(plain.x, ssn.solve(equation).require().x, atol=1e-7)


def test_nearest_correlation_matrix_by_the_conic_solver():
    a = random_matrix(8, 4)
    equation = NearestCorrelation(a)
    x = equation.matrix(ssn.solve(equation, tolerance=1e-12).require().x)
    n = equation.a.size
    rows = np.vstack([np.eye(n)[equation.diagonal], -np.eye(n)])
    right = np.concatenate([np.ones(8), np.zeros(n)])
    y, _ = conic(np.eye(n), -equation.a, rows, right, [clarabel.ZeroConeT(8), clarabel.PSDTriangleConeT(8)])
    np.testing.assert_allclose(equation.cone.to_vector(x), y, atol=1e-6)
