"""The choice of equation, linear solver and globalisation for a problem, and whether the choices fit."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from .complementarity import ComplementarityProblem
from .composite import CompositeProblem
from .control import ControlProblem
from .equations.coupled import CoupledEquation
from .equations.dual import DualEquation
from .equations.full_space import FullSpaceEquation, has_dual
from .errors import InputError
from .globalization import CATALOGUE, DualSearch, EnvelopeSearch, ResidualSearch
from .linear import CATALOGUE as LINEAR
from .nonlinear_control import NonlinearControlProblem
from .plans import (
    Plan,
    plan_complementarity,
    plan_composite,
    plan_control,
    plan_equation,
    plan_nonlinear,
    plan_sum,
)
from .protocols import Globalization
from .proximal_newton import ControlEquation
from .smoothing_path import SmoothingPath
from .sum_problem import SumProblem
from .traced import TracedEquation

__all__ = ["Plan", "prepare"]

LINEAR_CHOICES = ("auto", *LINEAR)


def prepare(
    problem: Any, start: Any = None, *, globalization: str | Globalization = "auto", linear: str = "auto"
) -> Plan:
    """Choose equation, linear solver and globalisation for a problem, and check that the choices fit."""
    if linear not in LINEAR_CHOICES:
        raise InputError(f"linear must be one of {', '.join(LINEAR_CHOICES)}, got {linear!r}")
    if isinstance(globalization, str) and globalization not in ("auto", "smoothing", *CATALOGUE):
        names = ", ".join(map(repr, CATALOGUE))
        raise InputError(f"globalization must be 'auto', {names} or 'smoothing', got {globalization!r}")
    if isinstance(problem, ControlProblem):
        plan = plan_control(problem, start, globalization, linear)
    elif isinstance(problem, NonlinearControlProblem):
        plan = plan_nonlinear(problem, start)
    elif isinstance(problem, CompositeProblem):
        plan = plan_composite(problem, start, globalization)
    elif isinstance(problem, SumProblem):
        plan = plan_sum(problem, start)
    elif isinstance(problem, ComplementarityProblem):
        plan = plan_complementarity(problem, start)
    elif hasattr(problem, "residual") and hasattr(problem, "linearize"):
        plan = plan_equation(problem, start)
    elif callable(problem):
        if start is None:
            raise InputError("give start: a function does not tell its number of unknowns")
        traced = TracedEquation(problem, start)
        plan = plan_equation(traced, None)
        plan.unpack = traced.unpack
    else:
        raise InputError(
            f"cannot solve a {type(problem).__name__}: give a ControlProblem, NonlinearControlProblem, "
            "CompositeProblem, ComplementarityProblem, "
            "a function of NumPy arrays, or an object with residual(x) and linearize(x)"
        )
    if linear not in ("auto", plan.solver.name):
        raise InputError(f"linear={linear!r} does not fit this problem; it is solved by {plan.solver.name!r}")
    if isinstance(plan.equation, ControlEquation) and globalization != "auto":
        raise InputError(
            f"globalization={globalization!r} does not fit a nonlinear state; use 'auto': a search on the objective"
        )
    several = plan.multipliers is not None or plan.primal_dual is not None
    if several and globalization not in ("auto", "dual"):
        raise InputError(f"globalization={globalization!r} does not fit several terms; use 'auto'")
    if isinstance(globalization, str) and globalization == "smoothing":
        if not getattr(plan.equation, "can_be_smoothed", hasattr(plan.equation, "smoothed")):
            raise InputError(
                "globalization='smoothing' needs complementarity, a composite problem without a dual, "
                "or a traced function"
            )
        plan.smoothing = SmoothingPath()
        plan.choices["globalization"] = "smoothing: asked for"
    elif globalization != "auto":
        plan.smoothing, plan.plain_steps, plan.relaxation = None, 0, None
        if plan.penalty is not None:
            plan.penalty = replace(plan.penalty, quick_steps=0)
        plan.globalization = _forced(globalization, plan.equation)
        plan.choices["globalization"] = f"{plan.globalization.name}: asked for"
    return plan


def _forced(choice: str | Globalization, equation: Any) -> Globalization:
    made: Any = CATALOGUE[choice]() if isinstance(choice, str) else choice
    if not hasattr(made, "advance"):
        raise InputError(f"globalization must have an advance method, got {type(made).__name__}")
    dual = (
        isinstance(equation, DualEquation)
        or (isinstance(equation, FullSpaceEquation) and has_dual(equation.problem))
        or (isinstance(equation, CoupledEquation) and equation.has_dual)
    )
    if isinstance(made, DualSearch) and not dual:
        raise InputError(
            "globalization='dual' needs a control problem or least squares with a convex cost; with state bounds, "
            "the whole state observed and a lumped mass"
        )
    if isinstance(made, EnvelopeSearch) and getattr(equation, "potential", None) is None:
        raise InputError(
            "globalization='envelope' needs an objective: a composite problem or symmetric complementarity"
        )
    return made.fresh() if isinstance(made, ResidualSearch) else made
