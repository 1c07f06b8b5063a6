"""Optimal control of a nonlinear state equation with a nonsmooth cost of the control."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator

from .control import ControlStatement
from .errors import InputError, StateSolveError
from .inner import relative
from .linear.boundary import product, transpose_product
from .nonlinear_states import NonlinearStateModel, second_derivative
from .states import StateModel
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class ReducedPoint:
    """What one solve of state and adjoint equation knows about a control.

    Attributes
    ----------
    u, y, p : array
        Control, state, and adjoint with E'(y)' p = C' Wy (z - C y), minus M l where state bounds are penalised.
    linear : StateModel
        E'(y).
    misfit : array
        C y - z.
    value : float
        Of the smooth part.
    tracking : array, shape (n,)
        The Riesz gradient of the smooth part without alpha u: -Wu^-1 B' p.
    """

    u: FloatArray
    y: FloatArray
    p: FloatArray
    linear: StateModel
    misfit: FloatArray
    value: float
    tracking: FloatArray


class NonlinearControlProblem(ControlStatement):
    """minimise 1/2 ||C y - z||^2_Wy + alpha/2 ||u||^2_Wu + g(u) subject to E(y) = B u + f, and bounds of the state.

    Parameters
    ----------
    state : NonlinearStateModel
        The state equation, of size N: `SemilinearState`, `TimeDependentSemilinearState`,
        `OrdinaryDifferentialSystem`, or an object of your own.
    target, cost, control_operator, observation, source, state_mass, control_mass, observation_mass
        As in `ControlProblem`; the cost must be convex.
    control_weight : float
        alpha > 0.
    state_lower, state_upper, state_tolerance
        As in `ControlProblem`; for a `SemilinearState` only.

    Raises
    ------
    InputError
        Naming the argument, its shape and the expected one, or what does not fit.

    Notes
    -----
    A sibling of `ControlProblem`, not a case of it: with a nonlinear state the problem is not convex, there is no dual
    equation and no certificate, and a control may have no state. What is found is a stationary point, at which the
    objective cannot be lowered along the directions tried. `proximal_newton` says how.

    Where the state equation cannot be solved, `smooth_value` and `objective` are inf and `smooth` returns inf with a
    gradient of NaN; `state_of` and `point` raise `StateSolveError` with the reason.

    ``Solution.state`` is y, ``Solution.adjoint`` is p with E'(y)' p = C' Wy (z - C y), so that without g
    alpha Wu u = B' p.

    Several controls with different costs: B = [B1 B2] and the cost a `Product` of theirs.
    """

    affine = False
    convex = False
    strong_convexity = 0.0

    def check_state(self, state: Any) -> None:
        """Raise `InputError` for something that is no nonlinear state model."""
        if not isinstance(state, NonlinearStateModel):
            hint = ": a linear one belongs into ControlProblem" if hasattr(state, "adjoint_solve") else ""
            raise InputError(
                f"state must be a nonlinear state model such as SemilinearState(K, d, ...), "
                f"got {type(state).__name__}{hint}"
            )

    def check_statement(self) -> None:
        """Raise `InputError` for what the methods cannot do."""
        if self.alpha == 0.0:
            raise InputError("control_weight must be positive: with a nonlinear state the steps stand on it")
        if not self.cost.convex:
            raise InputError(f"{type(self.cost).__name__} is not convex: control problems need a convex cost")
        if self.state_bounded and not hasattr(self.state, "curvature"):
            raise InputError(f"state bounds need a SemilinearState, got {type(self.state).__name__}")

    # state and adjoint

    def load(self, u: FloatArray) -> FloatArray:
        """B u + f."""
        self.work.operator_products += 1
        load = product(self.control_operator, u)
        return load if self.source is None else load + self.source

    def state_of(self, u: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """The state of a control, whose solve may begin at `start`; raises `StateSolveError`."""
        y = self.state.solve(self.load(u), start)
        if y.shape != (self.state.size,) or not np.isfinite(y).all():
            raise StateSolveError(
                f"the state model returned a state of shape {y.shape}, or one that is not finite"
            )
        return y

    def point(self, u: FloatArray, start: FloatArray | None = None) -> ReducedPoint:
        """State, adjoint and gradient of a control; raises `StateSolveError`."""
        y = self.state_of(u, start)
        misfit = self.observe(y) - self.target
        linear = self.state.linearize(y)
        p = linear.adjoint_solve(-self.state_load(y, misfit))
        if not np.isfinite(p).all():
            raise StateSolveError("the adjoint state is not finite")
        value = self._penalised_value(u, y, misfit) if self.state_bounded else self._value(u, misfit)
        return ReducedPoint(u, y, p, linear, misfit, value, -self.pull_back(p))

    def _value(self, u: FloatArray, misfit: FloatArray) -> float:
        return 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)

    def state_load(self, y: FloatArray, misfit: FloatArray) -> FloatArray:
        """The derivative of tracking and penalty with respect to the state."""
        weighted = self.observations.apply(misfit)
        if self.observation is not None:
            self.work.operator_products += 1
            weighted = transpose_product(self.observation, weighted)
        if not self.state_bounded:
            return weighted
        if self.state_penalty is None:
            raise InputError(
                "state bounds are hard constraints, which a gradient does not see; take problem.penalised(gamma)"
            )
        excess = np.maximum(y - self.state_upper, 0.0) - np.maximum(self.state_lower - y, 0.0)
        return weighted + self.state_penalty * self.bound_mass * excess

    def curvature(self, at: ReducedPoint) -> Callable[[FloatArray], FloatArray]:
        """The function v -> T v, with T + alpha the reduced Hessian of the smooth part; two state solves each.

        T = Wu^-1 B' E'^-T (C' Wy C + gamma M chi + (E'' p)) E'^-1 B, E'' p the derivative of E'(y)' p.
        """
        second = second_derivative(self.state, at.y, at.p)
        active: Any = 0.0
        if self.state_bounded and self.state_penalty is not None:
            active = ((at.y > self.state_upper) | (at.y < self.state_lower)) * (
                self.state_penalty * self.bound_mass
            )

        def apply(v: FloatArray) -> FloatArray:
            self.work.operator_products += 2
            dy = at.linear.solve(product(self.control_operator, v))
            weighted = self.observations.apply(self.observe(dy))
            if self.observation is not None:
                weighted = transpose_product(self.observation, weighted)
            load = weighted + active * dy + product(second, dy)
            return transpose_product(self.control_operator, at.linear.adjoint_solve(load)) / self.weights

        return apply

    # what the reference methods and the evidence see

    def smooth(self, u: FloatArray) -> tuple[float, FloatArray]:
        """Value and gradient (Riesz representative in the control product) of the smooth part."""
        try:
            at = self.point(u)
        except StateSolveError:
            return float("inf"), np.full(self.unknowns, np.nan)
        return at.value, at.tracking + self.alpha * u

    def smooth_value(self, u: FloatArray) -> float:
        """Value of the smooth part; one nonlinear state solve."""
        try:
            y = self.state_of(u)
        except StateSolveError:
            return float("inf")
        misfit = self.observe(y) - self.target
        return self._penalised_value(u, y, misfit) if self.state_bounded else self._value(u, misfit)

    def objective(self, u: FloatArray) -> float:
        """The objective; inf outside the domain of the cost, and where there is no state."""
        return self.smooth_value(u) + self.cost.value(u, self.weights)

    def gradient(self, u: FloatArray) -> FloatArray:
        """The vector of partial derivatives of the smooth part, for Taylor tests."""
        return self.weights * self.smooth(u)[1]

    def hessian(self, u: FloatArray) -> LinearOperator:
        """The matrix of second derivatives of the smooth part at u as an operator; raises `StateSolveError`."""
        apply = self.curvature(self.point(u))

        def action(v: FloatArray) -> FloatArray:
            x = np.ravel(v)
            return self.weights * (apply(x) + self.alpha * x)

        n = self.unknowns
        return LinearOperator((n, n), matvec=action, rmatvec=action, dtype=np.float64)

    def accuracy(self, u: FloatArray) -> float:
        """||u - u'|| / ||u'|| with u' the proximal map of the normal map (step 1/alpha), evaluated afresh."""
        step = 1.0 / self.alpha
        _, gradient = self.smooth(u)
        if not np.isfinite(gradient).all():
            return float("inf")
        moved = self.cost.prox(u - step * gradient, step)
        return relative(self.controls.norm(u - moved), self.controls.norm(moved))

    def state_and_adjoint(self, u: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Y and p that belong to u; raises `StateSolveError`."""
        at = self.point(u)
        return at.y, at.p


class LinearisedMap:
    """S = C E'(y)^-1 B at a point, with its adjoint in the weighted products: a tracking map for the dual equation."""

    def __init__(self, problem: NonlinearControlProblem, linear: StateModel) -> None:
        self.problem, self.linear = problem, linear
        self.work: WorkCounts = problem.work
        self.controls, self.observations = problem.controls, problem.observations

    def forward(self, u: FloatArray) -> FloatArray:
        """S u; one state solve."""
        problem = self.problem
        self.work.operator_products += 1
        return problem.observe(self.linear.solve(product(problem.control_operator, u)))

    def adjoint(self, q: FloatArray) -> FloatArray:
        """S* q; one state solve."""
        problem = self.problem
        weighted = self.observations.apply(q)
        if problem.observation is not None:
            self.work.operator_products += 1
            weighted = transpose_product(problem.observation, weighted)
        return problem.pull_back(self.linear.adjoint_solve(weighted))
