"""Block triangular matrices: order found, diagonal blocks factorised, same solutions as the whole."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp

from ssn.linear.block_triangular import SMALL, BlockTriangularFactor, block_order
from ssn.linear.direct import Factorization, SingularMatrixError

BLOCKS, SIZE = 12, 100


def time_stepping(shuffled: bool, upper: bool = False) -> sp.csc_array:
    second = sp.diags_array(
        [-np.ones(SIZE - 1), 3.0 * np.ones(SIZE), -1.5 * np.ones(SIZE - 1)], offsets=[-1, 0, 1]
    )
    rng = np.random.default_rng(3)
    coupling = sp.eye_array(SIZE) + 0.3 * sp.eye_array(SIZE, k=7) - 0.2 * sp.eye_array(SIZE, k=-3)
    before = sp.eye_array(BLOCKS, k=1 if upper else -1)
    matrix = sp.csc_array(sp.kron(sp.eye_array(BLOCKS), second) - sp.kron(before, coupling))
    if shuffled:
        p = rng.permutation(BLOCKS * SIZE)
        matrix = sp.csc_array(matrix[p][:, p])
    return matrix


@pytest.mark.parametrize("upper", [False, True])
@pytest.mark.parametrize("shuffled", [False, True])
def test_solutions_are_those_of_the_whole_matrix(shuffled, upper):
    matrix = time_stepping(shuffled, upper)
    order, starts = block_order(matrix)
    assert (np.diff(starts) == SIZE).all()
    ordered = matrix[order][:, order].tocoo()
    assert (ordered.row // SIZE >= ordered.col // SIZE).all()
    factor = Factorization(matrix)
    assert factor.method == "SuperLU by blocks"
    x = np.cos(np.arange(BLOCKS * SIZE * 2.0)).reshape(-1, 2)
    np.testing.assert_allclose(factor.solve(matrix @ x), x, atol=1e-9)
    np.testing.assert_allclose(factor.solve(matrix @ x[:, 0]), x[:, 0], atol=1e-9)
    np.testing.assert_allclose(factor.solve(matrix.T @ x, transposed=True), x, atol=1e-9)


def test_new_values_and_a_new_pattern():
    matrix = time_stepping(True)
    factor = Factorization(matrix)
    x = np.sin(np.arange(BLOCKS * SIZE))
    for other in (2.0 * matrix, matrix + 0.5 * sp.eye_array(BLOCKS * SIZE), matrix + 1e-3 * matrix.T):
        factor.refactorize(other)
        np.testing.assert_allclose(factor.solve(other @ x), x, atol=1e-8)
    assert factor.method == "SuperLU"  # the last one is one block


def test_there_is_no_fill_between_blocks():
    matrix = time_stepping(False)
    blocks = BlockTriangularFactor(matrix, *block_order(matrix))
    assert sum(f.L.nnz + f.U.nnz for _, f, _ in blocks._parts) < 8 * BLOCKS * SIZE


def test_other_matrices_are_factorised_as_a_whole():
    n = 2 * SMALL
    one = sp.csc_array(
        sp.diags_array([-np.ones(n - 1), 3.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    )
    assert block_order(one) is None
    assert block_order(sp.csc_array(sp.eye_array(n))) is None  # too many blocks
    assert block_order(time_stepping(False)[: SMALL - 1, : SMALL - 1]) is None
    large = sp.block_diag([one, sp.eye_array(10)], format="csc")
    assert block_order(large) is None


def test_a_singular_block_is_singular():
    matrix = time_stepping(False).tolil()
    row = 3 * SIZE + 4
    block = slice(3 * SIZE, 4 * SIZE)
    matrix[row : row + 1, block] = matrix[row + 1 : row + 2, block]
    with pytest.raises(SingularMatrixError):
        Factorization(sp.csc_array(matrix))
