"""Derivatives to compare with, and generated expressions that run on real, traced and complex arrays alike."""

from __future__ import annotations

from contextlib import contextmanager

import numpy as np
import scipy.sparse as sp
from hypothesis import strategies as st
from scipy.sparse.linalg import aslinearoperator

import ssn.traced.assemble
import ssn.traced.structure
from ssn.traced import TracedEquation

FORMS = ("dense", "sparse", "operator")


@contextmanager
def form(name):
    """Force one of the three forms in which derivatives are assembled."""
    assemble, structure = ssn.traced.assemble, ssn.traced.structure
    before = assemble.DENSE_ENTRIES, structure.FILL_FIXED, structure.FILL_PER_COLUMN
    if name != "dense":
        assemble.DENSE_ENTRIES = 0
    if name == "operator":
        structure.FILL_FIXED = structure.FILL_PER_COLUMN = -1
    try:
        yield
    finally:
        assemble.DENSE_ENTRIES, structure.FILL_FIXED, structure.FILL_PER_COLUMN = before


def as_dense(derivative):
    if sp.issparse(derivative):
        assert isinstance(derivative, sp.csr_array)
        assert derivative.has_canonical_format
        return derivative.toarray()
    columns = np.eye(derivative.shape[1])
    forward = derivative @ columns
    rows = derivative.rmatmat(np.eye(derivative.shape[0])).T
    np.testing.assert_allclose(
        forward, rows, rtol=1e-12, atol=1e-13 * max(1.0, np.abs(rows).max(initial=0.0))
    )
    return forward


def derivatives(function, x, eps=0.0):
    """The traced derivative at x, dense, from all three forms, which must agree.

    A fourth walks through all operations, as behind an operator.
    """
    results = []
    for name in FORMS:
        with form(name):
            results.append(as_dense(TracedEquation(function, x).smoothed(eps).linearize(x).derivative))
    identity = aslinearoperator(np.eye(x.size))
    behind = TracedEquation(lambda u: function(identity @ u), x).smoothed(eps).linearize(x).derivative
    results.append(as_dense(behind))
    for other in results[1:]:
        np.testing.assert_allclose(
            other, results[0], rtol=1e-12, atol=1e-13 * max(1.0, np.abs(results[0]).max())
        )
    return results[0]


def differences(function, x, step=1e-6):
    """Central differences."""
    columns = []
    for k in range(x.size):
        e = np.zeros(x.size)
        e[k] = step
        columns.append((np.asarray(function(x + e)) - np.asarray(function(x - e))).ravel() / (2 * step))
    return np.stack(columns, axis=1)


def complex_step(function, x, step=1e-30):
    """Derivatives exact to rounding, for functions that are analytic in their complex form."""
    columns = []
    for k in range(x.size):
        z = x.astype(complex)
        z[k] += 1j * step
        columns.append(np.asarray(function(z)).imag / step)
    return np.stack(columns, axis=1)


class Real:
    """The operations that need another form for complex numbers, for real and traced arrays."""

    maximum, minimum, abs, hypot = np.maximum, np.minimum, np.abs, np.hypot
    norm, largest, clip, arctan2, logaddexp = np.linalg.norm, np.max, np.clip, np.arctan2, np.logaddexp


class Complex:
    """The same as analytic functions of the piece that the real part is on."""

    @staticmethod
    def maximum(a, b):
        return np.where(np.real(a) >= np.real(b), a, b)

    @staticmethod
    def minimum(a, b):
        return np.where(np.real(a) <= np.real(b), a, b)

    @staticmethod
    def abs(a):
        return np.where(a.real >= 0, a, -a)

    @staticmethod
    def hypot(a, b):
        return np.sqrt(a * a + b * b)

    @staticmethod
    def norm(a):
        return np.sqrt(np.sum(a * a))

    @staticmethod
    def largest(a):
        return a[np.argmax(a.real)]

    @staticmethod
    def clip(a, low, high):
        return Complex.minimum(Complex.maximum(a, low), high)

    @staticmethod
    def arctan2(a, b):
        return np.arctan(a / b)  # for positive b

    @staticmethod
    def logaddexp(a, b):
        return np.log(np.exp(a) + np.exp(b))


N = 4
_generator = np.random.default_rng(5)
DENSE = _generator.standard_normal((N, N))
SPARSE = {
    "csr": sp.csr_array(np.where(_generator.random((N, N)) < 0.5, DENSE, 0.0)),
    "csc": sp.csc_matrix(np.where(_generator.random((N, N)) < 0.5, DENSE, 0.0)),
    "coo": sp.coo_array(
        (np.array([1.0, 2.0, -1.5, 0.5]), (np.array([0, 0, 2, 3]), np.array([1, 1, 3, 0]))), shape=(N, N)
    ),
}
MASK = np.array([True, False, False, True])

# name -> (number of operands, function of the operations and the operands); all map R^4 to R^4
SMOOTH = {
    "sin": (1, lambda m, a: np.sin(a)),
    "tanh": (1, lambda m, a: np.tanh(a)),
    "exp": (1, lambda m, a: np.exp(0.3 * np.tanh(a))),
    "log": (1, lambda m, a: np.log(2.0 + np.sin(a))),
    "sqrt": (1, lambda m, a: np.sqrt(1.0 + a * a)),
    "reciprocal": (1, lambda m, a: 1.0 / (2.0 + np.cos(a))),
    "square": (1, lambda m, a: np.sin(a) ** 2 - np.sin(a) ** 3),
    "power": (2, lambda m, a, b: (1.5 + np.sin(a)) ** np.sin(b)),
    "exponent": (1, lambda m, a: 1.7 ** np.sin(a)),
    "add": (2, lambda m, a, b: a + b),
    "subtract": (2, lambda m, a, b: 1.0 - a - b),
    "multiply": (2, lambda m, a, b: np.sin(a) * b),
    "divide": (2, lambda m, a, b: a / (2.0 + np.sin(b))),
    "arctan2": (2, lambda m, a, b: m.arctan2(np.sin(a), 2.0 + np.sin(b))),
    "logaddexp": (2, lambda m, a, b: m.logaddexp(np.sin(a), np.sin(b))),
    "dense": (1, lambda m, a: DENSE @ a),
    "left": (1, lambda m, a: a @ DENSE),
    "csr": (1, lambda m, a: SPARSE["csr"] @ a),
    "csc": (1, lambda m, a: SPARSE["csc"] @ a),
    "coo": (1, lambda m, a: SPARSE["coo"] @ a),
    "sum": (2, lambda m, a, b: a * np.tanh(np.sum(b))),
    "mean": (2, lambda m, a, b: a - np.mean(b)),
    "dot": (2, lambda m, a, b: np.sin(np.dot(a, b)) * np.ones(N)),
    "cumsum": (1, lambda m, a: np.cumsum(a)),
    "roll": (1, lambda m, a: np.roll(a, 1) - 0.5 * np.roll(a, -1)),
    "slices": (2, lambda m, a, b: np.concatenate([a[2:], b[:1], b[::-2][:1]])),
    "fancy": (1, lambda m, a: a[[3, 0, 0, 1]] + a[MASK][[0, 1, 1, 0]]),
    "stack": (2, lambda m, a, b: np.stack([a, b], axis=1).ravel()[::2] + np.stack([a, b]).sum(axis=0)),
    "reshape": (1, lambda m, a: (a.reshape(2, 2).T * np.array([1.0, -2.0])).ravel()),
    "outer": (2, lambda m, a, b: (a[:, None] * np.sin(b)).sum(axis=1)),
    "where": (2, lambda m, a, b: np.where(MASK, a, 2.0 * b)),
    "diff": (1, lambda m, a: np.concatenate([a[:1], np.diff(a)])),
    "matmul": (2, lambda m, a, b: (np.sin(a).reshape(2, 2) @ b.reshape(2, 2)).ravel()),
    "einsum": (2, lambda m, a, b: np.einsum("ij,jk->ki", np.sin(a).reshape(2, 2), b.reshape(2, 2)).ravel()),
}  # fmt: skip
KINKS = {
    "maximum": (2, lambda m, a, b: m.maximum(a, b)),
    "ramp": (1, lambda m, a: m.maximum(0.0, a - 0.25)),
    "minimum": (2, lambda m, a, b: m.minimum(a, 0.5 * b)),
    "clip": (1, lambda m, a: m.clip(a, -0.5, 0.75)),
    "abs": (1, lambda m, a: m.abs(a)),
    "norm": (2, lambda m, a, b: a * m.norm(b)),
    "hypot": (2, lambda m, a, b: m.hypot(a, b)),
    "largest": (2, lambda m, a, b: a - m.largest(b)),
}
OPERATIONS = SMOOTH | KINKS


def build(tree):
    """The function of a tree of names, as a function of the set of operations and of the array."""
    if tree == "x":
        return lambda m, x: x
    if isinstance(tree, float):
        return lambda m, x: tree + 0.0 * x
    name, *branches = tree
    made = [build(branch) for branch in branches]
    return lambda m, x: OPERATIONS[name][1](m, *(branch(m, x) for branch in made))


def trees(names=tuple(OPERATIONS), leaves=10):
    """Expressions as nested tuples of names."""
    leaf = st.one_of(st.just("x"), st.just("x"), st.sampled_from([0.5, -1.0]))

    def grow(inner):
        one = st.tuples(st.sampled_from([k for k in names if OPERATIONS[k][0] == 1]), inner)
        two = st.tuples(st.sampled_from([k for k in names if OPERATIONS[k][0] == 2]), inner, inner)
        return st.one_of(one, two)

    return st.recursive(leaf, grow, max_leaves=leaves)


points = st.integers(0, 2**32 - 1).map(lambda seed: np.random.default_rng(seed).uniform(-2.0, 2.0, N))
