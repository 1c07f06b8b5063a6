"""One self-contained HTML page for a comparison."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined

from ..solution import Solution
from .entry import Entry
from .numbers import small, whole
from .tables import (
    METHOD_COLUMNS,
    OVERVIEW_COLUMNS,
    conclusion,
    known_row,
    method_notes,
    method_row,
    overview_row,
)
from .words import assessment_sentences, piece_sizes


def page(
    entries: Sequence[Entry],
    environment: Mapping[str, Any],
    errors: Sequence[tuple[str, str]] = (),
    *,
    command: str = "",
) -> str:
    """Return the page as text.

    Parameters
    ----------
    entries : sequence of Entry
    environment : mapping
        From `ssn.environment.fingerprint`.
    errors : sequence of (str, str)
        File and message of what could not be run.
    command : str
        The command line that led to the page.
    """
    jinja = Environment(
        loader=FileSystemLoader(Path(__file__).parent), autoescape=True, undefined=StrictUndefined, trim_blocks=True,
        lstrip_blocks=True,
    )  # fmt: skip
    return jinja.get_template("page.html.jinja").render(
        conclusion=conclusion(entries, errors).plain,
        status="holds" if entries and not errors and all(e.assessment.holds for e in entries) else "fails",
        overview_columns=OVERVIEW_COLUMNS,
        overview=[[cell.plain for cell in overview_row(entry)] for entry in entries],
        sections=[_section(entry) for entry in entries],
        method_columns=METHOD_COLUMNS,
        errors=errors,
        environment=_environment_rows(environment),
        command=command,
    )


def _section(entry: Entry) -> dict[str, Any]:
    a = entry.assessment
    return {
        "heading": entry.heading,
        "setting": entry.setting,
        "title": entry.title,
        "caution": entry.caution,
        "description": entry.description,
        "sentences": assessment_sentences(a),
        "summary": entry.summary,
        "methods": [(m.converged, method_row(m)) for m in a.methods],
        "notes": method_notes(a),
        "known": [(k.holds, known_row(k)) for k in a.known],
        "checks": a.checks,
        "steps": _steps(a.solution),
        "choices": list(a.solution.choices.items()),
        "contractions": [(f"{float(d):.0e}", small(q)) for d, q in a.rate.contractions],
        "pictures": entry.pictures,
        "remarks": entry.remarks,
    }


def _steps(solution: Solution) -> list[list[str]]:
    rows = [["0", small(solution.start_norm), "", "", "", "", "", "", "start"]]
    for s in solution.steps:
        sizes = "; ".join(map(piece_sizes, s.pieces.values()))
        done = ", ".join(filter(None, (s.stage, s.action, s.reason)))
        rows.append(
            [str(s.index), small(s.residual_norm), small(s.accuracy), f"{s.contraction:.2g}", f"{s.length:.3g}",
             str(s.inner_iterations), whole(s.piece_changes), sizes, done]
        )  # fmt: skip
    return rows


def _environment_rows(environment: Mapping[str, Any]) -> list[tuple[str, str]]:
    rows = []
    for key, value in environment.items():
        if isinstance(value, Mapping):
            value = ", ".join(f"{k}={'unset' if v is None else v}" for k, v in value.items())
        rows.append((key.replace("_", " "), str(value)))
    return rows
