"""Search along a dual Newton direction: exact where the full step does not serve, at no cost in solves."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from ..protocols import Direction, Evaluation, StepOutcome


@dataclass(frozen=True)
class DualSearch:
    """Minimise the convex dual function along the direction.

    The full step is taken when the slope there has fallen to `sufficient` of the slope at zero; otherwise the
    zero of the slope is bracketed and found by a safeguarded Newton iteration in one variable.

    Parameters
    ----------
    sufficient : float
        Fraction of the initial slope at which a step length is taken.
    max_evaluations : int
        Slopes evaluated at most.
    """

    sufficient: float = 0.1
    max_evaluations: int = 60
    name: str = "dual"

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Search along the direction and evaluate the equation once, at the point found."""
        if direction.vector is None:
            return StepOutcome(None, 0.0, 0, "none", direction.message or "no Newton direction")
        slope = equation.merit_line(at, direction.vector)
        start, _, noise = slope(0.0)
        if abs(start) <= noise:  # the slope has no digit left to search by
            trial = equation.evaluate(at.x + direction.vector)
            if trial.finite and trial.norm < at.norm:
                return StepOutcome(trial, 1.0, 1, "full step", "slope at rounding level")
            return StepOutcome(
                None, 0.0, 1, "none", "rounding level reached: neither slope nor residual falls"
            )
        if not start < 0.0:
            return StepOutcome(None, 0.0, 1, "none", "the direction does not descend")
        low, high = 0.0, None
        t, evaluations = 1.0, 1
        action = "full step"
        while True:
            value, curvature, noise = slope(t)
            evaluations += 1
            if abs(value) <= max(self.sufficient * abs(start), noise) or evaluations >= self.max_evaluations:
                break
            action = "exact search"
            if value > 0.0:
                high = t
            else:
                low = t
            proposal = t - value / curvature if curvature > 0.0 else t
            if high is None:
                t = proposal if low < proposal <= 8.0 * t else 2.0 * t
            else:
                t = proposal if low < proposal < high else 0.5 * (low + high)
        trial = equation.evaluate(at.x + t * direction.vector)
        if not trial.finite:
            return StepOutcome(None, 0.0, evaluations, "none", "the dual step leads to NaN or infinity")
        return StepOutcome(trial, t, evaluations, action)

    def tightened(self) -> None:
        """None: the search descends strictly, so active sets cannot recur for ever."""
        return None
