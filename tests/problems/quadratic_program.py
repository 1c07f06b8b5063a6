"""The same control problem for a general interior-point solver, which shares nothing with ssn but the data."""

from __future__ import annotations

import clarabel
import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn

FloatArray = npt.NDArray[np.float64]


def interior_point(
    problem: ssn.ControlProblem, tolerance: float = 1e-13
) -> tuple[float, FloatArray, FloatArray]:
    """Return objective, control and state of a control problem with `SparseCost`, found by Clarabel.

    Unknowns are the state y and the parts p, m >= 0 of u = p - m; the state equation is a constraint. The objective is
    divided by the mean control mass. A gap g leaves a control error of up to sqrt(2 g / alpha), and comes near it where
    components lie close to a kink.
    """
    n_state, n = problem.control_operator.shape
    B, mass, scale = problem.control_operator, problem.weights, 1.0 / problem.weights.mean()
    C = sp.eye_array(n_state) if problem.observation is None else problem.observation
    W = sp.diags_array(scale * problem.observations.vector)
    curvature = sp.diags_array(scale * problem.alpha * mass)
    P = sp.block_diag([C.T @ W @ C, curvature, curvature], format="csc")
    price = scale * problem.cost.beta * mass
    q = np.concatenate([-(C.T @ (W @ problem.target)), price, price])
    # 0 <= p <= upper, 0 <= m <= -lower
    highest = np.concatenate(
        [np.broadcast_to(problem.cost.upper, (n,)), np.broadcast_to(-problem.cost.lower, (n,))]
    )
    parts = sp.hstack([sp.csr_array((2 * n, n_state)), sp.eye_array(2 * n)], format="csr")
    finite = np.isfinite(highest)
    A = sp.vstack([sp.hstack([problem.state.matrix, -B, B]), -parts, parts[finite]], format="csc")
    source = np.zeros(n_state) if problem.source is None else problem.source
    b = np.concatenate([source, np.zeros(2 * n), highest[finite]])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = tolerance
    cones = [clarabel.ZeroConeT(n_state), clarabel.NonnegativeConeT(b.size - n_state)]
    found = clarabel.DefaultSolver(sp.triu(P, format="csc"), q, A, b, cones, settings).solve()
    # the last two: the tolerance is near what rounding allows
    assert str(found.status) in ("Solved", "AlmostSolved", "InsufficientProgress")
    x = np.asarray(found.x)
    constant = 0.5 * problem.observations.dot(problem.target, problem.target)
    return found.obj_val / scale + constant, x[n_state : n_state + n] - x[n_state + n :], x[:n_state]
