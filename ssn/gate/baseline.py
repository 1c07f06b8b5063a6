"""The baseline file: read with care, written the same way every time."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spla

from ..errors import InputError
from ..schema import FORMAT
from .figures import Measured
from .verdict import TOLERANCES

# Two environments that agree in these and in `threads` compute the same bits.
SAME = ("python", "numpy", "scipy", "pyamg", "factorization", "factorization_note", "machine", "arithmetic")
IDENTITY = ("parameters", "unknowns", "statement")


@dataclass(frozen=True)
class Baseline:
    """Stored figures.

    Attributes
    ----------
    environment : dict
        Where they were computed: `ssn.environment.fingerprint` and ``arithmetic``.
    cases : dict
        By the name of the case: {"problem", "identity", "figures"}.
    """

    environment: dict[str, Any]
    cases: dict[str, dict[str, Any]]


def read_baseline(text: str, name: str) -> Baseline:
    """Read a baseline.

    Parameters
    ----------
    text : str
    name : str
        Of the file, for messages.

    Raises
    ------
    InputError
        For text that is not a baseline of this format.
    """
    try:
        data = json.loads(text)
    except ValueError as error:
        raise InputError(f"{name}: is not JSON: {error}") from None
    if not isinstance(data, dict) or "format" not in data:
        raise InputError(f"{name}: is not a baseline: it has no format number")
    if data["format"] != FORMAT:
        raise InputError(
            f"{name}: has format {data['format']!r}, this version reads {FORMAT}; write it again with --update"
        )
    environment, cases = data.get("environment"), data.get("cases")
    if not isinstance(environment, dict) or not isinstance(cases, dict):
        raise InputError(f"{name}: is not a baseline: environment or cases are missing")
    for case, entry in cases.items():
        parts = {"problem": str, "identity": dict, "figures": dict}
        if not isinstance(entry, dict) or any(not isinstance(entry.get(k), t) for k, t in parts.items()):
            raise InputError(f"{name}: the case {case!r} lacks problem, identity or figures")
        lacking = [key for key in IDENTITY if key not in entry["identity"]]
        if lacking:
            raise InputError(f"{name}: the case {case!r} lacks {', '.join(lacking)}")
    return Baseline(environment, cases)


def baseline_document(environment: Mapping[str, Any], cases: Iterable[Measured]) -> dict[str, Any]:
    """Return what a baseline file holds."""
    return {
        "format": FORMAT,
        "tolerances": dict(TOLERANCES),
        "environment": dict(environment),
        "cases": {
            m.case: {"problem": m.problem, "identity": m.identity, "figures": m.figures} for m in cases
        },
    }


def as_text(document: Mapping[str, Any]) -> str:
    """Return strict JSON with sorted keys: the same figures give the same bytes."""
    return json.dumps(document, indent=1, sort_keys=True, allow_nan=False, ensure_ascii=False) + "\n"


def equal_environments(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Whether two environments compute the same bits, so that counts must be equal.

    Same versions, factorisation, machine and arithmetic, and one BLAS thread in both.
    """
    return all(one.get(key) == other.get(key) for key in SAME) and _one_thread(one) and _one_thread(other)


def _one_thread(environment: Mapping[str, Any]) -> bool:
    threads = environment.get("threads")
    limits = threads.values() if isinstance(threads, Mapping) else ()
    return environment.get("cpus") == 1 or "1" in limits


def arithmetic() -> str:
    """Return a digest of the bits that BLAS, LAPACK, SuperLU and the mathematics library give here.

    Libraries choose their kernels by the processor: equal versions do not give equal rounding.
    """
    index = np.arange(1.0, 151.0)
    matrix = np.sin(np.outer(index, np.sqrt(index))) + np.diag(np.full(150, 20.0))
    sparse = sp.csc_array(np.where(np.abs(matrix) > 0.9, matrix, 0.0))
    parts = [matrix @ matrix, matrix @ index, np.linalg.solve(matrix, index), spla.spsolve(sparse, index)]
    parts += [np.exp(np.cos(index)), np.array([index @ matrix @ index, np.linalg.norm(matrix)])]
    digest = hashlib.blake2b(digest_size=8)
    for part in parts:
        digest.update(np.ascontiguousarray(part).tobytes())
    return digest.hexdigest()
