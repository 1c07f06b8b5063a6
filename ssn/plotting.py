"""The picture of a solve; matplotlib is optional and drawn on without its global state."""

from __future__ import annotations

from typing import Any

from .errors import MissingExtraError


def new_figure(width: float = 7.0, height: float = 4.2, **options: Any) -> Any:
    """Return a matplotlib Figure that no global state knows, or raise `MissingExtraError`."""
    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise MissingExtraError("pictures need matplotlib: pip install 'ssn[problems]'") from error
    return Figure(figsize=(width, height), layout="constrained", **options)


def plot_history(solution: Any, path: Any = None) -> Any:
    """Residual norm and accuracy (log scale), and below them how many components changed their piece."""
    figure = new_figure()
    top, bottom = figure.subplots(2, 1, sharex=True, height_ratios=[3, 1])
    numbers = [0] + [s.index for s in solution.steps]
    norms = [solution.start_norm] + [s.residual_norm for s in solution.steps]
    tiny = 1e-300
    top.semilogy(numbers, [max(v, tiny) for v in norms], "o-", label="residual norm")
    top.semilogy(numbers[1:], [max(s.accuracy, tiny) for s in solution.steps], "s--", label="accuracy")
    top.axhline(solution.tolerance, color="0.6", lw=0.8)
    top.set_title(f"{solution.outcome.value} after {len(solution.steps)} steps")
    top.legend(frameon=False)
    top.grid(alpha=0.3)
    bottom.bar(numbers[1:], [s.piece_changes or 0 for s in solution.steps], color="0.4")
    bottom.set_ylabel("changed pieces")
    bottom.set_xlabel("Newton step")
    if path is not None:
        figure.savefig(path, dpi=130)
    return figure
