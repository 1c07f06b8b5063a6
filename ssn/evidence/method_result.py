"""What one method did, judged by the same yardstick as the others."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ..inner import relative
from ..protocols import FloatArray
from ..solution import Solution
from . import judge
from .check import plain

OURS = "semismooth Newton"


@dataclass(frozen=True)
class MethodResult:
    """What one method did, judged by our measures.

    Attributes
    ----------
    name : str
    converged : bool
        By the method's own stopping rule.
    outcome : str
    objective, accuracy : float
        Evaluated afresh at the method's point by the problem's own measure.
    steps, state_solves, operator_products : int or None
        None where the method does not tell.
    seconds : float
        Wall time: a profile, not evidence; nan where the solution was given.
    distance : float
        Weighted relative distance to the semismooth Newton solution.
    certificate : dict or None
        The method's own bound on its distance to the exact solution: bound, relative, method.
    note : str
    x : array or None
        The point.
    """

    name: str
    converged: bool
    outcome: str
    objective: float
    accuracy: float
    steps: int | None
    state_solves: int | None
    operator_products: int | None
    seconds: float
    distance: float
    certificate: dict[str, Any] | None = None
    note: str = ""
    x: FloatArray | None = field(default=None, repr=False, compare=False)

    @property
    def bound(self) -> float | None:
        """The method's own relative bound on a distance, if any."""
        return (
            None
            if self.certificate is None or self.certificate.get("kind") == "gap"
            else float(self.certificate["relative"])
        )

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON, without the point and the note."""
        return {key: plain(value) for key, value in vars(self).items() if key not in ("note", "x")}


def ours(problem: Any, solution: Solution, seconds: float) -> MethodResult:
    """The result of `ssn.solve` as one method among others."""
    certificate = None if solution.certificate is None else solution.certificate.as_dict()
    x, finite = solution.x, bool(np.isfinite(solution.x).all())
    return MethodResult(
        OURS, solution.converged, solution.outcome.value, judge.objective(problem, x),
        judge.accuracy(problem, x) if finite else float("inf"), len(solution.steps), solution.work.state_solves,
        solution.work.operator_products, seconds, 0.0, certificate, solution.message, x,
    )  # fmt: skip


def own_bound(problem: Any, x: FloatArray, bound: float | None) -> dict[str, Any] | None:
    """A method's own bound in the form of a certificate."""
    if bound is None:
        return None
    return {
        "bound": bound,
        "relative": relative(bound, judge.norm(problem, x)),
        "method": "the method's own bound",
    }
