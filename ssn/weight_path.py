"""Choosing a weight: a family of solves over its values, the value from which on the answer is zero, and the refit."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components

from .control import ControlProblem
from .costs import Bounds, GroupSparseCost, SparseCost
from .errors import InputError
from .follow import Path, follow
from .plotting import new_figure
from .protocols import FloatArray
from .solution import Solution
from .validate import scalar


@dataclass(frozen=True)
class WeightPoint:
    """One weight with what it buys.

    Attributes
    ----------
    weight : float
    misfit : float
        Value of the smooth part f at the solution.
    cost : float
        Value of the nonsmooth cost divided by its weight (for L1: the L1 norm).
    support : int
        Components different from zero.
    size : float
        Norm of the unknown.
    steps : int
    solution : Solution
    """

    weight: float
    misfit: float
    cost: float
    support: int
    size: float
    steps: int
    solution: Solution


@dataclass(frozen=True)
class WeightPath:
    """A family of solutions over a weight.

    Attributes
    ----------
    points : tuple of WeightPoint
        In the order solved, largest weight first.
    converged : bool
    message : str
    """

    points: tuple[WeightPoint, ...]
    converged: bool
    message: str

    def table(self) -> str:
        """Return the points as a text table."""
        lines = [
            f"{'weight':>11} {'misfit':>11} {'cost/weight':>11} {'nonzeros':>8} {'size':>10} {'steps':>5}"
        ]
        lines += [
            f"{p.weight:11.4g} {p.misfit:11.5g} {p.cost:11.5g} {p.support:>8} {p.size:10.4g} {p.steps:>5}"
            for p in self.points
        ]
        return "\n".join(lines)

    def discrepancy(self, noise: float) -> WeightPoint:
        """Return the largest weight whose misfit does not exceed `noise` (discrepancy principle).

        `noise` is the value of f that the data error alone would leave, for instance 1/2 delta^2.
        Source: V. A. Morozov, Soviet Math. Dokl. 7 (1966) 414-417 (from memory).

        Raises
        ------
        InputError
            Where no point reaches the noise level: go on to smaller weights, or question the noise level.
        """
        noise = scalar(noise, "noise", positive=True)
        for point in sorted(self.points, key=lambda p: -p.weight):
            if point.misfit <= noise:
                return point
        least = min((p.misfit for p in self.points), default=float("inf"))
        raise InputError(f"no weight reaches the noise level {noise:.3g}; the least misfit is {least:.3g}")

    def plot(self, path: Any = None) -> Any:
        """Draw misfit against cost (both logarithmic), and the number of nonzeros against the weight."""
        figure = new_figure(9.0, 4.0)
        left, right = figure.subplots(1, 2)
        shown = [p for p in self.points if p.cost > 0]
        left.loglog([p.cost for p in shown], [p.misfit for p in shown], "o-")
        for p in shown:
            left.annotate(f"{p.weight:.1e}", (p.cost, p.misfit), fontsize=7)
        left.set_xlabel("cost / weight")
        left.set_ylabel("misfit")
        left.grid(alpha=0.3)
        right.semilogx([p.weight for p in self.points], [p.support for p in self.points], "o-")
        right.set_xlabel("weight")
        right.set_ylabel("nonzero components")
        right.grid(alpha=0.3)
        if path is not None:
            figure.savefig(path, dpi=130)
        return figure


def weight_path(family: Callable[[float], Any], weights: Sequence[float], **options: Any) -> WeightPath:
    """Solve a family of problems over the weight of their nonsmooth cost, from the largest weight down.

    Parameters
    ----------
    family : callable
        ``family(weight)`` returns a control or composite problem.
    weights : sequence of positive float
        Solved in descending order, each from the solution before it.
    **options
        Passed on to `ssn.follow` and `ssn.solve`.

    Returns
    -------
    WeightPath
        With the points solved before a failure, where there is one.

    Raises
    ------
    InputError
        For weights that are not positive, or a family without an objective.
    """
    ordered = sorted((scalar(w, f"weights[{k}]", positive=True) for k, w in enumerate(weights)), reverse=True)
    if not ordered:
        raise InputError("weights is empty")
    path: Path = follow(family, ordered, **options)
    points = []
    for point in path.points:
        problem, x = point.solution.problem, point.solution.x
        if not hasattr(problem, "smooth_value"):
            raise InputError(f"a {type(problem).__name__} has no misfit and cost to compare")
        misfit = problem.smooth_value(x)
        if isinstance(problem, ControlProblem):
            misfit -= 0.5 * problem.alpha * problem.controls.dot(x, x)
        value = problem.cost.value(x, problem.weights) / point.value
        steps = len(point.solution.steps)
        size = problem.controls.norm(x)
        points.append(
            WeightPoint(point.value, misfit, value, int(np.count_nonzero(x)), size, steps, point.solution)
        )
    return WeightPath(tuple(points), path.converged, path.message)


def vanishing_weight(problem: Any) -> float:
    """Return the smallest weight of the sparse cost for which the zero control is optimal.

    For L1 it is max |grad f(0)| over the weight's profile, for group costs the largest norm of the groups of grad f(0);
    what points out of a bound at zero does not count.

    Parameters
    ----------
    problem : ControlProblem or CompositeProblem with a SparseCost or GroupSparseCost
        Its own weight only matters as a profile: with a vector beta the result multiplies beta / max(beta).

    Returns
    -------
    float
        In the unit of beta. Common practice; it is the optimality condition of u = 0, exact for the discrete problem.

    Raises
    ------
    InputError
        Where the cost is none of the two, or its bounds exclude zero.
    """
    cost = _sparse_cost(problem, "vanishing_weight")
    if (cost.lower > 0).any() or (cost.upper < 0).any():
        raise InputError("zero is not within the bounds, so no weight makes the unknown vanish")
    _, gradient = problem.smooth(np.zeros(problem.unknowns))
    wanted = np.where(
        gradient < 0, np.where(cost.upper > 0, -gradient, 0.0), np.where(cost.lower < 0, gradient, 0.0)
    )
    if isinstance(cost, GroupSparseCost):
        wanted = cost.norms(wanted)
    profile = cost.beta / cost.beta.max() if cost.beta.max() > 0 else np.ones_like(cost.beta)
    if (profile == 0).any():
        raise InputError("beta is zero somewhere: no multiple of it makes the unknown vanish")
    return float((wanted / profile).max())


def refit(problem: Any, support: Any) -> Any:
    """Return the problem on a given support with the quadratic cost only: amplitudes without the sparse cost's bias.

    Parameters
    ----------
    problem : ControlProblem or CompositeProblem with a SparseCost or GroupSparseCost
    support : bool array, shape (n,), or Solution
        Components that may differ from zero; of a `Solution`, its nonzero components.

    Returns
    -------
    problem of the same kind
        With `Bounds` that are the old ones on the support and zero elsewhere; it shares the state model and its factor.
    """
    cost = _sparse_cost(problem, "refit")
    mask = support.x != 0 if isinstance(support, Solution) else np.asarray(support)
    if mask.dtype != np.bool_ or mask.shape != (problem.unknowns,):
        raise InputError(
            f"support must be {problem.unknowns} booleans or a Solution, got {mask.dtype} {mask.shape}"
        )
    lower, upper = (np.broadcast_to(b, (problem.unknowns,)) for b in (cost.lower, cost.upper))
    if ((lower > 0) | (upper < 0))[~mask].any():
        raise InputError("the bounds exclude zero off the support")
    return problem.with_cost(Bounds(np.where(mask, lower, 0.0), np.where(mask, upper, 0.0)))


def _sparse_cost(problem: Any, name: str) -> SparseCost | GroupSparseCost:
    cost = problem.cost
    if not isinstance(cost, SparseCost | GroupSparseCost):
        raise InputError(f"{name} needs a SparseCost or a GroupSparseCost, got {type(cost).__name__}")
    return cost


def placements(support: Any, graph: Any) -> list[FloatArray]:
    """Split a support into its connected places.

    Parameters
    ----------
    support : bool array, shape (n,)
    graph : sparse array, shape (n, n)
        Nonzero where two components are neighbours: the state matrix, restricted to the control's nodes.

    Returns
    -------
    list of integer arrays
        Components of each place, largest place first.
    """
    mask = np.asarray(support, dtype=bool)
    matrix = sp.csr_array(graph)
    if mask.ndim != 1 or matrix.shape != (mask.size, mask.size):
        raise InputError(f"graph has shape {matrix.shape}, expected ({mask.size}, {mask.size})")
    nodes = np.flatnonzero(mask)
    _, labels = connected_components(matrix[nodes][:, nodes], directed=False)
    places = [nodes[labels == k] for k in range(labels.max() + 1)] if nodes.size else []
    return sorted(places, key=lambda place: (-place.size, int(place[0])))
