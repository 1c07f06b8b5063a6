"""Plans for complementarity problems."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..complementarity import ComplementarityProblem
from ..equations.complementarity import FischerBurmeisterEquation, MidEquation, inside_bounds
from ..globalization import ResidualSearch
from ..linear import (
    ReducedSolver,
)
from ..protocols import FloatArray
from ..smoothing_path import SmoothingPath
from .plan import Plan, start_array

# distances inside the bounds tried where F or F' is not defined at the start
START_DISTANCES = (0.0, 1e-3, 1e-2, 1e-1, 1.0)


COMPLEMENTARITY_EQUATIONS = {
    "mid": (MidEquation, "mid(x - upper, x - lower, F / |diagonal of F'|)"),
    "fischer-burmeister": (
        FischerBurmeisterEquation,
        "Fischer-Burmeister function of x - lower, upper - x and F / |diagonal of F'|",
    ),
}


def plan_complementarity(problem: ComplementarityProblem, start: Any) -> Plan:
    """The mid or Fischer-Burmeister equation along the smoothing path."""
    given = start_array(start, problem.unknowns)
    x, moved = _where_defined(problem, problem.start() if given is None else given)
    step = problem.row_step(x)
    kind, name = COMPLEMENTARITY_EQUATIONS[problem.form]
    equation = kind(problem, step, problem.magnitude(x, step))
    equation.start_at(x)
    choices = {
        "equation": name,
        "globalization": "smoothing path, which tries plain steps first and at every point, then residual search: "
        "plain steps may cycle, or take one step an unknown or a layer of the contact set; where the path fails, plain "
        "steps, the path in the other form, and paths from inside the bounds",
    }
    if moved:
        choices["start"] = moved
    search = ResidualSearch().fresh()
    return Plan(problem, equation, ReducedSolver(equation), search, x, choices, smoothing=SmoothingPath())


def _where_defined(problem: ComplementarityProblem, x: FloatArray) -> tuple[FloatArray, str]:
    """Return the start, moved to or inside the bounds where F or its derivative is not defined, and what was done."""
    if problem.affine or _defined(problem, x):
        return x, ""
    for distance in START_DISTANCES:
        inside = inside_bounds(x, problem.lower, problem.upper, distance)
        if _defined(problem, inside):
            where = f"{distance:g} inside the bounds" if distance else "the bounds"
            return inside, f"moved to {where}: F or its derivative is not defined at the start"
    return x, ""


def _defined(problem: ComplementarityProblem, x: FloatArray) -> bool:
    with np.errstate(all="ignore"):
        if not np.isfinite(problem.value(x)).all():
            return False
        derivative = problem.derivative(x)
    if isinstance(derivative, LinearOperator):
        return True
    return bool(np.isfinite(derivative.data if sp.issparse(derivative) else np.asarray(derivative)).all())
