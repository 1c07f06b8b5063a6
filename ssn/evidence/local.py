"""The kernel's equation of a problem around one point: norms, directions, Newton derivative, Newton steps."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..composite import CompositeProblem
from ..control import ControlProblem
from ..equations.augmented import AugmentedEquation
from ..equations.dual import DualEquation
from ..equations.full_space import FullSpaceEquation
from ..equations.natural import NaturalEquation
from ..equations.normal import NormalEquation
from ..equations.primal_dual import PrimalDualEquation
from ..globalization import DualSearch
from ..linear import NormalSolver
from ..linear.boundary import product
from ..linear.primal_dual import PrimalDualSolver
from ..linear.subspace import SubspaceSolver
from ..newton import TIGHT, Limits, run
from ..nonlinear_control import NonlinearControlProblem
from ..norm_terms import NormRows
from ..prepare import prepare
from ..primal_dual_path import first_gammas
from ..protocols import Direction, Evaluation, FloatArray
from ..proximal_newton import normal_equation
from ..proximal_point import operator_size
from ..sum_problem import SumProblem

EPS = float(np.finfo(float).eps)
# weight of the proximal point subproblem that is looked at where control_weight is 0, relative to ||S||^2
SUBPROBLEM = 1e-5
# several terms: share of the multipliers that further points of the path begin with, how many, how they are solved
SPREAD = 1e3  # of gamma about the balance of f and the term: the arguments of an equation are all but zero
INWARD, POINTS, ROOT, POINT_STEPS = 0.9, 3, 1e-13, 30


def _factorised(problem: Any) -> bool:
    """Whether a problem can be solved with a factorised state operator."""
    return isinstance(problem, ControlProblem) and problem.convex and not problem.state_bounded


class Local:
    """An equation with its linear solver and the iterate that belongs to a point of the user's unknown.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, or object with the Equation protocol
    point : array, optional
        A point of the user's unknown (a control for control problems); the problem's own start by default.
    iterate : array, optional
        The kernel's iterate that led to `point`, used where it fits.

    Attributes
    ----------
    equation, solver
        As `ssn.solve` would use them; composite problems always by their natural residual.
    x : array
        The iterate.
    reference : float
        The size that relative perturbations refer to: the norm of the iterate, or where that is zero the size of
        the target, of the residual, or one, whichever comes first.
    note : str
        Which equation is looked at, and in which norm.
    """

    def __init__(
        self, problem: Any, point: FloatArray | None = None, iterate: FloatArray | None = None
    ) -> None:
        self.problem = problem
        self.equation: Any
        self.solver: Any
        if isinstance(problem, SumProblem):
            self._several_terms(problem, point, iterate)
        elif isinstance(problem, ControlProblem) and problem.alpha == 0.0:
            weight = SUBPROBLEM * operator_size(problem)
            control = np.zeros(problem.unknowns) if point is None else point
            target = problem.reduced_target()
            self.equation = DualEquation(problem, target, weight, problem.cost, weight * control)
            self.solver = SubspaceSolver(self.equation)
            self.x = self.equation.start(control)
            self.note = (
                f"dual equation of the proximal point subproblem with weight {weight:.1e} about the point, "
                "in the observation norm"
            )
        elif isinstance(problem, NonlinearControlProblem) and not problem.state_bounded:
            u = np.zeros(problem.unknowns) if point is None else point
            self.equation = normal_equation(problem)
            self.solver = NormalSolver(self.equation)
            # from the gradient at the control, which a small step of the equation itself could only approximate
            self.x = u - problem.smooth(u)[1] / problem.alpha
            self.note = "normal map with the full reduced Hessian, in the norm of the control"
        else:
            way = "envelope" if isinstance(problem, CompositeProblem) else "auto"
            # multigrid has no exact steps to look at: the dual equation of the same problem has
            linear = "subspace" if _factorised(problem) else "auto"
            plan = prepare(problem, point, globalization=way, linear=linear)
            self.equation, self.solver, self.x = plan.equation, plan.solver, plan.start
            if isinstance(self.equation, DualEquation):
                self.note = "dual equation, in the observation norm of the dual variable"
                if iterate is not None and iterate.shape == self.x.shape:
                    self.x = iterate
            elif isinstance(self.equation, FullSpaceEquation):
                self.note = (
                    f"state and adjoint at penalty {self.equation.gamma:.3g}, in the norm of their masses"
                )
                if iterate is not None and iterate.shape == self.x.shape:
                    self.x = iterate
            elif isinstance(self.equation, NaturalEquation):
                self.note = f"{plan.choices['equation'].split(':')[0]}, in the norm of the unknown"
            else:
                self.note = "the equation itself, in the Euclidean norm"
        self.dual = isinstance(self.equation, DualEquation)
        self.reference = self._reference()

    def _several_terms(
        self, problem: SumProblem, point: FloatArray | None, iterate: FloatArray | None
    ) -> None:
        """The equation of one point of the path, with the multipliers at hand as the centre and moderate gammas.

        The solution is its root whatever gamma, so gamma is that at which arguments and multipliers of a term weigh
        alike.
        """
        plan = prepare(problem, point)
        n = problem.unknowns
        u = np.zeros(n) if point is None else point
        y = iterate[n:] if iterate is not None else np.zeros(int(problem.splits[-1]))
        x = problem.arguments(u)
        gammas = []
        for k, first in enumerate(first_gammas(problem)):
            length, price = (float(np.linalg.norm(problem.part_of(a, k))) for a in (x, y))
            balance = length / price if length > 0.0 and price > 0.0 else first
            gammas.append(float(np.clip(balance, first / SPREAD, first * SPREAD)))
        if isinstance(plan.equation, PrimalDualEquation):
            self.x = np.concatenate([u, y])
            if iterate is not None:
                y = self._inner_multipliers(problem, plan.equation.rows, gammas)
            self.equation = PrimalDualEquation(problem, plan.equation.rows, gammas, y)
            kind = "primal-dual equation, in the norm of unknown and multipliers"
        else:
            gamma = float(np.median(gammas))
            self.equation = AugmentedEquation(problem, y, 1.0 / gamma, u, 0.0)
            self.x = u
            kind = "stationarity of the augmented Lagrangian, in the norm of the unknown"
        kind_of_solver: Any = type(plan.solver)
        self.solver = kind_of_solver(self.equation)
        self.note = f"{kind}, about multipliers of the solution, at the gamma that balances each term"

    def _inner_multipliers(self, problem: SumProblem, rows: NormRows, gammas: list[float]) -> FloatArray:
        """Multipliers of the solution away from the edge of their balls where they are not unique; x moves along.

        The path projects multipliers into their balls, and where several are right it may stop on the edge of a ball,
        which is a kink of the equation. Points of the path begun with smaller multipliers lead to others.
        """
        n = problem.unknowns
        y = INWARD * self.x[n:]
        for _ in range(POINTS):
            equation = PrimalDualEquation(problem, rows, gammas, y)
            loop = run(
                equation,
                PrimalDualSolver(equation),
                DualSearch(),
                self.x,
                Limits(ROOT, POINT_STEPS, exact=True),
            )
            self.x = loop.best.x
            y = rows.into_balls(self.x[n:])
        return y

    def _reference(self) -> float:
        size = self.norm(self.x)
        if size == 0.0 and self.dual:
            size = self.equation.tracking.observations.norm(self.equation.target)
        if size == 0.0 and isinstance(self.equation, NaturalEquation):
            size = max(self.equation.magnitude, self.equation.evaluate(self.x).norm)
        return size if size > 0.0 and np.isfinite(size) else float(np.sqrt(self.x.size))

    # norms: of an iterate (for a dual equation of its first half), and of a residual

    def norm(self, x: FloatArray) -> float:
        """Norm of an iterate or of a difference of iterates."""
        if self.dual:
            return float(self.equation.tracking.observations.norm(x[: self.equation.size]))
        inner = getattr(self.equation, "inner", None)
        return float(np.linalg.norm(x)) if inner is None else float(inner.norm(x))

    def residual_norm(self, residual: FloatArray) -> float:
        """Norm of a residual, where the equation has one of its own."""
        own = getattr(self.equation, "residual_norm", None)
        return self.norm(residual) if own is None else float(own(residual))

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Evaluate the equation; overflow shows as an infinite norm, not as a warning."""
        with np.errstate(all="ignore"):
            at: Evaluation = self.equation.evaluate(x)
        return at

    def direction(self, rng: np.random.Generator, *, smooth: bool) -> FloatArray:
        """A random direction of norm one; for a dual equation the pair [q, S* q]."""
        if self.dual:
            tracking = self.equation.tracking
            q = rng.standard_normal(self.equation.size)
            if smooth:
                q = tracking.forward(rng.standard_normal(tracking.controls.size))
            q = q / max(tracking.observations.norm(q), 1e-300)
            return np.concatenate([q, tracking.adjoint(q)])
        n = self.x.size
        h = smooth_sequence(rng, n) if smooth else rng.standard_normal(n)
        return h / max(self.norm(h), 1e-300)

    def step(self, at: Evaluation) -> Direction:
        """A full Newton direction from a tight linear solve."""
        with np.errstate(all="ignore"):
            direction: Direction = self.solver.solve(at, TIGHT)
        return direction

    def solve_error(self, at: Evaluation, direction: Direction) -> float:
        """What the linear solve may have left in the step: proven for the dual operator I + S D S*/a >= I."""
        left = max(direction.relative_residual, 0.0)
        if left == 0.0 or direction.vector is None:
            return 0.0
        return left * at.norm if self.dual else 100.0 * left * self.norm(direction.vector)

    def derivative(self, at: Evaluation, h: FloatArray) -> FloatArray:
        """G(x) h, formed from its definition and not by way of the linear solver."""
        if self.dual:
            m = self.equation.size
            sloped = at.data.derivative.apply(h[m:]) / self.equation.alpha
            image: FloatArray = h[:m] + self.equation.tracking.forward(sloped)
            return image
        if isinstance(self.equation, NormalEquation):
            return self.equation.derivative(at)(h)
        if isinstance(self.equation, NaturalEquation):
            inside = h - at.data.step * product(self.equation.jacobian(at.x), h) / self.equation.weights
            return h - np.asarray(at.data.derivative.apply(inside))
        return product(self.equation.linearize(at.x).derivative, h)

    def scatter(self, x: FloatArray, rng: np.random.Generator) -> FloatArray:
        """A copy of x with every entry changed by about one rounding error."""
        if self.dual:
            m = self.equation.size
            dq = EPS * x[:m] * rng.choice([-1.0, 1.0], m)
            return x + np.concatenate([dq, self.equation.tracking.adjoint(dq)])
        return x * (1.0 + EPS * rng.choice([-1.0, 1.0], x.size))


def smooth_sequence(rng: np.random.Generator, n: int) -> FloatArray:
    """A random sum of six slow cosines in the index."""
    t = (np.arange(n) + 0.5) / n
    return sum((rng.standard_normal() * np.cos(np.pi * k * t) for k in range(6)), np.zeros(n))
