"""Wrong variants of problems, kernels and claims: each is one mistake that somebody makes some day.

A mutant has a right twin, whose evidence holds, and a way to the evidence about the wrong variant.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

import ssn
from ssn.evidence import Assessment, assess
from ssn.linear import ReducedSolver, SubspaceSolver
from tests.evidence import cases

Patch = tuple[Any, str, Any]


@dataclass(frozen=True)
class Mutant:
    """One mistake.

    Attributes
    ----------
    name : str
    twin : callable
        Builds the right problem.
    evidence : callable
        Assesses the wrong variant.
    patches : tuple of (object, attribute, replacement)
        Made for the time of the assessment.
    known : callable, optional
        Outside values, given to twin and mutant.
    """

    name: str
    twin: Callable[[], Any]
    evidence: Callable[[], Assessment]
    patches: tuple[Patch, ...] = ()
    known: Callable[[Any, ssn.Solution], Any] | None = None


def _derivative(change: Callable) -> Callable[[], Assessment]:
    return lambda: assess(cases.kinked(change=change))


# derivatives of equations and maps


def _scaled(derivative):
    return lambda x: 1.02 * derivative(x)


def _negative(derivative):
    return lambda x: -derivative(x)


def _elsewhere(derivative):
    return lambda x: derivative(1.3 * x)


def _start_only(derivative):
    return lambda x: derivative(np.full(x.size, 3.0))


def _transposed(derivative):
    def wrong(x):
        matrix = derivative(x)
        matrix[0, 1] += 0.2
        return matrix

    return wrong


# costs


class OnePieceSwapped(ssn.SparseCost):
    """The derivative of one component is that of another piece."""

    def prox_derivative(self, v, step):
        diagonal = super().prox_derivative(v, step).diagonal.copy()
        sloped = np.flatnonzero(diagonal)
        diagonal[sloped[sloped.size // 2]] = 0.0
        return ssn.costs.DiagonalDerivative(diagonal)


class OneLabelSwapped(ssn.SparseCost):
    """The derivative is right, the label of one component is not: active sets are reported wrongly."""

    def pieces(self, v, step):
        right = super().pieces(v, step)
        labels = right["control"].copy()
        where = np.flatnonzero(labels == 3)
        if where.size:
            labels[where[0]] = 2
        return ssn.Pieces({"control": labels}, right.legend)


class ProxOfAnotherWeight(ssn.SparseCost):
    """The proximal map has nine tenths of the weight; its derivative belongs to it."""

    def prox(self, v, step):
        return super().prox(v, 0.9 * step)

    def prox_derivative(self, v, step):
        return super().prox_derivative(v, 0.9 * step)

    def pieces(self, v, step):
        return super().pieces(v, 0.9 * step)


class ProxOfTighterBounds(ssn.SparseCost):
    """The proximal map clips at nine tenths of the bounds."""

    def _tight(self):
        return ssn.SparseCost(self.beta, 0.9 * self.lower, 0.9 * self.upper)

    def prox(self, v, step):
        return self._tight().prox(v, step)

    def prox_derivative(self, v, step):
        return self._tight().prox_derivative(v, step)

    def pieces(self, v, step):
        return self._tight().pieces(v, step)


# problems


class AdjointWithoutMass(ssn.ControlProblem):
    """The gradient is the vector of partial derivatives, not its Riesz representative."""

    def pull_back(self, p):
        return super().pull_back(p) * self.weights * 100.0


class OffsetOfWrongSign(ssn.ControlProblem):
    """The source enters with the wrong sign: all methods solve the same wrong problem."""

    def offset(self):
        return -super().offset()


class SmallCertificate(ssn.ControlProblem):
    """The bound lacks its factor 1 / sqrt(alpha)."""

    def certify(self, difference, reference, gradient_error, moved=0.0):
        right = super().certify(difference, reference, gradient_error, moved)
        small = float(np.sqrt(self.alpha))
        return replace(right, bound=small * right.bound, relative=small * right.relative)


class SmallGap(ssn.ControlProblem):
    """The gap leaves out nine tenths of what it is."""

    def duality_gap(self, u, misfit, p):
        right = super().duality_gap(u, misfit, p)
        return replace(right, value=0.1 * right.value)


class OverstatedConvexity(ssn.CompositeProblem):
    """Claims the mean eigenvalue for the smallest one."""

    @property
    def strong_convexity(self):
        return float(np.trace(self.derivative(np.zeros(self.unknowns)))) / self.unknowns


class AdjointSolveWithoutTranspose(ssn.SteadyState):
    """Solves E p = r where E' p = r is asked for."""

    def adjoint_solve(self, rhs):
        return self.solve(rhs)


class InexactSolve(ssn.SteadyState):
    """Stops its state solves early."""

    def solve(self, rhs):
        y = super().solve(rhs)
        return y + 1e-6 * np.abs(y).max() * np.cos(np.arange(y.size))


# kernels and claims


_right_solve = ReducedSolver.solve


def _half(self, at, forcing):
    """Half of the Newton direction."""
    right = _right_solve(self, at, forcing)
    return replace(right, vector=None if right.vector is None else 0.5 * right.vector)


def _without_coupling(self, at, forcing):
    """The dual step without its S D S* term: a gradient step."""
    m = self.equation.size
    vector = np.concatenate([-at.residual, -at.data.adjoint_residual])
    assert vector.size > m
    return ssn.protocols.Direction(vector, 0.0, 0)


def _halved_run() -> Assessment:
    problem = cases.control()
    return assess(problem, solution=ssn.solve(problem, globalization=cases.AlwaysHalved(), max_steps=300))


def _claims(
    change: Callable[[ssn.Solution], ssn.Solution], make: Callable = cases.control
) -> Callable[[], Assessment]:
    def evidence():
        problem = make()
        return assess(problem, solution=change(ssn.solve(problem)))

    return evidence


def _unscaled_residual() -> Assessment:
    """Stops on the residual of the optimality system, in which alpha hides the error of the control."""
    problem = cases.control(alpha=1e-6)
    early = ssn.solve(problem, tolerance=1e-2)
    claimed = replace(early, converged=True, outcome=ssn.Outcome.CONVERGED, tolerance=1e-9)
    return assess(problem, solution=claimed)


def _known_state(problem, solution):
    """E y = B u + f with the f that was meant."""
    f = 2.0 * problem.weights
    load = problem.control_operator @ solution.x + f
    left = float(np.abs(load - problem.state.matrix @ solution.state).max() / np.abs(load).max())
    return [{
        "what": "residual of the state equation as it was meant", "expected": 0.0, "computed": left,
        "tolerance": 1e-10, "source": "definition of the problem", "holds": left <= 1e-10,
    }]  # fmt: skip


def _with_source(kind: type = ssn.ControlProblem) -> ssn.ControlProblem:
    return cases.control(kind=kind, source=2.0)


def _drifting(state: type = ssn.SteadyState) -> ssn.ControlProblem:
    return cases.control(state=state, convection=3.0)


def _easy() -> ssn.ControlProblem:
    return cases.control(alpha=1e-2)


def _bang(kind: type = ssn.ControlProblem) -> ssn.ControlProblem:
    return cases.control(alpha=0.0, kind=kind)


MUTANTS = (
    Mutant("derivative scaled", cases.kinked, _derivative(_scaled)),
    Mutant("derivative of wrong sign", cases.kinked, _derivative(_negative)),
    Mutant("derivative at another point", cases.kinked, _derivative(_elsewhere)),
    Mutant("derivative of the start only", cases.kinked, _derivative(_start_only)),
    Mutant("one entry of the derivative", cases.kinked, _derivative(_transposed)),
    Mutant(
        "map derivative with a lost factor", cases.complementarity, lambda: assess(cases.complementarity(wrong=1.0))
    ),
    Mutant("Hessian without its second-order term", cases.curved, lambda: assess(cases.curved(gauss_newton=True))),
    Mutant("Hessian not symmetric", cases.curved, lambda: assess(cases.curved(skew=0.05))),
    Mutant("gradient of another function", cases.curved, lambda: assess(cases.curved(lost=0.05))),
    Mutant("one piece with another derivative", cases.control, lambda: assess(cases.control(cost=OnePieceSwapped))),
    Mutant("one piece mislabelled", cases.control, lambda: assess(cases.control(cost=OneLabelSwapped))),
    Mutant("prox of another weight", cases.control, lambda: assess(cases.control(cost=ProxOfAnotherWeight))),
    Mutant("prox of tighter bounds", cases.control, lambda: assess(cases.control(cost=ProxOfTighterBounds))),
    Mutant("adjoint without mass", cases.control, lambda: assess(cases.control(kind=AdjointWithoutMass))),
    Mutant(
        "adjoint solve without transpose", _drifting, lambda: assess(_drifting(AdjointSolveWithoutTranspose))
    ),
    Mutant("inexact state solve", cases.control, lambda: assess(cases.control(state=InexactSolve))),
    Mutant(
        "reference that shares the error", _with_source,
        lambda: assess(_with_source(OffsetOfWrongSign), known=_known_state), known=_known_state,
    ),
    Mutant("certificate too small", cases.control, lambda: assess(cases.control(kind=SmallCertificate))),
    Mutant("gap too small", _bang, lambda: assess(_bang(SmallGap))),
    Mutant("another point returned, by its objective", _bang, _claims(lambda s: replace(s, x=0.9 * s.x), _bang)),
    Mutant("convexity overstated", cases.least_squares, lambda: assess(cases.least_squares(kind=OverstatedConvexity))),
    Mutant("steps always halved", cases.control, _halved_run),
    Mutant("unscaled residual", lambda: cases.control(alpha=1e-6), _unscaled_residual),
    Mutant("another point returned", cases.control, _claims(lambda s: replace(s, x=1.001 * s.x))),
    Mutant(
        "linear solver that returns half", cases.obstacle, lambda: assess(cases.obstacle()),
        ((ReducedSolver, "solve", _half),),
    ),
    Mutant(
        "linear solver without the coupling", _easy, lambda: assess(_easy()),
        ((SubspaceSolver, "solve", _without_coupling),),
    ),
)  # fmt: skip
