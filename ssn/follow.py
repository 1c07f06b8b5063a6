"""Path-following in a parameter: warm starts, a predictor, step-length control, and backtracking on failure."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from .control import ControlProblem
from .errors import InputError
from .prepare import prepare
from .protocols import FloatArray
from .solution import Solution
from .solve import solve
from .validate import count, scalar

PREDICTORS = ("secant", "none")


@dataclass(frozen=True)
class PathPoint:
    """One solved point: the parameter, the solution, and how the start was made."""

    value: float
    solution: Solution
    predictor: str
    inserted: bool


@dataclass(frozen=True)
class Path:
    """The solved points in order, and how the path ended.

    Attributes
    ----------
    points : tuple of PathPoint
        All solved points, those inserted after a failure included.
    converged : bool
        Whether the last wanted value was reached, or the stop rule held.
    message : str
    failed : tuple of (value, Solution)
        Tries that did not converge; nothing is lost.
    """

    points: tuple[PathPoint, ...]
    converged: bool
    message: str
    failed: tuple[tuple[float, Solution], ...] = ()

    @property
    def solution(self) -> Solution:
        """The last solution."""
        if not self.points:
            raise InputError(f"the path has no point: {self.message}")
        return self.points[-1].solution

    @property
    def values(self) -> FloatArray:
        """The parameter values of the points."""
        return np.array([p.value for p in self.points])

    @property
    def newton_steps(self) -> int:
        """Newton steps over all points and failed tries."""
        return sum(len(p.solution.steps) for p in self.points) + sum(len(s.steps) for _, s in self.failed)

    def table(self) -> str:
        """Return the points as a text table."""
        lines = [f"{'value':>12} {'steps':>5} {'accuracy':>9}  start"]
        for p in self.points:
            start = p.predictor + (", inserted" if p.inserted else "")
            lines.append(f"{p.value:12.5g} {len(p.solution.steps):>5} {p.solution.accuracy:9.1e}  {start}")
        return "\n".join(lines)


def follow(
    family: Callable[[float], Any],
    values: Sequence[float] | None = None,
    *,
    first: float | None = None,
    factor: float = 0.1,
    stop: Callable[[float, Solution], bool] | None = None,
    start: Any = None,
    predictor: str = "secant",
    max_points: int = 100,
    max_halvings: int = 6,
    easy: int = 4,
    hard: int = 12,
    callback: Callable[[PathPoint], None] | None = None,
    **options: Any,
) -> Path:
    """Solve a family of problems along a parameter.

    Parameters
    ----------
    family : callable
        ``family(value)`` returns a problem (anything `ssn.solve` takes) with the same unknown for every value.
    values : sequence of float, optional
        The values wanted, in order. Where a solve fails, a value half-way (geometrically, where the signs allow it) is
        inserted, at most `max_halvings` times in a row.
    first, factor, stop : float, float, callable, optional
        Instead of `values`: start at `first` and multiply by `factor` until ``stop(value, solution)`` is true. The
        factor is sharpened (to its power 1.5) after a point of at most `easy` Newton steps and softened (to its square
        root) after one of more than `hard`.
    start : array, optional
        Start at the first value.
    predictor : {"secant", "none"}
        "secant" extrapolates the unknown over the last two points (in the logarithm of a positive parameter) and takes
        the better of it and the last solution, judged by the residual.
    max_points : int
        Points at most.
    callback : callable, optional
        Gets each `PathPoint`.
    **options
        Passed on to `ssn.solve` (tolerance, max_steps, globalization, ...).

    Returns
    -------
    Path

    Raises
    ------
    InputError
        For arguments that do not fit together.
    """
    if not callable(family):
        raise InputError(f"family must be a function of the parameter, got {type(family).__name__}")
    if predictor not in PREDICTORS:
        raise InputError(f"predictor must be one of {', '.join(PREDICTORS)}, got {predictor!r}")
    count(max_points, "max_points")
    if (values is None) == (first is None):
        raise InputError("give either values, or first (with factor and stop)")
    if values is not None:
        if stop is not None:
            raise InputError("stop has no effect together with values")
        wanted = [scalar(v, f"values[{k}]") for k, v in enumerate(values)]
        if not wanted:
            raise InputError("values is empty")
    else:
        if stop is None:
            raise InputError("give stop: a function of value and solution that ends the path")
        wanted = [scalar(first, "first")]
        if not scalar(factor, "factor") > 0 or factor == 1.0:
            raise InputError(f"factor must be positive and not 1, got {factor}")
    tracker = _Tracker(family, start, predictor, options)
    position, halvings, current_factor = 0, 0, factor
    pending = [wanted[0]]
    while pending:
        if len(tracker.points) >= max_points:
            return tracker.path(False, f"{max_points} points taken")
        value = pending[-1]
        solution = tracker.attempt(value, inserted=len(pending) > 1)
        if not solution.converged:
            if not tracker.points or halvings >= max_halvings:
                return tracker.path(False, f"no convergence at {value:.6g}: {solution.outcome.value}")
            halvings += 1
            pending.append(_between(tracker.points[-1].value, value))
            continue
        halvings = 0
        pending.pop()
        if callback is not None:
            callback(tracker.points[-1])
        if pending:
            continue
        if stop is not None:
            if stop(value, solution):
                return tracker.path(True, "the stop rule holds")
            steps = len(solution.steps)
            current_factor = (
                factor**1.5 if steps <= easy else math.sqrt(current_factor) if steps > hard else factor
            )
            pending = [value * current_factor]
        else:
            position += 1
            pending = [wanted[position]] if position < len(wanted) else []
    return tracker.path(True, "all values reached")


class _Tracker:
    """Solved points, failures, and the start of the next solve."""

    def __init__(
        self, family: Callable[[float], Any], start: Any, predictor: str, options: dict[str, Any]
    ) -> None:
        self.family, self.start, self.predictor, self.options = family, start, predictor, options
        self.points: list[PathPoint] = []
        self.failed: list[tuple[float, Solution]] = []

    def attempt(self, value: float, inserted: bool) -> Solution:
        problem = self.family(value)
        start, how = self._start(problem, value)
        solution = solve(problem, start, **self.options)
        if solution.converged:
            self.points.append(PathPoint(value, solution, how, inserted))
        else:
            self.failed.append((value, solution))
        return solution

    def _start(self, problem: Any, value: float) -> tuple[Any, str]:
        if not self.points:
            return self.start, "given start" if self.start is not None else "own start"
        last = self.points[-1]
        warm = last.solution.x
        if self.predictor == "none" or len(self.points) < 2:
            return warm, "last solution"
        before = self.points[-2]
        ratio = _ratio(before.value, last.value, value)
        if ratio is None:
            return warm, "last solution"
        secant = warm + ratio * (warm - before.solution.x)
        globalization = self.options.get("globalization", "auto")
        residuals = []
        for candidate in (warm, secant):
            plan = prepare(problem, candidate, globalization=globalization)
            at = plan.equation.evaluate(plan.start) if plan.path is None else None
            residuals.append(np.inf if at is None or not at.finite else at.norm)
        return (secant, "secant") if residuals[1] < residuals[0] else (warm, "last solution")

    def path(self, converged: bool, message: str) -> Path:
        return Path(tuple(self.points), converged, message, tuple(self.failed))


def _between(known: float, wanted: float) -> float:
    if known > 0 and wanted > 0:
        return math.sqrt(known * wanted)
    return 0.5 * (known + wanted)


def _ratio(first: float, second: float, third: float) -> float | None:
    """How far the third value lies beyond the second, in units of the last move."""
    if min(first, second, third) > 0:
        first, second, third = math.log(first), math.log(second), math.log(third)
    move = second - first
    return (third - second) / move if move != 0.0 else None


def follow_meshes(
    build: Callable[..., Any],
    sizes: Sequence[int],
    transfer: Callable[[Any, Any], Callable[[FloatArray], FloatArray]],
    *,
    parameters: dict[str, Any] | None = None,
    coarse_tolerance: float | None = None,
    callback: Callable[[PathPoint], None] | None = None,
    **options: Any,
) -> Path:
    """Solve on a coarse mesh and carry the unknown over to finer ones; every level is searched, none is trusted.

    Where control and state live on the same nodes, state and adjoint are carried over in place of the control: they are
    smoother functions and interpolate better.

    Parameters
    ----------
    build : callable
        ``build(n=..., **parameters)`` returns the problem on the mesh of size n, as in a problem file.
    sizes : sequence of int
        Mesh sizes, ascending; the last is the one wanted.
    transfer : callable
        ``transfer(coarse_problem, fine_problem)`` returns a function that maps the unknown of one mesh to the next.
    parameters : dict, optional
        Passed on to `build`.
    coarse_tolerance : float, optional
        Tolerance on the meshes before the last, whose solutions are starts only; that of the last by default.
    callback : callable, optional
        Gets each `PathPoint`; its value is the mesh size.
    **options
        Passed on to `ssn.solve`.

    Returns
    -------
    Path
        Not converged where a level fails: the coarser solutions and the failed one are kept.

    Raises
    ------
    InputError
        For sizes that do not ascend.
    """
    levels = [count(n, f"sizes[{k}]") for k, n in enumerate(sizes)]
    if not levels or any(b <= a for a, b in itertools.pairwise(levels)):
        raise InputError(f"sizes must ascend, got {levels}")
    points: list[PathPoint] = []
    coarse: Any = None
    for n in levels:
        problem = build(n=n, **(parameters or {}))
        start = None
        if coarse is not None:
            start = _carried(points[-1].solution, transfer(coarse, problem), coarse, problem)
        if coarse_tolerance is not None and n != levels[-1]:
            solution = solve(problem, start, **{**options, "tolerance": coarse_tolerance})
        else:
            solution = solve(problem, start, **options)
        if not solution.converged:
            message = f"no convergence at n = {n}: {solution.outcome.value}"
            return Path(tuple(points), False, message, ((float(n), solution),))
        points.append(PathPoint(float(n), solution, "own start" if coarse is None else "coarser mesh", False))
        if callback is not None:
            callback(points[-1])
        coarse = problem
    return Path(tuple(points), True, "all meshes solved")


def _carried(solution: Solution, carry: Callable[[FloatArray], FloatArray], coarse: Any, fine: Any) -> Any:
    """The start on the finer mesh: state and adjoint where they live on the nodes of the control, else the unknown."""
    if solution.adjoint is None or solution.state is None or not _nodal(coarse) or not _nodal(fine):
        return carry(solution.x)
    return carry(solution.state), carry(solution.adjoint)


def _nodal(problem: Any) -> bool:
    """Whether a control problem has a distributed control on the nodes of its state."""
    return (
        isinstance(problem, ControlProblem)
        and problem.unknowns == problem.state.size
        and problem.alpha > 0
        and not problem.state_bounded
    )
