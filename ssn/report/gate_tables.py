"""What the gate found: one line a case, one line a change, JSON."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from rich.text import Text

from ..gate import Measured, Verdict
from .grid import figure_table
from .numbers import NOTHING, counted, objective
from .tables import STYLES
from .words import FAILS, HOLDS, UNDECIDED
from .writer import FORMAT, plain

COLUMNS = (
    "case", "steps", "state\nsolves", "products", "objective", "rate", "agreement", "known", "checks", "time\nratio",
    "baseline",
)  # fmt: skip


class GateTable:
    """The figures of each case and what became of them.

    Parameters
    ----------
    cases : sequence of Measured
    verdict : Verdict or None
        None where there is no baseline to compare with.
    """

    def __init__(self, cases: Sequence[Measured], verdict: Verdict | None) -> None:
        self.cases = cases
        self.verdict = verdict

    def __rich__(self) -> Any:
        """Render."""
        table = figure_table(COLUMNS, (*COLUMNS[1:5], *COLUMNS[7:10]), ("case",))
        for case in self.cases:
            f = case.figures
            order = f" ({f['order']:.2f})" if f["order"] is not None else ""
            ratio = NOTHING if case.ratio is None else f"{case.ratio:.2g}"
            table.add_row(
                Text(case.case), str(f["steps"]), str(f["state_solves"]), str(f["operator_products"]),
                objective(f["objective"]), Text(f["rate"] + order), Text(f["agreement"]), str(f["known_values"]),
                str(len(f["evidence"])), ratio, self._against(case),
            )  # fmt: skip
        return table

    def _against(self, case: Measured) -> Text:
        if case.failures:
            return Text("evidence fails", STYLES[FAILS])
        if self.verdict is None:
            return Text(NOTHING)
        kinds: dict[str, list[str]] = {}
        for change in self.verdict.changes:
            if change.case == case.case:
                kinds.setdefault(change.kind, []).append(change.figure.replace("_", " "))
        if any(refusal.startswith(f"{case.case}: ") for refusal in self.verdict.refusals):
            return Text("not compared", STYLES[FAILS])
        words = [
            f"{kind}: {', '.join(kinds[kind])}" for kind in ("worse", "better", "tolerated") if kind in kinds
        ]
        style = FAILS if "worse" in kinds else HOLDS
        return Text("; ".join(words) or "the same", STYLES[style])


def gate_lines(verdict: Verdict) -> list[Text]:
    """Return what is wrong, what is better and what is tolerated, one line each, named."""
    lines = [Text(f"Not compared: {refusal}", STYLES[FAILS]) for refusal in verdict.refusals]
    lines += [Text(f"Evidence fails: {case}: {failure}", STYLES[FAILS]) for case, failure in verdict.failing]
    styles = {
        "worse": ("Worse", STYLES[FAILS]),
        "better": ("Better", STYLES[HOLDS]),
        "tolerated": ("Tolerated", ""),
    }
    for kind, (word, style) in styles.items():
        lines += [Text(f"{word}: {change.sentence()}", style) for change in verdict.of_kind(kind)]
    return lines


def gate_conclusion(verdict: Verdict, errors: Sequence[tuple[str, str]] = ()) -> Text:
    """The last line of the gate."""
    how = "exactly, the environment is the same" if verdict.exact else "with the tolerances between platforms"
    parts = [f"{counted(verdict.compared, 'case')} compared {how}"]
    counts = {
        "figure worse": len(verdict.of_kind("worse")),
        "figure better": len(verdict.of_kind("better")),
        "check fails": len(verdict.failing),
        "refusal": len(verdict.refusals),
        "problem not run to the end": len(dict(errors)),
    }
    plurals = {
        "figure worse": "figures worse", "figure better": "figures better", "check fails": "checks fail",
        "problem not run to the end": "problems not run to the end",
    }  # fmt: skip
    parts += [counted(number, word, plurals.get(word, "")) for word, number in counts.items() if number]
    passed = verdict.holds and verdict.usable and not errors
    status = HOLDS if passed else UNDECIDED if verdict.holds else FAILS
    return Text(f"The gate {'holds' if passed else 'does not hold'}: {', '.join(parts)}.", STYLES[status])


def gate_document(
    environment: Mapping[str, Any],
    baseline_environment: Mapping[str, Any] | None,
    cases: Sequence[Measured],
    verdict: Verdict | None,
    errors: Sequence[tuple[str, str]] = (),
) -> dict[str, Any]:
    """Return the object that ``gate --json`` writes."""
    return {
        "format": FORMAT,
        "environment": plain(environment),
        "baseline_environment": plain(baseline_environment),
        "exact": None if verdict is None else verdict.exact,
        "compared": 0 if verdict is None else verdict.compared,
        "holds": None if verdict is None else verdict.holds and verdict.usable and not errors,
        "cases": [
            {
                "case": m.case, "problem": m.problem, "identity": plain(m.identity), "figures": plain(m.figures),
                "failures": list(m.failures), "time_ratio": plain(m.ratio),
            }
            for m in cases
        ],
        "changes": [] if verdict is None else [plain(change.as_dict()) for change in verdict.changes],
        "refusals": [] if verdict is None else list(verdict.refusals),
        "errors": [{"problem": name, "message": message} for name, message in errors],
    }  # fmt: skip
