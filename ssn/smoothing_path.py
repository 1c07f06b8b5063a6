"""Smoothing path: follow the roots of the smoothed equation as eps falls, and end with plain steps at eps = 0.

At each point one plain Newton step at eps = 0 is tried; while plain steps contract, or the pieces at the start of a
piecewise affine equation settle, they go on, and their point is taken when they converge. Otherwise the smoothed
equation is solved roughly at eps, eps falls by a factor (a smaller one after an easy point, a larger one after a hard
point), and so on.
The path is guaranteed for monotone-like (P0) maps with bounded level sets; where it does not work it stops and says so.
Equations that have another form and an interior (complementarity) are then tried in other ways, in this order, each
with a share of the steps left: plain steps from the start, the path on the Fischer-Burmeister form, and paths that
begin inside the bounds with a large eps, where the start is forgotten. The stage of each record names the way.

Source: B. Chen and P. T. Harker, SIAM J. Matrix Anal. Appl. 14 (1993) 1168-1190; C. Kanzow, SIAM J. Matrix Anal.
Appl. 17 (1996) 851-868 (both from memory), for the smoothed minimum.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from .globalization import FullStep, ResidualSearch
from .newton import Limits, LoopResult, run
from .protocols import FloatArray, Globalization
from .records import StepRecord
from .status import Outcome

ENDS = (Outcome.CONVERGED, Outcome.STOPPED, Outcome.INTERRUPTED)
# ways to go on where the path from the start fails: steps at most
PLAIN_STEPS = 15
WAY_STEPS = 40
# share of all steps that the ways may use: the rest is for the search from the best point, which tells why it fails
WAYS_SHARE = 0.85
# lengths below 2^-HALVINGS are not tried at a point of a nonlinear equation: a regularised step does better
HALVINGS = 6
# relative residual at most of an iterative solve that decides about pieces
AFFINE_FORCING = 1e-3


@dataclass(frozen=True)
class SmoothingPath:
    """How eps falls.

    Parameters
    ----------
    factor : float
        eps is multiplied by it after a point.
    point_steps : int
        Newton steps at most at one point.
    contraction : float
        Plain steps go on while each cuts the residual norm to this fraction; on a piecewise affine equation to this
        fraction of the norm before it or of that one step earlier.
    settling : float
        At the start of a piecewise affine equation they also go on without contracting while the pieces settle: the
        first step changes at most this fraction of the pieces, the second at most half as many as the first, further
        ones no more than the one before. The solution on a coarser mesh is near enough in this sense long before its
        residual contracts.
    patience : int
        Steps at most that go on in this way.
    least : float
        eps at which the path is given up, as a fraction of the first one.
    interior : tuple of float
        First eps of the paths that begin inside the bounds, where the path from the start fails; in units of the size
        of x.
    """

    factor: float = 0.1
    point_steps: int = 12
    contraction: float = 0.3
    settling: float = 0.1
    patience: int = 4
    least: float = 1e-12
    interior: tuple[float, ...] = (1.0, 10.0, 0.1)


def follow_smoothing(
    equation: Any,
    make_solver: Callable[[Any], Any],
    start: FloatArray,
    limits: Limits,
    path: SmoothingPath,
    callback: Callable[[StepRecord], None] | None,
    first_index: int = 1,
) -> LoopResult:
    """Run the path for an equation with ``smoothed(eps)``; the best plain evaluation is returned."""
    follower = _Follower(equation, make_solver, start, limits, path, callback, first_index)
    return follower.result if follower.done() else follower.all_ways()


class _Follower:
    """One solve: the records of all ways, the best point, and the steps left."""

    def __init__(
        self,
        equation: Any,
        make_solver: Callable[[Any], Any],
        start: FloatArray,
        limits: Limits,
        path: SmoothingPath,
        callback: Callable[[StepRecord], None] | None,
        first_index: int,
    ) -> None:
        self.equation, self.make_solver = equation, make_solver
        self.limits, self.path = limits, path
        self.callback, self.first_index = callback, first_index
        at = equation.evaluate(start)
        self.start = at.x
        self.most = limits.max_steps
        self.result = LoopResult(at, at, Outcome.STALLED, "", start_norm=at.norm, start_accuracy=at.accuracy)
        self._ended = not at.finite
        if not at.finite:
            self.result.outcome = Outcome.NOT_FINITE
            self.result.message = "the residual at the start is NaN or infinite"

    def all_ways(self) -> LoopResult:
        """The path from the start, then the other ways while steps are left."""
        equation, result = self.equation, self.result
        first = equation.smoothing_scale(result.best)
        if not hasattr(equation, "other_form"):
            self._follow(equation, self.start, first, self.limits.max_steps, "")
            return result
        hard_points = 2 if equation.piecewise_affine else 1
        self._follow(equation, self.start, first, self.limits.max_steps, "", hard_points)
        if self.done():
            return result
        self.most = max(1, int(WAYS_SHARE * self.limits.max_steps))
        way = "plain steps from the start"
        # on an affine equation they settle a layer of the contact set a step, or recur, which ends them
        self._plain(equation, self.start, WAY_STEPS if equation.piecewise_affine else PLAIN_STEPS, way)
        if self.done():
            return result
        other = equation.other_form()
        other.rescale(self.start)
        first = other.smoothing_scale(other.evaluate(self.start))
        self._follow(other, self.start, first, WAY_STEPS, f"{other.form}, ")
        for size in self.path.interior:
            if self.done():
                break
            distance = size * max(1.0, equation.typical(self.start))
            inside = equation.interior(self.start, distance)
            self._follow(other, inside, distance, WAY_STEPS, f"{other.form} from inside the bounds, ")
        return result

    def done(self) -> bool:
        """Whether the solve has ended: settled, stopped, or out of steps."""
        return self._ended

    def _left(self) -> int:
        return max(0, self.most - len(self.result.steps))

    def _stage(
        self,
        equation: Any,
        solver: Any,
        globalization: Globalization,
        at: FloatArray,
        limits: Limits,
        name: str,
    ) -> LoopResult:
        part = run(
            equation, solver, globalization, at, replace(limits, max_steps=max(0, min(limits.max_steps, self._left()))),
            callback=self.callback, first_index=self.first_index + len(self.result.steps), stage=name,
        )  # fmt: skip
        self.result.steps.extend(part.steps)
        return part

    def _plain(self, equation: Any, x: FloatArray, steps: int, name: str) -> None:
        """Plain steps at eps = 0 while they stay within a bound; they end the solve where they converge."""
        _rescaled(equation, x)
        solver = self.make_solver(equation)
        last_step = len(self.result.steps) + steps
        while not self.done():
            left = last_step - len(self.result.steps)
            part = self._stage(equation, solver, FullStep(), x, replace(self.limits, max_steps=left), name)
            unconfirmed = self._keep(equation, part)
            if not unconfirmed or not part.steps:
                return
            x = part.last.x

    def _keep(self, equation: Any, part: LoopResult) -> bool:
        """Remember the best point; end where the part settled the solve or no steps are left.

        True where the part converged, but not with F in the unit of x at its last point.
        """
        result = self.result
        unconfirmed = False
        if part.outcome is Outcome.CONVERGED and hasattr(equation, "confirmed"):
            part.best = part.last = equation.confirmed(part.best)
            if not part.best.accuracy <= self.limits.tolerance:
                part.outcome, unconfirmed = Outcome.STEP_LIMIT, part.best.finite
        if part.best.accuracy < result.best.accuracy or part.outcome is Outcome.CONVERGED:
            result.best = part.best
        if part.outcome in ENDS:
            result.outcome, result.message, result.last = part.outcome, part.message, part.last
            self._ended = True
        elif self._left() <= 0:
            result.outcome, result.message = Outcome.STEP_LIMIT, f"{len(result.steps)} steps taken"
            self._ended = True
        return unconfirmed

    def _follow(
        self, equation: Any, x: FloatArray, eps: float, steps: int, way: str, hard_points: int = 2
    ) -> None:
        """One path from x with the first eps."""
        path, result = self.path, self.result
        last_step = min(self.limits.max_steps, len(result.steps) + steps)
        solver = self.make_solver(equation)
        smoothed_solver: Any = None
        first, hard = eps, 0
        affine = bool(getattr(equation, "piecewise_affine", False))
        while not self.done():
            at, slow, earlier, settled = x, 0, 0.0, False
            allowed = path.settling * x.size if affine and eps == first else 0.0
            while True:  # plain steps, as long as they contract or the pieces of the start settle
                _rescaled(equation, at)
                previous = equation.evaluate(at).norm
                # the pieces of an affine equation are as good as the linear solve; once they stay, one tight solve ends
                forcing = min(self.limits.forcing, AFFINE_FORCING) if affine else self.limits.forcing
                one = replace(self.limits, max_steps=1, forcing=forcing, exact=self.limits.exact or settled)
                part = self._stage(equation, solver, FullStep(), at, one, f"{way}eps = 0")
                self._keep(equation, part)
                if self.done():
                    return
                if not part.steps or not part.last.finite:
                    break
                changes = part.steps[-1].piece_changes or 0
                if part.last.norm > path.contraction * max(previous, earlier):
                    slow += 1
                    if not 0.0 < allowed >= changes or slow > path.patience:
                        break
                # the second step must change half as many pieces as the first, further ones no more than the last
                allowed = min(allowed, 0.5 * changes if at is x else changes)
                at, earlier, settled = part.last.x, previous if affine else 0.0, affine and changes == 0
            _rescaled(equation, x)
            smoothed = equation.smoothed(eps)
            if smoothed_solver is None:
                smoothed_solver = self.make_solver(smoothed)
            smoothed_solver.equation = smoothed  # the pattern stays, and with it the symbolic factorisation
            search = ResidualSearch(memory=1, max_halvings=10 if affine else HALVINGS).fresh()
            point = Limits(tolerance=0.5, max_steps=min(path.point_steps, last_step - len(result.steps)))
            part = self._stage(smoothed, smoothed_solver, search, x, point, f"{way}eps = {eps:.1e}")
            if part.outcome in (Outcome.STOPPED, Outcome.INTERRUPTED):
                result.outcome, result.message = part.outcome, part.message
                self._ended = True
                return
            result.outcome = Outcome.STALLED
            result.message = f"{way}the smoothing path makes no progress at eps = {eps:.1e}"
            if part.outcome in (Outcome.NOT_FINITE, Outcome.SINGULAR):
                result.outcome, result.message = part.outcome, part.message
                return
            if self._left() <= 0:
                result.outcome = Outcome.STEP_LIMIT
                result.message = f"{len(result.steps)} steps taken"
                self._ended = True
                return
            x = part.last.x
            hard = 0 if part.outcome is Outcome.CONVERGED else hard + 1
            if hard >= hard_points or eps < path.least * first or len(result.steps) >= last_step:
                return
            if hard == 0:
                eps *= path.factor


def _rescaled(equation: Any, x: FloatArray) -> bool:
    """Bring F to the unit of x at this point, where the equation can."""
    rescale = getattr(equation, "rescale", None)
    return rescale is not None and bool(rescale(x))
