"""Plans for control problems with bounds of the state, and with a nonlinear state."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.sparse.linalg import LinearOperator

from ..control import ControlProblem
from ..equations.full_space import FullSpaceEquation, has_dual
from ..errors import InputError, StateSolveError
from ..globalization import ResidualSearch
from ..linear import (
    FullSpaceSolver,
)
from ..moreau_yosida import PenaltyPath, first_penalty
from ..nonlinear_control import NonlinearControlProblem
from ..protocols import FloatArray
from ..proximal_newton import ControlEquation, ObjectiveSearch, ProximalNewtonSolver
from .plan import Plan, start_array

# steps of a residual search at a point of the penalty path before a dual search takes over
QUICK = 6


def plan_state_bounds(problem: ControlProblem | NonlinearControlProblem, control: FloatArray | None) -> Plan:
    """State and adjoint together, along a path in the penalty of the bounds."""
    if getattr(problem.state, "matrix", None) is None and not hasattr(problem.state, "derivative_matrix"):
        raise InputError(
            f"state bounds need the explicit matrix of the state equation, which {type(problem.state).__name__} hides"
        )
    for name, matrix in (
        ("control_operator", problem.control_operator),
        ("observation", problem.observation),
    ):
        if isinstance(matrix, LinearOperator):
            raise InputError(f"state bounds need {name} as a matrix, got a LinearOperator")
    if problem.cost.prox_derivative(np.zeros(problem.unknowns), 1.0 / problem.alpha).diagonal is None:
        raise InputError(f"state bounds need a separable cost; {type(problem.cost).__name__} is not")
    gamma = problem.state_penalty if problem.state_penalty is not None else first_penalty(problem)
    equation = FullSpaceEquation(problem, gamma)
    first = "proximal Newton" if equation.nonlinear else "dual search"
    choices = {
        "equation": "state and adjoint, control eliminated, state bounds penalised",
        "globalization": "residual search, and dual search behind it: the dual function of each point is convex"
        if has_dual(problem)
        else "residual search at each point of the path, which goes back where it fails",
        "linear": "full space: one sparse factorisation a step, pattern kept",
        "path": f"Moreau-Yosida: the penalty rises from 0 ({first}) by a model of the value function",
    }
    search = ResidualSearch().fresh()
    path = PenaltyPath(control, quick_steps=QUICK if has_dual(problem) else 0)
    try:
        x = equation.start(control)
    except StateSolveError:
        x = np.zeros(2 * equation.size)  # the path says why it cannot begin
    return Plan(problem, equation, FullSpaceSolver(equation), search, x, choices, penalty=path)


def plan_nonlinear(problem: NonlinearControlProblem, start: Any) -> Plan:
    """Proximal Newton steps, or the penalty path where the state has bounds."""
    control = start_array(start, problem.unknowns)
    if problem.state_bounded:
        return plan_state_bounds(problem, control)
    equation = ControlEquation(problem)
    solver = ProximalNewtonSolver(equation)
    choices = {
        "equation": "u = prox(B* p / alpha) with the state and adjoint of u",
        "globalization": "objective: every step lowers it; steps to where there is no state are shortened",
        "linear": "proximal Newton: Gauss-Newton models by their dual equation, then the full Hessian by GMRES",
    }
    x = problem.cost.prox(np.zeros(problem.unknowns) if control is None else control, 1e-300)
    search = ObjectiveSearch(lambda at: solver.gauss_newton(at, 1e-6))
    return Plan(problem, equation, solver, search, x, choices)
