"""Proximal Newton steps for the control of a nonlinear state: convex models inside, a search on the objective outside.

At a control u with state y and adjoint p a step minimises a model of the objective,

    <h + alpha u, d> + 1/2 <H d, d> + g(u + d),   H = alpha + T,

first the Gauss-Newton one, T = S* S with S the linearised control-to-observation map: a linear-quadratic control
problem, solved through its dual equation. Its direction descends, and some step length lowers the objective. At a
residual that is not small Gauss-Newton steps converge slowly; so once they are shorter than `SWITCH` times the control,
T becomes the full reduced Hessian, the second derivative of the state equation along the adjoint included. Its model
need not be convex; it is solved through its normal map, and where that fails, or its direction does not descend as a
strongly convex model's would, the Gauss-Newton step is taken in its place. Inner accuracy is of second order in the
outer one, so that the end is superlinear.

For steady states the alternative is a Newton iteration in state and adjoint, the control eliminated, with a residual
search (`FullSpaceEquation` without state bounds). On -Lap y + kappa y^3 = u with L1 cost and bounds, n = 32 and 64,
alpha = 1e-3, 1e-5, 1e-7, kappa = 1 and 100, it took 3-5, 5-7 and 28-52 steps, and up to ten times the seconds; the
steps here 3-5, whatever alpha. So it serves state bounds only, from a solution without them.

A control of a search whose state equation cannot be solved counts as one with a larger objective: the step is shorter.

Source: J. D. Lee, Y. Sun and M. A. Saunders, SIAM J. Optim. 24 (2014) 1420-1443 (proximal Newton, from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from .equations.dual import DualEquation
from .equations.normal import Action, NormalEquation, QuadraticModel, least_curvature
from .errors import StateSolveError
from .globalization import DualSearch, ResidualSearch
from .inner import relative
from .linear import NormalSolver, SubspaceSolver
from .newton import Limits, run
from .nonlinear_control import LinearisedMap, NonlinearControlProblem, ReducedPoint
from .pieces import Pieces
from .protocols import Direction, Evaluation, FallbackStep, ProxDerivative, StepOutcome
from .status import Outcome

FloatArray = npt.NDArray[np.float64]

# relative step from which on the full Hessian is taken
SWITCH = 0.3
# steps of an inner solve
GAUSS_NEWTON_STEPS, FULL_STEPS = 60, 20
# decrease of the first-order model that a direction must promise, relative to alpha ||d||^2
DESCENT = 1e-3
# relative rounding error of an objective
ROUNDING = 1e-13
# products with the Hessian that look for negative curvature at the end
CURVATURE_STEPS = 15
# and at the solution of each full model
MODEL_CURVATURE_STEPS = 5


@dataclass(frozen=True)
class ControlPoint:
    """What one evaluation of the outer equation knows."""

    point: ReducedPoint
    objective: float
    v: FloatArray
    moved: FloatArray
    derivative: ProxDerivative
    step: float


@dataclass(frozen=True)
class ReducedGradient:
    """The reduced tracking of a nonlinear problem, as a normal equation sees it."""

    problem: NonlinearControlProblem

    def gradient(self, u: FloatArray) -> tuple[FloatArray, Callable[[], Action]]:
        """Gradient and Hessian; one nonlinear state solve."""
        at = self.problem.point(u)
        return at.tracking, lambda: self.problem.curvature(at)


def normal_equation(problem: NonlinearControlProblem) -> NormalEquation:
    """The normal map of the problem itself: plain semismooth Newton steps on it are what a rate is measured by."""
    return NormalEquation(
        ReducedGradient(problem), problem.cost, problem.alpha, problem.controls, problem.work
    )


class ControlEquation:
    """R(u) = u - prox(-h(u)/alpha) = 0 with the control as iterate; the norm over ||prox|| is the accuracy.

    Attributes
    ----------
    states : int
        Nonlinear state solves.
    failure : str
        Why the last one failed.
    """

    piecewise_affine = False

    def __init__(self, problem: NonlinearControlProblem) -> None:
        self.problem, self.alpha, self.cost = problem, problem.alpha, problem.cost
        self.work, self.inner, self.weights = problem.work, problem.controls, problem.weights
        self.states, self.failure = 0, ""
        self._nearest: FloatArray | None = None

    def evaluate(self, x: FloatArray) -> Evaluation:
        """One nonlinear state solve, begun at the last state found, and one adjoint solve."""
        step = 1.0 / self.alpha
        u = self.cost.prox(x, 1e-300)  # a convex combination may leave the domain by rounding
        self.states += 1
        try:
            point = self.problem.point(u, self._nearest)
        except StateSolveError as error:
            self.failure = str(error)
            return Evaluation(u, np.full(u.shape, np.nan), np.inf, np.inf, Pieces())
        self._nearest = point.y
        v = -step * point.tracking
        self.work.proximal_maps += 1
        moved = self.cost.prox(v, step)
        objective = point.value + self.cost.value(u, self.weights)
        residual = u - moved
        norm = self.inner.norm(residual)
        if not np.isfinite(objective):
            norm = float("inf")
        accuracy = relative(norm, self.inner.norm(moved))
        data = ControlPoint(point, objective, v, moved, self.cost.prox_derivative(v, step), step)
        return Evaluation(u, residual, norm, accuracy, self.cost.pieces(v, step), data)

    def slope(self, at: Evaluation, u: FloatArray) -> float:
        """The decrease that the objective promises to first order on the way to u: negative where it does."""
        gradient = at.data.point.tracking + self.alpha * at.x
        change = self.cost.value(u, self.weights) - self.cost.value(at.x, self.weights)
        return self.inner.dot(gradient, u - at.x) + change

    def merit_line(self, at: Evaluation, direction: FloatArray) -> None:
        """None: the objective costs a state solve."""
        return None

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the Gauss-Newton direction is the safe one."""
        return None


class ProximalNewtonSolver:
    """Directions from the inner models; see the module docstring.

    Parameters
    ----------
    equation : ControlEquation
    full_hessian : bool
        False: Gauss-Newton steps to the end, for comparison.
    """

    name = "proximal Newton"

    def __init__(self, equation: ControlEquation, *, full_hessian: bool = True) -> None:
        self.equation = equation
        self.full_hessian = full_hessian
        self._near = False

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """The direction to the minimiser of the model at the point."""
        why = ""
        tolerance = _inner_tolerance(at.accuracy, forcing)
        if self._near and self.full_hessian:
            direction = self.full(at, tolerance)
            if direction.vector is not None:
                return direction
            why = f"Gauss-Newton step: {direction.message}"
        direction = self.gauss_newton(at, tolerance)
        if direction.vector is not None:
            length = self.equation.inner.norm(direction.vector)
            self._near = length < SWITCH * self.equation.inner.norm(at.x + direction.vector)
        return Direction(
            direction.vector, direction.relative_residual, direction.inner_iterations,
            direction.status, direction.message or why,
        )  # fmt: skip

    def gauss_newton(self, at: Evaluation, tolerance: float) -> Direction:
        """Through the dual equation of the linearised problem, from the point itself."""
        equation, point = self.equation, at.data.point
        tracking = LinearisedMap(equation.problem, point.linear)
        try:
            target = tracking.forward(at.x) - point.misfit
            dual = DualEquation(tracking, target, equation.alpha, equation.cost)
            start = np.concatenate([point.misfit, tracking.adjoint(point.misfit)])
            result = run(
                dual, SubspaceSolver(dual), DualSearch(), start, Limits(tolerance, GAUSS_NEWTON_STEPS)
            )
        except StateSolveError as error:
            return Direction(None, np.inf, 0, "singular", str(error))
        if result.best.data is None:
            return Direction(None, np.inf, len(result.steps), "singular", result.message)
        return _direction(at, result.best.data.control, result.best.accuracy, len(result.steps), tolerance)

    def full(self, at: Evaluation, tolerance: float) -> Direction:
        """Through the normal map of the model with the full Hessian; none where it is not to be trusted."""
        equation, point = self.equation, at.data.point
        try:
            hessian = equation.problem.curvature(point)
            model = QuadraticModel(at.x, point.tracking, hessian)
            normal = NormalEquation(model, equation.cost, equation.alpha, equation.inner, equation.work)
            limits = Limits(tolerance, FULL_STEPS)
            result = run(normal, NormalSolver(normal), ResidualSearch().fresh(), at.data.v, limits)
        except StateSolveError as error:
            return Direction(None, np.inf, 0, "singular", str(error))
        inner = len(result.steps)
        # rounding may keep a model from its tolerance: then what is much better than the point serves
        if result.outcome is not Outcome.CONVERGED and not result.best.accuracy <= 0.1 * at.accuracy:
            return Direction(
                None, np.inf, inner, "singular", f"the full model was not solved ({result.outcome.value})"
            )
        direction = _direction(at, result.best.data.control, result.best.accuracy, inner, tolerance)
        assert direction.vector is not None
        length = equation.inner.norm(direction.vector)
        slope = equation.slope(at, at.x + direction.vector)
        noise = ROUNDING * abs(at.data.objective)
        if least_curvature(normal, result.best, MODEL_CURVATURE_STEPS) < 0.0:
            return Direction(None, np.inf, inner, "singular", "the full model has negative curvature here")
        if slope > -DESCENT * equation.alpha * length**2 + noise:
            return Direction(None, np.inf, inner, "singular", "the full model is not convex enough here")
        return direction


def _inner_tolerance(accuracy: float, forcing: float) -> float:
    """A fraction of the accuracy of the point that falls with the residual, but no tighter than the end needs."""
    return max(min(1e-3, forcing * accuracy), 1e-13)


# The control of an inner solve, not prox of its gradient: the accuracy was measured there, and what is left of the
# residual is multiplied by ||T||/alpha in the other.
def _direction(at: Evaluation, u: FloatArray, left: float, inner: int, tolerance: float) -> Direction:
    return Direction(u - at.x, left, inner, "solved" if left <= tolerance else "inaccurate")


@dataclass(frozen=True)
class ObjectiveSearch:
    """Halve the step until the objective falls by a fraction of what its first-order model promises.

    Near the end that decrease is below the rounding error of the objective; then the residual has to fall.

    Parameters
    ----------
    safe : callable, optional
        Makes a Gauss-Newton direction at an evaluation, tried where no length along another direction serves.
    sigma : float
        The fraction.
    max_halvings : int
    """

    safe: Callable[[Evaluation], Direction] | None = None
    sigma: float = 1e-4
    max_halvings: int = 20
    name: str = "objective"

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Search along the direction, then along the safe one."""
        found = self._along(equation, at, direction)
        if found.at is not None or self.safe is None or direction.vector is None:
            return found
        again = self._along(equation, at, self.safe(at))
        return StepOutcome(
            again.at, again.length, found.evaluations + again.evaluations, again.action,
            f"Gauss-Newton step: {found.reason}" if again.at is not None else again.reason,
        )  # fmt: skip

    def _along(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        if direction.vector is None:
            return StepOutcome(None, 0.0, 0, "none", direction.message or "no direction")
        slope = equation.slope(at, at.x + direction.vector)
        value, t, failures = at.data.objective, 1.0, 0
        for k in range(self.max_halvings + 1):
            trial = equation.evaluate(at.x + t * direction.vector)
            if trial.finite:
                noise = ROUNDING * (abs(value) + abs(trial.data.objective))
                falls = trial.data.objective <= value + self.sigma * t * slope + noise
                seen = abs(slope) * t > 10.0 * noise
                if slope < 0.0 and falls and (seen or trial.norm < at.norm):
                    reason = direction.message
                    if failures:
                        reason = f"{failures} longer steps had no state: {equation.failure}"
                    return StepOutcome(trial, t, k + 1, "full step" if t == 1.0 else "shortened", reason)
                if not seen and trial.norm < at.norm:
                    return StepOutcome(
                        trial, t, k + 1, "full step" if t == 1.0 else "shortened", direction.message
                    )
            else:
                failures += 1
            t *= 0.5
        reason = "no length along the direction lowers the objective"
        if failures == self.max_halvings + 1:
            reason = f"no trial point has a state: {equation.failure}"
        return StepOutcome(None, 0.0, self.max_halvings + 1, "none", reason)

    def tightened(self) -> None:
        """None: the objective falls strictly."""
        return None


def collect(equation: ControlEquation, best: Evaluation) -> tuple[FloatArray, float, dict[str, Any]]:
    """Control, accuracy and the fields of `Solution`, all computed afresh from the control alone."""
    problem, step = equation.problem, 1.0 / equation.alpha
    u = best.x
    try:
        at = problem.point(u)
    except StateSolveError:
        return u, float("inf"), {}
    v = -step * at.tracking
    moved = problem.cost.prox(v, step)
    accuracy = relative(problem.controls.norm(u - moved), problem.controls.norm(moved))
    normal = normal_equation(problem)
    fields: dict[str, Any] = {
        "pieces": problem.cost.pieces(v, step),
        "margins": problem.cost.margins(v, step),
        "multipliers": problem.cost.multipliers(u, -at.tracking - problem.alpha * u),
        "objective": at.value + problem.cost.value(u, problem.weights),
        "state": at.y,
        "adjoint": at.p,
    }
    try:
        least = least_curvature(normal, normal.evaluate(v), CURVATURE_STEPS)
    except (StateSolveError, AttributeError):
        return u, accuracy, fields
    if least < -1e-6:
        fields["doubt"] = (
            Outcome.SADDLE_POINT,
            f"negative curvature {least * problem.alpha:.1e} among the directions that the cost leaves free",
        )
    return u, accuracy, fields
