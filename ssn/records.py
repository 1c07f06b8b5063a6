"""Immutable records of what a solve did. Counts and norms only, no wall time: they repeat bit for bit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from .work import WorkCounts


@dataclass(frozen=True)
class StepRecord:
    """One Newton step.

    Attributes
    ----------
    index : int
        1 for the first step.
    residual_norm, accuracy : float
        After the step, in the equation's norm; `accuracy` is what the tolerance is compared with.
    contraction : float
        Residual norm after the step divided by that before.
    action : str
        What the globalisation did: "full step", "exact search", "halved", a fallback by name.
    reason : str
        Why, where it was not the plain step.
    length : float
        Step length.
    evaluations : int
        Residual or merit evaluations of the search.
    forcing, linear_residual : float
        Relative accuracy asked of the Newton system, and what was reached.
    inner_iterations : int
        Krylov or subspace iterations.
    piece_changes : int or None
        Components whose smooth piece changed in this step.
    pieces : mapping
        Sizes of the active sets after the step.
    work : WorkCounts
        What the step cost.
    """

    index: int
    residual_norm: float
    accuracy: float
    contraction: float
    action: str
    reason: str
    length: float
    evaluations: int
    forcing: float
    linear_residual: float
    inner_iterations: int
    piece_changes: int | None
    pieces: Mapping[str, Mapping[str, int]] = field(default_factory=dict)
    work: WorkCounts = field(default_factory=WorkCounts)
    stage: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Return the record as plain data for JSON."""
        data = dict(vars(self))
        data["work"] = self.work.as_dict()
        data["pieces"] = {name: dict(sizes) for name, sizes in self.pieces.items()}
        return data


@dataclass(frozen=True)
class Certificate:
    """A proven bound for the returned point and the discrete problem: on a distance, or on an excess of the objective.

    Attributes
    ----------
    bound : float
        ||x - x*|| <= bound, in the weighted norm of the unknown; for kind "gap" objective(x) - minimum <= bound.
    relative : float
        The bound divided by ||x||; for kind "gap" by the scale of the objective, the sum of the absolute values of its
        parts at x (and a ten-thousandth of 1/2 ||z||^2).
    method : str
        Which inequality gives it.
    solve_error : float
        The part of the bound that accounts for rounding in the linear solves; estimated by one step of
        iterative refinement, times two.
    kind : {"distance", "gap"}
        "gap" where the problem is not strongly convex: a duality gap bounds no distance.
    """

    bound: float
    relative: float
    method: str
    solve_error: float = 0.0
    kind: str = "distance"

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return dict(vars(self))
