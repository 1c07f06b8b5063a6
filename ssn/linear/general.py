"""Newton systems of a general equation: sparse or dense LU, Cholesky where the user says so, GMRES for operators."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, cg, gmres

from ..protocols import Direction, Evaluation
from .boundary import as_square
from .direct import Factorization, SingularMatrixError


class GeneralSolver:
    """Solve G(x) d = -F(x), keeping symbolic work while the pattern of G stays.

    Parameters
    ----------
    equation : GeneralEquation
    max_inner : int
        Krylov iterations at most.
    """

    name = "general"

    def __init__(self, equation: Any, *, max_inner: int = 2000) -> None:
        self.equation = equation
        self.max_inner = max_inner
        self._factor: Factorization | None = None
        self._claims: tuple[bool, bool] = (False, False)

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d; the residual of the system is computed."""
        equation, work = self.equation, self.equation.work
        linearization = equation.linearize(at.x)
        derivative = linearization.derivative
        claims = (bool(linearization.symmetric), bool(linearization.positive_definite))
        if isinstance(derivative, LinearOperator):
            return self._krylov(derivative, at, forcing, claims)
        data = sp.csr_array(derivative).data if sp.issparse(derivative) else np.asarray(derivative)
        if not np.isfinite(data).all():
            return Direction(None, np.inf, 0, "singular", "the derivative has NaN or infinite entries")
        matrix = as_square(derivative, "the derivative")
        try:
            if self._factor is not None and self._claims == claims:
                self._factor.refactorize(matrix)
            else:
                self._factor = Factorization(
                    matrix, symmetric=claims[0], positive_definite=claims[1], work=work
                )
                self._claims = claims
        except SingularMatrixError as error:
            self._factor = None
            return Direction(None, np.inf, 0, "singular", f"singular Newton system: {error}")
        work.linear_solves += 1
        d = self._factor.solve(-at.residual)
        left = float(np.linalg.norm(matrix @ d + at.residual) / np.linalg.norm(at.residual))
        return Direction(d, left, 0, "solved" if left < 1e-6 else "inaccurate")

    def _krylov(
        self, operator: LinearOperator, at: Evaluation, forcing: float, claims: tuple[bool, bool]
    ) -> Direction:
        iterations = 0
        work = self.equation.work

        def apply(x: Any) -> Any:
            nonlocal iterations
            iterations += 1
            work.operator_products += 1
            return operator @ x

        counted = LinearOperator(operator.shape, matvec=apply, dtype=np.float64)
        if claims[1]:
            d, _ = cg(counted, -at.residual, rtol=forcing, atol=0.0, maxiter=self.max_inner)
        else:
            restart = min(100, at.x.size)
            d, _ = gmres(
                counted,
                -at.residual,
                rtol=forcing,
                atol=0.0,
                maxiter=self.max_inner // restart + 1,
                restart=restart,
            )
        left = float(np.linalg.norm(apply(d) + at.residual) / np.linalg.norm(at.residual))
        if not np.isfinite(left) or left > 0.999:
            return Direction(None, left, iterations, "singular", "the Krylov solver made no progress")
        return Direction(d, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate")
