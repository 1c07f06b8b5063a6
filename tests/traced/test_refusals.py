"""What cannot be traced is refused by name, with the place and what to do."""

import math

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import aslinearoperator, spsolve

import ssn
from ssn.traced import TracedEquation

X = np.array([0.5, 1.5, -1.0])


def filled(u):
    r = np.zeros(3)
    r[0] = u[0]
    return r


def added(u):
    r = np.ones(3)
    r += u
    return r


def added_at(u):
    r = np.zeros(3)
    np.add.at(r, [0, 1, 2], u)
    return r


def decided(u):
    return u if u[0] > 0 else -u


def counted(u):
    return np.stack([u[i] for i in range(len(u))])


kept = []


def hoarding(u):
    kept.append(u)
    return kept[0] * 1.0


BAD = [
    (np.sign, r"np.sign at \S+ cannot be traced: .*jump.*declare_continuous"),
    (lambda u: np.where(u > 0, u, 0.0), r"a comparison \(np.greater\) at test_refusals.py:\d+ .*declare_continuous"),
    (lambda u: np.where(u, u, 0.0), "np.where with numbers"),
    (decided, r"a comparison \(np.greater\) at test_refusals.py:\d+"),
    (lambda u: u if u.any() else -u, "np.any"),
    (lambda u: u if u[0] else -u, r"a decision \(if, and, or, not, while\)"),
    (lambda u: u[u < 1.0], r"a comparison \(np.less\)"),
    (lambda u: u * (u == 1.0), "accident"),
    (lambda u: np.floor(u), "np.floor at .* jumps"),
    (lambda u: u % 1.0, "np.remainder at .* jumps"),
    (lambda u: u // 1.0, "np.floor_divide at .* jumps"),
    (lambda u: np.heaviside(u, 0.5), "np.heaviside at .* jumps"),
    (lambda u: np.round(u), "np.round at .* jumps"),
    (lambda u: u.round(), "np.round at .* jumps"),
    (lambda u: u[[u.argmax()] * 3], "np.argmax at .* jumps"),
    (lambda u: np.sort(u), "np.sort at .*custom_operation"),
    (lambda u: np.linalg.solve(np.eye(3), u), "np.linalg.solve at .*custom_operation"),
    (lambda u: np.fft.fft(u), r"np.fft\S* at .*custom_operation"),
    (lambda u: np.linalg.norm(u.reshape(3, 1), 2) * u, "np.linalg.norm with ord=2"),
    (lambda u: np.maximum.accumulate(u), "np.maximum.accumulate at .*custom_operation"),
    (lambda u: np.exp(u, where=[True, False, True]), r"np.exp\(..., where=...\)"),
    (lambda u: np.exp(u, dtype=np.float32), "np.exp with dtype"),
    (lambda u: u.astype(np.float32), r"astype\("),
    (lambda u: 1j * u, "complex"),
    (lambda u: (1j * np.eye(3)) @ u, "complex"),
    (lambda u: sp.csr_array(1j * np.eye(3)) @ u, "complex"),
    (lambda u: aslinearoperator(1j * np.eye(3)) @ u, "complex"),
    (lambda u: sp.csr_array(np.eye(3)) * u, "with a sparse array .*use @|F works on plain arrays, but"),
    (lambda u: np.multiply(u, sp.csr_array(np.eye(3))), "use @"),
    (lambda u: sp.diags_array(u) @ np.ones(3), r"cannot be traced at test_refusals.py:\d+"),
    (lambda u: spsolve(sp.csc_array(np.eye(3)), u), "cannot be traced"),
    (lambda u: np.eye(3).dot(u), r"array.dot\(x\) at .*write A @ x"),
    (lambda u: u * math.exp(u[0]), r"np.exp instead of math.exp"),
    (lambda u: np.asarray(u, dtype=float) * 2.0, "np.zeros_like"),
    (lambda u: np.array([u[0], u[1], 1.0], dtype=float), "np.stack"),
    (lambda u: float(u[0]) * u, r"float\(\)"),
    (filled, "assignment to an entry of a plain array"),
    (added, r"np.add into a plain array .*`a = a \+ ...`"),
    (added_at, "np.add.at into a plain array .*np.bincount"),
    (counted, r"no len\(\): write x.shape\[0\]"),
    (lambda u: np.exp(np.array([u[0], u[1], u[2]])), r"use np.stack"),
    (lambda u: np.block([u, u])[:3], "np.block"),
    (lambda u: u.flat[0] * u, "x.flat"),
    (lambda u: u + "a", "an operation with a str"),
    (lambda u: u[u], "indexing with what depends on the unknown"),
    (lambda u: np.interp(u, [0.0, 1.0], u[:2]), "np.interp with"),
    (lambda u: np.interp(u, [0.0, 1.0], [0.0, 1.0], left=5.0), "np.interp with left"),
    (lambda u: ssn.SparseCost(0.1).prox(u, u[0]), "step of a proximal map"),
]  # fmt: skip


@pytest.mark.parametrize(("function", "message"), BAD)
def test_refusal(function, message):
    for eps in (0.0, 0.1):
        with pytest.raises(ssn.InputError, match=message):
            TracedEquation(function, X).smoothed(eps).linearize(X)


def test_functions_that_remember_are_noticed():
    equation = TracedEquation(hoarding, X)
    kept.clear()
    equation.residual_and_pieces(X)
    with pytest.raises(ssn.InputError, match="kept from an earlier evaluation"):
        equation.residual_and_pieces(X)
    generator = np.random.default_rng(0)
    with pytest.raises(ssn.InputError, match="no random numbers, no state"):
        TracedEquation(lambda u: u + generator.random(3), X).linearize(X)


def test_errors_of_the_function_itself_pass_unchanged():
    def wrong(u):
        return u @ np.ones(7)

    with pytest.raises(ValueError, match="mismatch") as caught:
        TracedEquation(wrong, X).linearize(X)
    assert not isinstance(caught.value, ssn.InputError)
    with pytest.raises(ZeroDivisionError):
        TracedEquation(lambda u: u * (1 / 0), X).linearize(X)


def test_refusals_are_the_same_in_a_solve():
    with pytest.raises(ssn.InputError, match=r"np.floor at test_refusals.py:\d+"):
        ssn.solve(TracedEquation(lambda u: np.floor(u) - 0.5, X))


# declared continuity


@ssn.traced.declare_continuous
def softening(v):
    return np.where(np.abs(v) <= 1.0, v, np.sign(v) * (1.0 + 0.5 * (np.abs(v) - 1.0)))


@ssn.traced.declare_continuous
def absolute(v):
    return v * np.sign(v)


@ssn.traced.declare_continuous
def dead_zone(v):
    """Both sides at once; needs &, |, ~ and a product with a condition."""
    inside = (v > -0.5) & (v < 0.5)
    return (~inside) * (v - np.where(v > 0, 0.5, -0.5)) + 0.0 * np.where(inside | (v > 3.0), v, v)


@ssn.traced.declare_continuous
def by_length(v):
    n = np.linalg.norm(v)
    return np.where(n > 1.0, v / n, v)


DECLARED = [
    (softening, lambda v: np.clip(v, -1, 1) * 0.5 + 0.5 * v, [1.0, 0.5, 0.5]),
    (absolute, np.abs, [1.0, 1.0, -1.0]),
    (dead_zone, lambda v: v - np.clip(v, -0.5, 0.5), [0.0, 1.0, 1.0]),
]


@pytest.mark.parametrize(("function", "same", "slopes"), DECLARED)
def test_declared_continuous(function, same, slopes):
    x = np.array([0.25, 1.5, -2.0])
    np.testing.assert_allclose(function(x), same(x))
    equation = TracedEquation(function, x)
    at = equation.linearize(x)
    np.testing.assert_allclose(at.derivative.toarray(), np.diag(slopes), atol=1e-14)
    assert len(at.pieces) >= 1
    for eps in (1e-2, 1e-6):
        np.testing.assert_allclose(equation.smoothed(eps).residual(x), same(x), atol=5 * eps)
    smooth = equation.smoothed(0.1)
    from tests.traced.helpers import as_dense, differences

    found = as_dense(smooth.linearize(x).derivative)
    np.testing.assert_allclose(found, differences(smooth.residual, x), rtol=1e-6, atol=1e-8)


def test_declared_continuous_of_the_whole():
    x = np.array([0.5, 1.5, -2.0])
    at = TracedEquation(by_length, x).linearize(x)
    n = np.linalg.norm(x)
    np.testing.assert_allclose(at.derivative.toarray(), np.eye(3) / n - np.outer(x, x) / n**3)
    assert at.pieces.sizes()[f"condition at test_refusals.py:{by_length.function.__code__.co_firstlineno + 3}"] == {
        "false": 0, "true": 1
    }  # fmt: skip


JUMPS = [
    lambda v: np.sign(v),
    lambda v: np.where(v > 0.7, v, 0.0),
    lambda v: np.where(v > np.array([9.0, 9.0, 0.7]), v, np.minimum(v, np.array([9.0, 9.0, 0.69999]))),
    lambda v: np.where(np.linalg.norm(v) > 1.0, 2.0 * v, v),
    lambda v: (v > 0.0) * np.ones(3),
]


@pytest.mark.parametrize("function", JUMPS)
def test_a_wrong_declaration_is_refused(function):
    with pytest.raises(ssn.InputError, match=r"was declared continuous, but component \d jumps by"):
        TracedEquation(ssn.traced.declare_continuous(function), X).linearize(X)


def test_declarations_do_not_leak():
    with pytest.raises(ssn.InputError, match="a comparison"):
        TracedEquation(lambda u: absolute(u) + np.where(u > 0, u, 0.0), X).linearize(X)
    with pytest.raises(ssn.InputError, match="needs a function"):
        ssn.traced.declare_continuous(3)
    for function in (
        lambda v: v if v[0] > 0 else -v,
        lambda v: v[v > 0],
        lambda v: np.where(v > 0),
        lambda v: v == 0,
    ):
        with pytest.raises(ssn.InputError, match="cannot be traced"):
            TracedEquation(ssn.traced.declare_continuous(function), X).linearize(X)
