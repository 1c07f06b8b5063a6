"""How a solve can end. Every member explains itself and says what to try."""

from __future__ import annotations

from enum import Enum


class Outcome(Enum):
    """Why a solve ended; `Outcome.X.explanation` is one sentence, `Outcome.X.advice` another."""

    CONVERGED = "converged"
    STEP_LIMIT = "step limit"
    STALLED = "stalled"
    CYCLING = "cycling"
    SINGULAR = "singular"
    NOT_FINITE = "not finite"
    NO_ROOT_NEARBY = "no root nearby"
    INFEASIBLE = "infeasible"
    UNBOUNDED = "unbounded"
    SADDLE_POINT = "saddle point"
    NO_STATE = "no state"
    INACCURATE = "inaccurate"
    STOPPED = "stopped"
    INTERRUPTED = "interrupted"

    @property
    def explanation(self) -> str:
        """What happened."""
        return _TEXTS[self][0]

    @property
    def advice(self) -> str:
        """What to try next."""
        return _TEXTS[self][1]


_TEXTS: dict[Outcome, tuple[str, str]] = {
    Outcome.CONVERGED: (
        "The residual, computed afresh at the returned point, is within the tolerance.",
        "Nothing; look at the certificate and the margins to judge how sure the answer is.",
    ),
    Outcome.STEP_LIMIT: (
        "The step limit was reached while the iteration was still making progress.",
        "Raise max_steps, start from the returned point, or follow a path in a parameter.",
    ),
    Outcome.STALLED: (
        "Neither the Newton direction nor the fallback makes progress, and the tolerance is not met.",
        "If the residual is at rounding level, scale the unknowns or loosen the tolerance; "
        "otherwise check the derivative with ssn.evidence.check_derivative.",
    ),
    Outcome.CYCLING: (
        "The same active sets and residual came back: plain full steps would go round for ever.",
        "Use globalization='auto', or a better start from a coarser mesh or a larger regularisation.",
    ),
    Outcome.SINGULAR: (
        "The Newton system is singular at the returned point and no fallback direction makes progress.",
        "Check boundary conditions and constraints for missing or redundant rows; add a regularising term.",
    ),
    Outcome.NOT_FINITE: (
        "The residual or its derivative is NaN or infinite at the returned point or at every trial point.",
        "Check the model there (logarithms, roots, divisions) and the start; add bounds that keep it in range.",
    ),
    Outcome.NO_ROOT_NEARBY: (
        "The residual norm has a stationary point here that is not a root.",
        "The system may have no solution; otherwise start elsewhere or follow a path in a parameter.",
    ),
    Outcome.INFEASIBLE: (
        "The constraints exclude each other.",
        "Look at the named bounds or sets and relax one of them.",
    ),
    Outcome.UNBOUNDED: (
        "The objective falls without bound along the iterates.",
        "Add a bound, or a positive quadratic weight.",
    ),
    Outcome.SADDLE_POINT: (
        "The first-order conditions hold at the returned point, but the objective falls from it along a direction of "
        "negative curvature.",
        "Start from another point; the problem is not convex.",
    ),
    Outcome.NO_STATE: (
        "The nonlinear state equation was not solved for the control at which the solve began.",
        "Start from a control with a known state, give the state model a better start, or check its derivative with "
        "ssn.evidence.check_derivative.",
    ),
    Outcome.INACCURATE: (
        "The iteration met its tolerance, but an independent evaluation at the returned point did not.",
        "The linear solves lose too many digits: use a direct solver, tighten inner tolerances, rescale.",
    ),
    Outcome.STOPPED: (
        "A callback asked the solve to stop.",
        "The best iterate so far is returned; start from it to go on.",
    ),
    Outcome.INTERRUPTED: (
        "The solve was interrupted from the keyboard.",
        "The best iterate so far is attached; start from it to go on.",
    ),
}
