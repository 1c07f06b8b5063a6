"""Saddle points are told from minima, whatever the structure of the proximal derivative; by eigenvalues."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, aslinearoperator

import ssn
from ssn.second_order import lowest_curvature
from ssn.status import Outcome


def rotated(values, seed=0):
    """A symmetric matrix with these eigenvalues, and its eigenvectors."""
    q, _ = np.linalg.qr(np.random.default_rng(seed).standard_normal((len(values),) * 2))
    return q @ np.diag(values) @ q.T, q


@pytest.mark.parametrize("kind", ["ball", "weighted ball", "simplex", "group", "cone"])
def test_curvature_on_the_free_directions(kind):
    """f'' + (D^-1 - I)/s on the range of D, against the matrix of D inverted on its range by a pseudo-inverse."""
    rng = np.random.default_rng(2)
    n, step = 6, 0.7
    weights = rng.uniform(0.5, 2.0, n) if kind == "weighted ball" else np.ones(n)
    cost = {
        "ball": ssn.EuclideanBall(1.0), "weighted ball": ssn.EuclideanBall(1.0, weights=weights),
        "simplex": ssn.Simplex(2.0), "group": ssn.GroupSparseCost(0.3, [0, 0, 0, 1, 1, 1], lower=-0.6, upper=0.7),
        "cone": ssn.SecondOrderCone(3),
    }[kind]  # fmt: skip
    H = rng.standard_normal((n, n))
    H = H + H.T
    D = cost.prox_derivative(2.0 * rng.standard_normal(n), step)
    root = np.sqrt(weights)
    matrix = root[:, None] * D.apply(np.eye(n)) / root
    inverse = np.linalg.pinv(matrix, rcond=1e-8)
    project = inverse @ matrix
    whole = project @ (H / np.outer(root, root) + (inverse - project) / step) @ project
    free = np.linalg.matrix_rank(project, tol=1e-6)
    expected = np.linalg.eigvalsh(whole + 1e6 * (np.eye(n) - project))[0]
    found = lowest_curvature(H, weights, D, step)
    assert 0 < free <= n
    assert found.value == pytest.approx(expected, rel=1e-6, abs=1e-8)
    assert found.negative == (expected < 0)
    assert np.sum(weights * found.direction**2) == pytest.approx(1.0)


@pytest.mark.parametrize("structure", ["dense", "sparse", "operator"])
def test_diagonal_derivatives_of_every_kind_of_hessian(structure):
    H, q = rotated([-1.0, 0.5, 1.0, 2.0, 3.0])
    given = {"dense": H, "sparse": sp.csr_array(H), "operator": aslinearoperator(H)}[structure]
    d = ssn.Bounds(-10.0, 10.0).prox_derivative(np.zeros(5), 0.3)
    found = lowest_curvature(given, np.ones(5), d, 0.3)
    assert found.value == pytest.approx(-1.0, rel=1e-5) and found.negative
    assert abs(found.direction @ q[:, 0]) == pytest.approx(1.0, rel=1e-4)
    none = ssn.Bounds(-1.0, 1.0).prox_derivative(np.full(5, 7.0), 0.3)
    assert lowest_curvature(given, np.ones(5), none, 0.3) is None


def test_a_saddle_on_a_ball_is_told():
    """Stationary points of 1/2 u'Hu on the sphere are eigenvectors; only that of the least eigenvalue is a minimum."""
    H, q = rotated([-3.0, -2.0, -1.0, 4.0])
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(H, np.zeros(4)), cost=ssn.EuclideanBall(1.0))
    assert not problem.convex
    saddle = ssn.solve(problem, q[:, 1])
    assert saddle.outcome is Outcome.SADDLE_POINT and not saddle.converged
    assert "negative curvature -1.0e+00" in saddle.message  # -3 - (-2)
    least = ssn.solve(problem, q[:, 0] + 0.01 * q[:, 2]).require()
    assert abs(least.x @ q[:, 0]) == pytest.approx(1.0, rel=1e-8)


def test_a_saddle_with_groups_is_told():
    """u = (0, 0.45, ...) is stationary by symmetry: curvature -1 + beta/||u|| along the first component."""
    H = np.diag([-1.0, 2.0, 2.0, 2.0])
    cost = ssn.GroupSparseCost(0.1, [0, 0, 1, 1], lower=-1.0, upper=1.0)
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(H, np.array([0.0, 1.0, 0.0, 0.3])), cost=cost)
    saddle = ssn.solve(problem, np.array([0.0, 0.4, 0.0, 0.0]))
    np.testing.assert_allclose(saddle.x, [0.0, 0.45, 0.0, 0.1], atol=1e-9)
    assert saddle.outcome is Outcome.SADDLE_POINT and "negative curvature -7.8e-01" in saddle.message
    best = ssn.solve(problem, np.array([0.9, 0.2, 0.0, 0.0])).require()
    assert best.objective < saddle.objective - 0.1


def test_a_power_cost_in_control_is_a_minimum_on_its_support():
    """And a component on the concave part, below the size of strict convexity, is a saddle that is told."""
    cost = ssn.PowerCost(0.3, 0.5)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(np.eye(2)), control_operator=np.eye(2), target=np.array([1.0, 0.2]), control_weight=0.1,
        cost=cost,
    )  # fmt: skip
    solution = ssn.solve(problem).require()
    step = problem.natural_step()
    v = solution.x - step * problem.smooth(solution.x)[1]
    hessian = LinearOperator((2, 2), matvec=lambda x: 1.1 * np.ravel(x), dtype=float)
    found = lowest_curvature(hessian, np.ones(2), cost.prox_derivative(v, step), step)
    size = solution.x[solution.x != 0]
    expected = 1.1 - 0.3 * 0.25 * np.abs(size) ** -1.5
    assert found.value == pytest.approx(expected.min(), rel=1e-8) and not found.negative
