"""The verdict in words: what converged, how surely, and what the others say."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from ..evidence import Assessment
from ..solution import Solution
from .numbers import counted, small

HOLDS, FAILS, UNDECIDED, NOTE = "holds", "fails", "undecided", "note"


@dataclass(frozen=True)
class Sentence:
    """A finding.

    Attributes
    ----------
    topic : str
    text : str
    status : {"holds", "fails", "undecided", "note"}
        Whether the evidence under this topic holds; "note" says nothing either way.
    """

    topic: str
    text: str
    status: str = NOTE


# checks that have a topic of their own
TOLD_ELSEWHERE = ("solved", "agreement", "rate", "known values")


def assessment_sentences(assessment: Assessment) -> list[Sentence]:
    """Return the verdict on an assessed problem, topic by topic; the last sentence is the conclusion."""
    found = [*solution_sentences(assessment.solution), _reference(assessment), _rate(assessment)]
    known = assessment.known
    if known:
        wrong = [k.what for k in known if not k.holds]
        text = f"{len(known) - len(wrong)} of {len(known)} hold" + (
            f"; not: {'; '.join(wrong)}." if wrong else "."
        )
        found.append(Sentence("Known values", text, FAILS if wrong else HOLDS))
    failing = [check for check in assessment.checks if not check.holds]
    if failing:
        passed = len(assessment.checks) - len(failing)
        found.append(Sentence("Checks", f"{passed} of {len(assessment.checks)} hold.", FAILS))
        told = TOLD_ELSEWHERE if known else TOLD_ELSEWHERE[:3]
        found += [Sentence("", f"{c.name}: {c.detail}", FAILS) for c in failing if c.name not in told]
    elif assessment.checks:
        names = ", ".join(check.name for check in assessment.checks)
        found.append(Sentence("Checks", f"All {len(assessment.checks)} hold: {names}.", HOLDS))
    return [*found, _conclusion(assessment)]


def weak_points(assessment: Assessment) -> str:
    """The names of the checks that do not hold."""
    return ", ".join(check.name for check in assessment.checks if not check.holds)


def _conclusion(assessment: Assessment) -> Sentence:
    if assessment.holds:
        return Sentence("Conclusion", "All evidence holds.", HOLDS)
    return Sentence("Conclusion", f"Does not hold: {weak_points(assessment)}.", FAILS)


def solution_sentences(solution: Solution) -> list[Sentence]:
    """Return what a solve achieved: convergence, certainty, active sets."""
    found = [_convergence(solution), _certainty(solution)]
    sizes = _sizes(solution.pieces.sizes())
    if sizes:
        text = sizes + "."
        moves = [s.piece_changes for s in solution.steps if s.piece_changes is not None]
        if moves:
            text += f" Changes by step: {_series(moves)}."
        margin = _smallest(solution.margins)
        if margin is not None:
            text += f" The component nearest to a kink is {small(margin)} away from it."
        found.append(Sentence("Active sets", text))
    return found


def _convergence(solution: Solution) -> Sentence:
    steps = counted(len(solution.steps), "step")
    work = solution.work
    cost = f"{counted(work.state_solves, 'state solve')}, " if work.state_solves else ""
    cost += f"{counted(work.operator_products, 'operator product')}, {counted(work.factorizations, 'factorisation')}"
    reached = f"accuracy {small(solution.accuracy)}, asked for {small(solution.tolerance)}"
    if solution.converged:
        return Sentence("Convergence", f"Converged in {steps}: {reached}; {cost}.", HOLDS)
    details = f" ({solution.message})" if solution.message else ""
    text = f"Not converged after {steps}: {solution.outcome.value}{details}; {reached}. "
    return Sentence("Convergence", text + f"{solution.outcome.explanation} {solution.outcome.advice}", FAILS)


def _certainty(solution: Solution) -> Sentence:
    certificate = solution.certificate
    if certificate is None and solution.gap is not None:
        text = (
            f"No other point can have an objective lower by more than {small(max(solution.gap, 0.0))} of it "
        )
        text += "(bound by the convex envelope); how far a better point would be is not known."
        return Sentence("Certainty", text)
    if certificate is None:
        text = (
            "No distance bound: the problem is not known to be strongly convex. The accuracy is a residual."
        )
        return Sentence("Certainty", text)
    if certificate.kind == "gap":
        text = f"Objective within {small(certificate.bound)} of the least one, "
        text += f"{small(certificate.relative)} of its scale ({certificate.method}; it bounds no distance: the problem "
        text += "is not strongly convex)."
        return Sentence("Certainty", text, HOLDS if math.isfinite(certificate.relative) else FAILS)
    text = f"Within {small(certificate.relative)} of the exact discrete solution, relative to its size"
    text += f" ({small(certificate.bound)} in the unit of the unknown's norm; bound: {certificate.method})."
    return Sentence("Certainty", text, HOLDS if math.isfinite(certificate.relative) else FAILS)


def _reference(assessment: Assessment) -> Sentence:
    start = {HOLDS: "Agrees with ", FAILS: "Contradicted by ", UNDECIDED: "Undecided: "}
    text = start.get(assessment.agreement, "") + assessment.agreement_note
    return Sentence(
        "Reference", f"{text}; asked for {small(assessment.agreement_tolerance)}.", assessment.agreement
    )


def _rate(assessment: Assessment) -> Sentence:
    rate = assessment.rate
    meaning = {
        "exact": f"Exact: {_near(rate.exact_below)} one step lands on the solution, to rounding",
        "superlinear": "Superlinear",
        "linear": "Only linear: the contraction of a step does not fall with the distance",
        "none": "No contraction near the solution",
        "undecided": "Undecided: rounding leaves too little to see",
    }.get(rate.verdict, rate.verdict)
    if rate.verdict == "superlinear" and rate.order is not None:
        meaning += f", observed order {rate.order:.2f}"
    seen = sorted((float(d), float(q)) for d, q in rate.contractions)
    measured = ""
    if seen:
        (closest, q_closest), (widest, q_widest) = seen[0], seen[-1]
        measured = (
            f" One step multiplies the relative distance {widest:.0e} by {small(q_widest)}, "
            f"{closest:.0e} by {small(q_closest)}."
        )
    status = HOLDS if rate.holds else UNDECIDED if rate.verdict == "undecided" else FAILS
    return Sentence("Rate", f"{meaning}.{measured}", status)


def _near(distance: float | None) -> str:
    return "near enough" if distance is None else f"within relative distance {distance:.0e}"


def piece_sizes(sizes: Mapping[str, int]) -> str:
    """Return how many components are on each piece; empty pieces are left out."""
    return ", ".join(f"{count} {piece}" for piece, count in sizes.items() if count) or "none"


def _sizes(sizes: Mapping[str, Mapping[str, int]]) -> str:
    return "; ".join(f"{name}: {piece_sizes(of)}" for name, of in sizes.items())


def _series(values: list[int], most: int = 12) -> str:
    words = [str(v) for v in values]
    return ", ".join(words if len(words) <= most else [*words[: most - 3], "...", *words[-3:]])


def _smallest(margins: Any) -> float | None:
    if margins is None or margins.size == 0:
        return None
    value = float(margins.min())
    return value if math.isfinite(value) else None
