"""How numbers are written for people."""

from __future__ import annotations

import math
from typing import Any

NOTHING = "-"


def _absent(value: Any) -> bool:
    return value is None or (isinstance(value, float) and math.isnan(value))


def small(value: Any) -> str:
    """Write an error or distance: two digits and the power of ten."""
    if _absent(value):
        return NOTHING
    number = float(value)
    return f"{number:.1e}" if number else "0"


def certified(relative: Any, kind: str = "distance") -> str:
    """Write a certified bound; that of an objective says so."""
    return small(relative) + (" (gap)" if kind == "gap" and not _absent(relative) else "")


def objective(value: Any) -> str:
    """Write a value whose leading digits are to be compared."""
    return NOTHING if _absent(value) else f"{float(value):.9g}"


def seconds(value: Any) -> str:
    """Write a duration in seconds."""
    if _absent(value):
        return NOTHING
    number = float(value)
    return f"{number:.0f}" if number >= 100 else f"{number:.1f}" if number >= 10 else f"{number:.2f}"


def whole(value: Any) -> str:
    """Write a count."""
    return NOTHING if _absent(value) else str(int(value))


def plainly(value: Any) -> str:
    """Write a parameter or a value of unknown kind."""
    if value is None:
        return NOTHING
    if isinstance(value, float):
        return f"{value:.6g}"
    return str(value)


def counted(number: int, word: str, plural: str = "") -> str:
    """Write a number with its noun: 1 step, 2 steps."""
    return f"{number} {word if number == 1 else plural or word + 's'}"
