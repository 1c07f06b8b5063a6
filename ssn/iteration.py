"""The Newton loop in the hands of a host: one step at a time, for time steppers and load steps."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from .equations.complementarity import MidEquation
from .equations.coupled import CoupledEquation
from .equations.dual import DualEquation
from .equations.general import GeneralEquation
from .errors import InputError
from .finish import finish
from .newton import Limits, NewtonLoop
from .pieces import Pieces
from .prepare import Plan, prepare
from .protocols import Direction, Evaluation, FloatArray, Globalization
from .records import StepRecord
from .solution import Solution
from .status import Outcome
from .validate import count, scalar

LinearFunction = Callable[[Any, FloatArray], Any]


class Iteration:
    """Semismooth Newton steps on one problem after another of the same kind.

    Parameters
    ----------
    problem : as for `ssn.solve`
    start : array, optional
        As for `ssn.solve`.
    warm : Solution or Iteration, optional
        Where to go on from: the point of an earlier solve, and of an `Iteration` also its factors. Give either `start`
        or `warm`.
    pieces : Pieces or mapping, optional
        Active sets to begin with (complementarity problems): the first step solves the system of these pieces,
        whatever the start says. Taken from `warm` where that has them and the problem uses them.
    tolerance, max_steps, globalization : as for `ssn.solve`
        "auto" is one search without a path: a path is not a matter of single steps.
    linear : callable, optional
        The host's own linear solver, ``linear(derivative, rhs) -> d``, for objects with the Equation protocol.
    norm : callable, optional
        The host's own norm of the residual, for objects with the Equation protocol.

    Raises
    ------
    InputError
        For arguments that do not fit, or would have no effect.

    Examples
    --------
    >>> import numpy as np, ssn
    >>> problem = ssn.ComplementarityProblem(ssn.AffineMap(np.eye(2), [1.0, -1.0]))
    >>> iteration = ssn.Iteration(problem)
    >>> while not iteration.finished:
    ...     record = iteration.step()
    >>> iteration.solution().x.tolist()
    [0.0, 1.0]
    """

    def __init__(
        self,
        problem: Any,
        start: Any = None,
        *,
        warm: Solution | Iteration | None = None,
        pieces: Any = None,
        tolerance: float = 1e-9,
        max_steps: int = 100,
        globalization: str | Globalization = "auto",
        linear: LinearFunction | None = None,
        norm: Callable[[FloatArray], float] | None = None,
    ) -> None:
        if start is not None and warm is not None:
            raise InputError("give start or warm, not both")
        if globalization == "smoothing":
            raise InputError("globalization='smoothing' is a path; use ssn.solve for it")
        self._limits = Limits(
            scalar(tolerance, "tolerance", positive=True), count(max_steps, "max_steps", least=0)
        )
        self._globalization = globalization
        self._linear, self._norm = linear, norm
        self._undo: tuple[Any, ...] | None = None
        solver = None
        if isinstance(warm, Iteration):
            start, solver = warm.x, warm._plan.solver
            pieces = (
                warm.pieces if pieces is None and isinstance(warm._plan.equation, MidEquation) else pieces
            )
        elif warm is not None:
            start = warm.x
            pieces = warm.pieces if pieces is None and "contact" in warm.multipliers else pieces
        self._open(problem, start, pieces, solver)

    def _open(self, problem: Any, start: Any, pieces: Any, solver: Any) -> None:
        self._plan: Plan = prepare(problem, start, globalization=self._globalization)
        plan = self._plan
        if plan.path is not None:
            raise InputError("this problem is solved along a path of weights; use ssn.solve for it")
        if plan.multipliers is not None or plan.primal_dual is not None:
            raise InputError("several terms are solved along a path of multipliers; use ssn.solve for them")
        if self._norm is not None or self._linear is not None:
            if not isinstance(plan.equation, GeneralEquation):
                raise InputError("linear and norm are for objects with residual and linearize")
            if self._norm is not None:
                plan.equation.own_norm = self._norm
            if self._linear is not None:
                plan.solver = HostSolver(plan.equation, self._linear)
        if solver is not None and type(solver) is type(plan.solver):
            self._carry_over(solver)
        if pieces is not None:
            if not isinstance(plan.equation, MidEquation):
                raise InputError("pieces have an effect for complementarity problems only")
            given = pieces if isinstance(pieces, Pieces) else Pieces(pieces)
            plan.equation.first_pieces = given
        self._loop = NewtonLoop(plan.equation, plan.solver, plan.globalization, plan.start, self._limits)
        self._before = plan.equation.work.copy()
        self._finished: bool | None = None

    def _carry_over(self, solver: Any) -> None:
        """Keep the factors of the last problem where the linear solver can use them again."""
        plan = self._plan
        if isinstance(plan.equation, DualEquation):
            same = getattr(solver.equation.tracking, "state", None) is getattr(
                plan.equation.tracking, "state", None
            )
            if same and solver.equation.tracking is plan.equation.tracking:
                plan.solver.carry_over(solver)  # type: ignore[attr-defined]
            return
        solver.equation = plan.equation
        plan.solver = solver

    # the state of the iteration

    @property
    def x(self) -> FloatArray:
        """The current point in the user's unknown (the control, in control problems); a copy."""
        at = self._loop.at
        if isinstance(self._plan.equation, DualEquation):
            return np.array(at.data.corrected if at.data is not None else self._plan.start)
        if isinstance(self._plan.equation, CoupledEquation):
            return np.array(
                at.data.control if at.data is not None else self._plan.equation.residuals(at.x)[3]
            )
        return np.array(at.x)

    @property
    def pieces(self) -> Pieces:
        """Active sets at the current point."""
        return self._loop.at.pieces

    @property
    def residual_norm(self) -> float:
        """Residual norm at the current point."""
        return self._loop.at.norm

    @property
    def accuracy(self) -> float:
        """The figure compared with the tolerance."""
        return self._loop.at.accuracy

    @property
    def finished(self) -> bool:
        """Whether a stop rule holds at the current point; `outcome` says which."""
        if self._finished is None:
            self._finished = self._loop.finished()
        return self._finished

    @property
    def outcome(self) -> Outcome | None:
        """How the iteration ended; None while it goes on."""
        return self._loop.result.outcome if self.finished else None

    @property
    def steps(self) -> tuple[StepRecord, ...]:
        """Records of the steps taken on this problem."""
        return tuple(self._loop.result.steps)

    # what the host does

    def step(self) -> StepRecord:
        """Take one Newton step.

        Raises
        ------
        RuntimeError
            When the iteration has finished; look at `finished` first.
        """
        if self.finished:
            raise RuntimeError(f"the iteration has ended: {self._loop.result.outcome.value}")
        loop = self._loop
        self._undo = (loop.at, loop.index, loop.result.best, len(loop.result.steps))
        record = loop.step()
        if record is None:
            self._finished = True
            return StepRecord(
                loop.index,
                loop.at.norm,
                loop.at.accuracy,
                1.0,
                "none",
                loop.result.message,
                0.0,
                0,
                0.0,
                0.0,
                0,
                None,
            )
        self._finished = None
        return record

    def refuse(self) -> None:
        """Take the last step back: the point, the records and the count are those before it."""
        if self._undo is None:
            raise RuntimeError("there is no step to take back")
        loop = self._loop
        loop.at, loop.index, loop.result.best, kept = self._undo
        loop.result.last = loop.at
        del loop.result.steps[kept:]
        self._undo = None
        self._finished = None

    def move_to(self, x: Any) -> None:
        """Go on from another point of the same problem."""
        self._undo = None
        self._open(self._plan.problem, x, None, self._plan.solver)

    def change(self, problem: Any, start: Any = None) -> None:
        """Go on with another problem of the same size: the next time step, load or parameter.

        The current point is the start (or the given one), its pieces are the first ones of a complementarity problem
        where no start is given, and factors are kept as far as they serve.
        """
        self._undo = None
        keep = start is None and isinstance(self._plan.equation, MidEquation)
        self._open(
            problem, self.x if start is None else start, self.pieces if keep else None, self._plan.solver
        )

    def run(self) -> Solution:
        """Take steps until a stop rule holds, and return the solution."""
        while not self.finished:
            self.step()
        return self.solution()

    def solution(self) -> Solution:
        """Return the current state as a `Solution`, its accuracy computed afresh."""
        if not self.finished:
            self._loop.result.outcome, self._loop.result.message = (
                Outcome.STOPPED,
                "the host asked for the state",
            )
        return finish(self._plan, self._loop.result, self._limits, self._before)


class HostSolver:
    """The host's linear solver as one of ours; its residual is computed, not believed."""

    name = "host"

    def __init__(self, equation: GeneralEquation, function: LinearFunction) -> None:
        self.equation, self._function = equation, function

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d from the host's function."""
        derivative = self.equation.linearize(at.x).derivative
        self.equation.work.linear_solves += 1
        d = np.asarray(self._function(derivative, -at.residual), dtype=np.float64)
        if d.shape != at.x.shape:
            raise InputError(f"linear returned shape {d.shape}, expected {at.x.shape}")
        if not np.isfinite(d).all():
            return Direction(None, np.inf, 0, "singular", "the host's linear solver returned NaN or infinity")
        left = float(np.linalg.norm(derivative @ d + at.residual) / np.linalg.norm(at.residual))
        return Direction(d, left, 0, "solved" if left <= max(forcing, 1e-6) else "inaccurate")
