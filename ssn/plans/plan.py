"""A problem made ready for the loop, and what several kinds of problems share."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from ..augmented_lagrangian import MultiplierPath
from ..easier_weight import Detour
from ..envelope_start import EnvelopeStart, has_relaxation
from ..equations.natural import NaturalEquation
from ..gap_path import GapPath
from ..moreau_yosida import PenaltyPath
from ..primal_dual_path import PrimalDualPath
from ..protocols import FloatArray, Globalization, LinearSolver
from ..proximal_point import ProximalPointPath
from ..smoothing_path import SmoothingPath
from ..validate import float_array

LOCAL_CHOICES = {
    "equation": "natural residual",
    "globalization": "envelope: the forward-backward envelope falls at every step",
}


@dataclass
class Plan:
    """A problem made ready for the loop: equation, linear solver, globalisation, start, and why."""

    problem: Any
    equation: Any
    solver: LinearSolver
    globalization: Globalization
    start: FloatArray
    choices: dict[str, str]
    path: GapPath | ProximalPointPath | None = None
    polish: NaturalEquation | None = None
    smoothing: SmoothingPath | None = None
    penalty: PenaltyPath | None = None
    plain_steps: int = 0
    multipliers: MultiplierPath | None = None
    relaxation: EnvelopeStart | None = None
    primal_dual: PrimalDualPath | None = None
    unpack: Callable[[FloatArray], Any] | None = None
    otherwise: Callable[[FloatArray], Plan] | None = None
    detour: Detour | None = None


def start_array(start: Any, size: int, name: str = "start") -> FloatArray | None:
    """The start as a float array of that size, or None."""
    return None if start is None else float_array(start, name, shape=(size,))


def relaxed_first(plan: Plan, start: FloatArray | None) -> Plan:
    """The plan with the convex envelope before it, where there is one and no start was given."""
    if start is None and has_relaxation(plan.problem):
        plan.relaxation = EnvelopeStart()
        plan.choices["path"] = "convex envelope: starts and a lower bound, then Newton steps on the support"
    return plan
