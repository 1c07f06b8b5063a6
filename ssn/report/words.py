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


def assessment_sentences(assessment: Assessment) -> list[Sentence]:
    """Return the verdict on an assessed problem, topic by topic; the last sentence is the conclusion."""
    solution = assessment.solution
    found = [*solution_sentences(solution, changes=False)]
    found += [_reference(assessment), _rate(assessment)]
    if assessment.known:
        found.append(
            _counted_evidence(
                "Known values", [k.what for k in assessment.known if not k.holds], len(assessment.known)
            )
        )
    if assessment.checks:
        failing = [f"{c.name} ({c.detail})" if c.detail else c.name for c in assessment.checks if not c.holds]
        found.append(_counted_evidence("Checks", failing, len(assessment.checks)))
    if assessment.holds:
        found.append(Sentence("Conclusion", "All evidence holds.", HOLDS))
    else:
        found.append(
            Sentence("Conclusion", "Does not hold: " + "; ".join(assessment.failures()) + ".", FAILS)
        )
    return found


def solution_sentences(solution: Solution, *, changes: bool = True) -> list[Sentence]:
    """Return what a solve achieved: convergence, certainty, active sets."""
    found = [_convergence(solution), _certainty(solution)]
    sizes = _sizes(solution.pieces.sizes())
    if sizes:
        text = sizes + "."
        moves = [s.piece_changes for s in solution.steps if s.piece_changes is not None]
        if changes and moves:
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
    if certificate is None:
        text = (
            "No distance bound: the problem is not known to be strongly convex. The accuracy is a residual."
        )
        return Sentence("Certainty", text)
    text = f"Within {small(certificate.relative)} of the exact discrete solution, relative to its size"
    text += f" ({small(certificate.bound)} in the unit of the unknown's norm; bound: {certificate.method})."
    return Sentence("Certainty", text, HOLDS if math.isfinite(certificate.relative) else FAILS)


def _reference(assessment: Assessment) -> Sentence:
    others = assessment.methods[1:]
    names = ", ".join(m.name for m in others) or "no independent method"
    note = f" {assessment.agreement_note}" if assessment.agreement_note else ""
    distances = [(m.distance, m.name) for m in others if m.distance is not None and math.isfinite(m.distance)]
    closest = f": distance {small(min(distances)[0])} ({min(distances)[1]})" if distances else ""
    asked = f", asked for {small(assessment.agreement_tolerance)}" if assessment.agreement_tolerance else ""
    start = {
        HOLDS: f"Agrees with {names}{closest}{asked}.",
        FAILS: f"Does not agree with {names}{closest}{asked}.",
        UNDECIDED: f"Undecided ({names}){closest}{asked}.",
    }.get(assessment.agreement, f"{assessment.agreement} ({names}){closest}{asked}.")
    return Sentence("Reference", start + note, assessment.agreement)


def _rate(assessment: Assessment) -> Sentence:
    rate = assessment.rate
    seen = [(float(d), float(q)) for d, q in rate.contractions]
    measured = ""
    if seen:
        (widest, q_widest), (closest, q_closest) = max(seen), min(seen)
        measured = (
            f" One step from relative distance {widest:.0e} leaves {small(q_widest)} of it, "
            f"from {closest:.0e} {small(q_closest)}."
        )
    meaning = {
        "exact": "Exact: near the solution one step lands on it, to rounding.",
        "superlinear": "Superlinear"
        + (f", observed order {rate.order:.2f}." if rate.order is not None else "."),
        "linear": "Only linear: the contraction does not fall with the distance.",
        "none": "No contraction near the solution.",
        "undecided": "Undecided: rounding leaves too little to see.",
    }.get(rate.verdict, f"{rate.verdict}.")
    status = {"exact": HOLDS, "superlinear": HOLDS, "undecided": UNDECIDED}.get(rate.verdict, FAILS)
    return Sentence("Rate", meaning + measured, status)


def _counted_evidence(topic: str, failing: list[str], total: int) -> Sentence:
    text = f"{total - len(failing)} of {total} hold"
    return Sentence(
        topic, f"{text}; not: {'; '.join(failing)}." if failing else f"{text}.", FAILS if failing else HOLDS
    )


def _sizes(sizes: Mapping[str, Mapping[str, int]]) -> str:
    return "; ".join(
        f"{name}: " + ", ".join(f"{count} {piece}" for piece, count in of.items())
        for name, of in sizes.items()
    )


def _series(values: list[int], most: int = 12) -> str:
    words = [str(v) for v in values]
    return ", ".join(words if len(words) <= most else [*words[: most - 3], "...", *words[-3:]])


def _smallest(margins: Any) -> float | None:
    if margins is None or margins.size == 0:
        return None
    value = float(margins.min())
    return value if math.isfinite(value) else None
