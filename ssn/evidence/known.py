"""Outside values of a problem file, each with its source."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from ..solution import Solution
from .check import Check, describe, plain

KEYS = ("what", "expected", "computed", "tolerance", "source", "holds")


@dataclass(frozen=True)
class KnownValue:
    """A value known from elsewhere, and ours.

    Attributes
    ----------
    what : str
    expected, computed, tolerance : float
        In the unit that `what` names.
    source : str
    holds : bool
    """

    what: str
    expected: Any
    computed: Any
    tolerance: Any
    source: str
    holds: bool

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {key: plain(getattr(self, key)) for key in KEYS}


def known_values(
    known: Callable[[Any, Solution], Any] | None, problem: Any, solution: Solution
) -> tuple[tuple[KnownValue, ...], list[Check]]:
    """Call a problem file's ``known(problem, solution)``; an exception or an unusable entry is a failing check."""
    if known is None:
        return (), []
    try:
        rows = list(known(problem, solution))
    except Exception as error:
        return (), [Check("known values", False, f"known(problem, solution) raised {describe(error)}")]
    values, wrong = [], []
    for number, row in enumerate(rows, 1):
        if not isinstance(row, Mapping) or any(key not in row for key in KEYS[:5]):
            missing = [k for k in KEYS[:5] if not isinstance(row, Mapping) or k not in row]
            wrong.append(f"entry {number} lacks {', '.join(missing)}")
            continue
        try:
            values.append(_value(row))
        except (TypeError, ValueError) as error:
            wrong.append(f"entry {number} ({row['what']}): {describe(error)}")
    wrong += [
        f"{v.what}: expected {v.expected}, computed {v.computed} ({v.source})" for v in values if not v.holds
    ]
    detail = "; ".join(wrong) if wrong else f"{len(values)} values from outside agree"
    return tuple(values), [Check("known values", not wrong, detail)]


def _value(row: Mapping[str, Any]) -> KnownValue:
    computed, holds = row["computed"], row.get("holds")
    if holds is None:
        holds = abs(float(computed) - float(row["expected"])) <= float(row["tolerance"])
    if isinstance(computed, float) and math.isnan(computed):
        holds = False
    return KnownValue(
        str(row["what"]), row["expected"], computed, row["tolerance"], str(row["source"]), bool(holds)
    )
