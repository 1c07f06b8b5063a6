"""Plans for composite problems."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..composite import CompositeProblem, LeastSquaresMap
from ..equations.dual import DualEquation
from ..equations.natural import NaturalEquation
from ..globalization import DualSearch, EnvelopeSearch
from ..linear import (
    ReducedSolver,
    SubspaceSolver,
)
from ..proximal_point import ProximalPointPath
from ..smooth import LeastSquares
from .plan import LOCAL_CHOICES, Plan, relaxed_first, start_array


def plan_composite(problem: CompositeProblem, start: Any, globalization: Any) -> Plan:
    """The dual equation for least squares with a convex cost, else the natural residual."""
    u = start_array(start, problem.unknowns)
    wants_dual = globalization in ("auto", "dual") or isinstance(globalization, DualSearch)
    if isinstance(problem.part, LeastSquares) and problem.cost.convex and wants_dual:
        tracking = LeastSquaresMap(problem.part, problem.weights, problem.work)
        equation: Any = DualEquation(tracking, problem.part.b, 1.0, problem.cost)
        choices = {
            "equation": "dual equation: least squares, convex cost",
            "globalization": "dual: the dual function is convex, exact search costs no product",
            "path": "proximal point: no strong convexity is assumed",
        }
        x = np.zeros(problem.unknowns) if u is None else u
        return Plan(
            problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, ProximalPointPath(),
            natural_equation(problem),
        )  # fmt: skip
    equation = natural_equation(problem)
    x = problem.cost.prox(np.zeros(problem.unknowns) if u is None else u, 1e-300)
    plan = Plan(
        problem,
        equation,
        ReducedSolver(equation),
        EnvelopeSearch(),
        x if u is None else u,
        dict(LOCAL_CHOICES),
    )
    return plan if problem.cost.convex else relaxed_first(plan, u)


def natural_equation(problem: CompositeProblem) -> NaturalEquation:
    """The natural residual with the problem's own step."""
    return NaturalEquation(
        problem,
        problem.cost,
        problem.natural_step(),
        problem.weights,
        potential=problem.potential,
        work=problem.work,
    )
