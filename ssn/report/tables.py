"""Tables for a terminal."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from rich.console import Console, ConsoleOptions, Group, RenderableType, RenderResult
from rich.table import Table
from rich.text import Text

from ..evidence import Assessment
from ..solution import Solution
from .entry import Entry
from .grid import figure_table, fits, label_table
from .numbers import NOTHING, certified, counted, objective, plainly, seconds, small, whole
from .words import FAILS, HOLDS, UNDECIDED, Sentence, assessment_sentences, solution_sentences, weak_points

STYLES = {HOLDS: "green", FAILS: "bold red", UNDECIDED: "yellow"}
METHOD_COLUMNS = (
    "method", "outcome", "objective", "accuracy", "steps", "state solves", "products", "seconds", "distance",
    "certified",
)  # fmt: skip
OVERVIEW_COLUMNS = ("problem", "steps", "accuracy", "certified", "agreement", "rate", "known", "conclusion")
NARROW_OVERVIEW = ("problem", "steps", "agreement", "rate", "conclusion")


def comparison(entry: Entry) -> RenderableType:
    """One assessed problem: methods, verdict in words, known values, the file's own summary."""
    assessment = entry.assessment
    parts: list[RenderableType] = [_title(entry.heading, entry.setting), Text(), Methods(assessment)]
    parts += [Text(note, style="dim") for note in [*method_notes(assessment), *entry.remarks]]
    parts += [Text(), _verdict(assessment_sentences(assessment), entry.caution)]
    if assessment.known:
        parts += [Text(), _known(assessment)]
    if entry.summary:
        parts += [Text(), pairs_table(entry.summary)]
    return Group(*parts)


class Methods:
    """The methods as rows, or as columns where the window is too narrow: as many at a time as fit, no figure is cut."""

    def __init__(self, assessment: Assessment) -> None:
        self.rows = [[Text(cell) for cell in method_row(method)] for method in assessment.methods]
        for cells, method in zip(self.rows, assessment.methods, strict=True):
            cells[1].stylize(STYLES[HOLDS] if method.converged else STYLES[UNDECIDED])

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Render one way or the other."""
        wide = figure_table(METHOD_COLUMNS, figures=METHOD_COLUMNS[2:])
        for cells in self.rows:
            wide.add_row(*cells)
        if fits(wide, console, options):
            yield wide
            return
        waiting = list(self.rows)
        while waiting:
            many = len(waiting)
            while many > 1 and not fits(self._tall(waiting[:many]), console, options):
                many -= 1
            yield self._tall(waiting[:many])
            waiting = waiting[many:]
            if waiting:
                yield Text()

    @staticmethod
    def _tall(rows: list[list[Text]]) -> Table:
        names = [cells[0].plain for cells in rows]
        table = figure_table(["", *names], figures=names)
        for index, column in enumerate(METHOD_COLUMNS[1:], 1):
            table.add_row(Text(column, style="bold"), *(cells[index] for cells in rows))
        return table


class Overview:
    """One line a problem and size; some columns are left out where the window is too narrow.

    Parameters
    ----------
    entries : sequence of Entry
    errors : sequence of (str, str)
        Problem and message of what could not be run.
    """

    def __init__(self, entries: Sequence[Entry], errors: Sequence[tuple[str, str]] = ()) -> None:
        self.rows = [overview_row(entry) for entry in entries]
        blank = [Text()] * (len(OVERVIEW_COLUMNS) - 2)
        self.rows += [[Text(name), *blank, Text("not run to the end", STYLES[FAILS])] for name, _ in errors]

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Render with the columns that fit."""
        everything = self._table(OVERVIEW_COLUMNS)
        yield everything if fits(everything, console, options) else self._table(NARROW_OVERVIEW)

    def _table(self, columns: Sequence[str]) -> Table:
        table = figure_table(columns, figures=OVERVIEW_COLUMNS[1:4])
        chosen = [OVERVIEW_COLUMNS.index(column) for column in columns]
        for row in self.rows:
            table.add_row(*(row[index] for index in chosen))
        return table


def overview_row(entry: Entry) -> list[Text]:
    """The figures of one problem that fit in a line."""
    a = entry.assessment
    held = sum(k.holds for k in a.known)
    rate = a.rate.verdict + (
        f" {a.rate.order:.2f}" if a.rate.verdict == "superlinear" and a.rate.order else ""
    )
    certificate = a.solution.certificate
    return [
        Text(entry.heading),
        Text(whole(len(a.solution.steps))),
        Text(small(a.solution.accuracy)),
        Text(NOTHING if certificate is None else certified(certificate.relative, certificate.kind)),
        Text(a.agreement, style=STYLES.get(a.agreement, "")),
        Text(rate),
        Text(f"{held} of {len(a.known)}" if a.known else "-"),
        Text("holds", STYLES[HOLDS]) if a.holds else Text(f"not: {weak_points(a)}", STYLES[FAILS]),
    ]


def history_table(solution: Solution) -> Table:
    """The steps of a solve, one line each."""
    figures = ("step", "residual", "accuracy", "contraction", "length", "inner", "changed")
    table = figure_table([*figures, "what was done"], figures)
    table.add_row("0", small(solution.start_norm))
    for s in solution.steps:
        done = ", ".join(filter(None, (s.stage, s.action, s.reason)))
        table.add_row(
            str(s.index), small(s.residual_norm), small(s.accuracy), f"{s.contraction:.2g}", f"{s.length:.3g}",
            str(s.inner_iterations), whole(s.piece_changes), Text(done),
        )  # fmt: skip
    return table


def solution_summary(heading: str, setting: str, solution: Solution, caution: str = "") -> RenderableType:
    """A solve: its steps, and what they achieved in words."""
    sentences = solution_sentences(solution)
    if solution.choices:
        chosen = "; ".join(f"{what}: {why}" for what, why in solution.choices.items())
        sentences.append(Sentence("Method", f"{chosen}."))
    steps, verdict = history_table(solution), _verdict(sentences, caution)
    return Group(_title(heading, setting), Text(), steps, Text(), verdict)


def pairs_table(pairs: Iterable[tuple[str, str]]) -> Table:
    """What a problem file says about its solution."""
    table = label_table()
    for what, value in pairs:
        table.add_row(Text(str(what)), Text(str(value)))
    return table


def catalogue_table(rows: Iterable[tuple[str, str, str, str]]) -> Table:
    """Problem files: path, what, parameters, meshes."""
    table = figure_table(("file", "what", "parameters", "meshes"), unbroken=("file", "meshes"))
    for row in rows:
        table.add_row(*map(Text, row))
    return table


def conclusion(entries: Sequence[Entry], errors: Sequence[tuple[str, str]]) -> Text:
    """The last line of a comparison."""
    weak = [entry.heading for entry in entries if not entry.assessment.holds]
    parts = []
    if entries and not weak:
        parts.append(Text(f"All evidence holds ({counted(len(entries), 'problem')}).", STYLES[HOLDS]))
    elif weak:
        parts.append(Text(f"Evidence does not hold for {'; '.join(weak)}.", STYLES[FAILS]))
    if errors:
        parts.append(Text(f"Not run to the end: {'; '.join(name for name, _ in errors)}.", STYLES[FAILS]))
    return Text(" ").join(parts)


def method_row(method: Any) -> list[str]:
    """The cells of one method, as text."""
    certificate = method.certificate
    return [
        method.name, method.outcome, objective(method.objective), small(method.accuracy), whole(method.steps),
        whole(method.state_solves), whole(method.operator_products), seconds(method.seconds), small(method.distance),
        NOTHING if certificate is None else certified(certificate.get("relative"), certificate.get("kind", "")),
    ]  # fmt: skip


def method_notes(assessment: Assessment) -> list[str]:
    """What the other methods say, but for what the checks say already."""
    return [f"{m.name}: {m.note}" for m in assessment.methods[1:] if m.note and m.x is not None]


def known_row(known: Any) -> list[str]:
    """The cells of one known value, as text: what, expected, computed, tolerance, source."""
    figures = [plainly(known.expected), plainly(known.computed), small(known.tolerance)]
    return [known.what, *figures, known.source]


def _title(heading: str, setting: str) -> Text:
    return Text.assemble((heading, "bold"), "  ", (setting, "dim"))


def _verdict(sentences: Sequence[Sentence], caution: str = "") -> Table:
    table = label_table()
    for sentence in [*sentences, *([Sentence("Caution", caution)] if caution else [])]:
        style = "" if sentence.status == HOLDS else STYLES.get(sentence.status, "")
        table.add_row(Text(sentence.topic), Text(sentence.text, style))
    return table


def _known(assessment: Assessment) -> Table:
    figures = ("expected", "computed", "tolerance")
    table = figure_table(("known value", *figures, "holds", "source"), figures)
    for k in assessment.known:
        holds = Text("yes", STYLES[HOLDS]) if k.holds else Text("no", STYLES[FAILS])
        *values, source = map(Text, known_row(k))
        table.add_row(*values, holds, source)
    return table
