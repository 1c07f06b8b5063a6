"""Tables, picture and JSON of a verification: one table a problem, a summary, one line a folder."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from rich.console import Console, ConsoleOptions, Group, RenderableType, RenderResult
from rich.table import Table
from rich.text import Text

from ..evidence import MeshRow
from ..plotting import new_figure
from ..verification import Verification
from .entry import Entry
from .grid import figure_table, fits
from .numbers import NOTHING, certified, counted, objective, seconds, small
from .pictures import ROUNDING
from .tables import STYLES
from .words import FAILS, HOLDS, UNDECIDED
from .writer import FORMAT, plain

COLUMNS = (
    "problem", "converged", "rate", "steps over\nmeshes", "mesh-\nindependent", "agreement", "certified", "known",
    "seconds", "conclusion",
)  # fmt: skip
NARROW = ("problem", "rate", "steps over\nmeshes", "agreement", "conclusion")
# room for the names of what does not hold, which may take several lines
CONCLUSION = 18


@dataclass
class Verified:
    """A verification with the words of its problem file.

    Attributes
    ----------
    verification : Verification
    description : str
        The problem file's docstring.
    place : str
        The folder or file that was asked for.
    """

    verification: Verification
    description: str = ""
    place: str = ""

    @property
    def entry(self) -> Entry:
        """The assessment as `compare` shows it."""
        return Entry(self.verification.assessment, self.description)

    @property
    def heading(self) -> str:
        """Name and mesh size."""
        return self.entry.heading


def verification_table(verified: Verified) -> RenderableType:
    """One table: every check with what was measured, then the meshes, then the known values."""
    v, entry = verified.verification, verified.entry
    table = figure_table(("evidence", "verdict", "measured"), unbroken=("evidence", "verdict"))
    checks = [check for check in v.checks if not check.name.startswith("mesh ")]
    for check in checks:
        status = HOLDS if check.holds else FAILS
        if check.name == "agreement" and v.assessment.agreement == UNDECIDED:
            status = UNDECIDED
        if check.name == "rate" and v.assessment.rate.verdict == UNDECIDED:
            status = UNDECIDED
        detail = check.detail.removeprefix(f"{status}: ")
        table.add_row(Text(check.name), Text(status, STYLES[status]), Text(detail))
    if v.study is None:
        status = "-" if v.complete else FAILS
        table.add_row(Text("mesh study"), Text(status, STYLES.get(status, "")), Text(v.note))
    else:
        for check in v.study.checks():
            status = HOLDS if check.holds else FAILS
            table.add_row(Text(check.name), Text(status, STYLES[status]), Text(check.detail))
        for row in v.study.rows:
            style = "" if row.converged else STYLES[FAILS]
            table.add_row(Text(f"  n = {row.n}"), Text(), Text(_mesh(row), style))
    for value in v.assessment.known:
        shown = (
            f"{_figure(value.computed)}, expected {_figure(value.expected)} within {small(value.tolerance)}"
        )
        status = HOLDS if value.holds else FAILS
        words = Text(f"{value.what}: {shown} ({value.source})")
        table.add_row(Text("  known value"), Text(status, STYLES[status]), words)
    held = sum(check.holds for check in v.checks)
    last = f"{held} of {counted(len(v.checks), 'check')} hold in {seconds(v.seconds)} s"
    title = Text.assemble((entry.heading, "bold"), "  ", (entry.setting, "dim"))
    return Group(title, Text(), table, Text(), Text(last + ".", STYLES[HOLDS if v.holds else FAILS]))


def _mesh(row: MeshRow) -> str:
    words = [counted(row.unknowns, "unknown"), counted(row.steps, "step")]
    words += [counted(row.state_solves, "state solve")] if row.state_solves else []
    words.append(f"accuracy {small(row.accuracy)}")
    words += [f"objective {objective(row.objective)}"] if math.isfinite(row.objective) else []
    words += [f"{sum(k.holds for k in row.known)} of {len(row.known)} known values"] if row.known else []
    words += [] if row.converged else [row.outcome]
    return ", ".join(words)


def _figure(value: Any) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


class VerifiedOverview:
    """One line a problem; some columns are left out where the window is too narrow.

    Parameters
    ----------
    verified : sequence of Verified
    errors : sequence of (str, str)
        Problem and message of what could not be run.
    """

    def __init__(self, verified: Sequence[Verified], errors: Sequence[tuple[str, str]] = ()) -> None:
        self.rows = [_row(one) for one in verified]
        shown = {one.heading for one in verified}
        blank = [Text()] * (len(COLUMNS) - 2)
        self.rows += [
            [Text(name), *blank, Text("not run to the end", STYLES[FAILS])]
            for name in dict(errors)
            if name not in shown
        ]

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Render with the columns that fit."""
        room = options.update(max_width=max(options.max_width - CONCLUSION, 1))
        yield self._table(COLUMNS if fits(self._table(COLUMNS[:-1]), console, room) else NARROW)

    def _table(self, columns: Sequence[str]) -> Table:
        table = figure_table(columns, figures=("certified", "seconds"))
        chosen = [COLUMNS.index(column) for column in columns]
        for row in self.rows:
            table.add_row(*(row[index] for index in chosen))
        return table


def _row(verified: Verified) -> list[Text]:
    v = verified.verification
    a = v.assessment
    certificate = a.solution.certificate
    held, known = v.known()
    order = f" ({a.rate.order:.2f})" if a.rate.verdict == "superlinear" and a.rate.order else ""
    steps = "-" if v.study is None else ", ".join(str(row.steps) for row in v.study.rows)
    independent = {True: "yes", False: "no", None: "-"}[v.mesh_independent]
    if independent == "yes" and v.study is not None and v.study.nested_steps:
        independent = "nested: " + ", ".join(map(str, v.study.nested_steps))
    conclusion = (
        Text("holds", STYLES[HOLDS]) if v.holds else Text(f"not: {', '.join(v.weak_points())}", STYLES[FAILS])
    )
    return [
        Text(verified.heading),
        Text("yes") if a.solution.converged else Text("no", STYLES[FAILS]),
        Text(a.rate.verdict + order, "" if a.rate.holds else STYLES[FAILS]),
        Text(steps),
        Text(independent, STYLES[FAILS] if independent == "no" else ""),
        Text(a.agreement, STYLES.get(a.agreement, "")),
        Text(NOTHING if certificate is None else certified(certificate.relative, certificate.kind)),
        Text(f"{held} of {known}" if known else "-", STYLES[FAILS] if held < known else ""),
        Text(seconds(v.seconds)),
        conclusion,
    ]


def folder_line(place: str, verified: Sequence[Verified], errors: Sequence[tuple[str, str]] = ()) -> Text:
    """One line for a folder or file: how many problems, whether all evidence holds, and how long it took."""
    weak = [
        f"{v.heading} ({', '.join(v.verification.weak_points())})"
        for v in verified
        if not v.verification.holds
    ]
    checks = sum(len(one.verification.checks) for one in verified)
    took = sum(one.verification.seconds for one in verified)
    parts = []
    if verified and not weak:
        parts.append(f"all evidence holds, {counted(checks, 'check')}")
    if weak:
        parts.append(f"evidence does not hold for {'; '.join(weak)}")
    if errors:
        parts.append(f"not run to the end: {'; '.join(dict(errors))}")
    found = "; ".join(parts) or "nothing was verified"
    text = f"{place}: {counted(len(verified), 'problem')}, {found}, {seconds(took)} s."
    return Text(text, STYLES[HOLDS if verified and not weak and not errors else FAILS])


def verification_document(
    environment: Mapping[str, Any], verified: Iterable[Verified], errors: Iterable[tuple[str, str]] = ()
) -> dict[str, Any]:
    """Return the object that ``verify --json`` writes: that of ``compare --json`` with the mesh study added."""
    return {
        "format": FORMAT,
        "environment": plain(environment),
        "results": [plain(one.verification.as_dict()) for one in verified],
        "errors": [{"problem": name, "message": message} for name, message in errors],
    }


def verify_figure(verified: Verified) -> Any:
    """Draw the contractions of one step, log-log with the verdict, and the step counts over the meshes."""
    v = verified.verification
    rate = v.assessment.rate
    figure = new_figure(9.5, 4.0)
    left, right = figure.subplots(1, 2, width_ratios=[1.4, 1])
    order = f", order {rate.order:.2f}" if rate.verdict == "superlinear" and rate.order else ""
    left.set_title(f"rate: {rate.verdict}{order}")
    left.set_xlabel("relative distance $\\delta$ before the step")
    left.set_ylabel("worst contraction $q(\\delta)$")
    pairs = [(d, max(q, ROUNDING)) for d, q in sorted(rate.contractions) if math.isfinite(q)]
    if pairs:
        deltas, contractions = zip(*pairs, strict=True)
        left.loglog(deltas, contractions, "o-")
        left.axhline(1.0, color="0.6", lw=0.8)
        left.grid(alpha=0.3)
    else:
        _say(left, "nothing was measured")
    if rate.exact_below is not None:
        left.axvline(rate.exact_below, color="C2", ls="--", label=f"exact below {rate.exact_below:.0e}")
        left.legend(frameon=False, loc="upper left")
    if v.study is None:
        right.set_title("mesh study")
        _say(right, v.note.replace(": ", ":\n", 1))
    else:
        word = {True: "yes", False: "no", None: "not known"}[v.mesh_independent]
        if v.study.nested_steps:
            word += ", from mesh to mesh"
        right.set_title(f"independent of the mesh: {word}")
        sizes, steps = zip(*((row.n, row.steps) for row in v.study.rows), strict=True)
        right.plot(sizes, steps, "o-")
        if v.study.nested_steps:
            right.plot(sizes, v.study.nested_steps, "s--", label="from the mesh before")
            right.legend(frameon=False)
        failed = [(row.n, row.steps) for row in v.study.rows if not row.converged]
        if failed:
            right.plot(*zip(*failed, strict=True), "x", color="C3", ms=11, label="not converged")
            right.legend(frameon=False)
        right.set_xscale("log")
        right.set_xticks(sizes, [str(n) for n in sizes])
        right.minorticks_off()
        right.set_ylim(0, 1.3 * max(steps) + 1)
        right.set_xlabel("mesh size n")
        right.set_ylabel("Newton steps")
        right.grid(alpha=0.3)
    figure.suptitle(verified.heading)
    return figure


def _say(axes: Any, text: str) -> None:
    axes.text(0.5, 0.5, text, ha="center", va="center", transform=axes.transAxes)
    axes.set_xticks([])
    axes.set_yticks([])
