"""Published complementarity problems: linear ones, small nonlinear ones, and a membrane over an obstacle."""

import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from ..problems.loading import load

classic, double_obstacle = load("complementarity_set"), load("double_obstacle")


def residual(value, x, lower=0.0, upper=np.inf):
    """Independent of the kernel: |mid(x - upper, x - lower, F(x))|."""
    f = value(x)
    return float(np.abs(np.maximum(np.minimum(f, x - lower), x - upper)).max())


@pytest.mark.parametrize("n", [10, 100])
@pytest.mark.parametrize(("make", "at"), [(classic.murty_matrix, -1), (classic.fathi_matrix, 0)])
@pytest.mark.parametrize("sparse", [False, True])
def test_exponential_examples(make, at, n, sparse):
    """Pivoting methods need 2^n steps; the solution is a unit vector."""
    m = make(n)
    problem = ssn.ComplementarityProblem(ssn.AffineMap(sp.csr_array(m) if sparse else m, -np.ones(n)))
    solution = ssn.solve(problem, max_steps=400).require()
    expected = np.zeros(n)
    expected[at] = 1.0
    np.testing.assert_allclose(solution.x, expected, atol=1e-6)
    assert residual(lambda x: m @ x - 1, solution.x) < 1e-6


STARTS = [
    (0, 0, 0, 0), (1, 1, 1, 1), (100, 100, 100, 100), (1, 0, 1, 0), (1, 0, 0, 0), (0, 1, 1, 0), (0, 1, 0, 1),
    (1.25, 0, 0, 0.5),
]  # fmt: skip
SMALL = {
    "Kojima-Shindo": classic.KOJIMA_SHINDO,
    "Josephy": classic.JOSEPHY,
}


def solve_small(name, start):
    published = SMALL[name]
    problem = ssn.ComplementarityProblem(ssn.SmoothMap(published.value, published.derivative), size=4)
    solution = ssn.solve(problem, np.array(start, dtype=float))
    return solution, published.distance(solution.x) < 1e-5, residual(published.value, solution.x)


@pytest.mark.parametrize("name", SMALL)
@pytest.mark.parametrize("start", STARTS, ids=str)
def test_customary_starts_are_solved(name, start):
    solution, found, _ = solve_small(name, start)
    assert solution.converged, f"{solution.outcome.value}: {solution.message}, x = {solution.x}"
    assert found, solution.x


@pytest.mark.parametrize("name", SMALL)
def test_nothing_unsolved_is_claimed(name):
    claimed = 0
    for start in STARTS:
        solution, found, rest = solve_small(name, start)
        if solution.converged:
            claimed += 1
            assert found
            assert rest < 1e-7
        else:
            assert not found or rest > 1e-12
    assert claimed >= 3


@pytest.mark.parametrize("start", [0.0, 0.5, 1.0, -1.0, 1.5, 3.0, 10.0])
def test_billups(start):
    """F(x) = (x - 1)^2 - 1.01, x >= 0: merit functions have a local minimum near 0 that is no root.

    S. Billups, thesis, Wisconsin, 1995. F(0) < 0, so the only solution is 1 + sqrt(1.01).
    """

    problem = classic.build("billups")
    solution = ssn.solve(problem, [start])
    root = 1 + np.sqrt(1.01)
    assert root == pytest.approx(2.004987562, abs=1e-9)
    assert solution.converged == (abs(solution.x[0] - root) < 1e-6)
    if start >= 1.5:
        assert solution.converged


# I. Bongartz, A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995) 123-160: optima printed in the files.
# The objective is a sum over interior nodes, a quarter of the squared differences to the four neighbours each, so that
# edges to the boundary have half weight.

OBSTCLAE = {4: 0.753659753, 10: 1.397897560, 23: 1.678027027, 32: 1.748270032}


@pytest.mark.parametrize("points", list(OBSTCLAE))
def test_membrane_over_an_obstacle(points):
    n, h = points - 2, 1.0 / (points - 1)
    t = np.arange(1, n + 1) * h
    obstacle = np.outer(np.sin(3.2 * t), np.sin(3.3 * t)).ravel()
    F = ssn.AffineMap(double_obstacle.five_point(n, 0.5), np.full(n * n, -h * h))
    solution = ssn.solve(ssn.ComplementarityProblem(F, obstacle, 2000.0)).require()
    assert solution.objective == pytest.approx(OBSTCLAE[points], abs=1e-9)
