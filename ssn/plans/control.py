"""Plans for control problems with a linear state."""

from __future__ import annotations

import copy
from typing import Any

import numpy as np

from ..control import ControlProblem
from ..easier_weight import TINY, Detour
from ..envelope_start import control_equation
from ..equations.coupled import CoupledEquation
from ..equations.dual import DualEquation
from ..equations.factorised_pair import FactorisedPairEquation
from ..errors import InputError
from ..gap_path import GapPath
from ..globalization import DualSearch, EnvelopeSearch, ResidualSearch
from ..inner import relative
from ..linear import (
    CoupledSolver,
    ReducedSolver,
    SchurSolver,
    SubspaceSolver,
)
from ..linear.coupled import refusal
from ..linear.schur import refusal as schur_refusal
from ..protocols import FloatArray, Globalization
from ..proximal_point import ProximalPointPath
from ..states import SteadyState
from ..validate import float_array
from .bounded import plan_state_bounds
from .plan import LOCAL_CHOICES, Plan, relaxed_first, start_array

# states from which on cycles on the coupled system beat solves with a factorised state operator
COUPLED_FROM = 30_000


def plan_control(problem: ControlProblem, start: Any, globalization: Any, linear: str) -> Plan:
    """The dual equation; multigrid on state and adjoint where there are many states."""
    pair = _start_pair(start, problem.state.size)
    if pair is not None and (problem.alpha == 0.0 or problem.state_bounded):
        raise InputError("start: a pair (state, adjoint) needs control_weight > 0 and a state without bounds")
    if pair is not None and not problem.convex:
        raise InputError("start: a pair (state, adjoint) needs a convex cost; give a control")
    control = start_array(start, problem.unknowns) if pair is None else None
    if not problem.convex:
        return _plan_nonconvex(problem, control)
    if problem.state_bounded:
        return plan_state_bounds(problem, control)
    searched = globalization == "auto" or isinstance(globalization, DualSearch) or globalization == "dual"
    if linear == "coupled" or (linear == "auto" and searched and problem.state.size >= COUPLED_FROM):
        reason = (
            refusal(problem) if isinstance(problem.state, SteadyState) else "the state is not a SteadyState"
        )
        if reason is None and (problem.observation is None or linear == "coupled"):
            return _plan_coupled(problem, control, pair, linear)
        if linear == "coupled":
            raise InputError(f"linear='coupled' does not fit this problem: {reason}")
    if linear == "schur":
        reason = schur_refusal(problem)
        if reason is not None:
            raise InputError(f"linear='schur' does not fit this problem: {reason}")
        return _plan_schur(problem, control, pair)
    path = _path_without_quadratic(problem)
    alpha = problem.alpha if problem.alpha > 0 else 1.0
    equation = DualEquation(problem, problem.reduced_target(), alpha, problem.cost)
    choices = {
        "equation": "dual equation: quadratic tracking, convex cost",
        "globalization": "dual: the dual function is convex, exact search costs no solve",
        "linear": "subspace: one factorisation of the state operator, basis kept between steps",
    }
    if path is not None:
        choices["path"] = (
            "Moreau-Yosida, ended on the active sets of the problem itself by the duality gap: control_weight is 0"
            if isinstance(path, GapPath)
            else "proximal point: control_weight is 0, and no duality gap is known"
        )
        x = np.zeros(problem.unknowns) if control is None else control
    elif pair is not None:
        x = equation.start_from(problem.observe(pair[0] - problem.offset()))
    else:
        x = equation.start(control)
    plan = Plan(problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, path)
    if path is None:
        plan.detour = _dual_detour(plan)
    return plan


def _dual_detour(plan: Plan) -> Detour:
    """The dual equation with another weight, with the basis of the linear solver."""
    equation: DualEquation = plan.equation

    def make(factor: float) -> tuple[DualEquation, SubspaceSolver]:
        easier = DualEquation(equation.tracking, equation.target, factor * equation.alpha, equation.cost)
        solver = SubspaceSolver(easier)
        solver.carry_over(plan.solver)  # type: ignore[arg-type]
        return easier, solver

    # the start knows S* q for one q: a lower bound of ||S||
    tracking = equation.tracking
    q, lifted = plan.start[: equation.size], plan.start[equation.size :]
    size = relative(tracking.controls.norm(lifted), tracking.observations.norm(q))
    return Detour(make, at_once=equation.alpha < TINY * size**2)


def _start_pair(start: Any, size: int) -> tuple[FloatArray, FloatArray] | None:
    """State and adjoint where the start is a pair of arrays, else None."""
    if not isinstance(start, tuple):
        return None
    if len(start) != 2:
        raise InputError(f"start: a tuple is a pair (state, adjoint), got {len(start)} entries")
    y, p = (float_array(part, f"start[{k}]", shape=(size,)) for k, part in enumerate(start))
    return y, p


def _plan_coupled(
    problem: ControlProblem,
    control: FloatArray | None,
    pair: tuple[FloatArray, FloatArray] | None,
    linear: str,
) -> Plan:
    equation = CoupledEquation(problem)
    kind = equation.operators.hierarchy.name
    choices = {
        "equation": "state and adjoint, control eliminated",
        "globalization": "dual: the dual function is convex, exact search costs products only"
        if equation.has_dual
        else "residual search: the state cannot be eliminated",
        "linear": f"coupled: {kind} on the pair of state and adjoint, "
        + ("asked for" if linear != "auto" else f"{problem.state.size} states are too many to factorise"),
    }
    search: Globalization = DualSearch() if equation.has_dual else ResidualSearch().fresh()
    plan = Plan(
        problem, equation, CoupledSolver(equation), search, equation.start(control, pair), choices
    )  # fmt: skip
    if equation.has_dual:
        plan.detour = Detour(lambda factor: _coupled_with_weight(problem, factor))
    if linear == "auto":
        plan.otherwise = lambda best: plan_control(problem, best, "auto", "subspace")
    return plan


def _coupled_with_weight(problem: ControlProblem, factor: float) -> tuple[CoupledEquation, CoupledSolver]:
    easier = copy.copy(problem)
    easier.alpha = factor * problem.alpha
    equation = CoupledEquation(easier)
    return equation, CoupledSolver(equation)


def _plan_nonconvex(problem: ControlProblem, control: FloatArray | None) -> Plan:
    if problem.state_bounded:
        raise InputError(f"{type(problem.cost).__name__} is not convex: state bounds need a convex cost")
    equation = control_equation(problem)
    x = np.zeros(problem.unknowns) if control is None else control
    plan = Plan(problem, equation, ReducedSolver(equation), EnvelopeSearch(), x, dict(LOCAL_CHOICES))
    return relaxed_first(plan, control)


def _path_without_quadratic(problem: ControlProblem) -> GapPath | ProximalPointPath | None:
    if problem.alpha > 0:
        return None
    return GapPath() if problem.has_gap else ProximalPointPath()


def _plan_schur(
    problem: ControlProblem, control: FloatArray | None, pair: tuple[FloatArray, FloatArray] | None
) -> Plan:
    equation = FactorisedPairEquation(problem)
    factors = "cycles of multigrid" if equation.operators.multigrid else "one factorisation an active set"
    choices = {
        "equation": "state and adjoint, control eliminated",
        "globalization": "dual: the dual function is convex, exact search costs products only"
        if equation.has_dual
        else "residual search: the state cannot be eliminated",
        "linear": f"schur: Krylov iteration, Schur complement by matching, {factors}; asked for",
    }
    search: Globalization = DualSearch() if equation.has_dual else ResidualSearch().fresh()
    return Plan(problem, equation, SchurSolver(equation), search, equation.start(control, pair), choices)
