"""A @ x with everything that A can be."""

import threading

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, aslinearoperator

import ssn
from ssn.traced import TracedDerivative, TracedEquation
from tests.traced.helpers import as_dense, derivatives

GENERATOR = np.random.default_rng(3)
A = np.where(GENERATOR.random((6, 6)) < 0.5, GENERATOR.standard_normal((6, 6)), 0.0)
X = GENERATOR.standard_normal(6)
KINDS = {
    "dense": A,
    "Fortran": np.asfortranarray(A),
    **{f"{kind}_array": getattr(sp, f"{kind}_array")(A) for kind in ("csr", "csc", "coo", "bsr", "dia", "lil", "dok")},
    **{f"{kind}_matrix": getattr(sp, f"{kind}_matrix")(A) for kind in ("csr", "csc", "coo", "bsr", "dia", "lil")},
    "transposed": sp.csr_array(A.T).T,
    "operator": aslinearoperator(A),
    "operator of a sparse array": aslinearoperator(sp.csr_array(A)),
    "adjoint operator": aslinearoperator(A.T.copy()).H,
    "transposed operator": aslinearoperator(A.T.copy()).T,
    "sum of operators": aslinearoperator(0.25 * A) + 0.75 * aslinearoperator(A),
}  # fmt: skip


def far(matrix):
    """The same with 64-bit indices."""
    result = sp.csr_array(matrix)
    result.indices, result.indptr = result.indices.astype(np.int64), result.indptr.astype(np.int64)
    return result


KINDS["64-bit"] = far(A)


@pytest.mark.parametrize("kind", KINDS)
def test_product(kind):
    matrix = KINDS[kind]
    expected = 2.0 * A @ np.diag(np.cos(X)) + np.eye(6)
    for function in (
        lambda u: matrix @ (2.0 * np.sin(u)) + u,
        lambda u: (matrix @ (2.0 * np.sin(u))[:, None])[:, 0] + u,
        lambda u: (matrix @ np.stack([u, 2.0 * np.sin(u)], axis=1))[:, 1] + u,
    ):
        equation = TracedEquation(function, X)
        at = equation.linearize(X)
        np.testing.assert_allclose(at.residual, equation.residual(X), rtol=1e-13, atol=1e-14)
        np.testing.assert_allclose(as_dense(at.derivative), expected, rtol=1e-12, atol=1e-13)
        assert isinstance(at.derivative, TracedDerivative) == ("operator" in kind)
        np.testing.assert_allclose(derivatives(function, X), expected, rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("kind", [kind for kind in KINDS if "operator" not in kind])
def test_product_from_the_left(kind):
    matrix = KINDS[kind]
    np.testing.assert_allclose(derivatives(lambda u: u @ matrix, X), A.T, rtol=1e-13, atol=1e-14)
    both = derivatives(lambda u: (np.stack([u, 3.0 * u]) @ matrix)[1], X)
    np.testing.assert_allclose(both, 3.0 * A.T, rtol=1e-13, atol=1e-14)


def test_other_spellings():
    operator, matrix = aslinearoperator(A), sp.csr_matrix(A)
    for function in (
        lambda u: matrix * u,  # for sparse matrices * is the product
        lambda u: u * sp.csr_matrix(A.T),
        lambda u: matrix.dot(u),
        lambda u: sp.csr_array(A).dot(u),
        lambda u: np.dot(A, u),
        lambda u: np.matmul(A, u),
        lambda u: operator.dot(u),
        lambda u: operator.matvec(u),
        lambda u: operator * u,
        lambda u: operator(u),
        lambda u: aslinearoperator(A.T.copy()).rmatvec(u),
    ):
        np.testing.assert_allclose(derivatives(function, X), A, rtol=1e-13, atol=1e-14)


def test_rectangular():
    b = GENERATOR.standard_normal((9, 6))
    for matrix in (b, sp.csr_array(b), aslinearoperator(b)):
        found = derivatives(lambda u, m=matrix: b.T @ np.tanh(m @ u), X)
        np.testing.assert_allclose(found, b.T @ np.diag(1 - np.tanh(b @ X) ** 2) @ b, rtol=1e-12, atol=1e-13)


def test_matrices_stay_as_they_are():
    doubled = sp.csr_array(
        (np.array([1.0, 2.0, 3.0, 4.0]), np.array([1, 0, 1, 1]), np.array([0, 3, 4])), shape=(2, 2)
    )
    before = [a.copy() for a in (doubled.data, doubled.indices, doubled.indptr)]
    at = TracedEquation(lambda u: doubled @ u, np.ones(2)).linearize(np.ones(2))
    assert as_dense(at.derivative).tolist() == [[2.0, 4.0], [0.0, 4.0]]
    clean = sp.csr_array(A)
    for function in (lambda u: clean @ u, lambda u: 2.0 * (clean @ u), lambda u: clean @ u + u):
        from tests.traced.helpers import form

        with form("sparse"):
            derivative = TracedEquation(function, X).linearize(X).derivative
        derivative.data[:] = -1.0
        derivative.indices[:] = 0
        assert np.array_equal(clean.toarray(), A)
    for array, old in zip((doubled.data, doubled.indices, doubled.indptr), before, strict=True):
        assert np.array_equal(array, old)


def test_a_changed_matrix_is_seen():
    matrix = sp.csr_array(np.eye(2))
    equation = TracedEquation(lambda u: matrix @ u, np.ones(2))
    equation.linearize(np.ones(2))
    matrix.data[:] = 3.0
    assert equation.linearize(np.ones(2)).derivative.toarray().tolist() == [[3.0, 0.0], [0.0, 3.0]]


def test_too_full_to_store_becomes_an_operator():
    n = 5000
    x = GENERATOR.standard_normal(n)
    at = TracedEquation(lambda u: u + u * np.sum(u), x).linearize(x)
    assert isinstance(at.derivative, LinearOperator)
    d = GENERATOR.standard_normal(n)
    np.testing.assert_allclose(at.derivative @ d, d + d * x.sum() + x * d.sum(), rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(at.derivative.T @ d, d + d * x.sum() + x @ d, rtol=1e-9, atol=1e-9)


def test_an_operator_without_adjoint_says_so_when_it_is_needed():
    operator = LinearOperator((6, 6), matvec=lambda x: A @ np.ravel(x), dtype=np.float64)
    derivative = TracedEquation(lambda u: operator @ u + u, X).linearize(X).derivative
    np.testing.assert_allclose(derivative @ X, A @ X + X)
    with pytest.raises(ssn.InputError, match="rmatvec"):
        derivative.rmatvec(X)


def test_linear_operators_are_untouched_outside_of_traces():
    before = {name: getattr(LinearOperator, name) for name in ("dot", "matvec", "rmatvec", "matmat")}
    operator = aslinearoperator(A)
    equation = TracedEquation(lambda u: operator @ u + u, X)

    def failing(u):
        raise RuntimeError("mine")

    errors = []

    def work():
        for _ in range(50):
            try:
                np.testing.assert_allclose(equation.linearize(X).derivative @ X, A @ X + X)
            except Exception as error:
                errors.append(error)

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not errors
    with pytest.raises(RuntimeError, match="mine"):
        TracedEquation(failing, X).linearize(X)
    assert {name: getattr(LinearOperator, name) for name in before} == before
