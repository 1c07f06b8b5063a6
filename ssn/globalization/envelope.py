"""Search on the forward-backward envelope: the safe net for composite problems."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from ..protocols import Direction, Evaluation, StepOutcome


@dataclass(frozen=True)
class EnvelopeSearch:
    """Move from the proximal gradient point towards the Newton point until the envelope falls.

    Trial points are (1 - t) z + t (x + d), z the proximal gradient step from x; the envelope at z is below that
    at x by a multiple of ||x - z||^2 whenever the step is below 1/L, so some t > 0 serves and t = 0 always does.
    A full Newton step that cuts the residual norm to `contraction` of the smallest seen is taken without that test.

    Where none of the lengths 1, 1/2, ... serves, `safe_steps` proximal gradient steps are taken before the next Newton
    system.

    Source: A. Themelis, L. Stella and P. Patrinos, SIAM J. Optim. 28 (2018) 2274-2303 (from memory).
    """

    sigma: float = 1e-2
    contraction: float = 0.5
    max_halvings: int = 3
    safe_steps: int = 20
    name: str = "envelope"

    def advance(self, equation: Any, at: Evaluation, direction: Direction) -> StepOutcome:
        """Return the first trial that lowers the envelope enough; the proximal gradient point if none does."""
        at = equation.shrink_step(at)  # the envelope is a merit function for steps below 1/L only
        safe = equation.proximal_gradient_point(at)
        target = equation.envelope_target(at, self.sigma)
        evaluations = 0
        reason = direction.message
        if direction.vector is not None:
            newton = at.x + direction.vector
            t = 1.0
            for _ in range(self.max_halvings + 1):
                trial = equation.evaluate((1.0 - t) * safe + t * newton)
                evaluations += 1
                if trial.finite:
                    step = equation.step
                    trial = equation.shrink_step(trial)
                    if (
                        equation.step is not step
                    ):  # the curvature is larger there: judge all by the smaller step
                        at = equation.evaluate(at.x)
                        safe = equation.proximal_gradient_point(at)
                        target = equation.envelope_target(at, self.sigma)
                    quick = t == 1.0 and trial.norm <= self.contraction * at.norm and equation.is_best(trial)
                    if quick or equation.envelope(trial) <= target:
                        return StepOutcome(trial, t, evaluations, "full step" if t == 1.0 else "shortened")
                t *= 0.5
            reason = "no length along the Newton direction lowers the envelope"
        trial = equation.evaluate(safe)
        evaluations += 1
        if not trial.finite or (safe == at.x).all():
            return StepOutcome(
                None, 0.0, evaluations, "none", reason or "the proximal gradient step stands still"
            )
        for _ in range(
            self.safe_steps - 1
        ):  # cheap beside a Newton system, and out of the way of negative curvature
            trial = equation.shrink_step(trial)
            further = equation.evaluate(equation.proximal_gradient_point(trial))
            evaluations += 1
            if not further.finite or (further.x == trial.x).all():
                break
            trial = further
        return StepOutcome(trial, 0.0, evaluations, "proximal gradient", reason)

    def tightened(self) -> None:
        """None: the envelope falls strictly."""
        return None
