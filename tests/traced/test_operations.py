"""Every supported NumPy operation, in the ways it is called, against central differences and plain values."""

import numpy as np
import pytest
import scipy.special as special

from ssn.traced import TracedEquation
from tests.traced.helpers import derivatives, differences

X = np.array([0.35, 0.82, 0.51, 0.67, 0.23, 0.94])
M = np.arange(1.0, 7.0).reshape(2, 3)


def grid(u):
    return u.reshape(2, 3)


UNARY = ["negative", "positive", "exp", "exp2", "expm1", "log", "log2", "log10", "log1p", "sqrt", "cbrt", "square",
         "reciprocal", "sin", "cos", "tan", "arcsin", "arccos", "arctan", "sinh", "cosh", "tanh", "arcsinh", "arctanh",
         "deg2rad", "radians", "rad2deg", "degrees", "abs", "fabs", "conjugate"]  # fmt: skip
SPECIAL = ["expit", "logit", "erf", "erfc", "gammaln"]
CALLS = {
    **{name: getattr(np, name) for name in UNARY},
    **{f"special.{name}": getattr(special, name) for name in SPECIAL},
    "arccosh": lambda u: np.arccosh(1.0 + u),
    "xlogy": lambda u: special.xlogy(u[:3], u[3:]),
    "operators": lambda u: -(+u) + 2 * u - u / 3 + 1 / u - 2 * (3 - u) + abs(u - 0.5),
    "powers": lambda u: u**2 + u**-1.5 + u**0.5 + 2.0**u + u**u + np.power(u, 3) + np.float_power(u, 1.5),
    "integer operands": lambda u: np.arange(6) * u + u * 2 - np.ones(6, dtype=np.int8) + True * u,
    "numpy scalars": lambda u: np.float64(2.0) * u + np.int64(3) - np.float32(0.5) * u,
    "list operands": lambda u: u * [1.0, 2, 3, 4, 5, 6] + [u[0], 1.0, u[1], u[2], 0.0, u[5]],
    "arctan2": lambda u: np.arctan2(u, u[::-1]),
    "logaddexp": lambda u: np.logaddexp(u, 2 * u[::-1]),
    "hypot": lambda u: np.hypot(u, 3.0),
    "fmax fmin": lambda u: np.fmax(u, 0.5) + np.fmin(u, u[::-1]),
    "clip keywords": lambda u: np.clip(u, a_min=0.3, a_max=None) + np.clip(u, None, 0.6) + u.clip(0.3, 0.6),
    "clip arrays": lambda u: np.clip(u, np.linspace(0.2, 0.4, 6), 0.7),
    "clip traced bounds": lambda u: np.clip(u, u[0], 2.0 * u[2]),
    "broadcast": lambda u: (grid(u) * u[:3] + u[3:5, None] - u[0]).ravel(),
    "broadcast_to": lambda u: np.broadcast_to(u[:2], (3, 2)).ravel(),
    "broadcast_arrays": lambda u: np.multiply(*np.broadcast_arrays(u[:2, None], u[:3])).ravel(),
    "sum": lambda u: np.stack([u.sum(), np.sum(u), np.sum(grid(u)), np.add.reduce(u)]),
    "sum axis": lambda u: np.concatenate([grid(u).sum(axis=0), grid(u).sum(-1), grid(u).sum(1, keepdims=True)[:, 0]]),
    "sum axes": lambda u: u.reshape(1, 2, 3).sum(axis=(0, 2)),
    "mean": lambda u: np.concatenate([grid(u).mean(axis=1), [u.mean()]]),
    "prod": lambda u: np.concatenate([[np.prod(u)], grid(u).prod(axis=1), grid(u).prod(0)]),
    "cumsum": lambda u: np.concatenate([u.cumsum(), np.cumsum(grid(u)), grid(u).cumsum(0).ravel(),
                                        np.cumsum(grid(u), axis=1).ravel(), np.add.accumulate(u)]),
    "max min": lambda u: np.concatenate([[u.max(), np.min(u)], grid(u).max(axis=0), np.amin(grid(u), axis=1),
                                         np.maximum.reduce(grid(u))]),
    "norm": lambda u: np.stack([np.linalg.norm(u), np.linalg.norm(u, 2), np.linalg.norm(u - 0.5, 1),
                                np.linalg.norm(u, np.inf), np.linalg.norm(grid(u)), np.linalg.norm(grid(u), "fro")]),
    "norm axis": lambda u: np.concatenate([np.linalg.norm(grid(u), axis=0),
                                           np.linalg.norm(grid(u), axis=1, keepdims=True)[:, 0]]),
    "dot": lambda u: np.concatenate([[np.dot(u, u), u.dot(np.arange(6.0)), np.arange(6.0) @ u, u @ u],
                                     M @ u[:3], np.dot(M, u[3:]), u[:2] @ M, np.dot(grid(u), np.ones(3))]),
    "dot scalar": lambda u: np.dot(2.0, u) + np.dot(u, u[0]),
    "matmul": lambda u: np.concatenate([(M.T @ grid(u)).ravel(), (grid(u) @ M.T).ravel(), (grid(u) @ grid(u).T).ravel(),
                                        grid(u) @ u[:3], u[:2] @ grid(u)]),
    "matmul batch": lambda u: np.concatenate([(np.stack([M, 2 * M]) @ grid(u).T).ravel(),
                                              (u.reshape(3, 2, 1) @ u.reshape(3, 1, 2)).ravel(),
                                              (u.reshape(3, 1, 2) @ np.ones((2, 2))).ravel()]),
    "vdot inner outer": lambda u: np.concatenate([[np.vdot(u, M), np.inner(u, u), np.vdot(M, grid(u))],
                                                  np.outer(u[:2], u[2:4]).ravel(),
                                                  np.multiply.outer(u[:2], [1.0, 2.0]).ravel()]),
    "einsum": lambda u: np.concatenate([np.einsum("ij->j", grid(u)), np.einsum("ij,ij->i", grid(u), M),
                                        np.einsum("i,i", u, u).reshape(1), np.einsum("ii->i", u[:4].reshape(2, 2)),
                                        np.einsum("ij,kj->ki", grid(u), grid(u)).ravel()]),
    "trace": lambda u: np.trace(u[:4].reshape(2, 2)).reshape(1),
    "concatenate": lambda u: np.concatenate([np.concatenate((u, [1.0], u[:2])), np.concatenate([grid(u), M], 1).ravel(),
                                             np.concatenate([M, grid(u)], axis=0).ravel()]),
    "stack": lambda u: np.concatenate([np.stack([u, 2 * u], axis=1).ravel(), np.stack([u[0], 1.0, u[1] * u[2]]),
                                       np.hstack([u, u[0]]), np.vstack([u[:3], grid(u)]).ravel(),
                                       np.column_stack([u, X]).ravel(), np.dstack([grid(u), M]).ravel(),
                                       np.append(u, 3.0), np.hstack([grid(u), grid(u)]).ravel()]),
    "np.array of numbers": lambda u: np.array([u[0] * u[1], 2.0, np.sin(u[2])]),
    "np.array of arrays": lambda u: u[:1] + np.array([u, 2 * u]),
    "split": lambda u: np.concatenate([np.split(u, 3)[1] * 2, np.split(u, [1, 4])[1], np.array_split(u, 4)[0],
                                       np.hsplit(grid(u), 3)[2].ravel(), np.vsplit(grid(u), 2)[1].ravel()]),
    "unpacking": lambda u: np.stack([a * b for a, b in zip(u[:3], u[3:], strict=True)]),
    "slices": lambda u: np.concatenate([u[1:], u[:-1], u[::2], u[::-1], u[-2:], u[2:3], u[5:1], u[...]]),
    "integers": lambda u: np.stack([u[0], u[-1], grid(u)[1, 2], grid(u)[0][1]]),
    "fancy": lambda u: np.concatenate([u[[0, 0, 5]], u[np.array([[1, 2], [3, 3]])].ravel(), u[X > 0.5],
                                       grid(u)[[0, 1], [2, 0]], grid(u)[:, [2, 0]].ravel(), grid(u)[M > 3]]),
    "axes": lambda u: np.concatenate([grid(u).T.ravel(), np.transpose(u.reshape(1, 2, 3), (2, 0, 1)).ravel(),
                                      grid(u).swapaxes(0, 1).ravel(), np.moveaxis(grid(u), 0, 1).ravel(),
                                      u[:, None].squeeze(), np.expand_dims(u, 0)[0], np.ravel(grid(u), order="F"),
                                      grid(u).transpose(1, 0).flatten(), u.reshape((3, -1)).ravel(),
                                      np.atleast_2d(u)[0], np.atleast_1d(u[0]), u[np.newaxis, :].ravel()]),
    "moving": lambda u: np.concatenate([np.roll(u, 2), np.roll(grid(u), 1, axis=1).ravel(), np.flip(u), u.repeat(2),
                                        np.tile(u, 2), np.take(u, [3, 1]), u.take(2).reshape(1),
                                        np.rot90(grid(u)).ravel(),
                                        np.diagonal(grid(u)), np.delete(u, 2), np.fliplr(grid(u)).ravel()]),
    "zeros from nowhere": lambda u: np.concatenate([np.tril(grid(u)).ravel(), np.triu(grid(u), 1).ravel(),
                                                    np.diag(u[:2]).ravel(), np.pad(u, 1), np.pad(u, 2, mode="edge"),
                                                    np.pad(grid(u), ((1, 0), (0, 2)), constant_values=7.0).ravel()]),
    "diff": lambda u: np.concatenate([np.diff(u), np.diff(u, 2), np.diff(grid(u), axis=0).ravel(),
                                      np.diff(grid(u)).ravel()]),
    "where": lambda u: np.concatenate([np.where(X > 0.5, u, 0.0), np.where(True, u[0], u),
                                       np.where(M > 2, grid(u), M).ravel()]),
    "interp": lambda u: np.interp(u, [0.0, 0.5, 0.8], [0.0, 1.0, -1.0]),
    "bincount": lambda u: np.bincount([0, 2, 2, 1, 0, 4], weights=u * u, minlength=6),
    "copies": lambda u: np.copy(u) + u.copy() + u.astype(float) + u.real + np.real(u),
    "likes": lambda u: np.zeros_like(u) + np.ones_like(u) * u + np.full_like(u, 2.0) + 0 * np.empty_like(u),
    "asking": lambda u: u * np.shape(u)[0] + np.ndim(u) + np.size(u) + u.size + u.ndim + u.shape[0],
    "constant result": lambda u: np.ones(6),
    "zero-dimensional": lambda u: np.sin(u[0]) * np.exp(u.sum()).reshape(1),
}  # fmt: skip


@pytest.mark.parametrize("name", CALLS)
def test_call(name):
    function = CALLS[name]
    plain = np.asarray(function(X.copy()))
    size = plain.size
    # pad or cut to as many results as there are unknowns, in two halves where there are more
    for start in range(0, size, 6):
        count = min(6, size - start)

        def square(u, start=start, count=count):
            part = np.ravel(function(u))[start : start + count]
            return np.concatenate([part, np.zeros(6 - count)]) if count < 6 else part

        at = TracedEquation(square, X).linearize(X)
        np.testing.assert_allclose(at.residual[:count], plain.ravel()[start : start + count], rtol=1e-14)
        np.testing.assert_allclose(derivatives(square, X), differences(square, X), rtol=1e-7, atol=1e-7)


def test_the_list_is_whole():
    assert len(CALLS) >= 85
    from ssn.traced.array import FUNCTIONS, UFUNCS

    assert len(FUNCTIONS) >= 70
    assert len(UFUNCS) >= 60


def test_zeros_in_products_and_powers():
    zero = np.array([0.0, 2.0, 0.0])
    assert np.array_equal(derivatives(lambda u: np.prod(u[1:]) * np.ones(3), zero)[0], [0.0, 0.0, 2.0])
    assert np.array_equal(derivatives(lambda u: u**1 + u**0, zero), np.eye(3))
    assert np.array_equal(derivatives(lambda u: u**2.0, zero), 2 * np.diag(zero))


# assignment


def assembled(u):
    r = np.zeros_like(u)
    r[0] = u[0] ** 2
    r[1:-1] = u[2:] - 2.0 * u[1:-1] + u[:-2]
    r[-1] = 3.0
    r[3:5] = u[1]
    r[[2, 3]] += u[[0, 1]]
    r[1:3] *= 2.0
    r += u
    r -= 0.5 * u
    r /= 2.0
    return r


def looped(u):
    r = np.empty_like(u)
    for i in range(u.shape[0]):
        r[i] = u[i] * u[i - 1]
    return r


def scattered(u):
    r = np.zeros_like(u)
    np.add.at(r, [0, 1, 1, 5], u[:4] ** 2)
    np.add.at(r, np.array([[0, 1], [1, 2], [2, 0]]), u[:3, None] * np.array([1.0, 2.0]))
    return r


def through_out(u):
    r = np.empty_like(u)
    np.multiply(u, u, out=r)
    np.clip(r, 0.2, 0.6, out=r)
    np.sum(np.outer(u, u), axis=0, out=r)
    return np.add(r, u, out=r)


def two_axes(u):
    r = np.zeros_like(u.reshape(2, 3))
    r[:, 0] = u[:2]
    r[1, 1:] = u[0] * u[2:4]
    r[r.shape[0] - 2] += 2.0
    return r.ravel()


@pytest.mark.parametrize("function", [assembled, looped, scattered, through_out, two_axes])
def test_assignment(function):
    equation = TracedEquation(function, X)
    assert np.array_equal(equation.linearize(X).residual, function(X))
    np.testing.assert_allclose(derivatives(function, X), differences(function, X), rtol=1e-8, atol=1e-8)


def test_assignment_to_the_argument_stays_inside():
    def function(u):
        u[0] = 2.0 * u[1]
        u *= u
        return u

    x = X.copy()
    equation = TracedEquation(function, x)
    at = equation.linearize(x)
    assert np.array_equal(at.residual, equation.residual(x))
    assert np.array_equal(x, X)
    assert np.array_equal(equation.start, X)
    np.testing.assert_allclose(at.derivative.toarray()[0, 1], 8.0 * X[1])


def written_behind(u):
    r = u * 1.0
    part = r[1:3]
    part[0] = 5.0
    return r


def read_behind(u):
    r = u * 1.0
    part = r[1:3]
    r[1] = 5.0
    return np.concatenate([part, r[2:]])


@pytest.mark.parametrize("function", [written_behind, read_behind])
def test_writing_to_a_view_is_noticed(function):
    with pytest.raises(ValueError, match=r"view of it .* at test_operations.py:\d+ cannot be traced"):
        TracedEquation(function, X).linearize(X)


def test_a_copy_of_a_view_may_be_written():
    def function(u):
        r = u * 1.0
        part = r[1:3].copy()
        part[0] = 5.0
        return r + part[0]

    assert np.array_equal(derivatives(function, X), np.eye(6))
