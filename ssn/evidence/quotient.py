"""The defining quotient of a Newton derivative, along random, smooth and kink-crossing directions."""

from __future__ import annotations

import numpy as np

from ..pieces import Pieces
from ..protocols import Evaluation, FloatArray
from .check import Check
from .decay import RESOLUTION, decay
from .local import EPS, Local

# An error of the derivative below this, relative to the image, is not looked for.
NEGLIGIBLE = 1e-7
# Before an absolute error takes over, a figure this small is enough.
SMALL = 1e-5
# Growth from one size to the next smaller one (a tenth) that tells an absolute error from a relative one
GROWTH = 3.0
SIZES = tuple(10.0**-k for k in range(1, 8))


def newton_derivative(local: Local, rng: np.random.Generator) -> Check:
    """||F(x+h) - F(x) - G(x+h) h|| -> 0 faster than the image of h, at three kinds of points and directions.

    The points are the given one, one at a seeded distance from it, and one on a kink, where a component changes its
    piece; the quotient is divided by the size of the image, so that it does not depend on the scale of F.
    """
    away = local.x + 0.3 * local.reference * local.direction(rng, smooth=False)
    trials: list[tuple[str, FloatArray, FloatArray]] = []
    for where, x in (("at the point", local.x), ("nearby", away)):
        for smooth in (False, True):
            trials.append(
                (
                    f"{'smooth' if smooth else 'random'} direction {where}",
                    x,
                    local.direction(rng, smooth=smooth),
                )
            )
    # the proximal map of a cost that is not convex may jump, and has no derivative across a jump
    jumps = not getattr(getattr(local.problem, "cost", None), "convex", True)
    for smooth in () if jumps else (False, True):
        h = local.direction(rng, smooth=smooth)
        kink = kink_along(local, local.x, h)
        if kink is not None:
            trials += [("direction across a kink", kink, h), ("direction across a kink, backwards", kink, -h)]
    tested, failures, worst = 0, [], 0.0
    for what, x, h in trials:
        verdict = _along(local, x, h, rng)
        if verdict is None:
            continue
        tested += 1
        good, last, reason = verdict
        worst = max(worst, last)
        if not good:
            failures.append(f"{what}: the quotient {reason}")
    if failures:
        more = f"; and in {len(failures) - 2} more directions" if len(failures) > 2 else ""
        detail = "; ".join(failures[:2]) + more + ". The derivative does not belong to the residual"
        return Check("newton derivative", False, detail)
    if not tested:
        return Check("newton derivative", False, "the residual is not finite around the point")
    return Check(
        "newton derivative",
        True,
        f"the quotient tends to zero in {tested} directions, last figures <= {worst:.1e}"
        + ("; none of them across a jump" if jumps else ""),
    )


def newton_step(local: Local) -> Check | None:
    """Whether the step of the linear solver solves G d = -F, G applied by its definition."""
    x = local.x + 0.1 * local.reference * local.direction(np.random.default_rng(1), smooth=False)
    # primal-dual steps are safeguarded: they solve the system of G where the multipliers belong to the unknown
    consistent = getattr(local.equation, "consistent", None)
    at = local.evaluate(x if consistent is None else consistent(x))
    if not at.finite or at.norm == 0.0:
        return None
    direction = local.step(at)
    if direction.vector is None:
        return None
    image = local.derivative(at, direction.vector)
    left = local.residual_norm(image + at.residual) / local.residual_norm(at.residual)
    allowed = max(1e-6, 10.0 * direction.relative_residual)
    holds = bool(left <= allowed)
    detail = f"||G d + F|| / ||F|| = {left:.1e}"
    return Check(
        "newton step", holds, detail if holds else detail + ": the linear solver solves another system"
    )


def kink_along(local: Local, x: FloatArray, h: FloatArray) -> FloatArray | None:
    """The first point on the ray x + t h where the pieces change; None where they stay for all t tried."""
    base = pieces(local, x)
    if base is None or not len(base):
        return None
    low, high = 0.0, None
    for t in (1e-6, 1e-4, 1e-3, 1e-2, 1e-1, 1.0, 1e1):
        there = pieces(local, x + t * local.reference * h)
        if there is None:
            return None
        if there.changes(base) != 0:
            high = t
            break
        low = t
    if high is None:
        return None
    for _ in range(60):
        middle = 0.5 * (low + high)
        if not low < middle < high:
            break
        there = pieces(local, x + middle * local.reference * h)
        if there is None:
            return None
        low, high = (middle, high) if there.changes(base) == 0 else (low, middle)
    return x + high * local.reference * h


def pieces(local: Local, x: FloatArray) -> Pieces | None:
    """The active sets at x, without a state solve for a dual equation; None where the residual is not finite."""
    if local.dual:
        equation = local.equation
        found: Pieces = equation.cost.pieces(equation.v_of(x[equation.size :]), 1.0 / equation.alpha)
        return found
    at = local.evaluate(x)
    return at.pieces if at.finite else None


def _along(
    local: Local, x: FloatArray, h: FloatArray, rng: np.random.Generator
) -> tuple[bool, float, str] | None:
    """Whether the quotient tends to zero along h, its last figure, the reason; None outside the domain or in noise."""
    base = local.evaluate(x)
    if not base.finite:
        return None
    noise = _noise(local, base, rng)
    sizes, figures, rounding = [], [], []
    for size in SIZES:
        t = size * local.reference
        at = local.evaluate(x + t * h)
        sizes.append(size)
        if not at.finite:
            figures.append(float("inf"))
            rounding.append(0.0)
            continue
        change = at.residual - base.residual
        image = t * local.derivative(at, h)
        scale = max(local.residual_norm(change), local.residual_norm(image))
        if not np.isfinite(scale):
            figures.append(float("inf"))
            rounding.append(0.0)
            continue
        figures.append(local.residual_norm(change - image) / scale if scale > 0.0 else 0.0)
        rounding.append(max(30.0 * noise / scale, NEGLIGIBLE) if scale > 0.0 else NEGLIGIBLE)
    if min(rounding) > RESOLUTION:
        return None  # noise hides every size: this direction says nothing, the others do
    kept = _without_noise(figures)
    judged = decay(sizes[:kept], figures[:kept], rounding[:kept])
    least = min(figures[:kept])
    if kept < len(figures) and least <= SMALL:
        return True, least, f"is {least:.1e} before an absolute error shows"
    return judged.kind in ("exact", "falls"), judged.last if judged.kind != "exact" else 0.0, judged.reason


def _without_noise(figures: list[float]) -> int:
    """How many sizes to look at: not the last ones, where the figure grows like an absolute error over the size.

    Such an error is rounding, or a kink much nearer than the sizes; that of a wrong derivative stays level.
    """
    kept = len(figures)
    while kept > 1 and figures[kept - 1] > GROWTH * figures[kept - 2]:
        kept -= 1
    return kept


def _noise(local: Local, base: Evaluation, rng: np.random.Generator) -> float:
    """Size of the change of the residual when every entry of the iterate changes by one rounding error."""
    noise = EPS * local.residual_norm(base.residual)
    for _ in range(2):
        at = local.evaluate(local.scatter(base.x, rng))
        if at.finite:
            noise = max(noise, local.residual_norm(at.residual - base.residual))
    return noise
