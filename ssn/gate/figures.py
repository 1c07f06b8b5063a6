"""What is compared: figures of an assessment that repeat, and a fingerprint of the problem itself."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..complementarity import ComplementarityProblem
from ..evidence import Assessment
from ..evidence.judge import is_statement, project
from ..problem_file import ProblemFile

# meshes of the gate: the smallest ones of SIZES
MESHES = 2
# sizes of the points at which a problem is fingerprinted; the large ones reach bounds
SCALES = (0.0, 1.0, -10.0, 1e3)
# significant digits of stored figures: far below every tolerance, above the noise of the last bit
DIGITS = 12


@dataclass(frozen=True)
class Measured:
    """One case of the gate.

    Attributes
    ----------
    problem : str
        Name of the problem file.
    case : str
        Name with the mesh size.
    identity : dict
        ``parameters``, ``unknowns`` and ``statement``: which problem this is.
    figures : dict
        See `figures`.
    failures : tuple of str
        Evidence that does not hold, the name of the check first.
    ratio : float or None
        Our seconds divided by those of the first independent method in the same run; shown, never judged.
    """

    problem: str
    case: str
    identity: dict[str, Any]
    figures: dict[str, Any]
    failures: tuple[str, ...] = ()
    ratio: float | None = None


def gate_parameters(file: ProblemFile) -> list[dict[str, Any]]:
    """Return the parameters of the cases of a file: defaults, on the two smallest of its SIZES."""
    meshes = sorted(set(file.sizes))[:MESHES] if file.has_mesh else []
    return [file.arguments(n=n) for n in meshes] or [file.arguments()]


def measured(case: str, assessment: Assessment, problem: Any) -> Measured:
    """Return a case of the gate from its assessment; `problem` is built afresh, its work is not counted."""
    identity = {
        "parameters": rounded(assessment.as_dict()["parameters"]),
        "unknowns": assessment.unknowns,
        "statement": rounded(statement(problem, assessment.unknowns)),
    }
    others = [method for method in assessment.methods[1:] if method.seconds > 0.0]
    ratio = assessment.methods[0].seconds / others[0].seconds if others else None
    return Measured(
        assessment.name, case, identity, figures(assessment), tuple(assessment.failures()),
        ratio if ratio is not None and math.isfinite(ratio) else None,
    )  # fmt: skip


def figures(assessment: Assessment) -> dict[str, Any]:
    """Return the figures of an assessment that repeat.

    Returns
    -------
    dict
        "steps", "state_solves", "operator_products"; "accuracy_met" (converged, and the recomputed accuracy is what
        was asked for); "objective"; "rate" and "order"; "agreement"; "known_values" (how many hold); "evidence" (the
        names of the checks that hold); "pieces" (sizes of the active sets).
    """
    solution, own = assessment.solution, assessment.methods[0]
    order = assessment.rate.order if assessment.rate.verdict == "superlinear" else None
    met = solution.converged and bool(own.accuracy <= 10.0 * solution.tolerance)
    return {
        "steps": len(solution.steps),
        "state_solves": solution.work.state_solves,
        "operator_products": solution.work.operator_products,
        "accuracy_met": met,
        "objective": rounded(own.objective),
        "rate": assessment.rate.verdict,
        "order": rounded(order, 4),
        "agreement": assessment.agreement,
        "known_values": sum(value.holds for value in assessment.known),
        "evidence": sorted({check.name for check in assessment.checks if check.holds}),
        "pieces": rounded(solution.pieces.sizes()),
    }


def statement(problem: Any, unknowns: int) -> list[float | None]:
    """Return a fingerprint of a problem: what it says at four fixed points, derivatives left out.

    The objective, or for complementarity and equations the norm of F, at a fixed pattern times 0, 1, -10 and 1000,
    brought into the domain of the cost. Data, parameters, bounds and weights show in it; a wrong derivative does
    not, so that it is found as a failing check of the same problem, not taken for another problem. None where
    there is no finite value.
    """
    index = np.arange(unknowns)
    pattern = 1.0 + 0.5 * np.sin(1.0 + index)
    return [_value(problem, scale * pattern) for scale in SCALES]


def _value(problem: Any, x: Any) -> float | None:
    try:
        with np.errstate(all="ignore"):
            if not is_statement(problem):
                start = getattr(problem, "start", None)
                value = float(np.linalg.norm(problem.residual(x if start is None else np.asarray(start) + x)))
            else:
                inside = project(problem, x)
                complementarity = isinstance(problem, ComplementarityProblem)
                value = (
                    float(np.linalg.norm(problem.value(inside))) + float(np.linalg.norm(inside))
                    if complementarity
                    else float(problem.objective(inside))
                )
    except Exception:  # undefined there, whatever the way of saying so
        return None
    return value if math.isfinite(value) else None


def rounded(value: Any, to: int = DIGITS) -> Any:
    """Return plain data with floats rounded to significant digits; figures that are not finite become None."""
    if isinstance(value, float):
        return float(f"{value:.{to}g}") if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): rounded(item, to) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [rounded(item, to) for item in value]
    return value
