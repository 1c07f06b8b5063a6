"""Pictures: the steps of a solve, the measured rate, and how figures get into files and pages."""

from __future__ import annotations

import base64
import importlib.util
import io
import math
import sys
from pathlib import Path
from typing import Any

from ..errors import InputError, MissingExtraError
from ..evidence import Assessment
from ..plotting import new_figure, plot_history
from ..solution import Solution

ROUNDING = 1e-17
FILE_TYPES = (".png", ".svg", ".pdf", ".jpg")


def history_figure(solution: Solution) -> Any:
    """Residual, accuracy and changed pieces over the steps, as a matplotlib Figure."""
    return plot_history(solution)


def rate_figure(assessment: Assessment) -> Any | None:
    """Draw the contraction of one step against the distance it starts from; None where nothing was measured."""
    pairs = sorted((d, max(q, ROUNDING)) for d, q in assessment.rate.contractions if math.isfinite(q))
    if not pairs:
        return None
    figure = new_figure(7.0, 4.2)
    axes = figure.subplots()
    deltas, contractions = zip(*pairs, strict=True)
    axes.loglog(deltas, contractions, "o-", label="worst contraction of one step")
    axes.axhline(1.0, color="0.6", lw=0.8)
    if assessment.rate.verdict == "superlinear":
        guide = [contractions[-1] * d / deltas[-1] for d in deltas]
        axes.loglog(deltas, guide, "--", color="0.6", label="slope of order 2")
    axes.set_xlabel("relative distance from the solution before the step")
    axes.set_ylabel("remaining part after it")
    axes.set_title(f"rate: {assessment.rate.verdict}")
    axes.legend(frameon=False, loc="lower right")
    axes.grid(alpha=0.3)
    return figure


def pictures_available() -> bool:
    """Whether matplotlib is installed."""
    return importlib.util.find_spec("matplotlib") is not None


def require_pictures() -> None:
    """Raise `MissingExtraError` where matplotlib is not installed."""
    if not pictures_available():
        raise MissingExtraError("pictures need matplotlib: pip install 'ssn[problems]'")


def check_picture_path(path: Path) -> None:
    """Raise `InputError` where a picture cannot be written under this name, or at all."""
    require_pictures()
    if path.suffix.lower() not in FILE_TYPES:
        raise InputError(f"{path}: a picture's name ends in one of {', '.join(FILE_TYPES)}")


def is_figure(value: Any) -> bool:
    """Whether the value can be saved like a matplotlib Figure."""
    return callable(getattr(value, "savefig", None))


def save(figure: Any, path: Path) -> None:
    """Write a figure to a file; the ending of its name decides the format."""
    figure.savefig(path, dpi=130)
    _forget(figure)


def embedded(figure: Any, kind: str = "png") -> str:
    """Return a figure as a data URI, for a page that must stand alone."""
    buffer = io.BytesIO()
    options: dict[str, Any] = {"metadata": {"Date": None}} if kind == "svg" else {"dpi": 130}
    figure.savefig(buffer, format=kind, **options)
    _forget(figure)
    media = "image/svg+xml" if kind == "svg" else f"image/{kind}"
    return f"data:{media};base64,{base64.b64encode(buffer.getvalue()).decode('ascii')}"


def _forget(figure: Any) -> None:
    """Close a figure that a problem file made with pyplot, which would otherwise keep it for ever."""
    pyplot = sys.modules.get("matplotlib.pyplot")
    if pyplot is not None:
        pyplot.close(figure)
