"""Newton systems of a natural residual, reduced to the range of the proximal derivative (the inactive set)."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, cg, gmres

from ..protocols import Direction, Evaluation
from ..work import WorkCounts
from .direct import Factorization, SingularMatrixError
from .preconditioned import PreconditionedMatrix, krylov, preconditioner_of, why_iterate

FloatArray = npt.NDArray[np.float64]

# directions that GMRES keeps: 20, SciPy's own choice, stalls on transport
RESTART = 100


# in exact arithmetic conjugate gradients end after one iteration an unknown; a regular system needs few times that
ROUNDS = 10


class ReducedSolver:
    """Factorise or iterate on the inactive rows and columns only.

    Explicit derivatives are factorised (Cholesky where symmetric, LU otherwise; the factor is kept while neither the
    inactive set nor the matrix changes), or iterated on with a preconditioner where that would be too much
    (`preconditioned.why_iterate`), to the forcing term; where this fails once, no more. Operators are solved by CG or
    GMRES to the forcing term, with the inactive rows and columns of a preconditioner that the map brings. A singular
    matrix is regularised by a multiple of its diagonal; the direction is then marked and the search decides about it.

    Parameters
    ----------
    equation : NaturalEquation
    max_inner : int
        Krylov iterations at most.

    Notes
    -----
    What was decided about large matrices, and why, is left in ``equation.linear_note`` for ``Solution.choices``.
    """

    name = "reduced"

    def __init__(self, equation: Any, *, max_inner: int = 2000) -> None:
        self.equation = equation
        self.max_inner = max_inner
        self._key: Any = None
        self._matrix: Any = None
        self._factor: Factorization | None = None
        self._part: Any = None
        self._current = False  # whether the factor is that of the part
        self._system: PreconditionedMatrix | None = None
        self._iterate = True

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d with R'(x) d = -R(x)."""
        equation, work = self.equation, self.equation.work
        point = at.data
        d = point.derivative.diagonal
        if d is None:
            return self._krylov_full(at, forcing)
        step = np.broadcast_to(np.asarray(point.step, dtype=np.float64), d.shape)
        direction = -at.residual
        inactive = np.flatnonzero(d > 0.0)
        if inactive.size == 0:
            return Direction(direction, 0.0, 0)
        jacobian = equation.jacobian(at.x)
        w, di = equation.weights[inactive], d[inactive]
        scale = w / (step[inactive] * di)
        extra = (1.0 - di) * scale
        fixed = direction.copy()
        fixed[inactive] = 0.0
        rhs = -at.residual[inactive] * scale
        if fixed.any():
            work.operator_products += 1
            rhs = rhs - np.asarray(jacobian @ fixed)[inactive]
        if isinstance(jacobian, LinearOperator):
            return self._krylov_reduced(jacobian, inactive, extra, rhs, direction, forcing)
        key = (inactive.tobytes(), extra.tobytes())
        data = jacobian.data if sp.issparse(jacobian) else np.asarray(jacobian)
        if not np.isfinite(data).all():
            return Direction(None, np.inf, 0, "singular", "the derivative has NaN or infinite entries")
        if jacobian is not self._matrix or key != self._key:
            self._key, self._matrix = key, jacobian
            self._part, self._system, self._current = _submatrix(jacobian, inactive, extra), None, False
            reason = why_iterate(self._part) if self._iterate else None
            if reason is not None:
                self._begin_iterating(*reason)
        if self._system is not None:
            x, left, inner = self._system.solve(rhs, forcing)
            if left <= 1.01 * forcing:
                direction[inactive] = x
                return Direction(direction, left, inner)
            self._go_direct(f"left {left:.1e}")
        return self._direct(rhs, inactive, direction)

    def _begin_iterating(self, kind: str, why: str) -> None:
        definite = bool(self.equation.symmetric)
        try:
            self._system = PreconditionedMatrix(self._part, kind, definite=definite, work=self.equation.work)
            self.equation.linear_note = f"reduced: {kind} ({why})"
        except SingularMatrixError as error:
            self._go_direct(str(error))

    def _go_direct(self, why: str) -> None:
        self._system, self._iterate = None, False
        self.equation.linear_note = f"reduced: direct, the iteration for large matrices failed: {why}"

    def _direct(self, rhs: FloatArray, inactive: npt.NDArray[np.intp], direction: FloatArray) -> Direction:
        matrix = self._part
        try:
            if not self._current:
                if self._factor is not None and self._factor.shape == matrix.shape:
                    self._factor.refactorize(matrix)
                else:
                    self._factor = self._factorize(matrix)
                self._current = True
        except SingularMatrixError as error:
            self._factor, self._key = None, None
            return self._regularised(matrix, rhs, inactive, direction, str(error))
        assert self._factor is not None
        self.equation.work.linear_solves += 1
        direction[inactive] = self._factor.solve(rhs)
        return Direction(direction, 0.0, 0)

    def _factorize(self, matrix: Any) -> Factorization:
        symmetric = bool(self.equation.symmetric)
        definite = symmetric and bool((matrix.diagonal() > 0).all())
        return Factorization(matrix, symmetric=symmetric, positive_definite=definite, work=self.equation.work)

    def _regularised(
        self, matrix: Any, rhs: FloatArray, inactive: npt.NDArray[np.intp], direction: FloatArray, why: str
    ) -> Direction:
        size = float(np.abs(matrix.diagonal()).max()) or 1.0
        for power in (-8, -4, 0):
            shift = size * 10.0**power
            shifted = matrix + shift * (
                sp.eye_array(inactive.size) if sp.issparse(matrix) else np.eye(inactive.size)
            )
            try:
                factor = self._factorize(shifted)
            except SingularMatrixError:
                continue
            direction[inactive] = factor.solve(rhs)
            message = f"singular Newton system ({why}), regularised by {shift:.1e}"
            return Direction(direction, 1.0, 0, "inaccurate", message)
        return Direction(None, np.inf, 0, "singular", why)

    def _krylov_reduced(
        self,
        jacobian: LinearOperator,
        inactive: npt.NDArray[np.intp],
        extra: FloatArray,
        rhs: FloatArray,
        direction: FloatArray,
        forcing: float,
    ) -> Direction:
        work, n = self.equation.work, direction.size
        iterations = 0

        def apply(x: FloatArray) -> FloatArray:
            nonlocal iterations
            iterations += 1
            work.operator_products += 1
            full = np.zeros(n)
            full[inactive] = x
            return np.asarray(jacobian @ full)[inactive] + extra * x

        operator = LinearOperator((inactive.size, inactive.size), matvec=apply, dtype=np.float64)
        given = preconditioner_of(self.equation, n)
        if given is not None:

            def part(x: FloatArray) -> FloatArray:
                full = np.zeros(n)
                full[inactive] = np.ravel(x)
                return np.asarray(given @ full)[inactive]

            approximate = LinearOperator(operator.shape, matvec=part, dtype=np.float64)
            x, left, _ = krylov(
                operator, rhs, forcing, approximate, definite=bool(self.equation.symmetric),
                max_inner=self.max_inner, work=WorkCounts(),
            )  # fmt: skip
            if not np.isfinite(left):
                return Direction(
                    None, np.inf, iterations, "singular", "the preconditioned iteration broke down"
                )
            direction[inactive] = x
            return Direction(
                direction, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate"
            )
        most = min(self.max_inner, ROUNDS * inactive.size + 20)
        if self.equation.symmetric:
            x, _ = cg(operator, rhs, rtol=forcing, atol=0.0, maxiter=most)
        else:
            restart = min(RESTART, inactive.size)
            rounds = most // restart + 1
            x, _ = gmres(operator, rhs, rtol=forcing, atol=0.0, maxiter=rounds, restart=restart)
        size = float(np.linalg.norm(rhs))
        left = float(np.linalg.norm(rhs - apply(x))) / size if size > 0 else 0.0
        if not np.isfinite(left):
            return Direction(None, np.inf, iterations, "singular", "the Krylov solver broke down")
        direction[inactive] = x
        return Direction(direction, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate")

    def _krylov_full(self, at: Evaluation, forcing: float) -> Direction:
        point, work = at.data, self.equation.work
        jacobian = self.equation.jacobian(at.x)
        iterations = 0

        def apply(x: FloatArray) -> FloatArray:
            nonlocal iterations
            iterations += 1
            work.operator_products += 1
            inside = x - point.step * np.asarray(jacobian @ x) / self.equation.weights
            return x - point.derivative.apply(inside)

        n = at.x.size
        operator = LinearOperator((n, n), matvec=apply, dtype=np.float64)
        rounds = self.max_inner // RESTART + 1
        x, _ = gmres(operator, -at.residual, rtol=forcing, atol=0.0, maxiter=rounds, restart=RESTART)
        left = float(np.linalg.norm(apply(x) + at.residual) / np.linalg.norm(at.residual))
        if not np.isfinite(left):
            return Direction(None, np.inf, iterations, "singular", "GMRES broke down")
        return Direction(x, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate")


def _submatrix(matrix: Any, rows: npt.NDArray[np.intp], diagonal: FloatArray) -> Any:
    if sp.issparse(matrix):
        part = sp.csr_array(matrix)[rows][:, rows]
        return sp.csc_array(part + sp.diags_array(diagonal)) if diagonal.any() else sp.csc_array(part)
    part = np.asarray(matrix)[np.ix_(rows, rows)]
    return part + np.diag(diagonal) if diagonal.any() else part
