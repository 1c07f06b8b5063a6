"""The loop in the hands of a host."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import spsolve

import ssn
from ssn.status import Outcome
from tests.kernel.examples import Contact, control


def string_step(n=100, dt=5e-3):
    """Implicit steps of a string that is pulled down and up over an obstacle: (I + dt K) u - (u_old + dt f) >= 0."""
    h = 1.0 / (n + 1)
    x = np.linspace(h, 1.0 - h, n)
    stiffness = (
        sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h**2
    )
    matrix = sp.csr_array(sp.eye_array(n) + dt * stiffness)
    obstacle = -0.05 - 0.1 * (x - 0.5) ** 2

    def problem(u_old, k):
        load = -8.0 * np.sin(2.0 * np.pi * k * dt) * (1.0 + x)
        return ssn.ComplementarityProblem(ssn.AffineMap(matrix, -(u_old + dt * load)), lower=obstacle)

    return problem, np.zeros(n)


def test_a_time_stepper_drives_two_hundred_contact_steps():
    """Fewer than 2.5 Newton steps a time step thanks to warm starts, and the same result as fresh solves."""
    problem, u = string_step()
    iteration = ssn.Iteration(problem(u, 1), u)
    steps, fresh_steps, touching = 0, 0, set()
    for k in range(1, 201):
        if k > 1:
            iteration.change(problem(u, k))
        while not iteration.finished:
            iteration.step()
        solution = iteration.solution().require()
        fresh = ssn.solve(problem(u, k)).require()
        np.testing.assert_allclose(solution.x, fresh.x, atol=1e-10)
        steps += len(iteration.steps)
        fresh_steps += len(fresh.steps)
        touching.add(solution.pieces.sizes()["control"]["lower"])
        u = solution.x
    assert min(touching) == 0 and max(touching) > 40  # contact comes and goes
    assert steps < 2.5 * 200
    assert steps < fresh_steps


def test_warm_pieces_solve_an_affine_problem_in_one_step():
    problem, u = string_step()
    first = ssn.solve(problem(u - 0.04, 30)).require()
    assert first.pieces.sizes()["control"]["lower"] > 10
    from_pieces = ssn.Iteration(problem(u - 0.04, 30), u, pieces=first.pieces)
    from_pieces.step()
    assert from_pieces.finished and from_pieces.outcome is Outcome.CONVERGED
    np.testing.assert_allclose(from_pieces.x, first.x, atol=1e-12)
    without = ssn.Iteration(problem(u - 0.04, 30), u)
    without.step()
    assert not without.finished
    warm = ssn.Iteration(problem(u - 0.04, 30), warm=first)
    assert warm.finished and not warm.steps


def test_refuse_takes_a_step_back():
    iteration = ssn.Iteration(control(alpha=1e-5))
    iteration.step()
    before = (iteration.x.copy(), iteration.residual_norm, len(iteration.steps))
    iteration.step()
    assert iteration.residual_norm != before[1]
    iteration.refuse()
    np.testing.assert_array_equal(iteration.x, before[0])
    assert (iteration.residual_norm, len(iteration.steps)) == before[1:]
    with pytest.raises(RuntimeError, match="no step to take back"):
        iteration.refuse()
    solution = iteration.run().require()
    np.testing.assert_allclose(solution.x, ssn.solve(control(alpha=1e-5)).x, atol=1e-7)


def test_same_steps_as_solve():
    solution = ssn.solve(control(alpha=1e-5)).require()
    iteration = ssn.Iteration(control(alpha=1e-5))
    driven = iteration.run().require()
    np.testing.assert_array_equal(driven.x, solution.x)
    assert [s.residual_norm for s in driven.steps] == [s.residual_norm for s in solution.steps]
    with pytest.raises(RuntimeError, match="has ended"):
        iteration.step()


def test_the_hosts_linear_solver_and_norm_are_used():
    calls = []

    def linear(derivative, rhs):
        calls.append(rhs.shape)
        return spsolve(sp.csc_array(derivative), rhs)

    iteration = ssn.Iteration(
        Contact(), np.zeros(40), linear=linear, norm=lambda r: float(np.abs(r).max()), globalization="full"
    )
    solution = iteration.run().require()
    assert len(calls) == len(solution.steps) > 1
    assert iteration.residual_norm == np.abs(Contact().residual(solution.x)).max()
    bad = ssn.Iteration(
        Contact(), np.zeros(40), linear=lambda g, r: np.full(40, np.nan), globalization="full"
    )
    bad.step()
    assert bad.finished and bad.outcome is Outcome.SINGULAR


def test_a_state_in_between_is_no_success():
    iteration = ssn.Iteration(control(alpha=1e-6))
    iteration.step()
    assert not iteration.solution().converged
    iteration.move_to(ssn.solve(control(alpha=1e-6)).x)
    assert len(iteration.run().require().steps) <= 2


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"start": np.zeros(144), "warm": "solution"}, "start or warm"),
        ({"globalization": "smoothing"}, "is a path"),
        ({"linear": lambda g, r: r}, "residual and linearize"),
        ({"pieces": {"control": np.zeros(144, dtype=int)}}, "complementarity problems only"),
    ],
)
def test_refused(arguments, message):
    problem = control()
    if arguments.get("warm") == "solution":
        arguments = arguments | {"warm": ssn.solve(problem)}
    with pytest.raises(ssn.InputError, match=message):
        ssn.Iteration(problem, **arguments)
