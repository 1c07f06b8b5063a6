"""One yardstick for all methods: accuracy, objective and distance of a point, evaluated afresh."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp

from ..complementarity import ComplementarityProblem
from ..inner import relative
from ..prepare import prepare
from ..protocols import FloatArray
from ..smooth import Quadratic
from ..solution import Solution
from ..solve import solve
from ..sum_problem import SumProblem

# a point this near the domain of the cost, relative to its norm, is judged at its projection
INSIDE = 1e-7
# violation of a term, relative to its argument, up to which a point counts as inside: our own tolerance, and less than
# a first-order method leaves, whose objective would look better than the optimum
HELD = 1e-8
# tolerance and steps of the proximal map of several terms together
NEAREST, MOST = 1e-10, 300


def is_statement(problem: Any) -> bool:
    """Whether the problem is one of ours with an accuracy of its own, not a user's equation."""
    if isinstance(problem, SumProblem):
        return True
    return hasattr(problem, "accuracy") and hasattr(problem, "controls")


def judged(problem: Any, solution: Solution) -> Any:
    """What the solution solves: for hard state bounds the problem with the last penalty of the path."""
    return solution.problem if getattr(problem, "state_bounded", False) else problem


def accuracy(problem: Any, x: FloatArray) -> float:
    """The problem's accuracy figure at x; for an equation the root mean square of F / scale."""
    if isinstance(problem, SumProblem):
        return natural_residual(problem, x)
    if is_statement(problem):
        return float(problem.accuracy(x))
    return float(prepare(problem, x).equation.evaluate(x).accuracy)


def natural_residual(problem: SumProblem, u: FloatArray) -> float:
    """||u - v|| / ||v|| with v the proximal gradient step from u, all terms in the proximal map: a figure of u alone.

    v minimises sum_i g_i(K_i v - c_i) + ||v - (u - t grad f(u))||^2 / (2 t) and is solved for; where that problem is
    not solved better than u solves its own, the figure is its accuracy.
    """
    step = problem.natural_step()
    _, gradient = problem.smooth(u)
    weight = problem.weights / step
    centre = u - step * gradient
    nearest = problem.with_smooth(Quadratic(sp.diags_array(weight), weight * centre))
    found = solve(nearest, u, tolerance=NEAREST, max_steps=MOST)
    gap = relative(problem.controls.norm(u - found.x), problem.controls.norm(found.x))
    return max(gap, found.accuracy)


def norm(problem: Any, x: FloatArray) -> float:
    """Norm of the unknown in the problem's inner product."""
    return float(problem.controls.norm(x)) if is_statement(problem) else float(np.linalg.norm(x))


def distance(problem: Any, x: FloatArray, ours: FloatArray) -> float:
    """||x - ours|| / ||ours||; where our solution is zero, relative to the problem's magnitude or to x."""
    gap = norm(problem, x - ours)
    size = norm(problem, ours)
    if size == 0.0 and isinstance(problem, ComplementarityProblem):
        size = problem.magnitude(ours, problem.row_step(ours))
    return relative(gap, size if size > 0.0 else norm(problem, x))


def has_objective(problem: Any) -> bool:
    """Whether the problem minimises something."""
    return is_statement(problem) and (not isinstance(problem, ComplementarityProblem) or problem.symmetric)


def objective(problem: Any, x: FloatArray) -> float:
    """The objective at x, projected where x is outside the domain by rounding only; nan without an objective."""
    if not has_objective(problem) or not np.isfinite(x).all():
        return float("nan")
    inside = project(problem, x)
    near = norm(problem, inside - x) <= INSIDE * norm(problem, inside)
    if isinstance(problem, SumProblem):
        return float(problem.objective(inside if near else x, slack=HELD))
    return float(problem.objective(inside if near else x))


def start(problem: Any, size: int) -> FloatArray:
    """Where a method begins that knows nothing of our solution: an equation's own start, else zero in the domain."""
    own = getattr(problem, "start", None)
    if callable(own):
        own = own()
    if own is not None:
        return np.array(own, dtype=np.float64)
    zero = np.zeros(size)
    return project(problem, zero) if is_statement(problem) else zero


def project(problem: Any, x: FloatArray) -> FloatArray:
    """The nearest point of the cost's domain."""
    if isinstance(problem, SumProblem):
        return problem.inside(x)
    projected: FloatArray = problem.cost.prox(x, 1e-300)
    return projected
