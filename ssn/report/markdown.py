"""The overview of a verification as a Markdown table, written into a document between two marks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

from ..errors import InputError
from ..evidence import Assessment, KnownValue
from ..evidence.own_methods import FILES_REFERENCE
from .numbers import seconds, small
from .verify_tables import Verified

BEGIN, END = "<!-- verified: begin -->", "<!-- verified: end -->"
HEAD = (
    "problem", "unknowns", "steps over meshes", "rate", "agreement with", "value from outside", "certified",
    "solves", "seconds", "evidence",
)  # fmt: skip


def markdown_table(verified: Sequence[Verified], errors: Sequence[tuple[str, str]] = ()) -> str:
    """One row a problem, at its default size; what could not be run has a row that says so.

    Steps in brackets are those from the mesh before, where steps from zero grow. Solves are solves with state operators
    and Newton matrices, and multigrid cycles, of the one solve; seconds are those of all evidence about the problem.
    """
    rows = [_row(one) for one in verified]
    shown = {one.verification.assessment.name for one in verified}
    rows += [
        [name, *["-"] * (len(HEAD) - 2), "not run to the end"] for name in dict(errors) if name not in shown
    ]
    lines = [HEAD, ["---"] * len(HEAD), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)


def _row(one: Verified) -> list[str]:
    v = one.verification
    a = v.assessment
    steps = (
        str(len(a.solution.steps)) if v.study is None else ", ".join(str(row.steps) for row in v.study.rows)
    )
    if v.study is not None and v.study.nested_steps:
        steps += f" [{', '.join(map(str, v.study.nested_steps))}]"
    work, certificate = a.solution.work, a.solution.certificate
    order = f" {a.rate.order:.1f}" if a.rate.verdict == "superlinear" and a.rate.order else ""
    return [
        a.name.replace("_", " "),
        f"{a.unknowns:,}",
        steps,
        a.rate.verdict + order,
        _reference(a),
        _outside(a.known),
        small(None if certificate is None else certificate.relative),
        str(work.state_solves + work.linear_solves + work.multigrid_cycles),
        seconds(v.seconds),
        "holds" if v.holds else f"**not: {', '.join(v.weak_points())}**",
    ]


def _reference(a: Assessment) -> str:
    """The problem's own reference or else the method nearest to ours, its distance, and what is asked."""
    others = [m for m in a.methods[1:] if math.isfinite(m.distance)]
    own = [m for m in others if m.name == FILES_REFERENCE]
    if not others:
        return a.agreement
    chosen = own[0] if own else min(others, key=lambda m: m.distance)
    verdict = "" if a.agreement == "holds" else f"{a.agreement}: "
    return f"{verdict}{chosen.name} {chosen.distance:.0e} ({a.agreement_tolerance:.0e})"


def _outside(known: Sequence[KnownValue]) -> str:
    """A value and how many there are: one that does not hold, else the first that is not zero, else the first."""
    if not known:
        return "-"
    failing = [value for value in known if not value.holds]
    figures = [value for value in known if value.expected not in (0, 0.0)]
    first = [*failing, *figures, *known][0]
    held = sum(value.holds for value in known)
    text = f"{first.what}: {_short(first.computed)} for {_short(first.expected)} ({held} of {len(known)})"
    return text.replace("|", "\\|")


def _short(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def write_markdown(path: Path, table: str) -> None:
    """Put the table between the marks of a document, or into a new file.

    Raises
    ------
    InputError
        Where the document has no such marks, or cannot be written.
    """
    try:
        text = path.read_text() if path.exists() else f"{BEGIN}\n{END}\n"
        if BEGIN not in text or END not in text.partition(BEGIN)[2]:
            raise InputError(
                f"--markdown {path}: the document has no lines {BEGIN} and {END} to write between"
            )
        before, _, rest = text.partition(BEGIN)
        after = rest.partition(END)[2]
        path.write_text(f"{before}{BEGIN}\n\n{table}\n\n{END}{after}")
    except OSError as error:
        raise InputError(f"--markdown {path}: {error.strerror}") from error
