"""Newton systems (I + T D/alpha) d = -N of a normal map by GMRES, products with T being all that is known of it."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.sparse.linalg import LinearOperator, gmres

from ..errors import StateSolveError
from ..protocols import Direction, Evaluation

FloatArray = npt.NDArray[np.float64]


class NormalSolver:
    """GMRES in the inner product of the equation: T D is compact where it discretises an integral operator.

    Parameters
    ----------
    equation : NormalEquation
    max_inner : int
        Krylov iterations at most.
    """

    name = "normal"

    def __init__(self, equation: Any, *, max_inner: int = 300) -> None:
        self.equation = equation
        self.max_inner = max_inner

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d; its residual is computed."""
        n = at.x.size
        root = np.sqrt(self.equation.weights)
        iterations = 0
        derivative = self.equation.derivative(at)

        def apply(x: FloatArray) -> FloatArray:
            nonlocal iterations
            iterations += 1
            return root * derivative(np.ravel(x) / root)

        operator = LinearOperator((n, n), matvec=apply, dtype=np.float64)
        rhs = -root * at.residual
        restart = min(n, self.max_inner)
        try:
            x, _ = gmres(operator, rhs, rtol=forcing, atol=0.0, restart=restart, maxiter=1)
            left = float(np.linalg.norm(apply(x) - rhs) / np.linalg.norm(rhs))
        except StateSolveError as error:
            return Direction(None, np.inf, iterations, "singular", str(error))
        if not np.isfinite(left):
            return Direction(None, np.inf, iterations, "singular", "GMRES broke down")
        return Direction(x / root, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate")
