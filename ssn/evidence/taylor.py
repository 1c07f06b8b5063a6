"""Taylor tests: a gradient against its function, a Hessian against its gradient, a derivative against its map.

Central differences, so that a correct derivative leaves an error of second order and a quadratic none; figures are
relative to the derivative, or to its change over the largest size where it vanishes.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from ..linear.boundary import product
from ..protocols import FloatArray
from .check import Check
from .decay import decay
from .local import EPS, smooth_sequence

# An error of the derivative below this, relative to it, is not looked for.
NEGLIGIBLE = 1e-8
SIZES = tuple(10.0**-k for k in range(7))
# a large penalty of state bounds bends the value within the last of these
FINER = tuple(10.0**-k for k in range(10))


def gradient(
    problem: Any, u: FloatArray, size: float, rng: np.random.Generator, *, few: bool = False
) -> Check:
    """The Riesz gradient of ``problem.smooth`` against its value; along one direction only if `few`."""
    _, g = problem.smooth(u)
    controls = problem.controls
    value = getattr(problem, "smooth_value", None) or problem.potential
    failures, last = [], 0.0
    for what, h in _directions(u.size, rng, g, few):
        h = h * (size / max(controls.norm(h), 1e-300))
        slope = controls.dot(g, h)
        with np.errstate(all="ignore"):
            _, g_there = problem.smooth(u + h)
        change = controls.norm(g_there - g)
        scale = max(controls.norm(g), change if np.isfinite(change) else 0.0) * size
        if scale == 0.0:
            scale = 1.0
        figures, rounding = [], []
        sizes = FINER if getattr(problem, "state_bounded", False) else SIZES
        for t in sizes:
            with np.errstate(all="ignore"):
                up, down = value(u + t * h), value(u - t * h)
                figures.append(_figure(abs((up - down) / (2 * t) - slope) / scale))
                rounding.append(50.0 * EPS * (abs(up) + abs(down)) / (2 * t * scale))
        judged = decay(sizes, figures, [max(r, NEGLIGIBLE) if np.isfinite(r) else 0.0 for r in rounding])
        last = max(last, 0.0 if judged.kind == "exact" else judged.last)
        if judged.kind not in ("exact", "falls") and not _vanishes(figures, rounding):
            failures.append(f"{what} direction: the error {judged.reason}")
    return _report("gradient", failures, last, "gradient() is not the gradient of value()")


def jacobian(
    name: str,
    value: Callable[[FloatArray], FloatArray],
    derivative: Callable[[FloatArray], Any],
    u: FloatArray,
    step: Callable[[FloatArray], FloatArray],
    rng: np.random.Generator,
    complaint: str,
    *,
    few: bool = False,
) -> Check:
    """A derivative against the map: "hessian" for a gradient, "map derivative" for the F of complementarity.

    `step` scales a direction to the largest perturbation.
    """
    base = value(u)
    matrix = derivative(u)
    failures, last = [], 0.0
    for what, h in _directions(u.size, rng, base, few):
        h = step(h)
        image = product(matrix, h)
        with np.errstate(all="ignore"):
            change = float(np.linalg.norm(value(u + h) - base))
        scale = max(float(np.linalg.norm(image)), change if np.isfinite(change) else 0.0)
        if scale == 0.0:
            continue
        figures, rounding = [], []
        for t in SIZES:
            with np.errstate(all="ignore"):
                up, down = value(u + t * h), value(u - t * h)
                figures.append(_figure(float(np.linalg.norm((up - down) / (2 * t) - image)) / scale))
                noise = EPS * float(np.linalg.norm(up) + np.linalg.norm(down) + 2 * change)
                rounding.append(100.0 * noise / (2 * t * scale))
        judged = decay(SIZES, figures, [max(r, NEGLIGIBLE) if np.isfinite(r) else 0.0 for r in rounding])
        last = max(last, 0.0 if judged.kind == "exact" else judged.last)
        if judged.kind not in ("exact", "falls"):
            failures.append(f"{what} direction: the error {judged.reason}")
    return _report(name, failures, last, complaint)


def symmetry(matrix: Any, n: int, rng: np.random.Generator) -> Check:
    """<H x, y> = <x, H y>."""
    x, y = rng.standard_normal(n), rng.standard_normal(n)
    hx, hy = product(matrix, x), product(matrix, y)
    scale = float(np.linalg.norm(hx) * np.linalg.norm(y) + np.linalg.norm(hy) * np.linalg.norm(x))
    gap = abs(float(hx @ y - x @ hy)) / scale if scale > 0.0 else 0.0
    holds = gap <= 1e-10
    detail = f"<H x, y> and <x, H y> differ by {gap:.1e}"
    return Check("hessian symmetry", holds, detail if holds else detail + ": the Hessian is not symmetric")


def _directions(n: int, rng: np.random.Generator, own: FloatArray, few: bool) -> list[tuple[str, FloatArray]]:
    made = [("random", rng.standard_normal(n))]
    if few:
        return made
    made.append(("smooth", smooth_sequence(rng, n)))
    if own.any() and np.isfinite(own).all():
        made.append(("gradient", own.copy()))
    return made


def _vanishes(figures: list[float], rounding: list[float]) -> bool:
    """Whether the error is negligible at three sizes where it can be seen: a piecewise quadratic function."""
    seen = [figure for figure, level in zip(figures, rounding, strict=True) if level <= NEGLIGIBLE]
    return sum(figure <= NEGLIGIBLE for figure in seen) >= 3


def _figure(value: float) -> float:
    return value if np.isfinite(value) else float("inf")


def _report(name: str, failures: list[str], last: float, complaint: str) -> Check:
    if failures:
        return Check(name, False, "; ".join(failures) + f". {complaint}")
    return Check(name, True, f"the Taylor error tends to zero, last figures <= {last:.1e}")
