"""Published complementarity problems: linear ones, small nonlinear ones, and two elastic-plastic and fluid problems."""

import numpy as np
import pytest
import scipy.sparse as sp

import ssn


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


# B. Averick, R. Carter, J. More, G. Xue, The MINPACK-2 test problem collection, Argonne MCS-P153-0692, 1992;
# definitions also in J. More and G. Toraldo, SIAM J. Optim. 1 (1991) 93-113. Optimal values computed by independent
# solvers (sparse active sets, L-BFGS-B) to the digits shown.

TORSION = {25: -0.41693575347, 50: -0.418087632020}
BEARING = {25: -0.18017327151, 50: -0.180487995008}


def torsion(n, c=5.0):
    """int |grad v|^2/2 - c v over the unit square, |v| <= distance to the boundary."""
    h = 1.0 / (n + 1)
    line = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    stiffness = sp.csr_array(sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line))
    edge = np.minimum(np.arange(1, n + 1), n - np.arange(n)) * h
    distance = np.minimum.outer(edge, edge).ravel()
    return stiffness, np.full(n * n, -c * h * h), -distance, distance


def bearing(n, b=10.0, e=0.1):
    """int (1 + e cos x1)^3 |grad v|^2/2 - e sin(x1) v over (0, 2 pi) x (0, 2 b), v >= 0."""
    hx, hy = 2 * np.pi / (n + 1), 2 * b / (n + 1)
    nodes = np.arange(n + 2) * hx
    w = (1 + e * np.cos(np.arange(-1, n + 3) * hx)) ** 3  # w[i + 1] belongs to node i
    full = (n + 2) ** 2
    rows, columns, values = [], [], []

    def edge(p, q, weight):  # weight (v_p - v_q)^2 / 2
        rows.extend([p, q, p, q])
        columns.extend([p, q, q, p])
        values.extend([weight, weight, -weight, -weight])

    for i in range(n + 2):
        lower, upper = (2 * w[i + 1] + w[i + 2]) / 6, (2 * w[i + 1] + w[i]) / 6
        for j in range(n + 2):
            p = i * (n + 2) + j
            if i <= n and j <= n:
                edge(p, p + n + 2, hx * hy * lower / hx**2)
                edge(p, p + 1, hx * hy * lower / hy**2)
            if i >= 1 and j >= 1:
                edge(p, p - n - 2, hx * hy * upper / hx**2)
                edge(p, p - 1, hx * hy * upper / hy**2)
    stiffness = sp.csr_array(sp.coo_array((values, (rows, columns)), shape=(full, full)))
    load = -np.repeat(e * hx * hy * np.sin(nodes), n + 2)
    inner = np.arange(full).reshape(n + 2, n + 2)[1:-1, 1:-1].ravel()
    return sp.csr_array(stiffness[inner][:, inner]), load[inner]


@pytest.mark.parametrize("n", list(TORSION))
def test_elastic_plastic_torsion(n):
    stiffness, load, lower, upper = torsion(n)
    solution = ssn.solve(ssn.ComplementarityProblem(ssn.AffineMap(stiffness, load), lower, upper)).require()
    assert solution.objective == pytest.approx(TORSION[n], abs=1e-11)
    assert 0.5 * solution.x @ (stiffness @ solution.x) + load @ solution.x == pytest.approx(
        TORSION[n], abs=1e-11
    )
    assert residual(lambda x: stiffness @ x + load, solution.x, lower, upper) < 1e-9


@pytest.mark.parametrize("n", list(BEARING))
def test_journal_bearing(n):
    stiffness, load = bearing(n)
    solution = ssn.solve(ssn.ComplementarityProblem(ssn.AffineMap(stiffness, load))).require()
    assert solution.objective == pytest.approx(BEARING[n], abs=1e-11)
    assert (solution.multipliers["contact"] >= -1e-12).all()
    assert residual(lambda x: stiffness @ x + load, solution.x) < 1e-8


# I. Bongartz, A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995) 123-160: optima printed in the files.
# The objective is a sum over interior nodes, a quarter of the squared differences to the four neighbours each, so that
# edges to the boundary have half weight.

OBSTCLAE = {4: 0.753659753, 10: 1.397897560, 23: 1.678027027, 32: 1.748270032}
TORSION1 = {2: -0.51851852, 5: -0.49234185, 11: -0.45608771}


def half_weight_stiffness(n):
    diagonal = 2.0 * np.ones(n)
    diagonal[[0, -1]] = 1.5
    line = sp.diags_array([-np.ones(n - 1), diagonal, -np.ones(n - 1)], offsets=[-1, 0, 1])
    return sp.csr_array(sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line))


@pytest.mark.parametrize("points", list(OBSTCLAE))
def test_membrane_over_an_obstacle(points):
    n, h = points - 2, 1.0 / (points - 1)
    t = np.arange(1, n + 1) * h
    obstacle = np.outer(np.sin(3.2 * t), np.sin(3.3 * t)).ravel()
    F = ssn.AffineMap(half_weight_stiffness(n), np.full(n * n, -h * h))
    solution = ssn.solve(ssn.ComplementarityProblem(F, obstacle, 2000.0)).require()
    assert solution.objective == pytest.approx(OBSTCLAE[points], abs=1e-9)


@pytest.mark.parametrize("q", list(TORSION1))
def test_torsion_with_half_weight_edges(q):
    n, h = 2 * q - 2, 1.0 / (2 * q - 1)
    edge = np.minimum(np.arange(1, n + 1), n - np.arange(n)) * h
    distance = np.minimum.outer(edge, edge).ravel()
    F = ssn.AffineMap(half_weight_stiffness(n), np.full(n * n, -5.0 * h * h))
    solution = ssn.solve(ssn.ComplementarityProblem(F, -distance, distance)).require()
    assert solution.objective == pytest.approx(TORSION1[q], abs=1e-8)
