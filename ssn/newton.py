"""The Newton loop: evaluate, solve, globalise, record. The only one in ssn, and thin."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from .errors import StopSolve
from .protocols import Direction, Evaluation, FloatArray, Globalization, LinearSolver
from .records import StepRecord
from .status import Outcome


@dataclass(frozen=True)
class Limits:
    """When to stop and how accurately to solve inside.

    Attributes
    ----------
    tolerance : float
        Bound on the equation's accuracy figure.
    max_steps : int
    forcing : float
        Largest relative residual left in a Newton system; it falls with the residual norm (inexact Newton:
        R. Dembo, S. Eisenstat and T. Steihaug, SIAM J. Numer. Anal. 19 (1982) 400-408) and never asks for more
        than the tolerance needs.
    exact : bool
        Solve every Newton system tightly.
    settled : bool
        Stop, as stalled, after two steps that changed no piece and of which the second did not halve the residual: what
        is left is rounding.
    """

    tolerance: float = 1e-9
    max_steps: int = 100
    forcing: float = 0.1
    exact: bool = False
    settled: bool = False


TIGHT = 1e-12
# steps without any progress near rounding level after which a solve counts as stalled
STAGNANT_STEPS = 8


@dataclass
class LoopResult:
    """How the loop ended: the best evaluation, why, and the records."""

    best: Evaluation
    last: Evaluation
    outcome: Outcome
    message: str
    steps: list[StepRecord] = field(default_factory=list)
    start_norm: float = float("nan")
    start_accuracy: float = float("nan")


class NewtonLoop:
    """The loop, one step at a time: evaluate, check, solve, globalise, record.

    Parameters
    ----------
    equation, solver, globalization
        See protocols.
    x : array
        Start.
    limits : Limits
    first_index : int
        Number of the first step, where the loop continues another.
    stage : str
        Name of the part of a path, for the records.
    """

    def __init__(
        self,
        equation: Any,
        solver: LinearSolver,
        globalization: Globalization,
        x: FloatArray,
        limits: Limits,
        *,
        first_index: int = 1,
        stage: str = "",
    ) -> None:
        self.equation, self.solver, self.globalization = equation, solver, globalization
        self.limits, self.stage = limits, stage
        self.first_index = self.index = first_index
        self.at: Evaluation = equation.evaluate(x)
        at = self.at
        self.result = LoopResult(
            at, at, Outcome.STEP_LIMIT, "", start_norm=at.norm, start_accuracy=at.accuracy
        )
        self._seen: dict[bytes, list[tuple[int, float]]] = {}
        self._top_norm = at.norm
        self._repeated: int | None = None
        self._complete = getattr(
            equation, "complete", None
        )  # for evaluations that bring no pieces by themselves

    def finished(self) -> bool:
        """Whether a stop rule holds at the current point; outcome and message then stand in `result`."""
        at, result = self.at, self.result
        if not at.finite:
            return self._end(Outcome.NOT_FINITE, "the residual at the start is NaN or infinite")
        if at.accuracy <= self.limits.tolerance:
            return self._end(Outcome.CONVERGED, "")
        if self.index - self.first_index >= self.limits.max_steps:
            return self._end(Outcome.STEP_LIMIT, f"{self.limits.max_steps} steps taken")
        if self.limits.settled and _settled(result.steps, at.accuracy):
            return self._end(Outcome.STALLED, "no piece changes and no more progress: rounding is left")
        if _stagnant(result, self._top_norm):
            return self._end(Outcome.STALLED, "no more progress: the residual is at rounding level")
        self._repeated = _recurrence(self._seen, at, self.index)
        if self._repeated is not None:
            stricter = self.globalization.tightened()
            if stricter is None and self.globalization.name == "full":
                return self._end(
                    Outcome.CYCLING,
                    f"the active sets and residual of step {self._repeated} came back at step {self.index - 1}",
                )
            if stricter is not None:
                self.globalization = stricter
                self._seen.clear()
        return False

    def _end(self, outcome: Outcome, message: str) -> bool:
        self.result.outcome, self.result.message = outcome, message
        return True

    def step(self) -> StepRecord | None:
        """Take one Newton step; None where nothing makes progress, with the outcome in `result`."""
        if self.index == self.first_index and self._complete is not None:
            self.at = self._complete(self.at)
        at, result = self.at, self.result
        forcing = _forcing(at, self._top_norm, self.limits)
        before = self.equation.work.copy()
        direction: Direction = self.solver.solve(at, forcing)
        step = self.globalization.advance(self.equation, at, direction)
        if step.at is None:
            self._end(*_why_no_step(at, direction, step.reason, self.equation))
            return None
        new = step.at if self._complete is None else self._complete(step.at)
        self._top_norm = max(self._top_norm, new.norm)
        reasons = [step.reason] if step.reason else []
        if self._repeated is not None:
            reasons.append(f"active sets of step {self._repeated} recurred: stricter search")
        record = StepRecord(
            index=self.index,
            residual_norm=new.norm,
            accuracy=new.accuracy,
            contraction=new.norm / at.norm if at.norm > 0 else 0.0,
            action=step.action,
            reason="; ".join(reasons),
            length=step.length,
            evaluations=step.evaluations,
            forcing=forcing,
            linear_residual=direction.relative_residual,
            inner_iterations=direction.inner_iterations,
            piece_changes=new.pieces.changes(at.pieces),
            pieces=new.pieces.sizes(),
            work=self.equation.work.since(before),
            stage=self.stage,
        )
        result.steps.append(record)
        self.at = result.last = new
        if new.accuracy < result.best.accuracy or not result.best.finite:
            result.best = new
        self.index += 1
        return record


def run(
    equation: Any,
    solver: LinearSolver,
    globalization: Globalization,
    x: FloatArray,
    limits: Limits,
    *,
    callback: Callable[[StepRecord], None] | None = None,
    first_index: int = 1,
    stage: str = "",
    pause: Callable[[LoopResult], bool] | None = None,
) -> LoopResult:
    """Iterate from x until a stop rule holds, or ``pause(result)`` is true after a step: then as at a step limit.

    The callback gets each `StepRecord` and may raise `StopSolve`. Ctrl-C ends with `Outcome.INTERRUPTED` and the
    best iterate; the caller turns that into an exception.
    """
    loop = NewtonLoop(equation, solver, globalization, x, limits, first_index=first_index, stage=stage)
    try:
        while not loop.finished():
            record = loop.step()
            if record is None:
                break
            if callback is not None:
                callback(record)
            if pause is not None and pause(loop.result):
                break
    except StopSolve as stop:
        loop.result.outcome, loop.result.message = Outcome.STOPPED, str(stop)
    except KeyboardInterrupt:
        loop.result.outcome = Outcome.INTERRUPTED
    return loop.result


def _stagnant(result: LoopResult, top_norm: float) -> bool:
    """Whether neither accuracy nor residual norm has improved in the last steps, near rounding level."""
    recent = result.steps[-STAGNANT_STEPS:]
    earlier = result.steps[:-STAGNANT_STEPS]
    if len(recent) < STAGNANT_STEPS or not earlier or recent[-1].residual_norm > 1e-7 * top_norm:
        return False
    return all(
        min(getattr(s, figure) for s in recent) > 0.9 * min(getattr(s, figure) for s in earlier)
        for figure in ("accuracy", "residual_norm")
    )


# accuracy from which on two steps without a change can be taken for rounding
NEARLY = 1e-3


def _settled(steps: list[StepRecord], accuracy: float) -> bool:
    """Whether the last two steps changed no piece, and the second made no progress."""
    if len(steps) < 2 or accuracy > NEARLY or steps[-1].piece_changes != 0 or steps[-2].piece_changes != 0:
        return False
    return steps[-1].contraction > 0.5 and accuracy > 0.5 * steps[-2].accuracy


def _recurrence(seen: dict[bytes, list[tuple[int, float]]], at: Evaluation, index: int) -> int | None:
    """The earlier step with these pieces and this residual norm; None if there is none."""
    if not at.pieces:
        return None
    earlier = seen.setdefault(at.pieces.digest(), [])
    found = None
    for step, norm in earlier:
        if abs(norm - at.norm) <= 1e-8 * norm:
            found = step
            break
    earlier.append((index - 1, at.norm))
    return found


def _forcing(at: Evaluation, top_norm: float, limits: Limits) -> float:
    """Relative residual for the Newton system: proportional to the residual norm, no tighter than useful."""
    if limits.exact:
        return TIGHT
    needed = 0.1 * limits.tolerance / at.accuracy if np.isfinite(at.accuracy) else 0.0
    return max(min(limits.forcing, at.norm / top_norm), min(limits.forcing, needed), TIGHT)


def _why_no_step(at: Evaluation, direction: Direction, reason: str, equation: Any) -> tuple[Outcome, str]:
    if direction.status == "singular":
        return Outcome.SINGULAR, direction.message or reason
    if "NaN" in reason:
        return Outcome.NOT_FINITE, reason
    stationary = getattr(equation, "stationary", None)
    if stationary is not None and stationary(at):
        return Outcome.NO_ROOT_NEARBY, reason
    return Outcome.STALLED, reason
