"""Figures of a solve that repeat exactly."""

from __future__ import annotations

import json
import os
import tempfile
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from ..evidence import judge, rate
from ..evidence.agreement import decide
from ..evidence.check import describe
from ..evidence.compare import library_results
from ..evidence.references import references
from ..solution import Solution
from ..solve import solve
from .cases import ProblemBenchmarks
from .remembered import CaseFailedError, remembered

#: Figure -> (unit, what it is).
FIGURES = {
    "unsolved": ("0 or 1", "1 where the solve has not converged; all other figures then fail."),
    "newton_steps": ("steps", "Newton steps of the solve."),
    "state_solves": ("solves", "Solves with the state operator or its adjoint, final checks included."),
    "operator_products": ("products", "Products with matrices of the problem, final checks included."),
    "order_shortfall": (
        "2 - order",
        "What the observed order lacks to 2: 0 for exact or at least quadratic convergence, 1 for linear, 2 for none "
        "and where rounding leaves the order undecided.",
    ),
    "distance": (
        "relative",
        "Distance of the nearest independent method's point to ours; the tolerance where it is nearer.",
    ),
    "disagreement": ("0 or 1", "0 where the agreement with an independent method holds, else 1."),
    "accuracy": (
        "relative",
        "Accuracy recomputed at the returned point; the tolerance where it is better, since that is left to chance.",
    ),
}

# Of the order's digits: more differ from one platform to the next.
ORDER_DIGITS = 2


class FigureBenchmarks(ProblemBenchmarks):
    """Figures that repeat exactly; lower is better."""

    def setup_cache(self) -> str:
        """Make the directory that keeps the figures of this run; asv removes it."""
        return tempfile.mkdtemp(prefix="figures-", dir=os.getcwd())

    setup_cache.timeout = 600  # type: ignore[attr-defined]

    def _figure(self, name: str, directory: str, values: Sequence[Any]) -> Any:
        key = json.dumps([str(self.path), self.version, self.tolerance, repr(values)])
        found = remembered(directory, key, lambda: self._measure(values))
        if name not in found["figures"]:
            raise CaseFailedError(found["reasons"].get(name) or found["reasons"]["unsolved"])
        return found["figures"][name]

    def _measure(self, values: Sequence[Any]) -> dict[str, Any]:
        """All figures of a case, and the reasons why some are missing."""
        problem = self._build(values)
        solution = solve(problem, tolerance=self.tolerance)
        if not solution.converged:
            why = f"{solution.outcome.value}: {solution.message}\n{solution.history()}"
            return {"figures": {"unsolved": 1}, "reasons": {"unsolved": why}}
        figures: dict[str, Any] = {
            "unsolved": 0,
            "newton_steps": len(solution.steps),
            "state_solves": solution.work.state_solves,
            "operator_products": solution.work.operator_products,
        }
        reasons: dict[str, str] = {}

        def attempt(names: Sequence[str], compute: Callable[[], Mapping[str, Any]]) -> None:
            try:
                figures.update(compute())
            except Exception as error:
                reasons.update(dict.fromkeys(names, describe(error)))

        attempt(["accuracy"], lambda: {"accuracy": self._accuracy(problem, solution)})
        attempt(["order_shortfall"], lambda: {"order_shortfall": _order_shortfall(problem, solution)})
        attempt(["distance", "disagreement"], lambda: self._agreement(problem, solution, reasons))
        return {"figures": figures, "reasons": reasons}

    def _accuracy(self, problem: Any, solution: Solution) -> float:
        accuracy = judge.accuracy(judge.judged(problem, solution), solution.x)
        if not accuracy < float("inf"):
            raise ArithmeticError(f"the accuracy is {accuracy}")
        return max(accuracy, self.tolerance)

    def _agreement(self, problem: Any, solution: Solution, reasons: dict[str, str]) -> dict[str, Any]:
        stated, problem = problem, judge.judged(problem, solution)
        if stated is problem:
            found = references(
                problem, solution, budget=self.budget, agreement_tolerance=self.agreement_tolerance
            )
        else:  # hard state bounds: at the last penalty no first-order method gets anywhere
            found = library_results(stated, problem, solution, set(), self.budget, lambda text: None)
        verdict, note = decide(problem, solution, found, self.agreement_tolerance)
        figures: dict[str, Any] = {"disagreement": int(verdict != "holds")}
        late = [m.name for m in found if m.outcome == "budget used up"]
        distance = min(m.distance for m in found)
        if late:
            reasons["distance"] = (
                f"{late[0]} used up its {self.budget:g} s: the distance would not repeat ({note})"
            )
        elif not distance < float("inf"):
            reasons["distance"] = f"the distance is {distance} ({note})"
        else:
            figures["distance"] = max(distance, self.tolerance)
        return figures


def _order_shortfall(problem: Any, solution: Solution) -> float:
    speed = rate(problem, solution, samples=2)
    if speed.verdict == "exact":
        return 0.0
    if speed.holds and speed.order is not None:
        return round(max(0.0, 2.0 - speed.order), ORDER_DIGITS)
    return 1.0 if speed.verdict == "linear" else 2.0


def _tracker(name: str) -> Callable[..., Any]:
    def track(self: FigureBenchmarks, directory: str, *values: Any) -> Any:
        return self._figure(name, directory, values)

    track.__name__ = f"track_{name}"
    track.__qualname__ = f"FigureBenchmarks.track_{name}"
    track.unit, track.__doc__ = FIGURES[name]  # type: ignore[attr-defined]
    return track


for _name in FIGURES:
    setattr(FigureBenchmarks, f"track_{_name}", _tracker(_name))
