"""The rate verdict: contraction of one full Newton step from seeded perturbations of the solution.

The steps of a solve say little about a rate, and counting them rewards a slow solver. Measured is the definition:
from points x* + delta ||x*|| h one full Newton step with tight linear solves, and the worst contraction
q(delta) = ||x_1 - x*|| / ||x_0 - x*||. See L. Qi and J. Sun, Math. Program. 58 (1993) 353-367 (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from ..errors import InputError
from ..protocols import Evaluation, FloatArray
from ..solution import Solution
from ..solve import solve
from ..validate import count, scalar
from .check import plain
from .decay import decay
from .local import EPS, Local

# contractions below this are not told from rounding: direct solves leave the condition number times 1e-16
NEGLIGIBLE = 1e-8
DELTAS = (1e-1, 1e-2, 1e-3, 1e-4, 1e-5, 1e-6)
# x* is known up to the scatter of Newton steps from points this near
NEAR = 1e-9


@dataclass(frozen=True)
class RateVerdict:
    """How fast full Newton steps converge near the solution.

    Attributes
    ----------
    verdict : {"exact", "superlinear", "linear", "none", "undecided"}
        "exact": at rounding level below some delta; "superlinear": q falls with delta over at least three sizes
        above rounding and reaches 0.1; "linear", "none": q levels off below one, or not below one; "undecided":
        rounding leaves too little to see.
    order : float or None
        One plus the slope of log q against log delta, for "superlinear"; 1 for "linear".
    contractions : tuple of (delta, q)
        Worst q of all samples, largest delta first; inf where the Newton system was singular.
    exact_below : float or None
        For "exact", the largest delta from which on q is at rounding level.
    floor : float
        How well x* is known, relative to its norm.
    note : str
        The equation and norm looked at, and what limited the verdict.
    """

    verdict: str
    order: float | None
    contractions: tuple[tuple[float, float], ...]
    exact_below: float | None
    floor: float
    note: str

    @property
    def holds(self) -> bool:
        """Whether the convergence is superlinear or exact."""
        return self.verdict in ("exact", "superlinear")

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON: verdict, order and contractions."""
        return {
            "verdict": self.verdict,
            "order": plain(self.order),
            "contractions": plain(self.contractions),
        }

    def sentence(self) -> str:
        """The verdict in words."""
        q = ", ".join(f"{q:.1e}" for _, q in self.contractions)
        where = f", exact below delta = {self.exact_below:.0e}" if self.exact_below is not None else ""
        order = f", order {self.order:.2f}" if self.order is not None else ""
        worst = f"; worst contractions {q}" if q else ""
        return f"{self.verdict}{order}{where}{worst}; {self.note}"


# smaller sizes looked at where the verdict is not clear, and the rounding level that allows one
FURTHER, CLEAR = 3, 1e-4


def rate(
    problem: Any,
    solution: Solution | None = None,
    *,
    seed: int = 0,
    deltas: Sequence[float] = DELTAS,
    samples: int = 3,
    tolerance: float = 1e-9,
) -> RateVerdict:
    """Measure how fast full Newton steps converge near the solution.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, SumProblem, or object with the Equation protocol
    solution : Solution, optional
        Of `problem`; solved for by default (an Equation then needs a ``start``).
    seed : int
        Of the perturbations.
    deltas : sequence of float
        Relative sizes, falling, at least three; up to three smaller ones follow where the verdict is not clear.
    samples : int
        Rough and as many smooth directions; the first two of each kind are opposite.
    tolerance : float
        For the solve where no solution is given.

    Returns
    -------
    RateVerdict
        "none" with a note where there is no converged solution.

    Raises
    ------
    InputError
        For deltas that do not fall or are not in (0, 1).

    Notes
    -----
    The solution is first polished by full Newton steps to rounding level, so the verdict depends neither on the
    tolerance nor on the number of steps of the solve. Dual equations are perturbed in the dual variable q, with
    S* q kept consistent, and measured in the observation norm. Composite problems are measured on the natural
    residual, whatever way they were solved. Several terms are measured on the equation of one point of their path, with
    multipliers of the solution as its centre and the gamma at which arguments and multipliers of a term weigh alike:
    the primal-dual equation, in unknown and multipliers together, or stationarity of the augmented Lagrangian. The
    solution is its root for every gamma; the rate says nothing about the number of points. Where control_weight is 0
    the equation of one proximal point subproblem about the solution is measured, with a weight of 1e-5 ||S||^2.
    """
    sizes = [scalar(d, "deltas", positive=True) for d in deltas]
    if len(sizes) < 3 or any(b >= a for a, b in pairwise(sizes)) or sizes[0] >= 1.0:
        raise InputError(f"deltas must be at least three falling numbers below 1, got {sizes}")
    samples = count(samples, "samples")
    if solution is None:
        solution = solve(problem, tolerance=scalar(tolerance, "tolerance", positive=True))
    if not solution.converged:
        note = f"there is no solution to measure around: {solution.outcome.value}"
        return RateVerdict("none", None, (), None, float("inf"), note)
    local = Local(problem, solution.x, solution.iterate)
    best = _polish(local)
    rng = np.random.default_rng(seed)
    floor = _floor(local, best, rng)
    directions = _directions(local, rng, samples)
    worst, rounding, skipped = [], [], 0
    waiting = list(sizes)
    while waiting:
        delta = waiting.pop(0)
        q, level, bad = _contraction(local, best, directions, delta * local.reference, floor)
        worst.append(q)
        rounding.append(level)
        skipped += bad
        if waiting:
            continue
        judged = decay(sizes, worst, rounding)
        smaller = 0.1 * delta
        # a kink may lie nearer to the solution than the smallest size: look further in while rounding allows it
        unclear = judged.kind in ("levels", "undecided") and len(sizes) < len(deltas) + FURTHER
        if unclear and 10.0 * floor <= CLEAR * smaller * local.reference:
            sizes.append(smaller)
            waiting = [smaller]
    note = f"{local.note}; {len(directions)} perturbations a size"
    if skipped:
        note += f"; {skipped} of them left the domain of the equation"
    contractions = tuple(zip(sizes, worst, strict=True))
    relative_floor = floor / local.reference
    if judged.kind == "exact":
        return RateVerdict("exact", None, contractions, judged.exact_below, relative_floor, note)
    if judged.kind == "falls" and judged.slope is not None:
        return RateVerdict("superlinear", 1.0 + judged.slope, contractions, None, relative_floor, note)
    note += f"; {judged.reason}"
    if judged.kind == "levels":
        linear = judged.last < 1.0
        order = 1.0 if linear else None
        return RateVerdict("linear" if linear else "none", order, contractions, None, relative_floor, note)
    return RateVerdict(
        "undecided", judged.slope and 1.0 + judged.slope, contractions, None, relative_floor, note
    )


def _polish(local: Local, max_steps: int = 80) -> Evaluation:
    """Full Newton steps until the residual norm has not fallen twice running; the best point."""
    at = best = local.evaluate(local.x)
    stale = 0
    for _ in range(max_steps):
        direction = local.step(at)
        if direction.vector is None:
            break
        at = local.evaluate(at.x + direction.vector)
        if not at.finite:
            break
        stale = 0 if at.norm < best.norm else stale + 1
        best = at if at.norm < best.norm else best
        if stale == 2 or best.norm == 0.0:
            break
    return best


def _floor(local: Local, best: Evaluation, rng: np.random.Generator) -> float:
    """How well x* is known: the Newton step left at it, and how Newton steps scatter around it.

    The scatter is that of single steps from points one rounding error away, which lets the condition number show
    even where the residual at x* happens to vanish, and of two steps from points 1e-9 away.
    """
    reference = local.reference
    known = 0.0
    if best.norm > 0.0:
        left = local.step(best)
        known = NEAR * reference if left.vector is None else local.norm(left.vector)
    scatter = 0.0
    for _ in range(3):
        ended = _walk(local, local.scatter(best.x, rng), 1)
        scatter = max(scatter, local.norm(ended.x - best.x))
    for smooth in (False, True):
        ended = _walk(local, best.x + NEAR * reference * local.direction(rng, smooth=smooth), 2)
        scatter = max(scatter, min(local.norm(ended.x - best.x), NEAR * reference))
    return max(known, scatter, 4.0 * EPS * reference)


def _walk(local: Local, x: FloatArray, steps: int) -> Evaluation:
    """Full Newton steps from x, as far as they go."""
    at = local.evaluate(x)
    for _ in range(steps):
        direction = local.step(at) if at.finite and at.norm > 0.0 else None
        if direction is None or direction.vector is None:
            break
        at = local.evaluate(at.x + direction.vector)
    return at


def _directions(local: Local, rng: np.random.Generator, samples: int) -> list[FloatArray]:
    """Rough and smooth directions; each kind begins with an opposite pair, so both sides of a kink are seen."""
    made: list[FloatArray] = []
    for smooth in (False, True):
        first = local.direction(rng, smooth=smooth)
        made += [first, -first] + [local.direction(rng, smooth=smooth) for _ in range(samples - 2)]
    return made


def _contraction(
    local: Local, best: Evaluation, directions: list[FloatArray], size: float, floor: float
) -> tuple[float, float, int]:
    """Worst contraction from the perturbations of one size, what rounding would give, how many had no residual."""
    worst, level, bad = 0.0, max(10.0 * floor / size, NEGLIGIBLE), 0
    for h in directions:
        at = local.evaluate(best.x + size * h)
        if not at.finite:
            bad += 1
            continue
        if at.norm == 0.0:  # another root this near: no step leads back
            worst = max(worst, 1.0)
            continue
        direction = local.step(at)
        if direction.vector is None:
            worst = float("inf")
            continue
        error = local.norm(at.x + direction.vector - best.x)
        worst = max(worst, error / size if np.isfinite(error) else float("inf"))
        level = max(level, 10.0 * floor / size + 10.0 * local.solve_error(at, direction) / size)
    return (worst if bad < len(directions) else float("inf")), level, bad
