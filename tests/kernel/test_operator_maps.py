"""Complementarity with an affine map that is known by its products only."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, aslinearoperator

import ssn
from ssn.evidence import check_derivative
from ssn.evidence.library_methods import library_methods

N = 60
SECOND = sp.diags_array([-np.ones(N - 1), 2.0 * np.ones(N), -np.ones(N - 1)], offsets=[-1, 0, 1])
MATRIX = sp.csr_array(SECOND + 0.1 * sp.eye_array(N))
SKEW = sp.csr_array(0.3 * (sp.eye_array(N, k=1) - sp.eye_array(N, k=-1)))
VECTOR = -np.sin(np.linspace(0, 7, N))


def problem(matrix, symmetric, scale=1.0):
    operator = aslinearoperator(scale * matrix)
    F = ssn.AffineMap(operator, scale * VECTOR, diagonal=scale * matrix.diagonal(), symmetric=symmetric)
    return ssn.ComplementarityProblem(F, 0.0, 0.6)


@pytest.mark.parametrize(("matrix", "symmetric"), [(MATRIX, True), (MATRIX + SKEW, False)])
def test_operator_and_matrix_have_the_same_solution(matrix, symmetric):
    explicit = ssn.solve(ssn.ComplementarityProblem(ssn.AffineMap(matrix, VECTOR), 0.0, 0.6)).require()
    stated = problem(matrix, symmetric)
    solution = ssn.solve(stated).require()
    np.testing.assert_allclose(solution.x, explicit.x, atol=1e-8)
    assert stated.symmetric is symmetric
    assert all(check.holds for check in check_derivative(stated, solution.x))


def test_the_diagonal_brings_the_map_to_the_unit_of_the_unknown():
    plain, scaled = (ssn.solve(problem(MATRIX, True, scale)).require() for scale in (1.0, 1e6))
    np.testing.assert_allclose(plain.x, scaled.x, atol=1e-8)
    assert [s.piece_changes for s in plain.steps] == [s.piece_changes for s in scaled.steps]


def test_a_map_without_products_of_its_entries_has_no_quadratic_program():
    assert "interior point" not in library_methods(problem(MATRIX, True))
    assert "L-BFGS-B" in library_methods(problem(MATRIX, True))


def test_operators_need_diagonal_and_symmetry():
    operator = LinearOperator((N, N), matvec=lambda x: MATRIX @ x, dtype=float)
    for options in ({}, {"diagonal": np.ones(N)}, {"symmetric": True}):
        with pytest.raises(ssn.InputError, match="give diagonal= and symmetric="):
            ssn.AffineMap(operator, VECTOR, **options)
    with pytest.raises(ssn.InputError, match="diagonal has shape"):
        ssn.AffineMap(operator, VECTOR, diagonal=np.ones(3), symmetric=True)
    for options in ({"diagonal": np.ones(N)}, {"symmetric": True}):
        with pytest.raises(ssn.InputError, match="an explicit matrix shows them"):
            ssn.AffineMap(MATRIX, VECTOR, **options)
