"""Published complementarity problems: linear ones, small nonlinear ones, and a membrane over an obstacle."""

import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from ..problems.loading import load

double_obstacle = load("double_obstacle")


def residual(value, x, lower=0.0, upper=np.inf):
    """Independent of the kernel: |mid(x - upper, x - lower, F(x))|."""
    f = value(x)
    return float(np.abs(np.maximum(np.minimum(f, x - lower), x - upper)).max())


# linear: K. Murty, Math. Program. 8 (1975) 345-366, and Y. Fathi, Math. Program. 17 (1979) 335-344 (from memory)


def murty(n):
    return np.triu(2.0 * np.ones((n, n)), 1) + np.eye(n)


def fathi(n):
    lower = np.tril(2.0 * np.ones((n, n)), -1) + np.eye(n)
    return lower @ lower.T


@pytest.mark.parametrize("n", [10, 100])
@pytest.mark.parametrize(("make", "at"), [(murty, -1), (fathi, 0)])
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


# nonlinear: M. Kojima and S. Shindo, J. Oper. Res. Soc. Japan 29 (1986) 352-374;
# N. Josephy, Wisconsin MRC report 1965, 1979


def kojima_shindo(x):
    a, b, c, d = x
    return np.array([
        3 * a * a + 2 * a * b + 2 * b * b + c + 3 * d - 6,
        2 * a * a + a + b * b + 10 * c + 2 * d - 2,
        3 * a * a + a * b + 2 * b * b + 2 * c + 9 * d - 9,
        a * a + 3 * b * b + 2 * c + 3 * d - 3,
    ])  # fmt: skip


def kojima_shindo_derivative(x):
    a, b, _, _ = x
    return np.array([
        [6 * a + 2 * b, 2 * a + 4 * b, 1, 3],
        [4 * a + 1, 2 * b, 10, 2],
        [6 * a + b, a + 4 * b, 2, 9],
        [2 * a, 6 * b, 2, 3],
    ])  # fmt: skip


def josephy(x):
    a, b, c, d = x
    return np.array([
        3 * a * a + 2 * a * b + 2 * b * b + c + 3 * d - 6,
        2 * a * a + a + b * b + 3 * c + 2 * d - 2,
        3 * a * a + a * b + 2 * b * b + 2 * c + 3 * d - 1,
        a * a + 3 * b * b + 2 * c + 3 * d - 3,
    ])  # fmt: skip


def josephy_derivative(x):
    derivative = kojima_shindo_derivative(x).astype(float)
    derivative[1, 2], derivative[2, 3] = 3, 3
    return derivative


STARTS = [
    (0, 0, 0, 0), (1, 1, 1, 1), (100, 100, 100, 100), (1, 0, 1, 0), (1, 0, 0, 0), (0, 1, 1, 0), (0, 1, 0, 1),
    (1.25, 0, 0, 0.5),
]  # fmt: skip
DEGENERATE = np.array([np.sqrt(6) / 2, 0, 0, 0.5])
REGULAR = np.array([1.0, 0, 3, 0])
SMALL = {
    "Kojima-Shindo": (kojima_shindo, kojima_shindo_derivative, [DEGENERATE, REGULAR]),
    "Josephy": (josephy, josephy_derivative, [DEGENERATE]),
}


@pytest.mark.parametrize("name", SMALL)
def test_published_solutions_solve_the_statements(name):
    value, derivative, solutions = SMALL[name]
    for x in solutions:
        assert residual(value, x) < 1e-12
    x, h = np.array([0.3, 1.1, 0.7, 2.0]), 1e-6
    quotient = np.stack([(value(x + h * e) - value(x - h * e)) / (2 * h) for e in np.eye(4)], axis=1)
    np.testing.assert_allclose(derivative(x), quotient, atol=1e-7)


def solve_small(name, start):
    value, derivative, solutions = SMALL[name]
    problem = ssn.ComplementarityProblem(ssn.SmoothMap(value, derivative), size=4)
    solution = ssn.solve(problem, np.array(start, dtype=float))
    found = min(np.abs(solution.x - s).max() for s in solutions) < 1e-5
    return solution, found, residual(value, solution.x)


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

    def value(x):
        return (x - 1) ** 2 - 1.01

    problem = ssn.ComplementarityProblem(ssn.SmoothMap(value, lambda x: np.array([[2 * (x[0] - 1)]])), size=1)
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
