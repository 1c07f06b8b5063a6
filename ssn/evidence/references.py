"""The built-in independent methods: first-order methods for statements, a root finder for equations."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..complementarity import ComplementarityProblem
from ..extragradient import extragradient
from ..primal_dual import primal_dual
from ..protocols import FloatArray
from ..reference import ReferenceResult, proximal_gradient
from ..solution import Solution
from ..sum_problem import SumProblem
from . import judge
from .method_result import MethodResult, own_bound
from .residual_only import residual_only

# relative distance bound that the reference aims at: three times below the agreement asked for
AIM = 0.3
LEAST_TOLERANCE = 1e-12
# iterations of a call where the budget is in seconds
MOST_ITERATIONS = 100_000
ROOT_FINDER = "residual-only root finder"


def reference_name(problem: Any) -> str:
    """The name of the built-in reference for a problem."""
    if not judge.is_statement(problem):
        return ROOT_FINDER
    if isinstance(problem, SumProblem):
        return "first-order primal-dual"
    return "proximal gradient" if judge.has_objective(problem) else "extragradient"


def references(
    problem: Any,
    solution: Solution,
    *,
    budget: float | None,
    agreement_tolerance: float,
    iterations: int | None = None,
) -> list[MethodResult]:
    """Run the built-in reference until it is near enough to decide about agreement, or out of budget.

    The budget is in seconds. With `iterations` given it is in iterations instead, so that what is decided does not
    depend on the machine; the root finder then stops by its own limits.

    A reference without a bound of its own that stopped by its rule but is not within the agreement tolerance goes
    on from its own point with a tenth of the tolerance. Complementarity without an objective may have several
    solutions: where extragradient does not lead to ours, the root finder that sees residuals only is asked
    whether there is a solution here.
    """
    began = time.perf_counter()
    if iterations is not None:
        budget = None
    most = iterations if iterations is not None else MOST_ITERATIONS
    if not judge.is_statement(problem):
        return [_root_finder(problem, problem, solution, budget)]
    tolerance = AIM * agreement_tolerance
    result = _first_order(problem, None, tolerance, budget, most)
    taken, products, solves = result.iterations, result.work.operator_products, result.work.state_solves

    def seconds() -> float:
        return time.perf_counter() - began

    def apart() -> float:
        return judge.distance(problem, result.x, solution.x)

    while (
        result.converged
        and (result.bound is None or isinstance(problem, SumProblem))
        and apart() > agreement_tolerance
        and tolerance > LEAST_TOLERANCE
        and (budget is None or seconds() < budget)
        and taken < most
    ):
        tolerance *= 0.1
        left = None if budget is None else budget - seconds()
        result = _first_order(problem, result.x, tolerance, left, most - taken)
        taken += result.iterations
        products += result.work.operator_products
        solves += result.work.state_solves
    found = [
        MethodResult(
            reference_name(problem), result.converged, result.outcome, judge.objective(problem, result.x),
            judge.accuracy(problem, result.x), taken, solves, products, seconds(), apart(),
            own_bound(problem, result.x, result.bound), "", result.x,
        )
    ]  # fmt: skip
    if not judge.has_objective(problem) and result.bound is None and apart() > agreement_tolerance:
        mid = MidResidual(problem, problem.row_step(solution.x))
        found.append(_root_finder(problem, mid, solution, budget))
    return found


@dataclass(frozen=True)
class MidResidual:
    """x - clip(x - step F(x)) of a complementarity problem, and no derivative."""

    problem: ComplementarityProblem
    step: FloatArray

    def residual(self, x: FloatArray) -> FloatArray:
        """The residual at x."""
        problem = self.problem
        moved: FloatArray = np.clip(x - self.step * problem.value(x), problem.lower, problem.upper)
        return x - moved


def _first_order(
    problem: Any, start: FloatArray | None, tolerance: float, budget: float | None, most: int
) -> ReferenceResult:
    method = proximal_gradient if judge.has_objective(problem) else extragradient
    if isinstance(problem, SumProblem):
        method = primal_dual
    return method(problem, start, tolerance=tolerance, budget=budget, max_iterations=most)


def _root_finder(problem: Any, residual: Any, solution: Solution, budget: float | None) -> MethodResult:
    began = time.perf_counter()
    result = residual_only(residual, solution.x, tolerance=min(1e-9, solution.tolerance), budget=budget)
    seconds = time.perf_counter() - began
    return MethodResult(
        ROOT_FINDER, result.converged, result.outcome, float("nan"), judge.accuracy(problem, result.x),
        result.iterations, 0, result.work.operator_products, seconds,
        judge.distance(problem, result.x, solution.x), None, "started one percent from our solution", result.x,
    )  # fmt: skip
