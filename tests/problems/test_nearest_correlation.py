"""Nearest correlation matrix: printed values, optimality, a conic solver, and Newton steps over the order."""

from __future__ import annotations

import io

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

nearest = load("nearest_correlation")


@pytest.fixture(scope="module")
def solved():
    problem = nearest.build(50)
    return problem, ssn.solve(problem).require()


def test_known_values_hold(solved):
    known = nearest.known(*solved)
    assert len(known) == 9
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_point(solved):
    problem, _ = solved
    moved = ssn.solve(nearest.equation(problem.given.matrix + 1e-3 * np.ones((50, 50))))
    holds = [check["holds"] for check in nearest.known(problem, moved)]
    assert holds[:2] == [False, False]


def test_published_steps_of_the_tridiagonal_example():
    """A library's documented example of order 4 needs 3 Newton steps from y = 1 - diag A."""
    solution = ssn.solve(nearest.build(4, "tridiagonal"), tolerance=1e-7).require()
    assert len(solution.steps) <= 4


@pytest.mark.parametrize(("n", "steps"), [(50, 5), (200, 6)])
def test_steps_on_random_matrices(n, steps):
    """Five and six steps: Qi and Sun (2006) for the behaviour, counts by an independent program."""
    for seed in (0, 1, 2):
        solution = ssn.solve(nearest.build(n, seed=seed)).require()
        assert len(solution.steps) <= steps
        assert all(record.length == 1.0 for record in solution.steps)


def test_alternating_projections_agree(solved):
    problem, solution = solved
    other = nearest.reference(problem, 20.0)
    assert np.linalg.norm(solution.x - other) <= 1e-7 * np.linalg.norm(other)


def conic(matrix):
    """The matrix as variable of a semidefinite program; knows nothing of eigenvalues or multipliers y."""
    n = matrix.shape[0]
    rows, columns = np.triu_indices(n)
    order = np.lexsort((rows, columns))  # clarabel stacks the upper triangle by columns
    rows, columns = rows[order], columns[order]
    root = np.where(rows == columns, 1.0, np.sqrt(2.0))
    fixed = matrix[rows, columns] * root
    size = rows.size
    diagonal = sp.csc_matrix(sp.eye(size, format="csr")[rows == columns])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(sp.eye(size)), -fixed, sp.csc_matrix(sp.vstack([diagonal, -sp.eye(size)])),
        np.concatenate([np.ones(n), np.zeros(size)]), [clarabel.ZeroConeT(n), clarabel.PSDTriangleConeT(n)], settings,
    )  # fmt: skip
    x = np.zeros((n, n))
    x[rows, columns] = x[columns, rows] = np.array(solver.solve().x) / root
    return x


def test_a_conic_solver_finds_the_same_matrix():
    problem = nearest.build(12)
    x = nearest.correlation(problem, ssn.solve(problem).require().x)
    # a gap of 1e-11 bounds the distance of its matrix by sqrt(2e-11): strong convexity, constant 1
    assert np.linalg.norm(x - conic(problem.given.matrix)) <= 4.5e-6
    assert np.linalg.norm(x - problem.given.matrix) > 1.0


def test_a_correlation_matrix_is_its_own_nearest():
    factor = np.random.default_rng(3).standard_normal((6, 9))
    factor /= np.linalg.norm(factor, axis=1)[:, None]
    problem = nearest.equation(factor @ factor.T)
    solution = ssn.solve(problem).require()
    assert np.abs(nearest.correlation(problem, solution.x) - factor @ factor.T).max() <= 1e-9


@pytest.mark.parametrize(
    ("parameters", "words"),
    [
        ({"n": 1}, "n must be"),
        ({"n": 4.0}, "n must be"),
        ({"case": "x"}, "case must be"),
        ({"case": "three"}, "n = 3"),
    ],
)
def test_unusable_parameters_are_named(parameters, words):
    with pytest.raises(ssn.InputError, match=words):
        nearest.build(**parameters)


def test_picture_and_summary(solved):
    buffer = io.BytesIO()
    nearest.picture(*solved).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert dict(nearest.summary(*solved))["rank of X"].endswith("of 50")
