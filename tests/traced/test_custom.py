"""Operations with a derivative of their own, and the proximal maps of costs."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import aslinearoperator

import ssn
from ssn.traced import TracedEquation, custom_operation
from tests.traced.helpers import as_dense, derivatives, differences

X = np.array([-1.0, 0.5, 2.0])
A = np.array([[1.0, 2.0, 0.0], [0.0, 1.0, 3.0]])

ramp = custom_operation(
    value=lambda v: np.maximum(v, 0.0),
    derivative=lambda v: (v > 0).astype(float),
    pieces=lambda v: ssn.Pieces({"side": v > 0}, {"side": ("off", "on")}),
    smoothed=lambda v, eps: 0.5 * (v + np.sqrt(v * v + 4 * eps * eps)),
    name="ramp",
)


def test_elementwise_with_pieces_and_smoothed_form():
    assert ramp(X).tolist() == [0.0, 0.5, 2.0]
    equation = TracedEquation(lambda u: ramp(2.0 * u), X)
    at = equation.linearize(X)
    assert at.derivative.toarray().tolist() == np.diag([0.0, 2.0, 2.0]).tolist()
    ((name, sizes),) = at.pieces.sizes().items()
    assert name.startswith("ramp at test_custom.py:")
    assert sizes == {"off": 1, "on": 2}
    own = TracedEquation(lambda u: np.maximum(0.0, 2.0 * u), X)
    for eps in (1e-3, 0.4):
        a, b = equation.smoothed(eps).linearize(X), own.smoothed(eps).linearize(X)
        np.testing.assert_allclose(a.residual, b.residual, rtol=1e-10, atol=1e-10)
        np.testing.assert_allclose(a.derivative.toarray(), b.derivative.toarray(), atol=1e-10)


@pytest.mark.parametrize("matrix", [A, sp.csc_array(A), sp.coo_matrix(A), aslinearoperator(A)])
def test_matrices(matrix):
    operation = custom_operation(value=lambda v: A @ v, derivative=lambda v: matrix)
    found = derivatives(lambda u: np.concatenate([operation(u * u), u[:1]]), X)
    np.testing.assert_allclose(found[:2], A @ np.diag(2 * X))


def test_several_arguments_and_shapes():
    operation = custom_operation(
        value=lambda a, b, c: a * b + c,
        derivative=lambda a, b, c: (b * np.ones_like(a), a.reshape(-1, 1), None),
    )

    def function(u):
        return operation(u.reshape(3, 1), u[1], np.ones((3, 1))).ravel()

    np.testing.assert_allclose(derivatives(function, X), differences(function, X), atol=1e-8)
    assert operation(2.0, 3.0, 4.0) == 10.0


def test_a_smooth_operation_needs_no_smoothed_form():
    cube = custom_operation(value=lambda v: v**3, derivative=lambda v: 3 * v**2, name="cube")
    equation = TracedEquation(lambda u: cube(u), X)
    assert np.array_equal(equation.smoothed(0.1).residual(X), X**3)
    assert len(equation.linearize(X).pieces) == 0
    assert repr(cube) == "custom_operation(cube)"


BAD = [
    (lambda: custom_operation(value=1, derivative=np.cos), "value must be a function, got int"),
    (lambda: custom_operation(value=np.sin, derivative=None), "derivative must be a function"),
    (lambda: custom_operation(value=np.sin, derivative=np.cos, smoothed=np.sin), "give pieces too"),
    (lambda: use(custom_operation(value=np.sin, derivative=lambda v: np.ones(2))), r"shape \(2,\); expected \(3,\)"),
    (lambda: use(custom_operation(value=np.sin, derivative=lambda v: (v, v))), "tuple of 1 entries"),
    (lambda: use(custom_operation(value=np.sin, derivative=lambda v: sp.eye_array(2))), r"shape \(2, 2\)"),
    (lambda: use(custom_operation(value=np.abs, derivative=np.sign, pieces=np.sign, name="own"), 0.1),
     r"own at test_custom.py:\d+ has no smoothed form: give smoothed="),
]  # fmt: skip


def use(operation, eps=0.0):
    return TracedEquation(lambda u: operation(u), X).smoothed(eps).linearize(X)


@pytest.mark.parametrize(("call", "message"), BAD)
def test_bad_operations(call, message):
    with pytest.raises(ssn.InputError, match=message):
        call()


COSTS = [
    ssn.SparseCost(0.4),
    ssn.SparseCost(0.4, lower=-0.5, upper=1.0),
    ssn.SparseCost(np.array([0.0, 0.1, 0.2]), upper=1.0),
    ssn.Bounds(-0.5, 1.0),
    ssn.Bounds(upper=np.array([1.0, 2.0, np.inf])),
]


@pytest.mark.parametrize("cost", COSTS)
def test_proximal_maps(cost):
    v = np.array([-1.0, 0.03, 2.5])
    equation = TracedEquation(lambda u: u - cost.prox(2.0 * u, 0.5), v)
    at = equation.linearize(v)
    assert np.array_equal(at.residual, v - cost.prox(2.0 * v, 0.5))
    assert np.array_equal(
        as_dense(at.derivative), np.eye(3) - 2.0 * np.diag(cost.prox_derivative(2.0 * v, 0.5).diagonal)
    )
    ((name, labels),) = at.pieces.items()
    assert name.startswith(f"{type(cost).__name__}.prox at test_custom.py:")
    assert np.array_equal(labels, cost.pieces(2.0 * v, 0.5)["control"])
    assert at.pieces.legend[name] == cost.pieces(v, 0.5).legend["control"]
    smooth = equation.smoothed(0.2)
    np.testing.assert_allclose(
        smooth.residual(v), v - cost.smoothed_prox(2.0 * v, 0.5, 0.2), rtol=1e-14, atol=1e-15
    )
    np.testing.assert_allclose(
        as_dense(smooth.linearize(v).derivative), differences(smooth.residual, v), rtol=1e-7, atol=1e-8
    )


def test_the_cost_decides_at_kinks():
    cost = ssn.SparseCost(1.0)
    at = TracedEquation(lambda u: cost.prox(u, 1.0), np.ones(1)).linearize(np.ones(1))
    assert at.derivative.toarray() == cost.prox_derivative(np.ones(1), 1.0).diagonal == 0.0


class Projection:
    """A cost whose proximal map is no diagonal: the indicator of the vectors with equal entries."""

    convex = True

    def prox(self, v, step):
        return v.through_prox(self, step) if hasattr(v, "through_prox") else np.full(v.shape, v.mean())

    def prox_derivative(self, v, step):
        class Derivative:
            diagonal = None

            def apply(self, d):
                return np.broadcast_to(d.mean(axis=0), d.shape).copy()

        return Derivative()

    def pieces(self, v, step):
        return ssn.Pieces()

    def smoothed_prox(self, v, step, eps):
        return np.mean(v) * np.ones(v.shape)


def test_proximal_maps_that_are_not_diagonal():
    cost = Projection()
    equation = TracedEquation(lambda u: u + cost.prox(u * u, 1.0), X)
    expected = np.eye(3) + np.ones((3, 1)) * 2 * X / 3
    for each in (equation, equation.smoothed(0.1)):
        np.testing.assert_allclose(as_dense(each.linearize(X).derivative), expected, rtol=1e-13)


def test_natural_residual_solved():
    generator = np.random.default_rng(0)
    a, b = generator.standard_normal((30, 12)), generator.standard_normal(30)
    step = 1.0 / np.linalg.norm(a, 2) ** 2
    cost = ssn.SparseCost(2.0)
    equation = TracedEquation(lambda u: u - cost.prox(u - step * (a.T @ (a @ u - b)), step), np.zeros(12))
    solution = ssn.solve(equation, tolerance=1e-12).require()
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=cost)
    np.testing.assert_allclose(solution.x, ssn.solve(problem).require().x, atol=1e-9)


@pytest.mark.parametrize("weighted", [False, True])
def test_proximal_maps_that_cannot_be_traced_have_their_own_smoothed_form(weighted):
    """Coupled costs sort or solve for a threshold: their smoothed map and its derivative are taken as they are."""
    rng = np.random.default_rng(0)
    a = rng.standard_normal((12, 6))
    h, b = a.T @ a / 12, a.T @ rng.standard_normal(12) / 3
    inner = np.array([1.0, 2.0, 0.5, 1.5, 1.0, 3.0]) if weighted else 1.0
    cost = ssn.GroupSparseCost(0.3, [0, 0, 0, 1, 1, 1], inner_weights=inner)
    step = 0.5

    def natural(u):
        return u - cost.prox(u - step * (h @ u - b), step)

    equation = TracedEquation(natural, np.full(6, 0.7))
    smoothed = equation.smoothed(1e-2)
    x, d = rng.standard_normal(6), rng.standard_normal(6)
    quotient = (smoothed.residual(x + 1e-6 * d) - smoothed.residual(x - 1e-6 * d)) / 2e-6
    derivative = smoothed.linearize(x).derivative
    np.testing.assert_allclose(derivative @ d, quotient, atol=1e-7)
    e = rng.standard_normal(6)
    assert (derivative.T @ e) @ d == pytest.approx(e @ (derivative @ d), rel=1e-12)
    path = ssn.solve(natural, np.full(6, 0.7), globalization="smoothing").require()
    np.testing.assert_allclose(path.x, ssn.solve(natural, np.full(6, 0.7)).require().x, atol=1e-7)
