"""Traced functions through the front door: obstacle problems, several fields, path-following by hand."""

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import aslinearoperator

import ssn
from ssn.traced import TracedEquation


def laplacian(n):
    return (
        sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
        * (n + 1.0) ** 2
    )


def square_laplacian(n):
    one = laplacian(n)
    return sp.csr_array(sp.kron(sp.eye_array(n), one) + sp.kron(one, sp.eye_array(n)))


def test_penalised_contact_in_two_dimensions():
    n = 20
    stiffness = square_laplacian(n)
    ceiling, penalty = 0.03, 1e6

    def contact(u):
        return stiffness @ u - 1.0 + penalty * np.maximum(0.0, u - ceiling)

    equation = TracedEquation(contact, np.zeros(n * n))
    solution = ssn.solve(equation).require()
    assert np.abs(contact(solution.x)).max() < 1e-8
    assert len(solution.steps) <= 10
    (labels,) = solution.pieces.values()
    assert np.array_equal(labels == 1, solution.x >= ceiling)
    assert 0 < labels.sum() < labels.size


@pytest.mark.parametrize("product", [lambda a: a, lambda a: a.toarray(), sp.csc_matrix, aslinearoperator])
def test_obstacle_as_complementarity(product):
    n = 15
    stiffness = sp.csr_array(laplacian(n))
    operator = product(stiffness)
    ceiling = np.full(n, 0.08)
    scale = 2.0 * (n + 1.0) ** 2

    def obstacle(u):
        return np.maximum(operator @ u - 1.0, scale * (u - ceiling))

    equation = TracedEquation(obstacle, np.zeros(n), scale=scale)
    solution = ssn.solve(equation, tolerance=1e-10).require()
    u = solution.x
    force = 1.0 - stiffness @ u
    assert (u <= ceiling + 1e-8).all()
    assert (force >= -1e-5).all()
    assert np.abs(force * (ceiling - u)).max() < 1e-6


def test_obstacle_without_matrices():
    """The stencil written with slices of an array of two axes gives the matrix of the stencil."""
    n = 12
    h = 1.0 / (n + 1)

    def residual(u):
        padded = np.pad(u, 1)
        inner = 4 * u - padded[2:, 1:-1] - padded[:-2, 1:-1] - padded[1:-1, 2:] - padded[1:-1, :-2]
        return inner / h**2 - 1.0 + 1e5 * np.maximum(0.0, u - 0.04)

    equation = TracedEquation(residual, np.zeros((n, n)), scale=1.0 / h**2)
    at = equation.linearize(np.zeros(n * n))
    assert abs(at.derivative - square_laplacian(n)).max() < 1e-9
    u = equation.unpack(ssn.solve(equation).require().x)
    np.testing.assert_allclose(u, u.T, atol=1e-8)
    assert u.max() > 0.04


def test_two_fields():
    """Displacement and contact force of a rod pressed against a wall, in different units."""
    n, modulus, gap, load = 10, 2e11, 1e-5, 4e7
    strain = np.diff(np.eye(n + 1), axis=0)[:, 1:] * n

    def rod(fields):
        u, force = fields["displacement"], fields["force"]
        balance = modulus * (strain.T @ (strain @ u)) / n - load / n
        end = np.concatenate([np.zeros(n - 1), force])
        return {
            "displacement": balance + end,
            "force": np.maximum(u[-1:] - gap, -force / modulus),
        }

    start = {"displacement": np.zeros(n), "force": np.zeros(1)}
    equation = TracedEquation(rod, start, scale={"displacement": 1e7, "force": 1e-5})
    solution = ssn.solve(equation).require()
    fields = equation.unpack(solution.x)
    np.testing.assert_allclose(fields["displacement"][-1], gap, rtol=1e-9)
    assert fields["force"][0] > 0
    np.testing.assert_allclose(
        strain.T @ (strain @ fields["displacement"]) * modulus / n + np.eye(n)[-1] * fields["force"][0],
        load / n * np.ones(n),
        rtol=1e-6,
    )


def test_smooth_equation_converges_quadratically():
    solution = ssn.solve(
        TracedEquation(lambda u: np.exp(u) + u - 3.0, np.zeros(3)), tolerance=1e-14
    ).require()
    assert len(solution.steps) <= 7


def test_smoothing_path_by_hand_solves_where_plain_steps_cycle():
    """A linear complementarity problem with a P-matrix on which plain steps cycle."""
    matrix = np.array([[1.0, 0.0, 2.0], [2.0, 1.0, 0.0], [0.0, 2.0, 1.0]])

    def problem(x):
        return np.minimum(x, matrix @ x - 1.0)

    equation = TracedEquation(problem, np.array([1.0, 0.0, 0.0]))
    plain = ssn.solve(equation, globalization="full", max_steps=30)
    assert not plain.converged
    x = equation.start
    for eps in 10.0 ** -np.arange(0.0, 7.0):
        x = ssn.solve(equation.smoothed(eps), x, tolerance=1e-8).require().x
    solution = ssn.solve(equation, x, globalization="full").require()
    np.testing.assert_allclose(solution.x, np.full(3, 1.0 / 3.0), atol=1e-9)
    assert len(solution.steps) <= 2


def test_repeats_bit_for_bit():
    stiffness = square_laplacian(8)
    equation = TracedEquation(lambda u: stiffness @ u - 1.0 + 1e4 * np.maximum(0.0, u - 0.02), np.zeros(64))
    first, second = ssn.solve(equation), ssn.solve(equation)
    assert np.array_equal(first.x, second.x)
    assert first.steps == second.steps
