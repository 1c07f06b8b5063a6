"""The optimality system of a control problem with penalised state bounds, in state and adjoint.

With the penalty gamma/2 ||max(0, y - upper)||^2_M + gamma/2 ||max(0, lower - y)||^2_M of the state bounds, M lumped,

    E' p + C' Wy (C y - z) + M l(y) = 0,   l(y) = gamma max(0, y - upper) - gamma max(0, lower - y),
    E y - B u(p) - f = 0,                  u(p) = prox_{g/alpha}(Wu^-1 B' p / alpha),

where the control is eliminated. A Newton derivative is [[C' Wy C + gamma M chi, E'], [E, -B D Wu^-1 B'/alpha]] with chi
one where a bound is violated (zero at the bound itself) and D the derivative of the proximal map.

At any (y, p) let r1 and r2 be the two residuals, e1 = E'^-1 r1, e2 = E^-1 r2. Testing the difference to the solution
(y*, p*) with itself, the monotonicity of the proximal map and of l give

    alpha ||u - u*||^2_Wu + ||C (y - y*)||^2_Wy + ||l - l*||^2_M / gamma
        <= ||Wu^-1 B' e1||^2_Wu / alpha + ||C e2||^2_Wy + gamma ||e2||^2_M,

whose right-hand side is the squared residual norm here: it does not depend on the mesh, and rounding enters it with the
square root of gamma only.

Where the whole state is observed with a lumped mass, the first equation is solved for y one node at a time, and the
second is minus the gradient of the convex dual function

    Phi(p) = F*(-E' p) + (g + alpha/2 ||.||^2)*(B' p) + <f, p>,   F the penalised tracking as a function of the state,

whose slope along a direction costs no solve: `DualFullSpaceEquation`, with an exact search, converges from anywhere.

A semilinear state K y + M d(y) = B u + f brings E'(y) = K + M diag(d'(y)) in place of E, the residual of the state
equation itself, and diag(d''(y) M' p) in the first row of the derivative. No state equation is solved on the way.

Source: K. Ito and K. Kunisch, Systems Control Lett. 50 (2003) 221-228 (from memory), for the regularised system.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator

from ..errors import StateSolveError
from ..inner import InnerProduct, relative
from ..linear.boundary import product, transpose_product
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep, Linearization, ProxDerivative

FloatArray = npt.NDArray[np.float64]

STATE_LEGEND = ("below the lower bound", "between", "above the upper bound")
EPS = float(np.finfo(float).eps)
# relative error of an inner product
ROUNDING = 1e-15


@dataclass(frozen=True)
class FullSpacePoint:
    """What one evaluation knows.

    Attributes
    ----------
    v, control : array, shape (n,)
        The argument of the proximal map, and u.
    active : array, shape (N,)
        chi: one where a state bound is violated.
    derivative : ProxDerivative
        D.
    step : float
        That of the proximal map, 1/alpha.
    matrix, curvature : sparse array, array
        For a semilinear state E'(y), and the diagonal of the derivative of E'(y)' p.
    """

    v: FloatArray
    control: FloatArray
    active: FloatArray
    derivative: ProxDerivative
    step: float
    matrix: Any = None
    curvature: Any = 0.0


class FullSpaceEquation:
    """F(y, p) = 0 for a penalty gamma, with x = [y, p] as iterate.

    Parameters
    ----------
    problem : ControlProblem or NonlinearControlProblem
        With state bounds, alpha > 0, explicit matrices and a cost with a diagonal derivative; a nonlinear state is a
        `SemilinearState`.
    gamma : float
        Penalty >= 0, unit of the observation mass over that of the state mass.

    Notes
    -----
    The accuracy is the distance bound of the module docstring for u, relative to ||u||; where u = 0, to the argument
    of the proximal map. With a semilinear state E is E'(y) in the norm, and the bound holds to first order only.
    """

    def __init__(self, problem: Any, gamma: float) -> None:
        self.problem, self.gamma, self.alpha = problem, gamma, problem.alpha
        self.cost, self.work, self.weights = problem.cost, problem.work, problem.weights
        self.nonlinear = hasattr(problem.state, "linearize")
        self.size = int(problem.state.size)
        self.piecewise_affine = bool(getattr(problem.cost, "piecewise_affine", True))
        mass = problem.bound_mass
        self.inner = InnerProduct(np.concatenate([mass, mass / self.alpha]))
        self._source = np.zeros(self.size) if problem.source is None else problem.source

    def with_penalty(self, gamma: float) -> FullSpaceEquation:
        """The equation of another penalty."""
        return type(self)(self.problem, gamma)

    def start(self, control: FloatArray | None) -> FloatArray:
        """The state of a control and the adjoint that belongs to it; None means the proximal point of zero."""
        problem = self.problem
        u = self.cost.prox(np.zeros(problem.unknowns), 1.0 / self.alpha) if control is None else control
        y = problem.state_of(u) if self.nonlinear else problem.response(u) + problem.offset()
        return np.concatenate([y, self.linear(y).adjoint_solve(-self.state_load(y))])

    def linear(self, y: FloatArray) -> Any:
        """The linear state model at y."""
        state = self.problem.state
        return state.linearize(y) if self.nonlinear else state

    def density(self, y: FloatArray) -> FloatArray:
        """l(y): positive where the upper bound is violated, negative where the lower one is."""
        return self.gamma * self.excess(y)

    def excess(self, y: FloatArray) -> FloatArray:
        """max(0, y - upper) - max(0, lower - y)."""
        problem = self.problem
        above = np.maximum(y - problem.state_upper, 0.0)
        below = np.maximum(problem.state_lower - y, 0.0)
        return np.asarray(above - below)

    def state_load(self, y: FloatArray) -> FloatArray:
        """C' Wy (C y - z) + M l(y): the derivative of the penalised objective with respect to the state."""
        problem = self.problem
        weighted = problem.observations.apply(problem.observe(y) - problem.target)
        if problem.observation is not None:
            weighted = transpose_product(problem.observation, weighted)
        return weighted + problem.bound_mass * self.density(y)

    def control_load(self, u: FloatArray) -> FloatArray:
        """B u + f."""
        self.work.operator_products += 1
        return product(self.problem.control_operator, u) + self._source

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Both residuals, and two solves with the state operator for their norm."""
        problem, y, p = self.problem, x[: self.size], x[self.size :]
        v = problem.pull_back(p) / self.alpha
        self.work.proximal_maps += 1
        u = self.cost.prox(v, 1.0 / self.alpha)
        extra: dict[str, Any] = {}
        try:
            linear = self.linear(y)
            first = self.state_load(y) - linear.adjoint_residual(p, np.zeros(self.size))
            second = -problem.state.residual(y, self.control_load(u))
            residual = np.concatenate([first, second])
            if not np.isfinite(residual).all():
                return Evaluation(x, residual, np.inf, np.inf, Pieces())
            norm = self.energy(first, second, linear)
            if self.nonlinear:
                extra = {"matrix": linear.matrix, "curvature": problem.state.curvature(y, p)}
        except StateSolveError:
            return Evaluation(x, np.full(x.shape, np.nan), np.inf, np.inf, Pieces())
        accuracy = relative(norm / float(np.sqrt(self.alpha)), self.control_size(u, v))
        active = ((y > problem.state_upper) | (y < problem.state_lower)).astype(np.float64)
        derivative = self.cost.prox_derivative(v, 1.0 / self.alpha)
        data = FullSpacePoint(v, u, active, derivative, 1.0 / self.alpha, **extra)
        return Evaluation(x, residual, norm, accuracy, self.pieces(y, v), data)

    def control_size(self, u: FloatArray, v: FloatArray) -> float:
        """||u||, or ||v|| where u = prox(v) is zero."""
        return self.problem.controls.norm(u) or self.problem.controls.norm(v)

    def energy(self, first: FloatArray, second: FloatArray, linear: Any) -> float:
        """The norm of a pair of residuals, see the module docstring; two state solves."""
        problem = self.problem
        e1, e2 = linear.adjoint_solve(first), linear.solve(second)
        square = problem.controls.norm(problem.pull_back(e1)) ** 2 / self.alpha
        square += problem.observations.norm(problem.observe(e2)) ** 2
        square += self.gamma * float(problem.bound_mass @ (e2 * e2))
        return float(np.sqrt(square))

    def rounding(self, x: FloatArray) -> float:
        """The accuracy that rounding errors of residual and iterate leave, estimated with signs that alternate.

        The spacing of floating-point numbers around a state at its bound, times gamma, is the coarsest of them.
        """
        problem, y, p = self.problem, x[: self.size], x[self.size :]
        v = problem.pull_back(p) / self.alpha
        u = self.cost.prox(v, 1.0 / self.alpha)
        linear = self.linear(y)
        matrix = abs(linear.matrix)
        signs = np.where(np.cos(1.7 * np.arange(self.size) ** 2) > 0, EPS, -EPS)
        second = product(matrix, abs(y)) + abs(self.control_load(u))
        first = transpose_product(matrix, abs(p)) + abs(self.state_load(y))
        first = first + self.gamma * problem.bound_mass * np.where(self.excess(y) != 0.0, abs(y), 0.0)
        energy = self.energy(signs * first, signs * second, linear)
        return relative(energy / float(np.sqrt(self.alpha)), self.control_size(u, v))

    def pieces(self, y: FloatArray, v: FloatArray) -> Pieces:
        """The active sets of the cost, and those of the state bounds."""
        problem = self.problem
        own = self.cost.pieces(v, 1.0 / self.alpha)
        labels = np.ones(self.size, dtype=np.int8)
        labels[y < problem.state_lower] = 0
        labels[y > problem.state_upper] = 2
        return Pieces({**own, "state": labels}, {**own.legend, "state": STATE_LEGEND})

    def violation(self, y: FloatArray) -> float:
        """The largest violation of a state bound, in the unit of the state."""
        return float(abs(self.excess(y)).max(initial=0.0))

    def linearize(self, x: FloatArray) -> Linearization:
        """Residual and Newton derivative, the latter as an operator."""
        at, problem, n = self.evaluate(x), self.problem, self.size
        zero, linear = np.zeros(n), self.linear(x[: self.size])

        def apply(direction: FloatArray) -> FloatArray:
            dy, dp = np.ravel(direction)[:n], np.ravel(direction)[n:]
            weighted = problem.observations.apply(problem.observe(dy))
            if problem.observation is not None:
                weighted = transpose_product(problem.observation, weighted)
            du = at.data.derivative.apply(problem.pull_back(dp)) / self.alpha
            first = weighted + (self.gamma * problem.bound_mass * at.data.active + at.data.curvature) * dy
            first = first - linear.adjoint_residual(dp, zero)
            second = -linear.residual(dy, product(problem.control_operator, du))
            return np.concatenate([first, second])

        operator = LinearOperator((2 * n, 2 * n), matvec=apply, dtype=np.float64)
        return Linearization(at.residual, operator, at.pieces)

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]] | None:
        """None."""
        return None

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the path goes back to a smaller penalty instead."""
        return None


def has_dual(problem: Any) -> bool:
    """Whether the state can be eliminated node by node: all of it observed, with a lumped mass."""
    lumped = problem.observation is None and problem.observations.vector is not None
    return lumped and not hasattr(problem.state, "linearize")


class DualFullSpaceEquation(FullSpaceEquation):
    """The same equation with y eliminated: y is recomputed from p wherever it is evaluated."""

    def state_of(self, load: FloatArray) -> FloatArray:
        """The y with Wy (y - z) + M l(y) = -load."""
        return self._shifted(load)[0]

    def _shifted(self, load: FloatArray) -> tuple[FloatArray, FloatArray]:
        """y, and 1 / (Wy + gamma M chi)."""
        problem, weight = self.problem, self.problem.observations.vector
        stiff = weight + self.gamma * problem.bound_mass
        y = problem.target - load / weight
        high, low = problem.state_upper, problem.state_lower
        above, below = y > high, y < low
        # where the bound is infinite neither holds
        y = np.where(above, np.where(above, high, 0.0) + weight * (y - np.where(above, high, y)) / stiff, y)
        y = np.where(below, np.where(below, low, 0.0) + weight * (y - np.where(below, low, y)) / stiff, y)
        return y, 1.0 / np.where(above | below, stiff, weight)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The residuals at p, the state being that which belongs to p; the first one is rounding."""
        p = x[self.size :]
        load = -self.problem.state.adjoint_residual(p, np.zeros(self.size))
        return super().evaluate(np.concatenate([self.state_of(load), p]))

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]]:
        """Slope and curvature of t -> Phi(p + t d), and the rounding error of the slope."""
        problem, n, alpha = self.problem, self.size, self.alpha
        zero, p, d = np.zeros(n), at.x[n:], direction[n:]
        load, d_load = -problem.state.adjoint_residual(p, zero), -problem.state.adjoint_residual(d, zero)
        dv = problem.pull_back(d) / alpha
        source, weighted = float(self._source @ d), problem.weights * dv * alpha

        def slope_and_curvature(t: float) -> tuple[float, float, float]:
            self.work.proximal_maps += 1
            v = at.data.v + t * dv
            y, flexible = self._shifted(load + t * d_load)
            control = self.cost.prox(v, 1.0 / alpha) * weighted
            state = y * d_load
            noise = ROUNDING * float(abs(control).sum() + abs(state).sum() + abs(source))
            sloped = self.cost.prox_derivative(v, 1.0 / alpha).apply(dv)
            curvature = float(weighted @ sloped) + float(flexible @ (d_load * d_load))
            return float(control.sum() + source - state.sum()), curvature, noise

        return slope_and_curvature
