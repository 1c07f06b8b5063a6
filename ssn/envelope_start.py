"""Count and power costs: starts and a lower bound from the convex envelope, then Newton steps on the support.

minimise f(u) + h(u), f = 1/2 ||S u - z||^2 and h(u) = g(u) + alpha/2 ||u||^2 with g a count or power cost. With h
replaced by its convex envelope h** the problem is convex: it is solved along a proximal point path by dual steps. For
every q

    1/2 ||z||^2 - 1/2 ||q + z||^2 - h*(-S* q)  <=  f(u) + h(u)  for all u,

because h* = (h**)*: a lower bound whatever the accuracy of the path. The components that the envelope leaves undecided
are rounded at several levels, and the points of least objective are starts of Newton steps for a fixed point of the
proximal gradient map with a step just below 1/L, each of which lowers the objective.

The gap between the two is small where the supports are many mesh points wide: it belongs to the undecided components
along their edges. A support of a few points, or a price far above what a component can gain, leaves it wide.

Source: Fenchel-Rockafellar duality; the proximal map as iterative hard thresholding: T. Blumensath and M. Davies, J.
Fourier Anal. Appl. 14 (2008) 629-654; for control problems D. Wachsmuth, 2019 (all from memory). The roundings are
ours.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator

from .composite import CompositeProblem, LeastSquaresMap
from .control import ControlProblem
from .costs import ConvexEnvelope, CountCost
from .equations.dual import DualEquation, TrackingMap
from .equations.natural import NaturalEquation
from .globalization import DualSearch, EnvelopeSearch
from .linear import ReducedSolver, SubspaceSolver
from .newton import Limits, LoopResult, run
from .protocols import FloatArray
from .proximal_point import ProximalPointPath, operator_size
from .records import StepRecord
from .smooth import LeastSquares
from .status import Outcome

# part of the strong convexity of a least squares term that is moved into the envelope
MOVED = 0.99
# relative error of the terms of the bound, with room for long sums
ROUNDING = 1e-14
# accuracy of a point of the path for a weight of ||S||^2
INNER = 1e-3
# the least weight of the path, as a part of ||S||^2: below it v = (h - S* q)/weight loses its digits
SMALLEST = 1e-9
STOPS = (Outcome.STOPPED, Outcome.INTERRUPTED)


@dataclass(frozen=True)
class EnvelopeStart:
    """How the convex envelope is used.

    Attributes
    ----------
    gap : float
        The proximal point path ends where its value lies above the bound by no more than this, relative; the bound is
        valid whatever it is.
    point_steps, path_steps : int
        Dual steps at most at one point of the path, and in all.
    levels : tuple of float
        An undecided component counts as on where it has at least this part of the size that it would have.
    exchanges : int
        Up to so many undecided components are switched one by one and in pairs while the objective falls; each costs
        an application of S.
    starts : int
        Of the points of least objective so many are starts of Newton steps.
    start_steps : int
        Newton steps at most from a start that is not the best one.
    inner : int
        Conjugate gradient steps at most for a Newton system: near a poor start it need not be definite.
    """

    gap: float = 1e-8
    point_steps: int = 30
    path_steps: int = 70
    levels: tuple[float, ...] = (0.25, 0.5, 0.75)
    exchanges: int = 200
    starts: int = 2
    start_steps: int = 15
    inner: int = 200


class ControlMap:
    """Gradient and Hessian of the smooth part of a control problem in the control, for the natural residual."""

    affine = True
    symmetric = True

    def __init__(self, problem: ControlProblem) -> None:
        self.problem = problem

    def value(self, u: FloatArray) -> FloatArray:
        """The Euclidean gradient; two state solves."""
        gradient: FloatArray = self.problem.weights * self.problem.smooth(u)[1]
        return gradient

    def derivative(self, u: FloatArray) -> LinearOperator:
        """The Euclidean Hessian; two state solves a product."""
        problem = self.problem

        def apply(x: FloatArray) -> FloatArray:
            x = np.ravel(x)
            return problem.weights * (problem.adjoint(problem.forward(x)) + problem.alpha * x)

        return LinearOperator((problem.unknowns, problem.unknowns), matvec=apply, dtype=np.float64)


def control_equation(problem: ControlProblem) -> NaturalEquation:
    """The natural residual in the control with a step just below 1/L."""
    return NaturalEquation(
        ControlMap(problem),
        problem.cost,
        problem.natural_step(),
        problem.weights,
        potential=problem.smooth_value,
        work=problem.work,
    )


@dataclass(frozen=True)
class Relaxation:
    """The problem with its envelope: 1/2 ||S u - z||^2 + h**(u) + constant."""

    tracking: TrackingMap
    target: FloatArray
    envelope: ConvexEnvelope
    constant: float

    def value(self, u: FloatArray, residual: FloatArray) -> float:
        """The objective of the convex problem, residual = S u - z; near the domain of the cost."""
        tracking = self.tracking
        smooth = 0.5 * tracking.observations.dot(residual, residual)
        return smooth + self.envelope.value(u, tracking.controls.vector) + self.constant

    def bound(self, q: FloatArray) -> float:
        """A number that no objective lies below, from any q; one application of S*."""
        observations, controls = self.tracking.observations, self.tracking.controls
        conjugate = self.envelope.conjugate_value(-self.tracking.adjoint(q), controls.vector)
        terms = -0.5 * observations.dot(q, q), -observations.dot(q, self.target), -conjugate, self.constant
        return float(sum(terms) - ROUNDING * sum(abs(term) for term in terms))


def has_relaxation(problem: Any) -> bool:
    """Whether it is a tracking problem with a count or power cost."""
    if not isinstance(problem.cost, CountCost):
        return False
    if isinstance(problem, ControlProblem):
        return not problem.state_bounded
    return isinstance(problem, CompositeProblem) and isinstance(problem.part, LeastSquares)


def relaxation(problem: ControlProblem | CompositeProblem) -> Relaxation:
    """The convex relaxation of a problem that has one."""
    cost = problem.cost
    assert isinstance(cost, CountCost)
    if isinstance(problem, ControlProblem):
        envelope = ConvexEnvelope(cost, problem.alpha)
        return Relaxation(problem, problem.reduced_target(), envelope, 0.0)
    assert isinstance(problem.part, LeastSquares)
    part, mu = problem.part, MOVED * problem.strong_convexity
    if mu <= 0.0:
        tracking = LeastSquaresMap(part, problem.weights, problem.work)
        return Relaxation(tracking, part.b, ConvexEnvelope(cost, 0.0), 0.0)
    # f = 1/2 ||R u - c||^2 + mu/2 ||u||^2 + constant
    hessian = part.hessian(np.zeros(problem.unknowns))
    dense = hessian.toarray() if hasattr(hessian, "toarray") else np.asarray(hessian)
    root = np.linalg.cholesky(dense - mu * np.diag(problem.weights)).T
    pulled = -part.gradient(np.zeros(problem.unknowns))
    c: FloatArray = np.asarray(np.linalg.solve(root.T, pulled), dtype=np.float64)
    constant = part.value(np.zeros(problem.unknowns)) - 0.5 * float(c @ c)
    tracking = LeastSquaresMap(LeastSquares(root, c), problem.weights, problem.work)
    return Relaxation(tracking, c, ConvexEnvelope(cost, mu), constant)


@dataclass
class EnvelopeResult:
    """The best stationary point found, and the bound."""

    loop: LoopResult
    lower_bound: float


def run_envelope_start(
    problem: Any,
    equation: NaturalEquation,
    limits: Limits,
    how: EnvelopeStart,
    callback: Callable[[StepRecord], None] | None,
) -> EnvelopeResult:
    """Solve the convex problem, round its solution, and take Newton steps from the best points.

    Parameters
    ----------
    problem : ControlProblem or CompositeProblem
        With a `relaxation`.
    equation : NaturalEquation
        Of the problem itself.
    limits : Limits
    how : EnvelopeStart
    callback : callable or None
        Gets each step.
    """
    relaxed = relaxation(problem)
    envelope, tracking = relaxed.envelope, relaxed.tracking
    path, control, bound = _convex_path(relaxed, limits, how, callback)
    points = [np.zeros(problem.unknowns), *_roundings(control, relaxed, how)]
    if envelope.alpha > 0:
        pulled = tracking.adjoint(relaxed.target - tracking.forward(control))
        points.append(problem.cost.prox(pulled / envelope.alpha, 1.0 / envelope.alpha))
    ranked = sorted(_distinct(points), key=problem.objective)[: how.starts]
    steps = path.steps
    stopped = path.outcome if path.outcome in STOPS else None
    best: LoopResult | None = None
    least = (True, np.inf)
    for number, start in reversed(list(enumerate(ranked, 1))):  # the best one last
        left = 0 if stopped else max(limits.max_steps - len(steps), 1)
        allowed = replace(limits, max_steps=left if number == 1 else min(left // 2, how.start_steps))
        loop = run(
            equation, ReducedSolver(equation, max_inner=how.inner), EnvelopeSearch(), start, allowed,
            callback=callback, first_index=len(steps) + 1, stage=f"start {number}",
        )  # fmt: skip
        steps = steps + loop.steps
        stopped = stopped or (loop.outcome if loop.outcome in STOPS else None)
        if best is None:
            best = loop
        if loop.best.data is not None:
            rank = (loop.outcome is not Outcome.CONVERGED, problem.objective(loop.best.data.moved))
            if rank < least:
                best, least = loop, rank
    assert best is not None
    if stopped:
        best.outcome, best.message = stopped, path.message
    best.steps, best.start_norm, best.start_accuracy = steps, path.start_norm, path.start_accuracy
    return EnvelopeResult(best, bound)


def _convex_path(
    relaxed: Relaxation, limits: Limits, how: EnvelopeStart, callback: Callable[[StepRecord], None] | None
) -> tuple[LoopResult, FloatArray, float]:
    """Proximal points of the convex problem until value and bound agree; loop result, control and bound."""
    tracking = relaxed.tracking
    control = np.zeros(tracking.controls.size)
    residual = tracking.forward(control) - relaxed.target
    value = relaxed.value(control, residual)
    size = operator_size(tracking)
    path = ProximalPointPath()
    weight, x, first = path.first * size, None, None
    solver: SubspaceSolver | None = None
    steps: list[StepRecord] = []
    most = min(limits.max_steps, how.path_steps)
    bound = relaxed.bound(residual)
    while True:
        dual = DualEquation(tracking, relaxed.target, weight, relaxed.envelope, weight * control)
        previous, solver = solver, SubspaceSolver(dual)
        if previous is not None:
            solver.carry_over(previous)
        inner = replace(
            limits,
            tolerance=max(INNER * weight / size, how.gap),
            max_steps=min(most - len(steps), how.point_steps),
        )
        loop = run(
            dual, solver, DualSearch(), dual.start(control) if x is None else x, inner,
            callback=callback, first_index=len(steps) + 1, stage=f"convex envelope, weight {weight:.1e}",
        )  # fmt: skip
        taken = len(loop.steps)
        first = first if first is not None else loop
        steps.extend(loop.steps)
        x = loop.last.x
        bound = max(bound, relaxed.bound(x[: dual.size]))
        if loop.last.data is not None:
            trial = loop.last.data.corrected
            trial_residual = tracking.forward(trial) - relaxed.target
            trial_value = relaxed.value(trial, trial_residual)
            bound = max(bound, relaxed.bound(trial_residual))
            if trial_value < value:  # a point that was given up may be far off
                control, residual, value = trial, trial_residual, trial_value
        near = value - bound <= how.gap * abs(value)
        if near or loop.outcome in STOPS or len(steps) >= most or weight <= SMALLEST * size:
            break
        weight *= path.next_factor(taken)
    loop.steps, loop.start_norm, loop.start_accuracy = steps, first.start_norm, first.start_accuracy
    return loop, control, bound


def _roundings(u: FloatArray, relaxed: Relaxation, how: EnvelopeStart) -> list[FloatArray]:
    """The point with its undecided components set to zero or to the size at which the envelope touches."""
    envelope = relaxed.envelope
    above, below = envelope.tangent_sizes
    size = np.broadcast_to(np.where(u > 0, above, below), u.shape)
    undecided = np.flatnonzero((np.abs(u) < size) & (u != 0) & np.isfinite(size))
    if undecided.size == 0:
        return [u]
    base = u.copy()
    base[undecided] = 0.0
    landing = np.copysign(size, u)[undecided]
    part = np.abs(u[undecided]) / np.abs(landing)
    # at the levels, and so many of the largest as keep the amount of the convex solution
    order = np.argsort(-part, kind="stable")
    mass = (relaxed.tracking.controls.apply(np.abs(_placed(undecided, landing, u.size))))[undecided]
    kept = np.cumsum(mass[order]) <= float(mass @ part) + 0.5 * mass[order]
    amount = np.zeros(undecided.size, dtype=bool)
    amount[order[kept]] = True
    switches = [*(part >= level for level in how.levels), amount]
    few = np.sort(order[: how.exchanges])
    improve = _exchange(relaxed, base, undecided[few], landing[few])
    for on in list(switches):
        better = np.zeros_like(on)
        better[few] = improve(on[few])
        switches.append(better)
    return [base + _placed(undecided, np.where(on, landing, 0.0), u.size) for on in switches]


def _placed(rows: npt.NDArray[np.intp], values: FloatArray, size: int) -> FloatArray:
    """The vector with these values in these rows, zero elsewhere."""
    point = np.zeros(size)
    point[rows] = values
    return point


def _exchange(
    relaxed: Relaxation, base: FloatArray, rows: npt.NDArray[np.intp], landing: FloatArray
) -> Callable[[npt.NDArray[np.bool_]], npt.NDArray[np.bool_]]:
    """A function that switches components on and off, one or a pair at a time, while the objective falls.

    With the columns S e_i known the objective is a quadratic function of the switches: no further products.
    """
    tracking, envelope = relaxed.tracking, relaxed.envelope
    columns = []
    for row, size in zip(rows, landing, strict=True):
        columns.append(tracking.forward(_placed(np.array([row]), np.array([size]), base.size)))
    weighted = np.stack([tracking.observations.apply(column) for column in columns])
    coupling = weighted @ np.stack(columns).T
    price = tracking.controls.apply(envelope.terms(_placed(rows, landing, base.size)))[rows]
    linear = weighted @ (tracking.forward(base) - relaxed.target) + price

    def improve(on: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
        on = on.copy()
        for _ in range(10 * rows.size):
            sign = np.where(on, -1.0, 1.0)
            change = sign * (coupling @ on + linear) + 0.5 * np.diag(coupling)
            pairs = change[:, None] + change[None, :] + np.outer(sign, sign) * coupling
            np.fill_diagonal(pairs, change)
            i, j = np.unravel_index(int(np.argmin(pairs)), pairs.shape)
            if pairs[i, j] >= -1e-13 * np.abs(linear).sum():
                break
            on[[i, j]] = ~on[[i, j]]
        return on

    return improve


def _distinct(points: list[FloatArray]) -> list[FloatArray]:
    kept: dict[bytes, FloatArray] = {}
    for point in points:
        kept.setdefault((point + 0.0).tobytes(), point)
    return list(kept.values())
