"""When an independent method agrees with our solution, when it contradicts it, and when it cannot tell."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from ..complementarity import ComplementarityProblem
from ..errors import InputError
from ..solution import Solution
from ..validate import scalar
from . import judge
from .check import Check
from .method_result import MethodResult
from .own_methods import FILES_REFERENCE

LOOSEST = 1e-3
STRICT = 1e-9
# accuracy from which on the point of another method counts as stationary
STATIONARY = 1e-3


def checked_tolerance(value: Any) -> float:
    """The agreement tolerance, never looser than 1e-3."""
    tolerance = scalar(value, "agreement_tolerance", positive=True)
    if tolerance > LOOSEST:
        raise InputError(f"agreement_tolerance must not be looser than {LOOSEST}, got {tolerance}")
    return tolerance


def decide(
    problem: Any, solution: Solution, others: Sequence[MethodResult], tolerance: float
) -> tuple[str, str]:
    """Return "holds", "fails" or "undecided", and why.

    One method that comes within the tolerance decides for "holds", unless another contradicts; a problem's own
    reference, where there is one, is there because the others tell less, so that it has to. A method contradicts
    by a proven bound: when the two certified balls do not meet. Without a bound it contradicts where our point is
    the less accurate of the two, by a factor of ten, and not within our own tolerance.
    """
    if not others:
        return "undecided", "no independent method has run"
    decisive = next((other.name for other in others if other.name == FILES_REFERENCE), None)
    verdicts = [(other, *_one(problem, solution, other, tolerance)) for other in others]
    for wanted in ("fails", "holds"):
        for other, verdict, why in verdicts:
            if verdict == wanted and (wanted == "fails" or decisive in (None, other.name)):
                return wanted, f"{other.name}: {why}"
    return "undecided", "; ".join(f"{other.name}: {why}" for other, _, why in verdicts)


def _one(problem: Any, solution: Solution, other: MethodResult, tolerance: float) -> tuple[str, str]:
    if other.x is None:
        return "undecided", other.note or other.outcome
    if other.distance <= tolerance:
        return "holds", f"distance {other.distance:.1e}"
    if _nonconvex(problem):
        return _by_objective(solution, other, tolerance)
    if solution.certificate is not None and solution.certificate.kind == "gap":
        return _by_gap(problem, solution, other, tolerance)
    if other.bound is not None:
        own = 0.0 if solution.certificate is None else solution.certificate.relative
        if other.bound + own < other.distance / (1.0 + 1e-6):
            bounds = f"its bound {other.bound:.1e} and our certificate {own:.1e}"
            return "fails", f"distance {other.distance:.1e}, more than {bounds} allow"
        bounds = f"its bound {other.bound:.1e} and our certificate {own:.1e} ({other.outcome})"
        return "undecided", f"distance {other.distance:.1e}, within {bounds}"
    if not other.converged:
        return "undecided", f"distance {other.distance:.1e}, it did not come closer ({other.outcome})"
    mine = judge.accuracy(problem, solution.x)
    if mine > 10.0 * solution.tolerance and other.accuracy < 0.1 * mine:
        return (
            "fails",
            f"distance {other.distance:.1e}, its accuracy is {other.accuracy:.1e} and ours {mine:.1e}",
        )
    kind = "neither is accurate"
    if mine <= 10.0 * solution.tolerance:
        kind = "the problem is not known to have one solution only"
    return (
        "undecided",
        f"distance {other.distance:.1e}, accuracies {other.accuracy:.1e} and ours {mine:.1e}: {kind}",
    )


def _by_gap(problem: Any, solution: Solution, other: MethodResult, tolerance: float) -> tuple[str, str]:
    """Without strong convexity points may differ and both be minimisers: their objectives are compared.

    The unit is what the solution gains over the point that a method begins with, or where that is nothing the
    objective itself.
    """
    ours = float(problem.objective(solution.x))
    gain = float(problem.objective(judge.start(problem, solution.x.size))) - ours
    unit = gain if 0.0 < gain < float("inf") else abs(ours)
    above = other.objective - ours
    text = f"objective {above:+.1e} from ours, {above / unit if unit > 0.0 else above:+.1e} of what the control gains"
    text += f", distance {other.distance:.1e} (the problem is not strongly convex)"
    if abs(above) <= tolerance * unit:
        return "holds", text
    return ("fails" if above < 0.0 else "undecided"), text


def _nonconvex(problem: Any) -> bool:
    statement = judge.has_objective(problem) and not isinstance(problem, ComplementarityProblem)
    return statement and not problem.convex


def _by_objective(solution: Solution, other: MethodResult, tolerance: float) -> tuple[str, str]:
    """Nonconvex problems compare objective and stationarity."""
    gap = other.objective - solution.objective
    scale = abs(other.objective) + abs(solution.objective)
    if solution.lower_bound is not None and other.objective < solution.lower_bound - STRICT * scale:
        return "fails", f"nonconvex: its objective {other.objective:.10g} lies below our lower bound"
    if not solution.accuracy <= 10.0 * solution.tolerance:
        return "undecided", f"nonconvex: our point is not stationary, accuracy {solution.accuracy:.1e}"
    if gap < -tolerance * scale:
        return (
            "undecided",
            f"nonconvex: it found a lower objective, by {-gap:.1e}; our point is stationary, not the best",
        )
    if not other.accuracy <= STATIONARY:
        return "undecided", f"nonconvex: its point is not stationary, accuracy {other.accuracy:.1e}"
    return "holds", f"nonconvex: both stationary, its objective is {gap:+.1e} from ours"


def objective_check(
    problem: Any, solution: Solution, others: Sequence[MethodResult], ours: MethodResult
) -> Check | None:
    """No other method finds an objective below ours by more than the accuracy of the solution explains."""
    known = [m for m in others if m.x is not None and m.objective == m.objective]
    if not known or not judge.has_objective(problem):
        return None
    start = judge.start(problem, solution.x.size)
    lowest = min(known, key=lambda m: m.objective)
    sizes = [
        abs(v) for v in (ours.objective, lowest.objective, problem.objective(start)) if abs(v) < float("inf")
    ]
    slack = max(STRICT, 10.0 * solution.tolerance) * max(sizes, default=0.0)
    gap = ours.objective - lowest.objective
    holds = bool(gap <= slack)
    detail = f"the lowest objective of another method ({lowest.name}) is {-gap:+.1e} from ours"
    if _nonconvex(problem) and not holds:
        return Check("objective", True, detail + ": another stationary point of a nonconvex problem")
    return Check("objective", holds, detail if holds else f"{detail}: our point is not the minimiser")
