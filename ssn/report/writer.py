"""Results as JSON."""

from __future__ import annotations

import enum
import json
import math
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ..evidence import Assessment
from ..solution import Solution

FORMAT = 1


def comparison_document(
    environment: Mapping[str, Any], assessments: Iterable[Assessment], errors: Iterable[tuple[str, str]] = ()
) -> dict[str, Any]:
    """Return the object that ``compare --json`` writes.

    Parameters
    ----------
    environment : mapping
        From `ssn.environment.fingerprint`.
    assessments : iterable of Assessment
    errors : iterable of (str, str)
        File and message of what could not be run.

    Returns
    -------
    dict
        Plain data: {"format", "environment", "results", "errors"}; figures that are NaN or infinite are null.
    """
    return {
        "format": FORMAT,
        "environment": plain(environment),
        "results": [plain(a.as_dict()) for a in assessments],
        "errors": [{"problem": name, "message": message} for name, message in errors],
    }


def solution_document(
    environment: Mapping[str, Any], name: str, parameters: Mapping[str, Any], solution: Solution
) -> dict[str, Any]:
    """Return the object that ``solve --json`` writes: what the solve did, without the unknown itself."""
    certificate = solution.certificate
    return {
        "format": FORMAT,
        "environment": plain(environment),
        "problem": name,
        "parameters": plain(parameters),
        "unknowns": int(solution.x.size),
        "converged": solution.converged,
        "outcome": solution.outcome.value,
        "message": solution.message,
        "objective": plain(solution.objective),
        "accuracy": plain(solution.accuracy),
        "tolerance": plain(solution.tolerance),
        "residual_norm": plain(solution.residual_norm),
        "lower_bound": plain(solution.lower_bound),
        "certificate": None if certificate is None else plain(certificate.as_dict()),
        "active": plain(solution.pieces.sizes()),
        "work": plain(solution.work.as_dict()),
        "choices": plain(solution.choices),
        "steps": [plain(step.as_dict()) for step in solution.steps],
    }


def as_text(document: Mapping[str, Any]) -> str:
    """Return strict JSON: no NaN, keys in the given order."""
    return json.dumps(document, indent=2, allow_nan=False, ensure_ascii=False) + "\n"


def plain(value: Any) -> Any:
    """Return the value made of JSON's types: arrays become lists, NaN and infinity null, the rest its text."""
    if value is None or (isinstance(value, (bool, int, str)) and not isinstance(value, enum.Enum)):
        return value
    if isinstance(value, (float, np.floating)):
        number = float(value)
        return number if math.isfinite(number) else None
    if isinstance(value, np.bool_):
        return bool(value)
    if isinstance(value, np.integer):
        return int(value)
    if isinstance(value, enum.Enum):
        return plain(value.value)
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, (list, tuple, set, frozenset)):
        return [plain(item) for item in value]
    if isinstance(value, Path):
        return str(value)
    return str(value)
