"""Sparse control of a semilinear equation: order of the manufactured solution, known values, independent methods."""

import numpy as np
import pytest

import ssn
from ssn.evidence import assess

from .loading import load

problem_file = load("semilinear_sparse")


def test_manufactured_control_and_state_converge_at_order_h2():
    errors, states, widths = [], [], []
    for n in (12, 24, 48):
        problem = problem_file.build(n)
        mesh, solution = problem.mesh_data, ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2, 3, 4}  # bounds, both signs, zero
        assert len(solution.steps) <= 6
        errors.append(problem.controls.norm(solution.x - mesh.exact_control))
        states.append(np.abs(solution.state - mesh.exact_state).max())
        widths.append(mesh.h)
    for found in (errors, states):
        assert np.polyfit(np.log(widths), np.log(found), 1)[0] == pytest.approx(2.0, abs=0.1)
    assert errors[-1] < 0.05  # of a control between -50 and 50
    assert states[-1] < 1e-3


def test_known_values_hold_and_reject_another_control():
    problem = problem_file.build(24)
    solution = ssn.solve(problem).require()
    known = problem_file.known(problem, solution)
    assert len(known) == 2 and all(check["holds"] for check in known)
    other = ssn.solve(problem_file.build(24, beta=0.31)).require()
    assert [check["holds"] for check in problem_file.known(problem, other)] == [True, False]


def test_the_hessian_of_the_lagrangian_is_not_positive_and_first_order_methods_agree():
    problem = problem_file.build(12)
    solution = ssn.solve(problem).require()
    curvature = problem.observations.vector + problem.state.curvature(solution.state, solution.adjoint)
    assert (curvature < 0).mean() > 0.3
    found = assess(problem, solution=solution, budget=10.0, libraries=True)
    assert found.holds, found.failures()
    assert {"proximal gradient", "L-BFGS-B", "sequential programming"} <= {m.name for m in found.methods}
    for method in found.methods:
        assert method.objective == pytest.approx(solution.objective, rel=1e-9), method.name


def test_transfer_picture_and_input():
    coarse, fine = problem_file.build(8), problem_file.build(16)
    start = problem_file.transfer(coarse, fine)(ssn.solve(coarse).x)
    solution = ssn.solve(fine, start).require()
    assert problem_file.picture(fine, solution) is not None
    for wrong in ({"n": 1}, {"alpha": 0.0}, {"bound": -1.0}, {"kappa": -1.0}, {"height": np.inf}):
        with pytest.raises(ssn.InputError, match=next(iter(wrong))):
            problem_file.build(**{"n": 4} | wrong)
