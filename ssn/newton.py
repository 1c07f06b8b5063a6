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
    """

    tolerance: float = 1e-9
    max_steps: int = 100
    forcing: float = 0.1
    exact: bool = False


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
) -> LoopResult:
    """Iterate from x until a stop rule holds.

    The callback gets each `StepRecord` and may raise `StopSolve`. Ctrl-C ends with `Outcome.INTERRUPTED` and the
    best iterate; the caller turns that into an exception.
    """
    at = equation.evaluate(x)
    result = LoopResult(at, at, Outcome.STEP_LIMIT, "", start_norm=at.norm, start_accuracy=at.accuracy)
    if not at.finite:
        result.outcome, result.message = Outcome.NOT_FINITE, "the residual at the start is NaN or infinite"
        return result
    seen: dict[bytes, list[tuple[int, float]]] = {}
    top_norm = at.norm
    index = first_index
    complete = getattr(equation, "complete", None)  # evaluations that bring no pieces by themselves
    try:
        while True:
            if at.accuracy <= limits.tolerance:
                result.outcome = Outcome.CONVERGED
                return result
            if index - first_index >= limits.max_steps:
                result.message = f"{limits.max_steps} steps taken"
                return result
            if _stagnant(result, top_norm):
                result.outcome, result.message = (
                    Outcome.STALLED,
                    "no more progress: the residual is at rounding level",
                )
                return result
            repeated = _recurrence(seen, at, index)
            if repeated is not None:
                stricter = globalization.tightened()
                if stricter is None and globalization.name == "full":
                    result.outcome = Outcome.CYCLING
                    result.message = (
                        f"the active sets and residual of step {repeated} came back at step {index - 1}"
                    )
                    return result
                if stricter is not None:
                    globalization = stricter
                    seen.clear()
            if index == first_index and complete is not None:
                at = complete(at)
            forcing = _forcing(at, top_norm, limits)
            before = equation.work.copy()
            direction: Direction = solver.solve(at, forcing)
            step = globalization.advance(equation, at, direction)
            if step.at is None:
                result.outcome, result.message = _why_no_step(at, direction, step.reason, equation)
                return result
            new = step.at if complete is None else complete(step.at)
            top_norm = max(top_norm, new.norm)
            reason = step.reason
            if repeated is not None:
                reason = (
                    reason + "; " if reason else ""
                ) + f"active sets of step {repeated} recurred: stricter search"
            record = StepRecord(
                index=index,
                residual_norm=new.norm,
                accuracy=new.accuracy,
                contraction=new.norm / at.norm if at.norm > 0 else 0.0,
                action=step.action,
                reason=reason,
                length=step.length,
                evaluations=step.evaluations,
                forcing=forcing,
                linear_residual=direction.relative_residual,
                inner_iterations=direction.inner_iterations,
                piece_changes=new.pieces.changes(at.pieces),
                pieces=new.pieces.sizes(),
                work=equation.work.since(before),
                stage=stage,
            )
            result.steps.append(record)
            at = new
            result.last = at
            if at.accuracy < result.best.accuracy or not result.best.finite:
                result.best = at
            index += 1
            if callback is not None:
                callback(record)
    except StopSolve as stop:
        result.outcome, result.message = Outcome.STOPPED, str(stop)
    except KeyboardInterrupt:
        result.outcome = Outcome.INTERRUPTED
    return result


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
