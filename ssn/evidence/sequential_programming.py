"""Sequential quadratic programming for semilinear states: an independent method where states have hard bounds.

The state equation is linearised, the Lagrangian's curvature in the state added as far as the program stays convex, and
clarabel solves the quadratic program, which holds the bounds exactly and knows no penalty. Shared with the kernel are
the data: matrices, reaction and its derivatives.

Source: P. T. Boggs and J. W. Tolle, Acta Numerica 4 (1995) 1-51 (from memory); full steps, no globalisation.
"""

from __future__ import annotations

import time
from dataclasses import replace
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..control import ControlProblem
from ..errors import StateSolveError
from ..nonlinear_control import NonlinearControlProblem
from ..nonlinear_states import SemilinearState
from ..protocols import FloatArray
from ..states import SteadyState
from .quadratic_program import LARGEST, LibraryResult, clarabel_solution, quadratic_program

STEPS, TOLERANCE = 30, 1e-10
# part of the tracking's curvature that may be taken away
CONVEX = 0.9


def applies(problem: Any) -> bool:
    """Whether the method can state the problem: a semilinear state, explicit operators, not too many variables."""
    operators = (getattr(problem, "control_operator", None), getattr(problem, "observation", None))
    if not isinstance(problem, NonlinearControlProblem) or not isinstance(problem.state, SemilinearState):
        return False
    explicit = not any(isinstance(operator, LinearOperator) for operator in operators)
    if problem.state_bounded and problem.state_penalty is not None:
        return False  # the bounds are hard here
    return explicit and problem.state.size + 2 * problem.unknowns <= LARGEST


def linearised(problem: Any, u: FloatArray, y: FloatArray) -> ControlProblem:
    """The problem with its state equation linearised at y, bounds and all."""
    state = problem.state
    matrix = state.derivative_matrix(y)
    source = state.residual(y, np.zeros(state.size)) + matrix @ y
    weight = problem.observations
    bounds: dict[str, Any] = {}
    if problem.state_bounded:
        bounds = {"state_lower": problem.state_lower, "state_upper": problem.state_upper}
    return ControlProblem(
        state=SteadyState(matrix),
        target=problem.target,
        cost=problem.cost,
        control_weight=problem.alpha,
        control_operator=problem.control_operator,
        observation=problem.observation,
        source=source if problem.source is None else source + problem.source,
        control_mass=problem.weights,
        observation_mass=weight.vector if weight.matrix is None else weight.matrix,
        **bounds,
    )


def sequential_programming(problem: Any, *, budget: float) -> LibraryResult:
    """Full steps from the state of the zero control until the control stays."""
    began = time.monotonic()
    u = problem.cost.prox(np.zeros(problem.unknowns), 1e-300)
    try:
        y = problem.state_of(u)
        n, size = problem.unknowns, problem.state.size
        multiplier = np.zeros(size)
        for k in range(1, STEPS + 1):
            program = quadratic_program(linearised(problem, u, y))
            assert program is not None
            least = -CONVEX * program.p.diagonal()[n : n + size]
            curvature = np.maximum(problem.state.curvature(y, multiplier), least)
            extra = np.zeros(program.q.size)
            extra[n : n + size] = curvature
            linear = program.q.copy()
            linear[n : n + size] -= curvature * y
            program = replace(program, p=sp.csc_array(program.p + sp.diags_array(extra)), q=linear)
            v, dual, status = clarabel_solution(program, budget - (time.monotonic() - began))
            if not np.isfinite(v).all():
                return LibraryResult(u, False, status, k)
            change = problem.controls.norm(v[:n] - u)
            u, y, multiplier = v[:n], v[n : n + size], dual[:size]
            if change <= TOLERANCE * problem.controls.norm(u):
                return LibraryResult(_inside(problem, u), True, "converged", k)
            if time.monotonic() - began > budget:
                return LibraryResult(_inside(problem, u), False, "budget used up", k)
    except StateSolveError as error:
        return LibraryResult(u, False, str(error)[:40], None)
    return LibraryResult(_inside(problem, u), False, "step limit", STEPS)


def _inside(problem: Any, u: FloatArray) -> FloatArray:
    return np.clip(u, problem.cost.lower, problem.cost.upper)
