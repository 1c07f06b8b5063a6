"""Tracking and its gradient in a time-dependent state whose trajectory is not kept in memory.

The adjoint sweep needs the state from the last level to the first; levels come from checkpoints, and the load, the
adjoint and its product with B' are those of one level at a time.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .checkpoints import Checkpoints

FloatArray = npt.NDArray[np.float64]


def by_levels(problem: Any) -> bool:
    """Whether a control problem asks for this, and has the parts that belong to one level each."""
    state = problem.state
    memory = getattr(state, "memory", None)
    if memory is None or 8 * state.size <= memory:
        return False
    whole = problem.observation is None and problem.observations.vector is not None
    return whole and sp.issparse(problem.control_operator)


def tracking(problem: Any, u: FloatArray) -> tuple[float, FloatArray]:
    """1/2 ||y(u) - z||^2 and its gradient S* (y(u) - z); two sweeps and those of the recomputed levels."""
    state, control = problem.state, problem.control_operator
    points = state.points
    target, weight = (
        np.reshape(array, (state.steps, points)) for array in (problem.target, problem.observations.vector)
    )

    def rows(k: int) -> Any:
        return control[(k - 1) * points : k * points]

    def advance(k: int, level: FloatArray) -> FloatArray:
        load = np.asarray(rows(k) @ u)
        if problem.source is not None:
            load = load + problem.source[(k - 1) * points : k * points]
        return np.asarray(state.advance(k, level, load))

    trajectory = Checkpoints(advance, np.zeros(points), state.steps, state.memory)
    value, gradient, later = 0.0, np.zeros(problem.unknowns), None
    for k, level in trajectory.backward():
        misfit = level - target[k - 1]
        load = weight[k - 1] * misfit
        value += 0.5 * float(misfit @ load)
        later = state.retreat(k, later, load)
        gradient += np.asarray(rows(k).T @ later)
    state.work.state_solves += 1 + -(-trajectory.advances // state.steps)
    return value, gradient / problem.weights
