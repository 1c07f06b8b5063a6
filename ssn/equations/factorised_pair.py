"""The optimality system of a control problem in state and adjoint, where the state equation can be solved exactly.

`CoupledEquation` for E symmetric or not: what that estimates by multigrid cycles is a solve here, so that the residual
norm of each evaluation is the bound of its distance to the solution.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..inner import relative
from ..linear.schur import SchurOperators
from ..pieces import Pieces
from ..protocols import Evaluation
from ..records import Certificate
from .coupled import EPS, CoupledEquation, CoupledPoint

FloatArray = npt.NDArray[np.float64]


class FactorisedPairEquation(CoupledEquation):
    """F(y, p) = 0 with x = [y, p] as iterate, and a state model that solves.

    Parameters
    ----------
    problem : ControlProblem
        One that `ssn.linear.schur.refusal` has nothing against.
    """

    def _operators_of(self, problem: Any) -> Any:
        """The operators of the pair, with exact solves: no hierarchy is built."""
        return SchurOperators(problem)

    def evaluate(self, x: FloatArray) -> Evaluation:
        """Both residuals, and two solves with the state operator for their norm."""
        first, second, v, u = self.residuals(x)
        residual = np.concatenate([first, second])
        if not np.isfinite(residual).all():
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        step = 1.0 / self.alpha
        errors = self.operators.errors(second, first / self.operators.root)
        norm = self.size_of(*errors)
        accuracy = relative(norm / self.operators.root, self.control_size(u, v))
        data = CoupledPoint(v, u, self.cost.prox_derivative(v, step), errors)
        return Evaluation(x, residual, norm, accuracy, self.cost.pieces(v, step), data)

    def rounding(self, x: FloatArray, u: FloatArray) -> float:
        """The energy that rounding errors of the residuals leave, estimated with signs without order."""
        y, p = x[: self.size], x[self.size :]
        signs = EPS * (((np.arange(self.size) * 2654435761) >> 16 & 2) - 1.0)
        second = abs(self.operators.state) @ abs(y) + abs(self.control_load(u))
        first = abs(self.operators.matrix) @ abs(p) + abs(self.state_load(y))
        return self.energy(signs * first, signs * second)

    def collect(self, x: FloatArray, tolerance: float) -> tuple[FloatArray, float, dict[str, Any]]:
        """Control, accuracy computed afresh, and the fields of `Solution` at an iterate."""
        u, accuracy, fields = super().collect(x, tolerance)
        certificate: Certificate = fields["certificate"]
        fields["certificate"] = replace(certificate, method="residuals of state and adjoint equation")
        return u, accuracy, fields
