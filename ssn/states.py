"""State models: how a control problem solves its equation and the adjoint one."""

from __future__ import annotations

from typing import Any, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError
from .linear.boundary import as_square, is_symmetric
from .linear.direct import Factorization, SingularMatrixError
from .linear.multigrid import MultigridError, MultigridSolver
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]

# rows up to which "auto" factorises: beyond, in space, factors do not fit into memory
DIRECT_UP_TO = 200_000


@runtime_checkable
class StateModel(Protocol):
    """A linear state equation E y = b. A host's own simulator fits by having these members."""

    size: int

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        ...

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E y = rhs."""
        ...

    def adjoint_solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E' p = rhs, E' the transpose."""
        ...

    def residual(self, y: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E y."""
        ...

    def adjoint_residual(self, p: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E' p."""
        ...


class SteadyState:
    """The steady linear state equation E y = b, factorised once.

    Parameters
    ----------
    E : sparse array or array, shape (n, n)
        Regular, symmetric or not.
    solver : {"auto", "direct", "multigrid"}
        "direct" factorises (CHOLMOD or SuperLU). "multigrid" solves to a relative residual of `accuracy` by conjugate
        gradients with a pyamg cycle (symmetric positive definite E only). "auto" is "direct", but "multigrid" where a
        sparse symmetric E with a positive diagonal has more than 200,000 rows; should that fail, "direct" again.
    accuracy : float
        For "multigrid".

    Raises
    ------
    InputError
        For a matrix that is not square, not finite, or singular.
    """

    def __init__(self, E: Any, *, solver: str = "auto", accuracy: float = 1e-12) -> None:
        self.matrix = as_square(E, "E")
        if isinstance(self.matrix, LinearOperator):
            raise InputError(
                "SteadyState needs an explicit matrix E; give an object with the StateModel members instead"
            )
        if solver not in ("auto", "direct", "multigrid"):
            raise InputError(f"solver must be 'auto', 'direct' or 'multigrid', got {solver!r}")
        self.size = int(self.matrix.shape[0])
        self.symmetric = is_symmetric(self.matrix)
        if solver == "multigrid" and not (self.symmetric and (self.matrix.diagonal() > 0).all()):
            raise InputError(
                "solver='multigrid' needs a symmetric E with a positive diagonal; use solver='direct'"
            )
        self.work = WorkCounts()
        self._solver = solver
        self._accuracy = accuracy
        self._factor: Factorization | MultigridSolver | None = None
        large = solver == "auto" and self.size > DIRECT_UP_TO and sp.issparse(self.matrix)
        if large and self.symmetric and (self.matrix.diagonal() > 0).all():
            self._solver = "multigrid, direct behind it"

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        self.work = work
        if self._factor is not None:
            self._factor.work = work

    def factor(self) -> Factorization | MultigridSolver:
        """Return the factorisation, computed at the first call."""
        if self._factor is None:
            try:
                if self._solver.startswith("multigrid"):
                    self._factor = MultigridSolver(self.matrix, accuracy=self._accuracy, work=self.work)
                    return self._factor
                definite = self.symmetric and bool((self.matrix.diagonal() > 0).all())
                self._factor = Factorization(
                    self.matrix, symmetric=self.symmetric, positive_definite=definite, work=self.work
                )
            except SingularMatrixError as error:
                raise InputError(
                    f"the state operator E is singular ({error}); check the boundary conditions of the model"
                ) from error
        return self._factor

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E y = rhs; one state solve."""
        self.work.state_solves += 1
        return self._solved(rhs, False)

    def adjoint_solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E' p = rhs; one state solve."""
        self.work.state_solves += 1
        return self._solved(rhs, not self.symmetric)

    def _solved(self, rhs: FloatArray, transposed: bool) -> FloatArray:
        try:
            return self.factor().solve(rhs, transposed=transposed)
        except MultigridError:
            if self._solver == "multigrid":
                raise
            self._solver, self._factor = "direct", None
            return self.factor().solve(rhs, transposed=transposed)

    def residual(self, y: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E y."""
        self.work.operator_products += 1
        return rhs - np.asarray(self.matrix @ y)

    def adjoint_residual(self, p: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E' p."""
        self.work.operator_products += 1
        return rhs - np.asarray(self.matrix.T @ p)
