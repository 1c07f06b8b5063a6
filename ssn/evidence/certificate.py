"""Whether certificates are true: at the returned point against a tighter solve, and at points further away."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..composite import CompositeProblem
from ..control import ControlProblem
from ..duality_gap import certify
from ..protocols import FloatArray
from ..solution import Solution
from ..solve import solve
from ..sum_problem import SumProblem
from .check import Check

# relative size of a perturbation, and proximal gradient steps after it: they leave what the problem feels least,
# which is where a bound is sharp
TRIALS = ((1e-1, 0), (1e-2, 0), (1e-3, 0), (1e-5, 0), (1e-1, 20), (1e-1, 100))


def certificate(problem: Any, solution: Solution, *, seed: int = 0) -> Check | None:
    """Check the distance bound; None where there is none.

    The tighter solve starts from the solution and has a hundredth of its tolerance. The same inequality is then
    evaluated at seeded points further away, where a wrong constant shows, against the solution.
    """
    own = solution.certificate
    if own is None:
        return None
    if own.kind == "gap":
        return _gap(problem, solution, seed)
    norm = problem.controls.norm
    rounding = 1e-13 * norm(solution.x)
    tighter = solve(problem, solution.x, tolerance=max(1e-2 * solution.tolerance, 1e-14))
    if tighter.certificate is not None:
        gap = norm(solution.x - tighter.x)
        if gap > own.bound + tighter.certificate.bound + rounding:
            detail = f"a tighter solve moved the point by {gap:.1e}, the certificate allows {own.bound:.1e}"
            return Check("certificate", False, detail)
        best, left = min(
            ((s.x, s.certificate.bound) for s in (solution, tighter) if s.certificate), key=lambda p: p[1]
        )
    else:
        best, left = solution.x, own.bound
    rng = np.random.default_rng(seed)
    tried, tightest = 0, float("inf")
    for size, smoothing in TRIALS:
        h = rng.standard_normal(problem.unknowns)
        u = best + size * (norm(best) or 1.0) * h / norm(h)
        u = _smoothed(problem, u, smoothing)
        certified = _certify(problem, u, solution)
        if certified is None:
            continue
        z, bound = certified
        gap = norm(z - best)
        tried += 1
        if gap > 1.001 * bound + left + rounding:
            detail = (
                f"at a perturbation of {size:.0e} the distance is {gap:.1e} and the certificate {bound:.1e}"
            )
            return Check("certificate", False, detail + ": the bound is too small")
        if gap > 100.0 * (left + rounding):
            tightest = min(tightest, bound / gap)
    sharp = f", at best {tightest:.1f} times the distance" if np.isfinite(tightest) else ""
    detail = f"bound {own.relative:.1e} relative; true against a tighter solve and at {tried} points{sharp}"
    return Check("certificate", True, detail)


def _gap(problem: Any, solution: Solution, seed: int) -> Check:
    """The gap against the objectives of a tighter solve and of seeded points, which it has to bound, too."""
    own = solution.certificate
    assert own is not None
    tighter = solve(problem, solution.x, tolerance=max(1e-2 * solution.tolerance, 1e-14))
    least = min(problem.objective(solution.x), problem.objective(tighter.x))
    excess = problem.objective(solution.x) - least
    if excess > own.bound:
        detail = f"a tighter solve lowered the objective by {excess:.1e}, the gap is {own.bound:.1e}"
        return Check("certificate", False, detail)
    rng = np.random.default_rng(seed)
    size, sharpest = problem.controls.norm(solution.x) or 1.0, float("inf")
    rounding = 1e-13 * abs(least)
    for part, _ in TRIALS:
        h = rng.standard_normal(problem.unknowns)
        u = problem.cost.prox(solution.x + part * size * h / problem.controls.norm(h), 1e-300)
        misfit = problem.reduced_target() - problem.forward(u)
        gap = problem.duality_gap(u, misfit, problem.adjoint(misfit)).value
        excess = problem.objective(u) - least
        if excess > gap + own.bound + rounding:
            detail = f"at a perturbation of {part:.0e} the objective is {excess:.1e} above ours and the gap {gap:.1e}"
            return Check("certificate", False, detail + ": it is too small")
        if excess > 100.0 * (own.bound + rounding):
            sharpest = min(sharpest, gap / excess)
    sharp = f", at best {sharpest:.1f} times the excess" if np.isfinite(sharpest) else ""
    detail = f"gap {own.relative:.1e} of the objective's scale; true against a tighter solve"
    return Check("certificate", True, f"{detail} and at {len(TRIALS)} points{sharp}")


def _smoothed(problem: Any, u: FloatArray, steps: int) -> FloatArray:
    """Plain proximal gradient steps of a composite problem; a control problem's bound is sharp without."""
    if not isinstance(problem, CompositeProblem):
        return u
    t = problem.natural_step()
    for _ in range(steps):
        u = problem.cost.prox(u - t * problem.smooth(u)[1], t)
    return u


def _certify(problem: Any, u: FloatArray, solution: Solution) -> tuple[FloatArray, float] | None:
    """The certified point that belongs to u and its bound, by the problem's own inequality."""
    if isinstance(problem, ControlProblem):
        observed = problem.forward(u)
        v = problem.adjoint(problem.reduced_target() - observed) / problem.alpha
        z = problem.cost.prox(v, 1.0 / problem.alpha)
        difference = problem.forward(z) - observed
        bound = problem.certify(difference, problem.controls.norm(z), 0.0)
        return None if bound is None else (z, bound.bound)
    if isinstance(problem, CompositeProblem):
        z, found = problem.certify(problem.cost.prox(u, 1e-300))
        return None if found is None else (z, found.bound)
    if isinstance(problem, SumProblem):
        # with the multipliers of the solution the gap at u is that of its objective alone
        multipliers = np.concatenate([solution.multipliers[name] for name in problem.names])
        gap, found = certify(problem, problem.inside(u), multipliers)
        return None if found is None else (gap.u, found.bound)
    return None
