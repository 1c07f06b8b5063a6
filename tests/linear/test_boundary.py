"""The gate for matrices: every kind is accepted, copied, normalised once and checked."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, aslinearoperator

import ssn
from ssn.linear.boundary import as_matrix, as_square, is_symmetric, product, transpose_product

DENSE = np.array([[4.0, 0.0, 1.0], [0.0, 3.0, 0.0], [-2.0, 0.0, 5.0]])
FORMATS = ("csr", "csc", "coo", "bsr", "lil", "dok", "dia")
CASES = [
    (kind, container, index)
    for kind in FORMATS
    for container in ("array", "matrix")
    for index in (np.int32, np.int64)
]


def make(kind, container, index, dense=DENSE):
    coo = sp.coo_array(dense)
    coo.coords = tuple(c.astype(index) for c in coo.coords)
    result = coo.asformat(kind)
    for name in ("indices", "indptr"):
        if hasattr(result, name) and kind in ("csr", "csc", "bsr"):
            setattr(result, name, getattr(result, name).astype(index))
    return getattr(sp, f"{kind}_matrix")(result) if container == "matrix" else result


def state(matrix):
    parts = {}
    for name in ("data", "indices", "indptr", "row", "col", "offsets", "rows"):
        if hasattr(matrix, name):
            value = getattr(matrix, name)
            parts[name] = str(value.tolist()) if isinstance(value, np.ndarray) else str(value)
    return type(matrix), parts


@pytest.mark.parametrize(("kind", "container", "index"), CASES)
def test_every_sparse_kind(kind, container, index):
    given = make(kind, container, index)
    before = state(given)
    result = as_matrix(given, "A")
    assert isinstance(result, sp.csr_array)
    assert result.dtype == np.float64
    assert result.has_canonical_format
    np.testing.assert_array_equal(result.toarray(), DENSE)
    result.data[:] = 77.0
    assert state(given) == before
    np.testing.assert_array_equal(given.toarray(), DENSE)


@pytest.mark.parametrize(("kind", "container", "index"), CASES)
def test_every_sparse_kind_solves(kind, container, index):
    given = make(kind, container, index)
    before = state(given)
    found = ssn.solve(ssn.ComplementarityProblem(ssn.AffineMap(given, [-1.0, 2.0, -1.0])))
    assert found.converged
    np.testing.assert_allclose(found.x, [4 / 22, 0, 6 / 22], atol=1e-9)
    assert state(given) == before


@pytest.mark.parametrize("index", [np.int32, np.int64])
def test_unsorted_duplicates_are_summed_in_a_copy(index):
    data = np.array([1.0, 2.0, 3.0, 4.0])
    given = sp.csr_array(
        (data, np.array([2, 0, 2, 1], dtype=index), np.array([0, 3, 4, 4], dtype=index)), shape=(3, 3)
    )
    before = state(given)
    result = as_matrix(given, "A")
    np.testing.assert_array_equal(result.toarray(), [[2, 0, 4], [0, 4, 0], [0, 0, 0]])
    assert state(given) == before
    assert data.tolist() == [1.0, 2.0, 3.0, 4.0]


@pytest.mark.parametrize("dtype", [np.int64, np.float32, np.bool_, np.float64])
def test_dense_and_other_dtypes(dtype):
    given = np.eye(3).astype(dtype)
    result = as_matrix(given, "A")
    assert result.dtype == np.float64
    assert not np.shares_memory(result, given)
    assert as_matrix([[1, 2], [3, 4]], "A").shape == (2, 2)
    assert as_matrix(sp.csr_array(given), "A").dtype == np.float64


def test_operators_pass():
    operator = aslinearoperator(DENSE)
    assert as_matrix(operator, "A") is operator
    x = np.array([1.0, 2.0, 3.0])
    for matrix in (operator, DENSE, sp.csr_array(DENSE)):
        np.testing.assert_allclose(product(matrix, x), DENSE @ x)
        np.testing.assert_allclose(transpose_product(matrix, x), DENSE.T @ x)

    class Duck:
        shape, dtype = (3, 3), np.dtype(float)

        def matvec(self, x):
            return DENSE @ x

    assert isinstance(as_matrix(Duck(), "A"), LinearOperator)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("kind", ["dense", "csr", "csc", "coo", "lil"])
def test_bad_entries_are_named(kind, bad):
    dense = DENSE.copy()
    dense[2, 0] = bad
    given = dense if kind == "dense" else sp.coo_array(dense).asformat(kind)
    with pytest.raises(ssn.InputError, match=rf"K\[2, 0\] is {bad}"):
        as_matrix(given, "K")


def test_bad_entry_after_empty_rows():
    given = sp.csr_array(([1.0, np.nan], ([0, 4], [1, 3])), shape=(6, 6))
    with pytest.raises(ssn.InputError, match=r"K\[4, 3\] is nan"):
        as_matrix(given, "K")


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: as_matrix(np.ones(3), "A"), r"A must have 2 dimensions, got shape \(3,\)"),
        (lambda: as_matrix(np.ones((2, 2, 2)), "A"), r"A must have 2 dimensions"),
        (lambda: as_matrix("stiffness", "A"), r"A must be a sparse matrix"),
        (lambda: as_matrix([[1.0], [1.0, 2.0]], "A"), r"A must be a sparse matrix"),
        (lambda: as_matrix(np.ones((2, 3)), "A", shape=(None, 2)), r"A has shape 2x3, expected anyx2"),
        (lambda: as_square(np.ones((2, 3)), "A"), r"A must be square, got shape 2x3"),
        (lambda: as_square(sp.eye_array(3), "A", 4), r"A has shape 3x3, expected 4x4"),
    ],
)
def test_refused(call, message):
    with pytest.raises(ssn.InputError, match=message):
        call()


def test_complex_entries_are_refused():
    for given in (1j * np.eye(2), sp.csr_array(1j * np.eye(2))):
        with pytest.raises(ssn.InputError, match="A"):
            as_matrix(given, "A")


def test_symmetry():
    assert is_symmetric(np.array([[1.0, 2.0], [2.0, 1.0]]))
    assert is_symmetric(sp.csr_array([[1.0, 2.0], [2.0, 1.0]]))
    assert not is_symmetric(DENSE)
    assert not is_symmetric(sp.csr_array(DENSE))
    assert not is_symmetric(aslinearoperator(np.eye(2)))
