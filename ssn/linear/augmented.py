"""Newton systems of an augmented Lagrangian: f'' + sigma sum K'W(I - D)K + nu I, by Cholesky or conjugate gradients."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, cg

from ..protocols import Direction, Evaluation
from .direct import Factorization, SingularMatrixError

FloatArray = npt.NDArray[np.float64]


class AugmentedSolver:
    """Cholesky where every part is explicit, conjugate gradients otherwise.

    Parameters
    ----------
    equation : AugmentedEquation
    max_inner : int
        Iterations of conjugate gradients at most.
    """

    name = "augmented"

    def __init__(self, equation: Any, *, max_inner: int = 2000) -> None:
        self.equation = equation
        self.max_inner = max_inner

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return d with the Newton matrix times d = -residual."""
        equation, problem = self.equation, self.equation.problem
        hessian = problem.part.hessian(at.x)
        explicit = not isinstance(hessian, LinearOperator)
        parts = []
        for k, (operator, derivative) in enumerate(zip(problem.operators, at.data.derivatives, strict=True)):
            matrix = explicit_complement(derivative)
            if matrix is None or isinstance(operator, LinearOperator):
                explicit = False
                break
            weighted = sp.diags_array(problem.part_of(problem.term_weights, k)) @ matrix
            parts.append(equation.sigma * (operator.T @ (weighted @ operator)))
        if explicit:
            return self._direct(hessian, parts, at)
        return self._iterative(hessian, at, forcing)

    def _direct(self, hessian: Any, parts: list[Any], at: Evaluation) -> Direction:
        equation = self.equation
        n = equation.size
        pieces = [hessian, *parts]
        if all(sp.issparse(p) for p in pieces):
            matrix: Any = sp.csc_array(
                sum(pieces[1:], start=sp.csr_array(pieces[0])) + equation.nu * sp.eye_array(n)
            )
        else:
            matrix = sum(
                (p.toarray() if sp.issparse(p) else np.asarray(p) for p in pieces),
                start=equation.nu * np.eye(n),
            )
        diagonal = matrix.diagonal()
        scale = float(np.abs(diagonal).max()) or 1.0
        for shift in (0.0, 1e-12, 1e-8, 1e-4):
            shifted = matrix
            if shift:
                shifted = matrix + shift * scale * (sp.eye_array(n) if sp.issparse(matrix) else np.eye(n))
            try:
                factor = Factorization(shifted, positive_definite=True, work=equation.work)
            except SingularMatrixError:
                continue
            equation.work.linear_solves += 1
            d = factor.solve(-at.residual)
            left = float(np.linalg.norm(matrix @ d + at.residual) / np.linalg.norm(at.residual))
            return Direction(d, left, 0, "solved" if shift == 0.0 else "inaccurate")
        return Direction(None, np.inf, 0, "singular", "the Newton matrix is singular")

    def _iterative(self, hessian: Any, at: Evaluation, forcing: float) -> Direction:
        equation, problem = self.equation, self.equation.problem
        iterations = 0

        def apply(x: FloatArray) -> FloatArray:
            nonlocal iterations
            iterations += 1
            x = np.ravel(x)
            image = problem.forward(x)
            bent = np.concatenate(
                [
                    part - derivative.apply(part)
                    for part, derivative in (
                        (problem.part_of(image, k), d) for k, d in enumerate(at.data.derivatives)
                    )
                ]
            )
            equation.work.operator_products += 1
            return np.asarray(hessian @ x) + equation.sigma * problem.adjoint(bent) + equation.nu * x

        operator = LinearOperator((equation.size, equation.size), matvec=apply, dtype=np.float64)
        d, _ = cg(operator, -at.residual, rtol=forcing, atol=0.0, maxiter=self.max_inner)
        left = float(np.linalg.norm(apply(d) + at.residual) / np.linalg.norm(at.residual))
        if not np.isfinite(left):
            return Direction(None, np.inf, iterations, "singular", "conjugate gradients broke down")
        return Direction(d, left, iterations, "solved" if left <= 1.01 * forcing else "inaccurate")


def explicit_complement(derivative: Any) -> Any:
    """I - D as a sparse array where D has sparse structure, else None."""
    if derivative.diagonal is not None:
        return sp.diags_array(1.0 - derivative.diagonal)
    if hasattr(derivative, "as_sparse"):
        matrix = derivative.as_sparse()
        if matrix is None:
            return None
        return sp.csr_array(sp.eye_array(matrix.shape[0]) - matrix)
    return None
