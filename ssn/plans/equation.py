"""Plans for equations, traced functions and objects with their own derivative."""

from __future__ import annotations

from typing import Any

from ..equations.general import GeneralEquation
from ..errors import InputError
from ..globalization import ResidualSearch
from ..linear import (
    GeneralSolver,
)
from ..traced import TracedEquation
from ..validate import float_array
from .plan import Plan

# full steps tried first on a general equation: piecewise smooth ones settle within them or cycle
PLAIN_STEPS = 12


def plan_equation(problem: Any, start: Any) -> Plan:
    """A few full steps, then what the equation allows."""
    given = start if start is not None else getattr(problem, "start", None)
    if given is None:
        raise InputError("give start: an Equation does not tell its number of unknowns")
    traced = isinstance(problem, TracedEquation)
    x = problem.pack(given) if traced and given is not problem.start else float_array(given, "start", ndim=1)
    equation = GeneralEquation(problem, x.size)
    last = ", then the smoothing path" if hasattr(problem, "smoothed") else ""
    choices = {
        "equation": "derived from the operations of the function" if traced else "given by the caller",
        "globalization": f"a few full steps, then residual search (nonmonotone, least squares behind it){last}",
    }
    search = ResidualSearch().fresh()
    return Plan(problem, equation, GeneralSolver(equation), search, x, choices, plain_steps=PLAIN_STEPS)
