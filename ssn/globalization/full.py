"""Plain full Newton steps."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from ..protocols import Direction, Evaluation, StepOutcome


@dataclass(frozen=True)
class FullStep:
    """Take every Newton step in full. Fast near a solution, known to cycle from afar."""

    name: str = "full"

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Evaluate x + d and take it, whatever the residual."""
        if direction.vector is None:
            return StepOutcome(None, 0.0, 0, "none", "no Newton direction")
        trial = equation.evaluate(at.x + direction.vector)
        if not trial.finite:
            return StepOutcome(None, 0.0, 1, "none", "the full step leads to NaN or infinity")
        return StepOutcome(trial, 1.0, 1, "full step")

    def tightened(self) -> None:
        """None: there is nothing stricter of this kind."""
        return None
