"""Several fields in a tuple or dict, their shapes and scales, and the check of all of them."""

import numpy as np
import pytest

import ssn
from ssn.traced import TracedEquation
from tests.traced.helpers import as_dense, derivatives


def test_tuple():
    start = (np.zeros((2, 2)), np.ones(3), 2.0)

    def function(fields):
        u, v, w = fields
        return u * w + v[0], v**2 + u.sum(), w - v[1] * u[0, 1]

    equation = TracedEquation(function, start, scale=(2.0, np.array([1.0, 2.0, 3.0]), 5.0))
    assert equation.size == 8
    assert equation.start.tolist() == [0, 0, 0, 0, 1, 1, 1, 2]
    assert equation.scale.tolist() == [2, 2, 2, 2, 1, 2, 3, 5]
    x = np.arange(1.0, 9.0)
    u, v, w = equation.unpack(x)
    assert (u.shape, v.shape, w.shape) == ((2, 2), (3,), ())
    assert np.array_equal(equation.pack((u, v, w)), x)
    at = equation.linearize(x)
    assert np.array_equal(at.residual, equation.residual(x))
    flat = derivatives(
        lambda y: np.concatenate([np.ravel(f) for f in function((y[:4].reshape(2, 2), y[4:7], y[7]))]), x
    )
    assert np.array_equal(as_dense(at.derivative), flat)


def test_dict():
    start = {"displacement": np.zeros(3), "force": np.zeros(2)}

    def function(fields):
        u, p = fields["displacement"], fields["force"]
        gap = 1.0 - u[:2]
        return {"force": np.minimum(p, gap), "displacement": 2.0 * u + np.concatenate([p, [0.0]]) - 3.0}

    equation = TracedEquation(function, start, scale={"force": 0.1, "displacement": 10.0})
    assert equation.scale.tolist() == [10.0, 10.0, 10.0, 0.1, 0.1]
    assert equation.residual(np.zeros(5)).tolist() == [-3.0, -3.0, -3.0, 0.0, 0.0]
    solution = ssn.solve(equation).require()
    fields = equation.unpack(solution.x)
    assert list(fields) == ["displacement", "force"]
    np.testing.assert_allclose(fields["displacement"], [1.0, 1.0, 1.5])
    np.testing.assert_allclose(fields["force"], [1.0, 1.0])


def test_other_forms_of_the_result():
    x = np.array([1.0, 2.0, 3.0])
    for function in (
        lambda u: [u[0] - 1.0, u[1] * u[2], 3.0],
        lambda u: (u[0] - 1.0, u[1] * u[2], 3.0),
        lambda u: np.array([u[0] - 1.0, u[1] * u[2], 3.0]),
        lambda u: np.stack([u[0] - 1.0, u[1] * u[2], 3.0 + 0.0 * u[0]]).reshape(3),
    ):
        at = TracedEquation(function, x).linearize(x)
        assert at.residual.tolist() == [0.0, 6.0, 3.0]
        assert as_dense(at.derivative).tolist() == [[1, 0, 0], [0, 3, 2], [0, 0, 0]]
    together = TracedEquation(lambda f: np.concatenate([f[1], f[0]]), (np.ones(2), np.ones(1)))
    assert together.linearize(x).residual.tolist() == [3.0, 1.0, 2.0]
    square = TracedEquation(lambda u: u.T @ u, np.eye(2))
    assert as_dense(square.linearize(np.array([1.0, 0.0, 0.0, 1.0])).derivative)[0].tolist() == [2, 0, 0, 0]
    number = TracedEquation(lambda u: u * u - 2.0, 1.0)
    np.testing.assert_allclose(ssn.solve(number).require().x, [np.sqrt(2.0)])


BAD = [
    (lambda: TracedEquation(3, np.zeros(2)), "F must be a function, got int"),
    (lambda: TracedEquation(np.sin, ()), "start is an empty tuple"),
    (lambda: TracedEquation(np.sin, np.zeros(0)), "start has no entries"),
    (lambda: TracedEquation(np.sin, {"a": np.ones(2), "b": ["x"]}), r"start\['b'\] must be an array of real numbers"),
    (lambda: TracedEquation(np.sin, (np.ones(2), np.array([1.0, np.nan]))), r"start\[1\]\[1\] is nan"),
    (lambda: TracedEquation(np.sin, np.ones(2), scale=0.0), "scale must be positive"),
    (lambda: TracedEquation(np.sin, np.ones(2), scale=np.ones(3)), r"scale has shape \(3,\)"),
    (lambda: TracedEquation(np.sin, {"a": np.ones(2)}, scale={"b": 1.0}), "scale must be a dict with the keys"),
    (lambda: TracedEquation(np.sin, (np.ones(2), 1.0), scale=(1.0,)), "scale must be a tuple of 2 arrays"),
    (lambda: TracedEquation(np.sin, (np.ones(2), 1.0), scale=np.ones(3)), "scale must have one entry a field"),
    (lambda: TracedEquation(np.sin, np.ones(2)).residual(np.ones(3)), r"x has shape \(3,\), expected \(2,\)"),
    (lambda: TracedEquation(np.sin, np.ones(2)).linearize(np.ones((2, 1))), r"x has shape \(2, 1\)"),
    (lambda: TracedEquation(np.sum, np.ones(2)).residual(np.ones(2)), r"F\(x\) has shape \(\), expected \(2,\)"),
    (lambda: TracedEquation(np.sum, np.ones(2)).linearize(np.ones(2)), r"F\(x\) has shape \(\), expected \(2,\)"),
    (lambda: TracedEquation(lambda f: f[0], (np.ones(2), 1.0)).residual(np.ones(3)), "must be a tuple of 2"),
    (lambda: TracedEquation(lambda f: {"b": 1.0}, {"a": 1.0}).linearize(np.ones(1)), r"must be a dict .*\['b'\]"),
    (lambda: TracedEquation(lambda f: (f[0], f[0]), (np.ones(2), 1.0)).linearize(np.ones(3)), r"F\(x\)\[1\] has shape"),
    (lambda: TracedEquation(lambda u: None, np.ones(2)).residual(np.ones(2)), r"F\(x\)"),
    (lambda: TracedEquation(lambda u: None, np.ones(2)).linearize(np.ones(2)), r"F\(x\)"),
    (lambda: TracedEquation(lambda u: "ab", np.ones(2)).residual(np.ones(2)), r"F\(x\) must hold real numbers"),
    (lambda: TracedEquation(lambda u: 1j * u, np.ones(2)).residual(np.ones(2)), r"F\(x\) must hold real numbers"),
]  # fmt: skip


@pytest.mark.parametrize(("call", "message"), BAD)
def test_bad_arguments(call, message):
    with pytest.raises(ssn.InputError, match=message):
        call()
