"""Moreau-Yosida path for state bounds: the penalty rises, guided by a model of the value function.

V(gamma), the optimal value of the penalised problem, has V' = 1/2 ||excess||^2_M, the violation, and
V'' = (excess, dy/dgamma)_M, for which one more solve with the Newton matrix of the point serves. The model
m(gamma) = C1 - C2/(K + gamma) through both has K + gamma = -2 V'/V'', and says that the violation falls like
1/(K + gamma): it gives the penalty at which the violation is within its tolerance, the next one on the way there (the
modelled gap C1 - V falls by a factor), and in the variable 1/(K + gamma), in which the path is nearly straight, a
predictor. Points are solved roughly but for the last one. The path begins at gamma = 0 with a dual search, which needs
no start: a residual search for one of the penalised problems, from afar, stalls or takes dozens of steps.

Source: M. Hintermueller and K. Kunisch, SIAM J. Optim. 17 (2006) 159-187 and SIAM J. Control Optim. 45 (2006)
1198-1221; M. Hintermueller, A. Schiela and W. Wollner, SIAM J. Optim. 24 (2014) 108-126 (all from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .equations.dual import DualEquation
from .equations.full_space import DualFullSpaceEquation, FullSpaceEquation
from .errors import StateSolveError
from .globalization import DualSearch
from .inner import relative
from .linear import FullSpaceSolver, SubspaceSolver
from .newton import Limits, LoopResult, run
from .protocols import Evaluation, FloatArray, Globalization
from .proximal_newton import ControlEquation, ObjectiveSearch, ProximalNewtonSolver
from .records import Certificate, StepRecord
from .status import Outcome

# accuracy within this multiple of what rounding leaves is all that can be asked for
ROUNDING = 4.0
# a violation that falls less than by this factor at two points running, while the penalty rises, is no longer falling
FALLING = 0.9
# relative difference of two states of one control that no rounding explains
SAME_STATE = 1e-6


@dataclass(frozen=True)
class PenaltyPath:
    """How the penalty rises.

    Parameters
    ----------
    start : array, optional
        A control to begin with; zero by default.
    growth : float
        The modelled gap to the optimal value of the bounded problem falls by this factor from point to point; ten times
        larger after a point of one or two steps, its square root after one of more than six or none at all.
    greatest_growth : float
    overshoot : float
        Factor on the penalty at which the model expects the violation to be within its tolerance.
    quick_steps : int
        Where the state can be eliminated: steps of the search of the plan at each point, which need far fewer when the
        active sets change little, before a dual search takes over, which converges from anywhere. 0: no dual search.
    point_tolerance : float
        Accuracy asked for at the points before the last.
    point_steps : int
        Newton steps at most at one point.
    max_points : int
    """

    start: FloatArray | None = None
    growth: float = 100.0
    greatest_growth: float = 1e4
    overshoot: float = 1.2
    quick_steps: int = 0
    point_tolerance: float = 1e-2
    point_steps: int = 30
    max_points: int = 60


@dataclass
class PenaltyResult:
    """The loop result with the steps of all points, the last equation, and what to say about the path."""

    loop: LoopResult
    equation: FullSpaceEquation
    tolerance: float
    points: int = 0


def first_penalty(problem: Any) -> float:
    """The penalty that weighs the bounds like the tracking, by the traces of their masses."""
    weights = problem.observations
    diagonal = weights.vector if weights.vector is not None else weights.matrix.diagonal()
    seen = float(diagonal.sum())
    if problem.observation is not None:
        seen = float((diagonal @ (problem.observation**2)).sum())
    return seen / float(problem.bound_mass.sum()) if seen > 0.0 else 1.0


def follow_penalty(
    equation: FullSpaceEquation,
    make_search: Callable[[], Globalization],
    limits: Limits,
    path: PenaltyPath,
    callback: Callable[[StepRecord], None] | None,
) -> PenaltyResult:
    """Run the path to the problem's own penalty, or until the violation is small enough."""
    problem, start = equation.problem, path.start
    fixed: float | None = problem.state_penalty
    solver = FullSpaceSolver(equation)
    growth, stale, failed = path.growth, 0, 0
    without = _without_bounds_nonlinear if hasattr(problem.state, "linearize") else _without_bounds
    first, control = without(problem, start, limits, path, callback)
    steps = first.steps
    kind = DualFullSpaceEquation if make_search().name == "dual" else FullSpaceEquation
    base: FullSpaceEquation = kind(problem, 0.0)
    if first.outcome is Outcome.NO_STATE:
        return PenaltyResult(first, base, limits.tolerance)
    at = base.evaluate(base.start(control))
    result = PenaltyResult(replace(first, best=at, last=at), base, limits.tolerance)
    if first.outcome is not Outcome.CONVERGED:
        return result
    # the last point solved, and its violation
    good = (base, at, base.violation(at.x[: base.size]))

    def stage(eq: FullSpaceEquation, at: FloatArray, tolerance: float) -> LoopResult:
        part = newton(eq, make_search(), at, tolerance, path.quick_steps or path.point_steps)
        if path.quick_steps and part.outcome in (Outcome.STALLED, Outcome.STEP_LIMIT, Outcome.CYCLING):
            part = newton(
                DualFullSpaceEquation(problem, eq.gamma), DualSearch(), at, tolerance, path.point_steps
            )
        return part

    def newton(
        eq: FullSpaceEquation, search: Globalization, at: FloatArray, tolerance: float, most: int
    ) -> LoopResult:
        solver.equation = eq
        inner = replace(limits, tolerance=tolerance, max_steps=min(most, limits.max_steps - len(steps)))
        part = run(
            eq, solver, search, at, inner,
            callback=callback, first_index=len(steps) + 1, stage=f"penalty {eq.gamma:.3g}",
        )  # fmt: skip
        steps.extend(part.steps)
        return part

    for point in range(1, path.max_points + 1):
        if len(steps) >= limits.max_steps:
            result.loop.outcome, result.loop.message = Outcome.STEP_LIMIT, f"{limits.max_steps} steps taken"
            return result
        base, at, violation = good
        equation, x = _next_point(base, at, solver, growth, violation, fixed, path)
        part = stage(equation, x, max(path.point_tolerance, limits.tolerance))
        taken = len(part.steps)
        part.steps, part.start_norm, part.start_accuracy = steps, first.start_norm, first.start_accuracy
        result = PenaltyResult(part, equation, limits.tolerance, point)
        if part.outcome is not Outcome.CONVERGED:
            out_of_steps = len(steps) >= limits.max_steps
            hopeless = part.outcome not in (Outcome.STALLED, Outcome.STEP_LIMIT, Outcome.CYCLING)
            if out_of_steps or hopeless or failed >= 5:
                part.message = f"{part.message} at penalty {equation.gamma:.3g}"
                return result
            failed += 1
            growth = max(float(np.sqrt(growth)), 1.5)
        else:
            failed = 0
            at = part.last
            violation = equation.violation(at.x[: equation.size])
            at_end = equation.gamma >= fixed if fixed is not None else violation <= problem.state_tolerance
            if at_end:
                tolerance = max(limits.tolerance, ROUNDING * equation.rounding(at.x))
                part = stage(equation, at.x, tolerance)
                part.steps, part.start_norm, part.start_accuracy = (
                    steps,
                    first.start_norm,
                    first.start_accuracy,
                )
                result = PenaltyResult(part, equation, tolerance, point)
                violation = equation.violation(part.last.x[: equation.size])
                at_end = fixed is not None or violation <= problem.state_tolerance
                if at_end or part.outcome is not Outcome.CONVERGED:
                    part.message = part.message or _told(equation, violation, tolerance, limits.tolerance)
                    return result
                at = part.last
            stale = stale + 1 if violation > FALLING * good[2] and equation.gamma > 10 * good[0].gamma else 0
            if stale >= 2 and fixed is None:
                part.outcome = Outcome.INFEASIBLE
                part.message = (
                    f"the violation of the state bounds stays at {violation:.2g} while the penalty rises, "
                    f"to {equation.gamma:.3g}: no control seems to satisfy them"
                )
                return result
            good = (equation, at, violation)
            growth = _next_growth(growth, taken, path)
    result.loop.outcome = Outcome.STEP_LIMIT
    result.loop.message = f"{path.max_points} points of the penalty path taken"
    return result


def _without_bounds(
    problem: Any,
    control: FloatArray | None,
    limits: Limits,
    path: PenaltyPath,
    callback: Callable[[StepRecord], None] | None,
) -> tuple[LoopResult, FloatArray | None]:
    """Solve the problem without its state bounds, roughly; the loop result and the control found."""
    equation = DualEquation(problem, problem.reduced_target(), problem.alpha, problem.cost)
    rough = replace(limits, tolerance=max(path.point_tolerance, limits.tolerance))
    result = run(
        equation, SubspaceSolver(equation), DualSearch(), equation.start(control), rough,
        callback=callback, stage="penalty 0",
    )  # fmt: skip
    return result, result.best.data.corrected if result.best.data is not None else control


def _without_bounds_nonlinear(
    problem: Any,
    control: FloatArray | None,
    limits: Limits,
    path: PenaltyPath,
    callback: Callable[[StepRecord], None] | None,
) -> tuple[LoopResult, FloatArray | None]:
    """The same for a nonlinear state, by proximal Newton steps."""
    equation = ControlEquation(problem.unbounded())
    solver = ProximalNewtonSolver(equation)
    u = equation.cost.prox(np.zeros(problem.unknowns) if control is None else control, 1e-300)
    rough = replace(limits, tolerance=max(path.point_tolerance, limits.tolerance))
    search = ObjectiveSearch(lambda at: solver.gauss_newton(at, 1e-6))
    result = run(equation, solver, search, u, rough, callback=callback, stage="penalty 0")
    if result.outcome is Outcome.NOT_FINITE and equation.failure:
        result.outcome, result.message = Outcome.NO_STATE, equation.failure
    return result, result.best.x


def _next_growth(growth: float, taken: int, path: PenaltyPath) -> float:
    if taken <= 2:
        return min(10.0 * growth, path.greatest_growth)
    return max(float(np.sqrt(growth)), 3.0) if taken > 6 else growth


def _next_point(
    base: FullSpaceEquation,
    at: Evaluation,
    solver: FullSpaceSolver,
    growth: float,
    violation: float,
    fixed: float | None,
    path: PenaltyPath,
) -> tuple[FullSpaceEquation, FloatArray]:
    """The next equation, and the predicted point where its residual is smaller than at the old point."""
    gamma, mass = base.gamma, base.problem.bound_mass
    excess = base.excess(at.x[: base.size])
    solver.equation = base
    rate = solver.sensitivity(at, -mass * excess) if excess.any() else None
    scale = gamma if gamma > 0.0 else first_penalty(base.problem)
    reach = scale  # K + gamma
    if rate is not None:
        slope, bend = 0.5 * float(mass @ (excess * excess)), float((mass * excess) @ rate[: base.size])
        if bend < 0.0:
            reach = float(np.clip(-2.0 * slope / bend, 0.1 * scale, 1e3 * scale))
    shift = reach - gamma
    further = reach * growth - shift
    if fixed is not None:
        further = min(further, fixed)
    else:
        wanted = path.overshoot * reach * violation / base.problem.state_tolerance - shift
        further = min(further, max(wanted, 2.0 * scale))
    further = max(further, min(1.5 * scale, fixed if fixed is not None else np.inf))
    equation = base.with_penalty(further)
    if rate is not None:
        predicted = at.x + rate * (reach * (1.0 - reach / (further + shift)))
        there = equation.evaluate(predicted)
        if there.finite and there.norm < equation.evaluate(at.x).norm:
            return equation, predicted
    return equation, at.x


def _told(equation: FullSpaceEquation, violation: float, tolerance: float, asked: float) -> str:
    text = f"solution of the problem with penalty {equation.gamma:.3g}, "
    text += f"state bounds violated by {violation:.2g} at most"
    if tolerance > asked:
        text += f"; tolerance raised to {tolerance:.1e}, what rounding may leave at this penalty"
    return text


def collect(equation: FullSpaceEquation, best: Evaluation) -> tuple[FloatArray, float, dict[str, Any]]:
    """Control, accuracy computed afresh, and the fields of `Solution` at an iterate of the equation."""
    problem, n, step = equation.problem, equation.size, 1.0 / equation.alpha
    equation = FullSpaceEquation(problem, equation.gamma)
    if best.x.size != 2 * n:  # the path ended before it began
        return best.x, float("inf"), {}
    at = equation.evaluate(best.x.copy())
    if at.data is None:
        return np.zeros(problem.unknowns), float("inf"), {}
    y, p, u = at.x[:n], at.x[n:], at.data.control
    size = equation.control_size(u, at.data.v)
    rounding = equation.rounding(at.x) * size
    bound = at.norm / float(np.sqrt(equation.alpha)) + rounding
    method = f"residuals of state and adjoint equation, for the penalty {equation.gamma:.3g}"
    density = equation.density(y)
    misfit = problem.observe(y) - problem.target
    smooth = 0.5 * problem.observations.dot(misfit, misfit) + 0.5 * equation.alpha * problem.controls.dot(
        u, u
    )
    margins = equation.cost.margins(at.data.v, step)
    fields: dict[str, Any] = {
        "pieces": at.pieces,
        "margins": margins,
        "multipliers": {
            **equation.cost.multipliers(u, problem.pull_back(p) - equation.alpha * u),
            "state": density,
        },
        "objective": smooth
        + 0.5 * float((problem.bound_mass * density) @ equation.excess(y))
        + equation.cost.value(u, problem.weights),
        "certificate": Certificate(bound, relative(bound, size), method, rounding),
        "state": y,
        "adjoint": p,
        "violation": equation.violation(y),
    }  # fmt: skip
    if equation.nonlinear:
        fields["certificate"] = None
        fields["doubt"] = _other_state(problem, u, y)
    return u, at.accuracy, fields


def _other_state(problem: Any, u: FloatArray, y: FloatArray) -> tuple[Outcome, str] | None:
    """Whether the state equation, solved from its own start, leads to another state than the path."""
    try:
        gap = float(np.abs(problem.state_of(u) - y).max(initial=0.0))
    except StateSolveError as error:
        return Outcome.INACCURATE, f"the state equation was not solved for the control found: {error}"
    if gap <= SAME_STATE * float(np.abs(y).max(initial=0.0)):
        return None
    return Outcome.INACCURATE, f"the state solve leads to another state of the control found, {gap:.1e} away"
