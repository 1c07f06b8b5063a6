"""The gate: figures that repeat, compared with a stored baseline; no seconds, no printing, no command line."""

from .baseline import (
    Baseline,
    arithmetic,
    as_text,
    baseline_document,
    equal_environments,
    read_baseline,
)  # fmt: skip
from .figures import Measured, figures, gate_parameters, measured, statement
from .verdict import RULES, TOLERANCES, Change, Verdict, decide

__all__ = [
    "RULES",
    "TOLERANCES",
    "Baseline",
    "Change",
    "Measured",
    "Verdict",
    "arithmetic",
    "as_text",
    "baseline_document",
    "decide",
    "equal_environments",
    "figures",
    "gate_parameters",
    "measured",
    "read_baseline",
    "statement",
]
