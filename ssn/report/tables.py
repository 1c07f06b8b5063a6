"""Tables for a terminal."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from rich import box
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from ..evidence import Assessment
from ..solution import Solution
from .entry import Entry
from .numbers import counted, objective, plainly, seconds, small, whole
from .words import FAILS, HOLDS, UNDECIDED, Sentence, assessment_sentences, solution_sentences

STYLES = {HOLDS: "green", FAILS: "bold red", UNDECIDED: "yellow"}
METHOD_COLUMNS = (
    "method", "outcome", "objective", "accuracy", "steps", "state solves", "products", "seconds", "distance", "certified"
)  # fmt: skip


def comparison(entry: Entry) -> RenderableType:
    """One assessed problem: methods, verdict in words, known values, the file's own summary."""
    assessment = entry.assessment
    parts: list[RenderableType] = [_title(entry.heading, entry.setting), _methods(assessment)]
    notes = [f"{m.name}: {m.note}" for m in assessment.methods if m.note]
    parts += [Text(note, style="dim") for note in [*notes, *entry.remarks]]
    parts.append(Text())
    parts.append(_verdict(assessment_sentences(assessment)))
    if assessment.known:
        parts += [Text(), _known(assessment)]
    if entry.summary:
        parts += [Text(), pairs_table(entry.summary)]
    return Group(*parts)


def overview_table(entries: Sequence[Entry], errors: Sequence[tuple[str, str]] = ()) -> Table:
    """One line a problem and size."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in ("problem", "steps", "accuracy", "certified", "agreement", "rate", "known", "conclusion"):
        table.add_column(column, justify="right" if column in ("steps", "accuracy", "certified") else "left")
    for entry in entries:
        table.add_row(*overview_row(entry))
    for name, message in errors:
        table.add_row(Text(name), *[""] * 6, Text(f"not run: {message}", style=STYLES[FAILS]))
    return table


def overview_row(entry: Entry) -> list[Text]:
    """The figures of one problem that fit in a line."""
    a = entry.assessment
    held = sum(k.holds for k in a.known)
    rate = a.rate.verdict + (f" {a.rate.order:.2f}" if a.rate.order is not None else "")
    certificate = a.solution.certificate
    return [
        Text(entry.heading),
        Text(whole(len(a.solution.steps))),
        Text(small(a.solution.accuracy)),
        Text(small(None if certificate is None else certificate.relative)),
        Text(a.agreement, style=STYLES.get(a.agreement, "")),
        Text(rate),
        Text(f"{held} of {len(a.known)}" if a.known else "-"),
        Text("holds", style=STYLES[HOLDS]) if a.holds else Text("; ".join(a.failures()), style=STYLES[FAILS]),
    ]


def history_table(solution: Solution) -> Table:
    """The steps of a solve, one line each."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in ("step", "residual", "accuracy", "contraction", "length", "inner", "changed"):
        table.add_column(column, justify="right")
    table.add_column("what was done")
    table.add_row("0", small(solution.start_norm))
    for s in solution.steps:
        done = ", ".join(filter(None, (s.stage, s.action, s.reason)))
        table.add_row(
            str(s.index), small(s.residual_norm), small(s.accuracy), f"{s.contraction:.2g}", f"{s.length:.3g}",
            str(s.inner_iterations), whole(s.piece_changes), Text(done),
        )  # fmt: skip
    return table


def solution_summary(heading: str, setting: str, solution: Solution) -> RenderableType:
    """A solve: its steps, and what they achieved in words."""
    sentences = solution_sentences(solution)
    if solution.choices:
        chosen = "; ".join(f"{what}: {why}" for what, why in solution.choices.items())
        sentences.append(Sentence("Method", chosen + "."))
    return Group(_title(heading, setting), history_table(solution), _verdict(sentences))


def pairs_table(pairs: Iterable[tuple[str, str]]) -> Table:
    """What a problem file says about its solution."""
    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(style="bold")
    table.add_column()
    for what, value in pairs:
        table.add_row(Text(str(what)), Text(str(value)))
    return table


def catalogue_table(rows: Iterable[tuple[str, str, str, str]]) -> Table:
    """Problem files: path, what, parameters, meshes."""
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in ("file", "what", "parameters", "meshes"):
        table.add_column(column, overflow="fold")
    for row in rows:
        table.add_row(*map(Text, row))
    return table


def _title(heading: str, setting: str) -> Text:
    return Text.assemble((heading, "bold"), "  ", (setting, "dim"))


def method_row(method: Any) -> list[str]:
    """The cells of one method, as text."""
    certificate = method.certificate
    return [
        method.name, method.outcome, objective(method.objective), small(method.accuracy), whole(method.steps),
        whole(method.state_solves), whole(method.operator_products), seconds(method.seconds), small(method.distance),
        small(None if certificate is None else certificate.get("relative")),
    ]  # fmt: skip


def _methods(assessment: Assessment) -> Table:
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for index, column in enumerate(METHOD_COLUMNS):
        table.add_column(column, justify="left" if index < 2 else "right")
    for method in assessment.methods:
        cells = [Text(cell) for cell in method_row(method)]
        cells[1].style = STYLES[HOLDS] if method.converged else STYLES[UNDECIDED]
        table.add_row(*cells)
    return table


def _verdict(sentences: Sequence[Sentence]) -> Table:
    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(no_wrap=True, style="bold")
    table.add_column(ratio=1)
    for sentence in sentences:
        style = STYLES.get(sentence.status, "")
        table.add_row(
            Text(sentence.topic), Text(sentence.text, style="" if sentence.status == HOLDS else style)
        )
    return table


def _known(assessment: Assessment) -> Table:
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in ("known value", "expected", "computed", "tolerance", "holds", "source"):
        table.add_column(
            column, justify="right" if column in ("expected", "computed", "tolerance") else "left"
        )
    for k in assessment.known:
        holds = Text("yes", style=STYLES[HOLDS]) if k.holds else Text("no", style=STYLES[FAILS])
        row = [plainly(k.expected), plainly(k.computed), plainly(k.tolerance)]
        table.add_row(Text(k.what), *map(Text, row), holds, Text(k.source))
    return table


def conclusion(entries: Sequence[Entry], errors: Sequence[tuple[str, str]]) -> Text:
    """The last line of a comparison."""
    weak = [entry.heading for entry in entries if not entry.assessment.holds]
    parts = []
    if entries and not weak:
        parts.append((f"All evidence holds ({counted(len(entries), 'problem')}).", STYLES[HOLDS]))
    elif weak:
        parts.append((f"Evidence does not hold for {', '.join(weak)}.", STYLES[FAILS]))
    if errors:
        parts.append((f" {counted(len(errors), 'problem')} not run.", STYLES[FAILS]))
    return Text.assemble(*parts)
