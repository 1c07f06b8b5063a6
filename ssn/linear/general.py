"""Newton systems of a general equation: sparse or dense factors; Krylov iterations for operators and large matrices."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, cg, gmres

from ..protocols import Direction, Evaluation, Linearization
from .boundary import as_square
from .direct import Factorization, SingularMatrixError
from .preconditioned import PreconditionedMatrix, checked_preconditioner, krylov, why_iterate


class GeneralSolver:
    """Solve G(x) d = -F(x), keeping symbolic work while the pattern of G stays.

    A preconditioner that the equation brings is used, whatever G is. Without one a matrix is factorised, or, where
    that would be too much (`preconditioned.why_iterate`), preconditioned. A matrix on which the iteration fails is
    factorised, and so are those after it.

    Parameters
    ----------
    equation : GeneralEquation
    max_inner : int
        Krylov iterations at most.

    Notes
    -----
    What was decided about large matrices, and why, is left in ``equation.linear_note`` for ``Solution.choices``.
    """

    name = "general"

    def __init__(self, equation: Any, *, max_inner: int = 2000) -> None:
        self.equation = equation
        self.max_inner = max_inner
        self._factor: Factorization | None = None
        self._claims: tuple[bool, bool] = (False, False)
        self._iterate = True

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d; the residual of the system is computed."""
        linearization = self.equation.linearize(at.x)
        derivative = linearization.derivative
        claims = (bool(linearization.symmetric), bool(linearization.positive_definite))
        matrix: Any = derivative
        if not isinstance(derivative, LinearOperator):
            data = sp.csr_array(derivative).data if sp.issparse(derivative) else np.asarray(derivative)
            if not np.isfinite(data).all():
                return Direction(None, np.inf, 0, "singular", "the derivative has NaN or infinite entries")
            matrix = as_square(derivative, "the derivative")
        given = self._given(linearization, at)
        if given is not None and self._iterate:
            found = self._with(given, matrix, at, forcing, claims[1])
            if found.status == "solved" or isinstance(matrix, LinearOperator):
                return found
            self._go_direct("with the preconditioner given", found)
        if isinstance(matrix, LinearOperator):
            return self._krylov(matrix, at, forcing, claims)
        reason = why_iterate(matrix) if self._iterate else None
        if reason is not None:
            large = self._large(matrix, reason, at, forcing, claims[1])
            if large is not None:
                return large
        return self._direct(matrix, at, claims)

    def _given(self, linearization: Linearization, at: Evaluation) -> LinearOperator | None:
        """The preconditioner of the linearisation, else of the equation."""
        if getattr(linearization, "preconditioner", None) is not None:
            return checked_preconditioner(linearization.preconditioner, at.x.size)
        return checked_preconditioner(getattr(self.equation.user, "preconditioner", None), at.x.size)

    def _with(
        self, preconditioner: LinearOperator, matrix: Any, at: Evaluation, forcing: float, definite: bool
    ) -> Direction:
        x, left, inner = krylov(
            matrix, -at.residual, forcing, preconditioner, definite=definite, max_inner=self.max_inner,
            work=self.equation.work,
        )  # fmt: skip
        if left > 0.999:
            return Direction(None, left, inner, "singular", "the preconditioned iteration made no progress")
        return Direction(x, left, inner, "solved" if left <= 1.01 * forcing else "inaccurate")

    def _large(
        self, matrix: Any, reason: tuple[str, str], at: Evaluation, forcing: float, definite: bool
    ) -> Direction | None:
        """A direction by iteration, None where that fails."""
        kind, why = reason
        try:
            system = PreconditionedMatrix(matrix, kind, definite=definite, work=self.equation.work)
        except SingularMatrixError as error:
            self._go_direct(f"{kind}: {error}", None)
            return None
        x, left, inner = system.solve(-at.residual, forcing)
        if left > 1.01 * forcing:
            self._go_direct(f"with {kind}", Direction(x, left, inner))
            return None
        self.equation.linear_note = f"general: {kind} ({why})"
        return Direction(x, left, inner)

    def _go_direct(self, what: str, found: Direction | None) -> None:
        self._iterate = False
        left = "" if found is None else f" left {found.relative_residual:.1e}"
        self.equation.linear_note = f"general: direct, the iteration {what}{left}"

    def _direct(self, matrix: Any, at: Evaluation, claims: tuple[bool, bool]) -> Direction:
        work = self.equation.work
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
