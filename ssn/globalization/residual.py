"""Residual search: backtrack until the residual norm falls, with the equation's own safe step behind it."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field, replace
from typing import Any

from ..protocols import Direction, Evaluation, StepOutcome


@dataclass(frozen=True)
class ResidualSearch:
    """Take x + t d, t = 1, 1/2, ..., once the residual norm is at most (1 - sigma t) times a reference.

    The reference is the largest of the last `memory` residual norms (1: monotone; L. Grippo, F. Lampariello and
    S. Lucidi, SIAM J. Numer. Anal. 23 (1986) 707-716, from memory). When no length serves, or there is no
    Newton direction, the equation's fallback step is taken; its own merit function decides about it.

    Parameters
    ----------
    sigma : float
        Sufficient decrease, in (0, 1).
    memory : int
        Residual norms remembered.
    max_halvings : int
        Lengths tried: 1, 1/2, ..., 2^-max_halvings.
    """

    sigma: float = 1e-4
    memory: int = 5
    max_halvings: int = 10
    name: str = "residual"
    _history: deque[float] = field(default_factory=deque, repr=False, compare=False)

    def fresh(self) -> ResidualSearch:
        """Return a copy with an empty history, for a new solve."""
        return replace(self, _history=deque(maxlen=self.memory))

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Search, then fall back; an outcome without a point says why there is none."""
        self._history.append(at.norm)
        reference = max(list(self._history)[-self.memory :])
        evaluations = 0
        finite_trial = direction.vector is None
        if direction.vector is not None:
            t = 1.0
            for _ in range(self.max_halvings + 1):
                trial = equation.evaluate(at.x + t * direction.vector)
                evaluations += 1
                finite_trial |= trial.finite
                if (
                    trial.finite
                    and trial.norm <= (1.0 - self.sigma * t) * reference
                    and not (trial.x == at.x).all()
                ):
                    return StepOutcome(trial, t, evaluations, "full step" if t == 1.0 else "shortened")
                t *= 0.5
        step = equation.fallback(at)
        reason = direction.message or "no length along the Newton direction lowers the residual"
        if step is None or (step.x == at.x).all():
            if not finite_trial:
                reason = "every trial point has a NaN or infinite residual"
            return StepOutcome(None, 0.0, evaluations, "none", reason)
        trial = equation.evaluate(step.x)
        self._history.clear()
        if not trial.finite:
            return StepOutcome(
                None, 0.0, evaluations + 1, "none", "the fallback step leads to NaN or infinity"
            )
        return StepOutcome(trial, 1.0, evaluations + 1, step.name, reason)

    def tightened(self) -> ResidualSearch | None:
        """The monotone variant."""
        return None if self.memory == 1 else replace(self, memory=1, _history=deque(maxlen=1))
