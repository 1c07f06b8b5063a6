"""Which figures are worse than the baseline, by how much, and what that makes of a run."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from .figures import Measured

WORSE, BETTER, TOLERATED = "worse", "better", "tolerated"
RATES = ("none", "undecided", "linear", "superlinear", "exact")
AGREEMENTS = ("fails", "undecided", "holds")
EXACT = "exact in the same environment"
# a problem whose objective differs by more is another problem, or another solution
SAME_VALUE = 1e-8


@dataclass(frozen=True)
class Rule:
    """How one figure is judged.

    Attributes
    ----------
    tolerance : str
        The rule in words.
    judge : callable
        ``judge(before, now, exact)`` -> "worse", "better", "tolerated", or "" for equal.
    """

    tolerance: str
    judge: Callable[[Any, Any, bool], str]


def _count(steps: int, share: float) -> Rule:
    def judge(before: Any, now: Any, exact: bool) -> str:
        if now == before:
            return ""
        if now < before:
            return BETTER
        allowed = 0 if exact else max(steps, math.floor(share * before))
        return WORSE if now - before > allowed else TOLERATED

    return Rule(f"{EXACT}; elsewhere {steps} or {100 * share:.0f} % more", judge)


def _ranked(ranks: Sequence[str]) -> Rule:
    def judge(before: Any, now: Any, exact: bool) -> str:
        if now == before:
            return ""
        places = [ranks.index(value) if value in ranks else -1 for value in (before, now)]
        return WORSE if places[1] <= places[0] else BETTER

    return Rule(f"must not fall; from worst to best: {', '.join(ranks)}", judge)


def _flag(before: Any, now: Any, exact: bool) -> str:
    return "" if now == before else BETTER if now else WORSE


def _value(before: Any, now: Any, exact: bool) -> str:
    if before is None or now is None:
        return "" if now == before else WORSE if now is None else BETTER
    return "" if same_value(before, now) else WORSE


def _order(before: Any, now: Any, exact: bool) -> str:
    if before is None or now is None or now == before:  # an order lost or won is the verdict's matter
        return ""
    return BETTER if now > before + 0.1 else WORSE if now < before - 0.1 else "" if exact else TOLERATED


def _fewer(before: Any, now: Any, exact: bool) -> str:
    return "" if now == before else WORSE if now < before else BETTER


def _names(before: Any, now: Any, exact: bool) -> str:
    return WORSE if set(before) - set(now) else BETTER if set(now) - set(before) else ""


def _sizes(before: Any, now: Any, exact: bool) -> str:
    if now == before:
        return ""
    if exact or set(before) != set(now):
        return WORSE
    for name, sizes in before.items():
        labels = set(sizes) | set(now[name])
        allowed = max(2.0, 0.005 * sum(sizes.values()))
        if any(abs(sizes.get(label, 0) - now[name].get(label, 0)) > allowed for label in labels):
            return WORSE
    return TOLERATED


RULES: dict[str, Rule] = {
    "steps": _count(1, 0.10),
    "state_solves": _count(2, 0.15),
    "operator_products": _count(2, 0.15),
    "accuracy_met": Rule("must stay true", _flag),
    "objective": Rule(f"{SAME_VALUE:.0e} relative, up or down", _value),
    "rate": _ranked(RATES),
    "order": Rule("0.1 less", _order),
    "agreement": _ranked(AGREEMENTS),
    "known_values": Rule("no fewer that hold", _fewer),
    "evidence": Rule("every check that held is made and holds", _names),
    "pieces": Rule(f"{EXACT}; elsewhere 2 components or 0.5 % of them", _sizes),
}
TOLERANCES = {name: rule.tolerance for name, rule in RULES.items()}


@dataclass(frozen=True)
class Change:
    """A figure that is not what the baseline says.

    Attributes
    ----------
    case, figure : str
    baseline, now : figure
    tolerance : str
    kind : {"worse", "better", "tolerated"}
    """

    case: str
    figure: str
    baseline: Any
    now: Any
    tolerance: str
    kind: str

    def sentence(self) -> str:
        """The change in words, the case and the figure first."""
        name = self.figure.replace("_", " ")
        if self.figure == "evidence":
            lost = sorted(set(self.baseline) - set(self.now))
            won = sorted(set(self.now) - set(self.baseline))
            texts = [f"no longer holds: {', '.join(lost)}"] if lost else []
            texts += [f"holds now: {', '.join(won)}"] if won else []
            return f"{self.case}: {name}: {'; '.join(texts)}"
        return f"{self.case}: {name} {_shown(self.baseline)} -> {_shown(self.now)} ({self.tolerance})"

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return dict(vars(self))


@dataclass(frozen=True)
class Verdict:
    """What the comparison with a baseline gave.

    Attributes
    ----------
    exact : bool
        The environments are the same, counts are compared exactly.
    compared : int
        Cases compared.
    changes : tuple of Change
    failing : tuple of (str, str)
        Case and evidence that does not hold, whatever the baseline says.
    refusals : tuple of str
        Why the comparison is not one: nothing compared, cases missing on one side, another problem.
    """

    exact: bool
    compared: int
    changes: tuple[Change, ...] = ()
    failing: tuple[tuple[str, str], ...] = ()
    refusals: tuple[str, ...] = field(default=())

    def of_kind(self, kind: str) -> list[Change]:
        """The changes that are "worse", "better" or "tolerated"."""
        return [change for change in self.changes if change.kind == kind]

    @property
    def usable(self) -> bool:
        """Whether everything was compared."""
        return not self.refusals

    @property
    def holds(self) -> bool:
        """Whether nothing is worse and all evidence holds."""
        return not self.of_kind(WORSE) and not self.failing


def decide(stored: Mapping[str, Mapping[str, Any]], measured: Iterable[Measured], *, exact: bool) -> Verdict:
    """Compare measured cases with the stored ones.

    Parameters
    ----------
    stored : mapping
        ``cases`` of a baseline.
    measured : iterable of Measured
    exact : bool
        The environment is that of the baseline: counts and active sets must be equal.

    Returns
    -------
    Verdict
    """
    cases = list(measured)
    changes: list[Change] = []
    refusals: list[str] = []
    compared = 0
    for case in cases:
        refusal = _refusal(stored.get(case.case), case)
        if refusal:
            refusals.append(f"{case.case}: {refusal}")
            continue
        compared += 1
        changes += _changes(case, stored[case.case]["figures"], exact)
    missing = sorted(set(stored) - {case.case for case in cases})
    refusals += [f"{name}: is in the baseline and was not run; --update removes it" for name in missing]
    if not compared:
        refusals.append("nothing was compared")
    failing = [(case.case, failure) for case in cases for failure in case.failures]
    return Verdict(exact, compared, tuple(changes), tuple(failing), tuple(refusals))


def same_value(one: float, other: float) -> bool:
    """Whether two values are equal to 1e-8 of their size."""
    return abs(one - other) <= SAME_VALUE * max(abs(one), abs(other))


def _refusal(entry: Mapping[str, Any] | None, case: Measured) -> str:
    """Why a case cannot be compared; empty where it can."""
    if entry is None:
        return "is not in the baseline; --update adds it"
    other = _another_problem(entry["identity"], case.identity)
    if other:
        return f"is another problem than that of the baseline ({other}); --update declares the change"
    odd = sorted(set(entry["figures"]) ^ set(case.figures))
    return f"figures on one side only ({', '.join(odd)}); --update settles it" if odd else ""


def _another_problem(before: Mapping[str, Any], now: Mapping[str, Any]) -> str:
    """In which respect two problems differ; empty where they do not.

    A parameter that only the present problem has is no difference by itself: its values at fixed points tell.
    """
    if before["parameters"] != {k: v for k, v in now["parameters"].items() if k in before["parameters"]}:
        return f"parameters {_shown(before['parameters'])}, now {_shown(now['parameters'])}"
    if before["unknowns"] != now["unknowns"]:
        return f"{before['unknowns']} unknowns, now {now['unknowns']}"
    values = before["statement"], now["statement"]
    if len(values[0]) == len(values[1]) and not any(
        (a is None) != (b is None) or (a is not None and not same_value(a, b))
        for a, b in zip(*values, strict=True)
    ):
        return ""
    return "its values at fixed points differ"


def _changes(case: Measured, before: Mapping[str, Any], exact: bool) -> list[Change]:
    found = []
    for figure, rule in RULES.items():
        old, new = before[figure], case.figures[figure]
        kind = rule.judge(old, new, exact)
        if kind:
            found.append(Change(case.case, figure, old, new, rule.tolerance, kind))
    return found


def _shown(value: Any) -> str:
    if isinstance(value, Mapping):
        return ", ".join(f"{key}: {_shown(item)}" for key, item in value.items()) or "none"
    if isinstance(value, list | tuple):
        return ", ".join(map(_shown, value)) or "none"
    return f"{value:.12g}" if isinstance(value, float) else str(value)
