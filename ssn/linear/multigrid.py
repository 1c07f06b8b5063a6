"""State solves by conjugate gradients with a pyamg cycle, for meshes too large to factorise."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import cg

from ..work import WorkCounts
from .direct import SingularMatrixError

FloatArray = npt.NDArray[np.float64]


# error in recovering a known vector from which on a matrix counts as singular
LOST_DIGITS = 1e-3


class MultigridError(ArithmeticError):
    """The multigrid solve did not reach its accuracy."""


def one_cycle(matrix: Any) -> Any:
    """One multigrid cycle as an operator: a preconditioner for a matrix with a dominant diagonal, symmetric or not."""
    import pyamg

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        hierarchy: Any = pyamg.ruge_stuben_solver(
            sp.csr_matrix(matrix),
            strength=("classical", {"theta": 0.25, "norm": "min"}),
            CF=("RS", {"second_pass": True}),
            presmoother=("gauss_seidel", {"sweep": "forward"}),
            postsmoother=("gauss_seidel", {"sweep": "backward"}),
        )
    return hierarchy.aspreconditioner(cycle="V")


class MultigridSolver:
    """Solve A x = b, A sparse symmetric positive definite, to a relative residual.

    The hierarchy is classical (Ruge and Stueben) with the strength measure that keeps positive couplings out and
    the second coarsening pass, which stays robust on meshes with obtuse angles.

    Raises
    ------
    MultigridError
        When the accuracy is not reached within `max_iterations`.
    SingularMatrixError
        From the constructor, where a known vector does not come back.
    """

    method = "multigrid"

    def __init__(
        self,
        matrix: sp.csr_array,
        *,
        accuracy: float = 1e-12,
        max_iterations: int = 200,
        work: WorkCounts | None = None,
    ) -> None:
        self.matrix = sp.csr_array(matrix)
        self.accuracy, self.max_iterations = accuracy, max_iterations
        self.work = work if work is not None else WorkCounts()
        self.cycle: Any = one_cycle(self.matrix)
        self.work.factorizations += 1
        known = 1.5 + np.sin(np.arange(self.matrix.shape[0]) * 0.7)
        if float(np.linalg.norm(self.solve(self.matrix @ known) - known)) > LOST_DIGITS * float(
            np.linalg.norm(known)
        ):
            raise SingularMatrixError("a known vector does not come back from the solve")

    def solve(self, rhs: FloatArray, *, transposed: bool = False) -> FloatArray:
        """Solve A x = rhs (A is symmetric, `transposed` changes nothing)."""
        if not rhs.any():
            return np.zeros_like(rhs)
        x, info = cg(
            self.matrix, rhs, rtol=self.accuracy, atol=0.0, maxiter=self.max_iterations, M=self.cycle
        )
        if info != 0:
            residual = float(np.linalg.norm(rhs - self.matrix @ x) / np.linalg.norm(rhs))
            if residual > 100 * self.accuracy:
                raise MultigridError(
                    f"multigrid reached a relative residual of {residual:.1e} in {self.max_iterations} iterations, "
                    f"not {self.accuracy:.1e}; use solver='direct'"
                )
        return np.asarray(x)
