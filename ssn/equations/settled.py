"""The optimality system of a control problem without a quadratic cost (alpha = 0), by its pieces.

The unknown is v, the control u = prox_{t g}(v) for a fixed step t > 0, and

    R(v) = u + t p - v,   p = S*(z - S u),

vanishes exactly where p is a subgradient of g at u. With the pieces fixed, u = c + D v, D = B diag(d) B' W with
orthonormal columns B (unit vectors for a separable cost): what of u is not in the range of B stays, and the
coefficients x = B' W u follow from the small symmetric system

    (K* K + diag(k)) dx = B' W R(v) / t,   K = S B,   k = (1/d - 1)/t,

which says that on a sloped piece, of curvature k, p is the slope of the cost. For bounds, L1, settings d = 1: the
control off its kinks solves a least-squares problem, and once the pieces are right one step is exact. K is kept by
columns, one state solve each; where they would be many and the state equation has an explicit matrix, the state and
the adjoint become unknowns of one sparse system instead.

Plain steps, from pieces found by a path: from afar they do not converge. The accuracy is the duality gap.

Source: primal-dual active sets as a semismooth Newton method (M. Hintermueller, K. Ito and K. Kunisch, SIAM J. Optim.
13 (2003) 865-888); on the support of a measure the final step of K. Bredies and H. K. Pikkarainen, ESAIM COCV 19
(2013) 190-218 (both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla
import scipy.sparse as sp
from scipy.sparse.csgraph import reverse_cuthill_mckee
from scipy.sparse.linalg import LinearOperator

from ..costs.derivative import modes
from ..duality import Gap
from ..linear.direct import Factorization, SingularMatrixError
from ..pieces import Pieces
from ..protocols import Direction, Evaluation, FallbackStep, ProxDerivative

FloatArray = npt.NDArray[np.float64]

# columns of K up to which they are solved for one by one even where a sparse system could be factorised
FEW = 200
# The sparse system is factorised up to SMALL rows of the state equation, and up to LARGE where the bandwidth of that is
# that of a surface mesh, a few times the root of its rows: in a volume, and in a surface and time, the factors fill up.
SMALL, LARGE, SURFACE = 3_000, 200_000, 2.5
# bytes that the columns may take, and their number that is always allowed
MEMORY, MOST = 2e8, 200
# ratio of the diagonal of a triangular factor below which K has no full rank
RANK = 1e-13


@dataclass(frozen=True)
class SettledPoint:
    """What one evaluation knows."""

    control: FloatArray
    observed: FloatArray
    misfit: FloatArray
    p: FloatArray
    gap: Gap
    derivative: ProxDerivative


class SettledEquation:
    """R(v) = 0 for a control problem with control_weight 0 whose duality gap is known; the iterate is v.

    Parameters
    ----------
    problem : ControlProblem
    step : float
        t, in units of control over adjoint.
    """

    piecewise_affine = True

    def __init__(self, problem: Any, step: float) -> None:
        self.problem, self.step = problem, step
        self.work = problem.work

    def evaluate(self, x: FloatArray) -> Evaluation:
        """One application of S and one of S*."""
        problem, step = self.problem, self.step
        self.work.proximal_maps += 1
        u = problem.cost.prox(x, step)
        observed = problem.forward(u)
        misfit = problem.reduced_target() - observed
        if not np.isfinite(misfit).all():
            return Evaluation(x, misfit, np.inf, np.inf, Pieces())
        p = problem.adjoint(misfit)
        residual = u + step * p - x
        gap = problem.duality_gap(u, misfit, p)
        data = SettledPoint(u, observed, misfit, p, gap, problem.cost.prox_derivative(x, step))
        norm = problem.controls.norm(residual) / step
        return Evaluation(x, residual, norm, gap.relative, problem.cost.pieces(x, step), data)

    def merit_line(self, at: Evaluation, direction: FloatArray) -> None:
        """None: full steps only."""
        return None

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """None: the path goes on where the steps fail."""
        return None


class SettledSolver:
    """Newton systems of `SettledEquation`; columns of S are kept for all points of a path."""

    name = "settled"

    def __init__(self, equation: SettledEquation) -> None:
        self.equation = equation
        self.columns: dict[int, FloatArray] = {}
        self.sparse_allowed = True
        self._light: bool | None = None

    def size(self, at: Evaluation) -> int | None:
        """How many coefficients the Newton system at a point has; None where it is too large or not known.

        Too large for columns, where the state equation shows no matrix that can be factorised together with its
        adjoint, or `sparse_allowed` rules that out.
        """
        found = modes(at.data.derivative, self.equation.problem.weights)
        if found is None:
            return None
        rows = np.unique(found[0].indices)
        fits = rows.size <= FEW or self._explicit() is not None or self._columns_fit(rows)
        return int(found[1].size) if fits else None

    def _columns_fit(self, rows: Any) -> bool:
        new = sum(int(row) not in self.columns for row in rows)
        allowed = MOST + self.equation.work.state_solves
        fits = 8.0 * rows.size * self.equation.problem.observations.size <= MEMORY
        return new <= allowed and fits

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return dv; the system is solved directly, so `forcing` has no effect."""
        equation, problem = self.equation, self.equation.problem
        point: SettledPoint = at.data
        found = modes(point.derivative, problem.weights)
        if found is None:
            return Direction(
                None, np.inf, 0, "singular", "the derivative of the proximal map is no sum of blocks"
            )
        basis, d = found
        step, weights = equation.step, problem.weights
        if d.size == 0:
            return Direction(at.residual.copy(), 0.0, 0)
        bend = (1.0 / d - 1.0) / step
        rhs = basis.T @ (weights * at.residual) / step
        explicit = self._explicit()
        rows = np.unique(basis.indices)
        try:
            if rows.size <= FEW or explicit is None:
                try:
                    dx, dp = self._by_columns(basis, bend, rhs, rows)
                except sla.LinAlgError:  # the state as an unknown costs fewer digits
                    if explicit is None:
                        raise
                    dx, dp = self._sparse(basis, bend, rhs, explicit)
            else:
                dx, dp = self._sparse(basis, bend, rhs, explicit)
        except (SingularMatrixError, sla.LinAlgError) as error:
            return Direction(None, np.inf, 0, "singular", f"on the pieces found: {error}")
        dv = at.residual + step * dp
        # along the basis D dv = B dx exactly: an error of p there would come back times t
        return Direction(dv + basis @ (dx / d - basis.T @ (weights * dv)), 0.0, 0)

    def _by_columns(
        self, basis: sp.csc_array, bend: FloatArray, rhs: FloatArray, rows: Any
    ) -> tuple[FloatArray, FloatArray]:
        problem = self.equation.problem
        for row in rows:
            if int(row) not in self.columns:
                unit = np.zeros(problem.unknowns)
                unit[row] = 1.0
                self.columns[int(row)] = problem.forward(unit)
        used = np.stack([self.columns[int(row)] for row in rows], axis=1)
        image = used @ basis[rows].toarray()
        factor = _triangular(problem.observations, image, bend)
        half = sla.solve_triangular(factor, rhs, trans=1, check_finite=False)
        dx = sla.solve_triangular(factor, half, check_finite=False)
        return dx, -problem.adjoint(image @ dx)

    def _explicit(self) -> tuple[Any, Any, Any] | None:
        """E, B and C' Wy C where all of them are matrices."""
        problem = self.equation.problem
        if not self.sparse_allowed:
            return None
        matrix = getattr(problem.state, "matrix", None)
        operators = (matrix, problem.control_operator, problem.observation)
        if matrix is None or any(isinstance(operator, LinearOperator) for operator in operators):
            return None
        if self._light is None:
            self._light = _light(matrix)
        if not self._light:
            return None
        product = problem.observations
        mass = product.matrix if product.matrix is not None else sp.diags_array(product.vector)
        if problem.observation is not None:
            seen = sp.csr_array(problem.observation)
            mass = seen.T @ mass @ seen
        return sp.csr_array(matrix), sp.csr_array(problem.control_operator), sp.csr_array(mass)

    def _sparse(
        self, basis: sp.csc_array, bend: FloatArray, rhs: FloatArray, explicit: tuple[Any, Any, Any]
    ) -> tuple[FloatArray, FloatArray]:
        """State, adjoint and coefficients at once, in units in which the coefficients of the blocks are alike."""
        problem, work = self.equation.problem, self.equation.work
        state, control, mass = explicit
        size = state.shape[0]
        load = control @ basis
        matrix = sp.block_array(
            [[mass, state.T, None], [state, None, -load], [None, -load.T, sp.diags_array(bend)]], format="csc"
        )
        factor = Factorization(_with_diagonal(matrix), work=work)
        right = np.concatenate([np.zeros(2 * size), rhs])
        found = factor.solve(right)
        found += factor.solve(right - matrix @ found)
        work.linear_solves += 2
        return found[2 * size :], problem.pull_back(found[size : 2 * size])


def _light(matrix: Any) -> bool:
    """Whether the factors of state and adjoint together can be expected to stay sparse."""
    rows = int(matrix.shape[0])
    if rows <= SMALL or rows > LARGE:
        return rows <= SMALL
    pattern = sp.csr_matrix(abs(sp.csr_array(matrix)) + abs(sp.csr_array(matrix)).T)
    place = np.empty(rows, dtype=np.intp)
    place[reverse_cuthill_mckee(pattern, symmetric_mode=True)] = np.arange(rows)
    entries = pattern.tocoo()
    return bool(np.abs(place[entries.row] - place[entries.col]).max(initial=0) <= SURFACE * np.sqrt(rows))


def _with_diagonal(matrix: sp.csc_array) -> sp.csc_array:
    """The matrix with its diagonal stored, zeros included."""
    return sp.csc_array(matrix + sp.diags_array(np.zeros(matrix.shape[0])))


def _triangular(product: Any, image: FloatArray, bend: FloatArray) -> FloatArray:
    """R with R'R = K* K + diag(bend), K not squared."""
    if product.vector is not None:
        rows = np.sqrt(product.vector)[:, None] * image
    else:
        rows = _coordinates(product, image)
    if bend.any():
        rows = np.concatenate([rows, np.diag(np.sqrt(bend))])
    factor: FloatArray = np.asarray(np.linalg.qr(rows, mode="r"))
    size = np.abs(np.diag(factor))
    if factor.shape[0] < factor.shape[1] or size.min() <= RANK * size.max():
        raise sla.LinAlgError("the controls off their kinks are not told apart by the observation")
    return factor


def _coordinates(product: Any, image: FloatArray) -> FloatArray:
    """The columns in a basis that is orthonormal in the product, by Gram-Schmidt, twice."""
    basis: list[FloatArray] = []
    result = np.zeros((image.shape[1], image.shape[1]))
    for k, column in enumerate(image.T):
        rest = column
        for _ in range(2):
            weighted = product.apply(rest)
            for j, q in enumerate(basis):
                part = float(q @ weighted)
                result[j, k] += part
                rest = rest - part * q
        size = product.norm(rest)
        result[k, k] = size
        basis.append(rest / size if size > 0.0 else rest)
    return result
