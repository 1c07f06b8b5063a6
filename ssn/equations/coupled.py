"""The optimality system of a control problem in state and adjoint, without any exact solve of the state equation.

    r1 = E' p + C' Wy (C y - z),      r2 = E y - B u(p) - f,      u(p) = prox_{g/alpha}(Wu^-1 B' p / alpha),

E symmetric positive definite, g separable. With e1 = E^-1 r1 and e2 = E^-1 r2, testing the difference to the solution
with itself and the monotonicity of the proximal map give

    alpha ||u - u*||^2_Wu + ||C (y - y*)||^2_Wy <= ||Wu^-1 B' e1||^2_Wu / alpha + ||C e2||^2_Wy,

so that the right-hand side bounds the distance to the exact discrete solution. At the end e1 and e2 are computed by
multigrid cycles until these leave a twentieth, which enters the certificate. In the iteration the residual norm is the
same expression for the first cycle of the next Newton step in place of (e2, e1): the step needs it anyway.

Where the whole state is observed, y can be eliminated, and the second residual is minus the gradient of the convex dual
function

    Phi(p) = 1/2 ||z - Wy^-1 E' p||^2_Wy + (g + alpha/2 ||.||^2)*(B' p) + <f, p>

up to a constant. Its slope along a direction costs products only: the search is exact, and Newton directions descend.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator, cg

from ..inner import InnerProduct, relative
from ..linear.boundary import product, transpose_product
from ..linear.coupled import CoupledOperators
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep, ProxDerivative
from ..records import Certificate
from ..status import Outcome

FloatArray = npt.NDArray[np.float64]

EPS = float(np.finfo(float).eps)
# relative error of an inner product
ROUNDING = 1e-15
# cycles at most, and what the last may leave, in the final estimate of the distance
FINAL_CYCLES, LEFT = 12, 0.05
# cycles at most for state and adjoint of a control that is given as a start
START_CYCLES = 25
# a cycle leaves a fifth of an error: what it finds, times this, is no less than the error
CAUTION = 1.25
# distance bound, relative to the control, from which on a solution counts as inaccurate, and in units of the tolerance
DOUBTFUL, LOOSE = 1e-7, 100.0


@dataclass(frozen=True)
class CoupledPoint:
    """What one evaluation knows: the argument of the proximal map, the control, D, and the first cycle of the step."""

    v: FloatArray
    control: FloatArray
    derivative: ProxDerivative
    correction: tuple[FloatArray, FloatArray]


class CoupledEquation:
    """F(y, p) = 0 with x = [y, p] as iterate.

    Parameters
    ----------
    problem : ControlProblem
        One that `ssn.linear.coupled.refusal` has nothing against.

    Notes
    -----
    The accuracy is 1.25 times the size of the first cycle of the next Newton step, in the norm of the module docstring
    and divided by sqrt(alpha), relative to ||u||; where u = 0, to the argument of the proximal map. The certificate at
    the end does not rely on it.
    """

    def __init__(self, problem: Any) -> None:
        self.problem, self.alpha, self.cost, self.work = problem, problem.alpha, problem.cost, problem.work
        self.operators: Any = self._operators_of(problem)
        self.size = self.operators.size
        self.piecewise_affine = bool(getattr(problem.cost, "piecewise_affine", True))
        weight = problem.observations
        self.has_dual = problem.observation is None
        self._weight = weight.vector if weight.vector is not None else weight.matrix
        mass = (
            weight.vector if problem.observation is None and weight.vector is not None else np.ones(self.size)
        )
        self.inner = InnerProduct(np.concatenate([mass, mass / self.alpha]))
        self._source = np.zeros(self.size) if problem.source is None else problem.source

    def _operators_of(self, problem: Any) -> Any:
        """The operators of the pair, with what estimates its errors."""
        return CoupledOperators(problem)

    def start(
        self, control: FloatArray | None, pair: tuple[FloatArray, FloatArray] | None = None
    ) -> FloatArray:
        """The pair that belongs to a control, or a pair given; zeros without either."""
        if pair is not None:
            return np.concatenate(pair)
        if control is None:
            return np.zeros(2 * self.size)
        zero = np.zeros(self.size)
        # accurate: a control that solves the problem already must not cost steps
        y, _ = self.operators.errors(self.control_load(control), zero, START_CYCLES, EPS)
        _, p = self.operators.errors(zero, -self.state_load(y), START_CYCLES, EPS)
        return np.concatenate([y, p])

    def state_load(self, y: FloatArray) -> FloatArray:
        """C' Wy (C y - z)."""
        problem = self.problem
        weighted = problem.observations.apply(problem.observe(y) - problem.target)
        return weighted if problem.observation is None else transpose_product(problem.observation, weighted)

    def control_load(self, u: FloatArray) -> FloatArray:
        """B u + f."""
        self.work.operator_products += 1
        return product(self.problem.control_operator, u) + self._source

    def residuals(self, x: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """r1, r2, the argument of the proximal map, and u."""
        y, p = x[: self.size], x[self.size :]
        self.work.operator_products += 2
        v = self.problem.pull_back(p) / self.alpha
        self.work.proximal_maps += 1
        u = self.cost.prox(v, 1.0 / self.alpha)
        first = self.operators.matrix @ p + self.state_load(y)
        second = self.operators.state @ y - self.control_load(u)
        return first, second, v, u

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Both residuals, and the first cycle of the Newton step from here for their norm."""
        first, second, v, u = self.residuals(x)
        residual = np.concatenate([first, second])
        if not np.isfinite(residual).all():
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        step, operators = 1.0 / self.alpha, self.operators
        derivative = self.cost.prox_derivative(v, step)
        operators.activate(derivative.diagonal)
        correction = operators.correct(-second, first * (-1.0 / operators.root))
        norm = self.size_of(*correction)
        accuracy = relative(CAUTION * norm / operators.root, self.control_size(u, v))
        data = CoupledPoint(v, u, derivative, correction)
        return Evaluation(x, residual, norm, accuracy, self.cost.pieces(v, step), data)

    def control_size(self, u: FloatArray, v: FloatArray) -> float:
        """||u||, or ||v|| where u = prox(v) is zero."""
        return self.problem.controls.norm(u) or self.problem.controls.norm(v)

    def size_of(self, y: FloatArray, q: FloatArray) -> float:
        """The norm of a pair of state and scaled adjoint."""
        problem = self.problem
        pulled, seen = (
            problem.controls.norm(problem.pull_back(q)),
            problem.observations.norm(problem.observe(y)),
        )
        return float(np.hypot(pulled, seen))

    def energy(self, first: FloatArray, second: FloatArray, cycles: int = 1) -> float:
        """The norm of the errors that belong to a pair of residuals, see the module docstring."""
        return self.size_of(*self.operators.errors(second, first / self.operators.root, cycles, LEFT))

    def rounding(self, x: FloatArray, u: FloatArray) -> float:
        """The energy that rounding errors of the residuals leave, estimated with signs without order."""
        y, p = x[: self.size], x[self.size :]
        diagonal = self.operators.matrix.diagonal()  # half of what a row of an M-matrix sums up
        signs = EPS * (((np.arange(self.size) * 2654435761) >> 16 & 2) - 1.0)
        second = 2.0 * diagonal * abs(y) + abs(self.control_load(u))
        first = 2.0 * diagonal * abs(p) + abs(self.state_load(y))
        return self.energy(signs * first, signs * second)

    def merit_line(
        self, at: Evaluation, direction: FloatArray
    ) -> Callable[[float], tuple[float, float, float]] | None:
        """Slope and curvature of t -> Phi(p + t d), and the rounding error of the slope; None without a dual."""
        if not self.has_dual:
            return None
        problem, n, alpha = self.problem, self.size, self.alpha
        p, d = at.x[n:], direction[n:]
        self.work.operator_products += 2
        load, d_load = self.operators.matrix @ p, self.operators.matrix @ d
        flexible = self._without_mass(d_load)
        dv = problem.pull_back(d) / alpha
        weighted = problem.weights * dv * alpha
        parts = np.array([float(self._source @ d), -float(problem.target @ d_load), float(load @ flexible)])
        constant, quadratic = float(parts.sum()), float(d_load @ flexible)
        base = float(abs(problem.target) @ abs(d_load)) + float(abs(load) @ abs(flexible)) + abs(parts[0])

        def slope_and_curvature(t: float) -> tuple[float, float, float]:
            self.work.proximal_maps += 1
            v = at.data.v + t * dv
            control = self.cost.prox(v, 1.0 / alpha) * weighted
            noise = ROUNDING * (base + abs(t) * quadratic + float(abs(control).sum()))
            sloped = self.cost.prox_derivative(v, 1.0 / alpha).apply(dv)
            return (
                float(control.sum()) + constant + t * quadratic,
                quadratic + float(weighted @ sloped),
                noise,
            )

        return slope_and_curvature

    def _without_mass(self, load: FloatArray) -> FloatArray:
        """Wy^-1 load; a consistent mass by conjugate gradients with its diagonal, which takes a few products."""
        if isinstance(self._weight, np.ndarray):
            return load / self._weight
        inverse = 1.0 / self._weight.diagonal()
        scaled = LinearOperator(self._weight.shape, matvec=lambda r: inverse * np.ravel(r), dtype=np.float64)
        result, _ = cg(self._weight, load, rtol=1e-12, atol=0.0, maxiter=200, M=scaled)
        return np.asarray(result)

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: another equation takes over where this one fails."""
        return None

    def collect(self, x: FloatArray, tolerance: float) -> tuple[FloatArray, float, dict[str, Any]]:
        """Control, accuracy computed afresh, and the fields of `Solution` at an iterate."""
        problem, step = self.problem, 1.0 / self.alpha
        at = self.evaluate(x.copy())
        if at.data is None:
            return np.zeros(problem.unknowns), float("inf"), {}
        first, second, v, u = at.residual[: self.size], at.residual[self.size :], at.data.v, at.data.control
        y, p = x[: self.size], x[self.size :]
        norm = self.energy(first, second, FINAL_CYCLES) * (1.0 + LEFT)
        rounding = self.rounding(x, u)
        root = self.operators.root
        misfit = problem.observe(y) - problem.target
        value = 0.5 * problem.observations.dot(misfit, misfit) + 0.5 * self.alpha * problem.controls.dot(u, u)
        bound = (norm + rounding) / root
        method = "residuals of state and adjoint equation, by multigrid"
        share = relative(bound, self.control_size(u, v))
        doubt = None
        if share > max(DOUBTFUL, LOOSE * tolerance):
            doubt = f"state and adjoint equation are solved to {share:.1e} of the control only"
        return u, at.accuracy, {
            "doubt": None if doubt is None else (Outcome.INACCURATE, doubt),
            "pieces": at.pieces,
            "margins": self.cost.margins(v, step),
            "multipliers": self.cost.multipliers(u, problem.pull_back(p) - self.alpha * u),
            "objective": value + self.cost.value(u, problem.weights),
            "certificate": Certificate(bound, relative(bound, problem.controls.norm(u)), method, rounding / root),
            "state": y,
            "adjoint": p,
        }  # fmt: skip
