"""Newton systems in state and adjoint by a Krylov iteration with a matching Schur-complement preconditioner.

    [[M, E'],  [dy;     = - [r1;     M = C' Wy C,     T = B D Wu^-1 B' / alpha,
     [E, -T]]   dp]          r2],

E regular, symmetric or not. The preconditioner is the same matrix with T + E K + K E' in place of T, K diagonal with
K M K close to T. With w = y - K p it is inverted by one solve each with E + K M and its transpose, and without M^-1:

    (E + K M) w = g + K f,     (E + K M)' p = f - M w,     y = w + K p.

Its Schur complement is (E + K M) M^-1 (E + K M)'. Where K M K = T, the preconditioned matrix has the eigenvalue one and
those of S against this, between 1/2 and a bound near one, whatever mesh and alpha; with active sets they may spread
above, to a bound that does not depend on the mesh. For a consistent mass, K M is taken as sqrt(K) M sqrt(K), which is
symmetric with E, so that one Cholesky factorisation an active set serves; nodes that are not observed are matched as if
a thousandth of the mean mass were there.

Sources: J. W. Pearson, M. Stoll and A. J. Wathen, Numer. Linear Algebra Appl. 21 (2014) 81-97, for the matching; M.
Porcelli, V. Simoncini and M. Stoll, arXiv:1611.07201, for active sets; O. Axelsson and M. Neytcheva, for the inversion
without M^-1 (all from memory).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..protocols import Direction, Evaluation
from .boundary import is_symmetric, product, transpose_product
from .direct import Factorization, SingularMatrixError
from .krylov import conjugate_residuals
from .multigrid import MultigridSolver, one_cycle

FloatArray = npt.NDArray[np.float64]

# directions kept: the latest
KEPT = 80
# share of changed components of D up to which the factor of the earlier ones is kept, and the iterations after which it
# is replaced all the same
FEW, PATIENCE = 0.01, 12
# share of the mean mass given to nodes that are not observed
UNSEEN = 1e-3


class SchurOperators:
    """The pieces of the system of a control problem, their factors, and the preconditioner.

    Parameters
    ----------
    problem : ControlProblem
        One for which `refusal` is None.
        Where its state model solves by multigrid, one cycle takes the place of each solve with E + K M.

    Attributes
    ----------
    matrix : sparse array, shape (N, N)
        E', the operator of the adjoint equation.
    """

    def __init__(self, problem: Any) -> None:
        self.problem, self.work = problem, problem.work
        self.root = float(np.sqrt(problem.alpha))
        self.state = sp.csr_array(problem.state.matrix)
        self.symmetric = is_symmetric(self.state)
        self.matrix = self.state if self.symmetric else sp.csr_array(self.state.T)
        self.size = int(self.state.shape[0])
        self.mass = _mass(problem)
        ones = np.ones(self.size)
        lumped = np.maximum(np.asarray(self.mass @ ones), 0.0)
        self._lumped = np.maximum(lumped, UNSEEN * lumped.mean())
        factor = getattr(problem.state, "factor", None)
        self.multigrid = factor is not None and isinstance(factor(), MultigridSolver)
        self._active: FloatArray | None = None
        self._factorised: FloatArray | None = None
        self._factor: Any = None
        self._scaled = np.zeros(problem.unknowns)
        self._match = np.zeros(self.size)

    def activate(self, derivative: FloatArray) -> None:
        """Take the diagonal of D; the factor stays where little has changed: it only preconditions."""
        if self._active is not None and np.array_equal(derivative, self._active):
            return
        problem = self.problem
        self._scaled = derivative / (problem.weights * problem.alpha)
        self._active = derivative.copy()
        old = self._factorised
        if old is None or np.count_nonzero(old != derivative) > FEW * derivative.size:
            self.refresh()

    @property
    def stale(self) -> bool:
        """Whether the factor belongs to earlier active sets."""
        return self._factorised is not self._active

    def refresh(self) -> None:
        """Factorise for the active sets of the moment."""
        self._factorised = None
        control = abs(self.problem.control_operator)
        rows = np.asarray(control @ (self._scaled * np.asarray(control.T @ np.ones(self.size))))
        self._match = np.sqrt(rows / self._lumped)
        root = sp.diags_array(np.sqrt(self._match))
        matched = sp.csr_array(self.state + root @ self.mass @ root)
        if self.multigrid:
            self._factor = one_cycle(matched)
            self.work.factorizations += 1
        elif self._factor is None:
            definite = self.symmetric and bool((self.state.diagonal() > 0).all())
            self._factor = Factorization(
                matched, symmetric=self.symmetric, positive_definite=definite, work=self.work
            )
        else:
            self._factor.refactorize(matched)
        self._factorised = self._active

    def _solve(self, rhs: FloatArray, *, transposed: bool) -> FloatArray:
        if self.multigrid:
            self.work.multigrid_cycles += 1
            return np.asarray(self._factor @ rhs)
        self.work.linear_solves += 1
        return np.asarray(self._factor.solve(rhs, transposed=transposed and not self.symmetric))

    def apply(self, y: FloatArray, p: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Both rows of the system."""
        self.work.operator_products += 2
        control = self.problem.control_operator
        active = product(control, self._scaled * transpose_product(control, p))
        return self.mass @ y + self.matrix @ p, self.state @ y - active

    def correct(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The preconditioner: two solves with the factor of the moment."""
        k = self._match
        w = self._solve(g + k * f, transposed=False)
        p = self._solve(f - self.mass @ w, transposed=True)
        return w + k * p, p

    def errors(
        self, first: FloatArray, second: FloatArray, cycles: int = 1, enough: float = 0.0
    ) -> tuple[FloatArray, FloatArray]:
        """E^-1 first and E'^-1 second by the state model, whatever number of cycles is asked for."""
        state = self.problem.state
        return state.solve(first), state.adjoint_solve(second)


def refusal(problem: Any) -> str | None:
    """Why the Schur-complement preconditioner does not fit a control problem; None where it does."""
    matrix = getattr(problem.state, "matrix", None)
    if matrix is None or isinstance(matrix, LinearOperator) or not sp.issparse(matrix):
        return "the state operator is not an explicit sparse matrix"
    if problem.alpha <= 0 or problem.state_bounded:
        return "the control weight is zero, or the state has bounds"
    if problem.cost.prox_derivative(np.zeros(problem.unknowns), 1.0 / problem.alpha).diagonal is None:
        return "the cost is not separable"
    for name, part in (("control operator", problem.control_operator), ("observation", problem.observation)):
        if part is not None and not sp.issparse(part):
            return f"the {name} is not sparse"
    return None


class SchurSolver:
    """Newton systems of a `FactorisedPairEquation`.

    Parameters
    ----------
    equation : FactorisedPairEquation
    max_inner : int
        Iterations at most in one Newton step.
    """

    name = "schur"

    def __init__(self, equation: Any, *, max_inner: int = 300) -> None:
        self.equation, self.max_inner = equation, max_inner

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return [dy, dp]; the residual, in the scaling of `CoupledSolver`, is computed at the end."""
        operators: SchurOperators = self.equation.operators
        size = operators.size
        try:
            operators.activate(at.data.derivative.diagonal)
        except SingularMatrixError as error:
            return Direction(None, np.inf, 0, "singular", f"singular preconditioner: {error}")
        rhs = -at.residual
        rhs[:size] /= operators.root

        def precondition(left: FloatArray, inner: int) -> FloatArray:
            if inner == PATIENCE and operators.stale:
                operators.refresh()
            return np.concatenate(operators.correct(left[:size] * operators.root, left[size:]))

        try:
            x, left, inner = conjugate_residuals(
                self._image, precondition, rhs, forcing, max_inner=self.max_inner, kept=KEPT
            )
        except SingularMatrixError as error:
            return Direction(None, np.inf, 0, "singular", f"singular preconditioner: {error}")
        if not np.isfinite(left):
            return Direction(None, np.inf, inner, "singular", "the preconditioner returned NaN or nothing")
        return Direction(x, left, inner, "solved" if left <= forcing else "inaccurate")

    def _image(self, z: FloatArray) -> FloatArray:
        """The system applied to [dy, dp], its first row scaled."""
        operators = self.equation.operators
        first, second = operators.apply(z[: operators.size], z[operators.size :])
        return np.concatenate([first / operators.root, second])


def _mass(problem: Any) -> sp.csr_array:
    """C' Wy C."""
    weight = problem.observations
    inner = sp.diags_array(weight.vector) if weight.vector is not None else weight.matrix
    if problem.observation is None:
        return sp.csr_array(inner)
    return sp.csr_array(problem.observation.T @ inner @ problem.observation)
