"""Direct factorisations: every back end, structure, reuse, and the one meaning of singular."""

import numpy as np
import pytest
import scipy.sparse as sp

from ssn.linear import cholmod
from ssn.linear.direct import Factorization, SingularMatrixError
from ssn.work import WorkCounts

RNG = np.random.default_rng(3)


def laplacian(n, *, neumann=False):
    line = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]).tolil()
    if neumann:
        line[0, 0] = line[-1, -1] = 1.0
    return sp.csr_array(sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line))


def nonsymmetric(n):
    rng = np.random.default_rng(n)
    entries = np.where(rng.random((n, n)) < 0.1, rng.random((n, n)), 0.0)
    return sp.csr_array(entries + 3.0 * np.eye(n))


BACK_ENDS = {
    "CHOLMOD": pytest.param(
        "CHOLMOD", marks=pytest.mark.skipif(not cholmod.available(), reason="CHOLMOD missing")
    ),
    "SuperLU": "SuperLU",
    "dense": "dense",
}


@pytest.fixture(params=list(BACK_ENDS.values()), ids=list(BACK_ENDS))
def back_end(request, monkeypatch):
    """Return a function that prepares a matrix, and the name that the factorisation should report."""
    monkeypatch.setenv("SSN_WITHOUT_CHOLMOD", "0" if request.param == "CHOLMOD" else "1")
    return request.param


def prepared(matrix, back_end):
    return matrix.toarray() if back_end == "dense" else matrix


def method(back_end):
    return "dense Cholesky" if back_end == "dense" else back_end


def check(factor, dense, **options):
    for shape in ((dense.shape[0],), (dense.shape[0], 3)):
        rhs = RNG.standard_normal(shape)
        kept = rhs.copy()
        found = factor.solve(rhs, **options)
        matrix = dense.T if options.get("transposed") else dense
        np.testing.assert_allclose(found, np.linalg.solve(matrix, rhs), rtol=1e-10, atol=1e-12)
        assert np.array_equal(rhs, kept)


def test_positive_definite(back_end):
    matrix = laplacian(6)
    factor = Factorization(prepared(matrix, back_end), positive_definite=True)
    assert factor.method == method(back_end)
    check(factor, matrix.toarray())
    check(factor, matrix.toarray(), transposed=True)


def test_a_wrong_claim_of_definiteness_is_survived(back_end):
    matrix = laplacian(5) - 2.5 * sp.eye_array(25)
    assert np.linalg.eigvalsh(matrix.toarray())[0] < -1
    factor = Factorization(prepared(sp.csr_array(matrix), back_end), positive_definite=True)
    check(factor, matrix.toarray())


def test_symmetric_indefinite(back_end):
    k = laplacian(4)
    saddle = sp.csr_array(sp.block_array([[k, sp.eye_array(16)], [sp.eye_array(16), None]]))
    factor = Factorization(prepared(saddle, back_end), symmetric=True)
    check(factor, saddle.toarray())


@pytest.mark.parametrize("transposed", [False, True])
def test_nonsymmetric(back_end, transposed):
    matrix = nonsymmetric(30)
    check(Factorization(prepared(matrix, back_end)), matrix.toarray(), transposed=transposed)


@pytest.mark.parametrize("structure", ["nonsymmetric", "symmetric", "positive_definite"])
def test_refactorize(back_end, structure):
    first = nonsymmetric(36) if structure == "nonsymmetric" else laplacian(6)
    claims = {} if structure == "nonsymmetric" else {structure: True}
    work = WorkCounts()
    factor = Factorization(prepared(first, back_end), work=work, **claims)
    for k in (2, 3):  # same pattern, other values
        matrix = first.copy()
        matrix.setdiag(matrix.diagonal() + k)
        factor.refactorize(prepared(matrix, back_end))
        check(factor, matrix.toarray())
        check(factor, matrix.toarray(), transposed=True)
        assert work.factorizations == k
    if back_end != "dense":
        assert work.symbolic_analyses == 1
    other = sp.csr_array(
        sp.diags_array([1.0 + np.arange(36), np.ones(30), np.ones(30)], offsets=[0, 6, -6]) * 5.0
    )
    other.setdiag(40.0 + np.arange(36))
    factor.refactorize(prepared(other, back_end))  # another pattern
    check(factor, other.toarray())
    smaller = laplacian(3)  # another size
    factor.refactorize(prepared(smaller, back_end))
    check(factor, smaller.toarray())
    if back_end != "dense":
        assert work.symbolic_analyses == 3


def test_refactorize_after_losing_definiteness_and_back(back_end):
    definite = laplacian(5)
    indefinite = sp.csr_array(definite - 2.5 * sp.eye_array(25))
    factor = Factorization(prepared(definite, back_end), positive_definite=True)
    for matrix in (indefinite, definite, indefinite):
        factor.refactorize(prepared(matrix, back_end))
        check(factor, matrix.toarray())


def pure_neumann():
    return laplacian(8, neumann=True)


def rank_one_short():
    a = RNG.standard_normal((12, 12))
    a[:, 5] = a[:, 2] + a[:, 7]
    return sp.csr_array(a)


def empty_row():
    a = laplacian(4).tolil()
    a[3, :] = 0.0
    a[:, 3] = 0.0
    return sp.csr_array(a)


def nearly_singular():
    return sp.csr_array(laplacian(8, neumann=True) + 1e-15 * sp.eye_array(64))


@pytest.mark.parametrize("claims", [{}, {"symmetric": True}, {"positive_definite": True}], ids=str)
@pytest.mark.parametrize("make", [pure_neumann, rank_one_short, empty_row, nearly_singular])
def test_singular(back_end, make, claims):
    matrix = make()
    if make is rank_one_short and claims:
        matrix = sp.csr_array(matrix.T @ matrix)
    with pytest.raises(SingularMatrixError):
        Factorization(prepared(matrix, back_end), **claims)


def test_singular_at_refactorization(back_end):
    matrix = laplacian(5)
    factor = Factorization(prepared(matrix, back_end), positive_definite=True)
    with pytest.raises(SingularMatrixError):
        factor.refactorize(prepared(laplacian(5, neumann=True), back_end))


@pytest.mark.parametrize("claims", [{}, {"symmetric": True}, {"positive_definite": True}], ids=str)
@pytest.mark.parametrize("size", [1e-30, 1.0, 1e30])
def test_badly_scaled_but_regular(back_end, size, claims):
    """Row and column scaling over twelve orders of magnitude is no singularity."""
    k = laplacian(4)
    scale = sp.diags_array(np.sqrt(size) * 10.0 ** np.linspace(-6, 6, 16))
    matrix = sp.csr_array(scale @ k @ scale)
    factor = Factorization(prepared(matrix, back_end), **claims)
    x = 1.0 / scale.diagonal()
    found = factor.solve(matrix @ x)
    np.testing.assert_allclose(found, x, rtol=1e-6)


def test_switch_off_cholmod(monkeypatch):
    from ssn.errors import MissingExtraError

    monkeypatch.setenv("SSN_WITHOUT_CHOLMOD", "1")
    assert not cholmod.available()
    assert cholmod.why_not()
    with pytest.raises(MissingExtraError, match="pip install"):
        cholmod.require()


def test_the_matrix_is_not_modified(back_end):
    matrix = prepared(nonsymmetric(20), back_end)
    kept = matrix.copy()
    factor = Factorization(matrix)
    factor.refactorize(matrix)
    factor.solve(np.ones(20))
    assert (matrix != kept).sum() == 0
