"""A check with a name, a verdict and a sentence."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np


@dataclass(frozen=True)
class Check:
    """One piece of evidence.

    Attributes
    ----------
    name : str
        A stable name, such as "gradient", "adjoint" or "newton derivative".
    holds : bool
    detail : str
        What was measured, and where it fails, what that means.
    """

    name: str
    holds: bool
    detail: str

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {"name": self.name, "holds": self.holds, "detail": self.detail}


def plain(value: Any) -> Any:
    """`value` as JSON can hold it: figures that are not finite become None, arrays lists, unknown objects text."""
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return str(value)


def describe(error: Exception) -> str:
    """An exception in one line."""
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text[:300]}" if text else type(error).__name__
