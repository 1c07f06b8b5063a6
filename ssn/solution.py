"""What a solve returns: fixed fields, always present."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import NotConverged
from .pieces import Pieces
from .plotting import plot_history
from .records import Certificate, StepRecord
from .status import Outcome
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Solution:
    """The result of `ssn.solve`.

    Attributes
    ----------
    x : array
        The returned point: the solution, or the best iterate where the solve failed. In the form of the start: a tuple
        or dict of arrays where a traced function has several fields.
    converged : bool
        True only where the residual computed afresh at `x` is within the tolerance.
    outcome : Outcome
        Why the solve ended; explains itself and says what to try.
    message : str
        Details of this case.
    residual_norm : float
        Norm of the equation's residual at the last evaluated iterate that led to `x`.
    accuracy : float
        The figure compared with the tolerance, computed afresh at `x`.
    steps : tuple of StepRecord
        One record a Newton step.
    start_norm : float
        Residual norm at the start.
    pieces : Pieces
        Active sets at the solution.
    multipliers : mapping of str to array
        The forces that go with the pieces; signs in the docstrings of costs and problems.
    margins : array or None
        Distance of each component to its nearest kink, in the unit of x: strict complementarity is the smallest one.
    certificate : Certificate or None
        Distance bound to the exact discrete solution, where the problem is strongly convex; bound on the objective by
        the duality gap (kind "gap") for control problems with control_weight 0.
    lower_bound : float or None
        Count and power costs: no point has a lower objective than this, by the convex envelope (up to rounding of the
        linear solves). `gap` compares it with the objective. It says nothing about the distance to a minimiser. Several
        terms: the same by the duality gap, where it is finite.
    state, adjoint : array or None
        Control problems: y and p with E'p = C'Wy(z - Cy), minus M l where the state has bounds.
    violation : float or None
        Control problems with state bounds: the largest violation, in the unit of the state.
    work : WorkCounts
        What the whole solve cost, final checks included.
    objective : float
        The objective at x; nan for equations.
    choices : mapping of str to str
        What "auto" decided and why.
    """

    x: Any
    converged: bool
    outcome: Outcome
    message: str
    residual_norm: float
    accuracy: float
    tolerance: float
    steps: tuple[StepRecord, ...]
    start_norm: float
    pieces: Pieces
    multipliers: Mapping[str, FloatArray] = field(default_factory=dict)
    margins: FloatArray | None = None
    certificate: Certificate | None = None
    lower_bound: float | None = None
    state: FloatArray | None = None
    adjoint: FloatArray | None = None
    violation: float | None = None
    work: WorkCounts = field(default_factory=WorkCounts)
    objective: float = float("nan")
    choices: Mapping[str, str] = field(default_factory=dict)
    problem: Any = field(default=None, repr=False, compare=False)
    iterate: FloatArray | None = field(default=None, repr=False, compare=False)

    def __repr__(self) -> str:
        fields = (
            self.x.values() if isinstance(self.x, dict) else self.x if isinstance(self.x, tuple) else [self.x]
        )
        size = ", ".join("x".join(map(str, np.shape(field))) for field in fields)
        certified = ""
        if self.certificate is not None:
            bound = self.certificate
            certified = f", certified to {bound.relative:.1e}"
            if bound.kind == "gap":
                certified = f", objective certified to {bound.relative:.1e}"
            elif not np.isfinite(bound.relative):
                certified = f", zero within {bound.bound:.1e}"
        return (
            f"Solution({self.outcome.value}, {len(self.steps)} steps, accuracy {self.accuracy:.1e}{certified}, "
            f"x of shape {size})"
        )

    def require(self) -> Solution:
        """Return self, or raise `NotConverged` (with this solution attached) unless converged."""
        if not self.converged:
            raise NotConverged(
                f"{self.outcome.value}: {self.message or self.outcome.explanation} {self.outcome.advice}",
                self,
            )
        return self

    @property
    def gap(self) -> float | None:
        """(objective - lower bound) / |objective|, the most that another point can gain; None without a bound."""
        if self.lower_bound is None:
            return None
        return float((self.objective - self.lower_bound) / max(abs(self.objective), 1e-300))

    @property
    def contractions(self) -> list[float]:
        """Residual norm after each step divided by that before."""
        return [s.contraction for s in self.steps]

    def history(self) -> str:
        """Return the steps as a text table."""
        lines = [
            f"{'step':>4} {'residual':>9} {'accuracy':>9} {'length':>7} {'inner':>5} {'changes':>8}  action"
        ]
        lines.append(f"{0:>4} {self.start_norm:9.1e}")
        for s in self.steps:
            changes = "-" if s.piece_changes is None else str(s.piece_changes)
            reason = f" ({s.reason})" if s.reason else ""
            lines.append(
                f"{s.index:>4} {s.residual_norm:9.1e} {s.accuracy:9.1e} {s.length:7.3g} {s.inner_iterations:>5} "
                f"{changes:>8}  {s.action}{reason}"
            )
        return "\n".join(lines)

    def plot(self, path: Any = None) -> Any:
        """Draw residual norm, accuracy and changes of the active sets over the steps.

        Parameters
        ----------
        path : str or path, optional
            File to write; without it the matplotlib figure is returned.

        Raises
        ------
        MissingExtraError
            Where matplotlib is not installed.
        """
        return plot_history(self, path)
