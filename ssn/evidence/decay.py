"""How a measured figure behaves as a size goes to zero, told apart from rounding."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

# Below this slope in the logarithms (a fall by 9 percent in a decade) a figure counts as levelling off.
LEAST_SLOPE = 0.04
# A fall over three sizes and more must be steeper than this.
LEAST_FALL = 0.05
# A size is of use only where rounding alone would give a figure below this one.
RESOLUTION = 0.03
# The figure that a fall has to reach.
REACH = 0.1
# Rounding below this counts as zero.
TINY = 1e-6
# Largest figure that counts as near enough to the limit for the slope.
ASYMPTOTIC = 0.5


@dataclass(frozen=True)
class Decay:
    """How figures fall with their sizes.

    Attributes
    ----------
    kind : {"exact", "falls", "levels", "undecided"}
        "exact": at rounding level below some size, more abruptly than any power law seen above it explains, or with
        too little above it to show one;
        "falls": over at least three sizes above rounding, down to 0.1 and still falling there; "levels": it stays.
    slope : float or None
        Of log figure against log size, over the last sizes above rounding.
    last : float
        The figure at the smallest size above rounding; 0 where there is none.
    exact_below : float or None
        The largest size from which on all figures are at rounding level ("exact" only).
    reason : str
    """

    kind: str
    slope: float | None
    last: float
    exact_below: float | None
    reason: str


def decay(sizes: Sequence[float], figures: Sequence[float], rounding: Sequence[float]) -> Decay:
    """Judge figures measured at falling sizes.

    Parameters
    ----------
    sizes : sequence of float
        Falling.
    figures : sequence of float
        Nonnegative; inf where nothing could be measured, which counts against at the last two sizes only.
    rounding : sequence of float
        What rounding alone would give at each size.

    Returns
    -------
    Decay
    """
    seen = [row for row in zip(sizes, figures, rounding, strict=True) if row[2] <= RESOLUTION]
    while len(seen) > 2 and not np.isfinite(seen[0][1]):
        seen = seen[1:]
    split = len(seen)
    while split and seen[split - 1][1] <= seen[split - 1][2]:
        split -= 1
    above, below = seen[:split], seen[split:]
    last = above[-1][1] if above else 0.0
    if below and (_abrupt(above, below[0]) or (len(above) < 3 and below[0][2] <= TINY)):
        return Decay("exact", None, last, below[0][0], f"at rounding level from size {below[0][0]:.0e} on")
    if len(above) > 1 and not np.isfinite([row[1] for row in above[-2:]]).all():
        return Decay("levels", None, float("inf"), None, "not finite at the smallest sizes")
    if len(above) < 3:
        return Decay(
            "undecided", None, last, None, f"only {len(above)} sizes lie above rounding, three are needed"
        )
    slope = _slope(above)
    recent = [row[1] for row in above[-4:]]
    final = float(np.log(recent[-2] / recent[-1]) / np.log(above[-2][0] / above[-1][0]))
    if slope is None:
        return Decay("levels", None, max(recent[-2:]), None, f"levels off at {max(recent[-2:]):.1e}")
    falling = final >= LEAST_SLOPE and slope >= LEAST_FALL
    if falling and last <= REACH:
        return Decay("falls", slope, last, None, f"falls to {last:.1e} with slope {slope:.2f}")
    if falling:
        return Decay("undecided", slope, last, None, f"still falling at {last:.1e}: smaller sizes are needed")
    level = max(recent[-2:])
    return Decay("levels", slope, level, None, f"levels off at {level:.1e}")


def _abrupt(above: Sequence[tuple[float, float, float]], first: tuple[float, float, float]) -> bool:
    """Whether the figure drops to rounding faster than the power law (at least slope one) of those above."""
    if not above:
        return True
    (size, figure, _), power = above[-1], 1.0
    if len(above) > 1 and np.isfinite([above[-2][1], figure]).all():
        power = max(power, float(np.log(above[-2][1] / figure) / np.log(above[-2][0] / size)))
    return bool(figure * (first[0] / size) ** power > 10.0 * first[2])


def _slope(above: Sequence[tuple[float, float, float]]) -> float | None:
    """Least-squares slope of the logarithms over the last four sizes, with figures below 0.5 if any."""
    rows = [(size, figure) for size, figure, _ in above if np.isfinite(figure)]
    near = [row for row in rows if row[1] < ASYMPTOTIC]
    chosen = (near if len(near) > 1 else rows)[-4:]
    if len(chosen) < 2:
        return None
    logs = np.log(np.array(chosen))
    return float(np.polyfit(logs[:, 0], logs[:, 1], 1)[0])
