"""Newton systems of a primal-dual equation: y eliminated, the rest made symmetric and positive.

For a norm the exact derivative of beta w / m is (beta I - y e')/m on the long groups, e = w/||w_g||, with y the
multiplier at hand. Here y is first projected into its ball, and y e' replaced by its symmetric part: then
v'(beta I - (y e' + e y')/2) v >= (beta - ||y||) ||v||^2 >= 0, so that f'' + K'W M K is positive definite wherever f''
is and the direction descends; at a solution, where y = beta e, nothing is changed.

Source: M. Hintermueller and G. Stadler, SIAM J. Sci. Comput. 28 (2006) 1-23 (from memory).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, cg

from ..protocols import Direction, Evaluation
from .augmented import explicit_complement
from .boundary import product
from .direct import Factorization, SingularMatrixError

FloatArray = npt.NDArray[np.float64]

# relative residual asked for from which on the solution is refined once
REFINED = 1e-10
# entries of a row of an operator from which on its outer product would fill a sparse Newton matrix
WIDE_ROW = 200
# multiples of the largest diagonal entry added where the matrix is singular
SHIFTS = (0.0, 1e-13, 1e-10, 1e-6)


class PrimalDualSolver:
    """Sparse Cholesky of f'' + K'W M K, its pattern kept; conjugate gradients where f'' is an operator.

    There the same matrix with the explicit part of f'' (`hessian_model`) preconditions: what it leaves out, the state
    equation's S*S, has few eigenvalues that matter.

    Parameters
    ----------
    equation : PrimalDualEquation
        May be replaced by that of another gamma: attribute `equation`.
    max_inner : int
        Iterations of conjugate gradients at most.
    """

    name = "primal-dual"

    def __init__(self, equation: Any, *, max_inner: int = 1000) -> None:
        self.equation = equation
        self.max_inner = max_inner
        self._factor: Factorization | None = None
        self._assembly: _Assembly | None = None
        self._hessian: Any = None
        self._model: Any = None

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return (du, dy): the first equation's Newton step in u, and y moved along the second one."""
        equation, point, n = self.equation, at.data, self.equation.unknowns
        problem, rows = equation.problem, equation.rows
        hessian = self._explicit_hessian(at)
        weak, coupling = self._curvatures(at)
        matrix, others = self._matrix(hessian, weak, coupling, point)
        rhs = -(point.gradient + problem.adjoint(point.image))
        size = float(np.linalg.norm(rhs))
        iterations = 0
        status = "solved"
        narrow, shifted = self._factorized(matrix)
        if narrow is None:
            return Direction(None, np.inf, 0, "singular", "the Newton matrix is singular")
        assert self._assembly is not None
        wide, at_wide = self._assembly.wide, self._assembly.wide_rows
        stiff = (problem.term_weights * (weak - rows.inner * coupling[0] * coupling[1]))[at_wide]
        factor = narrow if wide.shape[0] == 0 else _Updated(narrow, wide, stiff)
        if isinstance(hessian, LinearOperator):
            du, iterations, left = self._iterate(hessian, weak, coupling, others, factor, rhs, forcing)
            status = "solved" if left <= 1.01 * forcing else "inaccurate"
        else:
            equation.work.linear_solves += 1
            du = factor.solve(rhs)
            rest = matrix @ du + wide.T @ (stiff * (wide @ du)) - rhs
            left = float(np.linalg.norm(rest)) / size if size > 0 else 0.0
            status = "inaccurate" if shifted else status
        if not np.isfinite(du).all():
            return Direction(None, np.inf, iterations, "singular", "the linear solve broke down")
        dx = problem.forward(du)
        dy = point.image - at.x[n:] + self._bend(dx, weak, coupling, others)
        dy = np.where(rows.is_norm & (rows.beta == 0.0), -at.x[n:], dy)
        return Direction(np.concatenate([du, dy]), left, iterations, status)

    def _explicit_hessian(self, at: Evaluation) -> Any:
        """f'' as a matrix where it is one, or where it is A'WA with a sparse A; kept where it is constant."""
        problem = self.equation.problem
        if self._hessian is None or not problem.affine:
            hessian = problem.part.hessian(at.x[: self.equation.unknowns])
            a = getattr(problem.part, "A", None)
            if isinstance(hessian, LinearOperator) and sp.issparse(a):
                a = sp.csr_array(a)
                hessian = sp.csr_array(a.T @ (sp.diags_array(problem.part.weights) @ a))
            self._hessian = hessian
        return self._hessian

    def _curvatures(self, at: Evaluation) -> tuple[FloatArray, tuple[FloatArray, FloatArray]]:
        """M as a diagonal plus, on long groups, -(y e' + e y')/2 / m: the diagonal, and the vectors y/m and e."""
        equation, point = self.equation, at.data
        rows = equation.rows
        y = rows.into_balls(at.x[equation.unknowns :])
        long = rows.is_norm & (point.length > equation.gamma * rows.beta)
        unit = np.where(long, point.w / np.where(long, point.length, 1.0), 0.0)
        diagonal = np.where(rows.is_norm, rows.beta / point.divisor, rows.curvature)
        for k, derivative in point.derivatives.items():
            if derivative.diagonal is not None:
                part = slice(int(equation.problem.splits[k]), int(equation.problem.splits[k + 1]))
                diagonal[part] = (1.0 - derivative.diagonal) / equation.gammas[k]
        return diagonal, (np.where(long, y / point.divisor, 0.0), unit)

    def _bend(
        self,
        dx: FloatArray,
        diagonal: FloatArray,
        coupling: tuple[FloatArray, FloatArray],
        others: dict[int, Any],
    ) -> FloatArray:
        """M dx, as a density."""
        equation, rows = self.equation, self.equation.rows
        y, e = coupling
        moved = diagonal * dx
        moved -= 0.5 * (y * rows.sums(rows.inner * e * dx) + e * rows.sums(rows.inner * y * dx))
        for k, complement in others.items():
            part = slice(int(equation.problem.splits[k]), int(equation.problem.splits[k + 1]))
            moved[part] = complement @ dx[part]
        return moved

    def _matrix(
        self, hessian: Any, diagonal: FloatArray, coupling: tuple[FloatArray, FloatArray], point: Any
    ) -> tuple[Any, dict[int, Any]]:
        """f'' (or its model) + K'W M K, and M of those terms whose derivative is not diagonal."""
        equation = self.equation
        problem = equation.problem
        base = hessian
        if isinstance(hessian, LinearOperator):
            model = getattr(problem.part, "hessian_model", None)
            if self._model is None or not problem.affine:
                self._model = model() if model else problem.curvature() * sp.eye_array(equation.unknowns)
            base = self._model
        if self._assembly is None:
            self._assembly = _Assembly(problem, equation.rows)
        matrix = self._assembly.matrix(diagonal, coupling, base)
        others = {}
        for k, derivative in point.derivatives.items():
            if derivative.diagonal is None:
                others[k] = explicit_complement(derivative) / equation.gammas[k]
                operator = problem.operators[k]
                weighted = sp.diags_array(problem.part_of(problem.term_weights, k)) @ others[k]
                extra = operator.T @ (weighted @ operator)
                matrix = sp.csc_array(matrix + extra) if sp.issparse(matrix) else matrix + _dense(extra)
        return matrix, others

    def _factorized(self, matrix: Any) -> tuple[Factorization | None, bool]:
        """The factor of the matrix, or of one with its diagonal raised, and whether it was."""
        work = self.equation.work
        scale = 0.0
        for shift in SHIFTS:
            if shift:
                scale = scale or float(np.abs(matrix.diagonal()).max(initial=0.0)) or 1.0
                n = matrix.shape[0]
                matrix = matrix + shift * scale * (sp.eye_array(n) if sp.issparse(matrix) else np.eye(n))
            try:
                if self._factor is None:
                    self._factor = Factorization(matrix, positive_definite=True, work=work)
                else:
                    self._factor.refactorize(matrix)
                return self._factor, shift > 0.0
            except SingularMatrixError:
                self._factor = None
        return None, True

    def _iterate(
        self,
        hessian: LinearOperator,
        diagonal: FloatArray,
        coupling: tuple[FloatArray, FloatArray],
        others: dict[int, Any],
        factor: Any,
        rhs: FloatArray,
        forcing: float,
    ) -> tuple[FloatArray, int, float]:
        equation, problem = self.equation, self.equation.problem
        iterations = 0

        def apply(x: FloatArray) -> FloatArray:
            nonlocal iterations
            iterations += 1
            x = np.ravel(x)
            bent = self._bend(problem.forward(x), diagonal, coupling, others)
            return product(hessian, x) + problem.adjoint(bent)

        def precondition(x: FloatArray) -> FloatArray:
            equation.work.linear_solves += 1
            return factor.solve(np.ravel(x))

        n = equation.unknowns
        operator = LinearOperator((n, n), matvec=apply, dtype=np.float64)
        inverse = LinearOperator((n, n), matvec=precondition, dtype=np.float64)
        du, _ = cg(operator, rhs, rtol=forcing, atol=0.0, maxiter=self.max_inner, M=inverse)
        if forcing < REFINED:  # the residual that conjugate gradients update drifts away from the true one
            rest = rhs - apply(du)
            du = du + cg(operator, rest, rtol=1e-4, atol=0.0, maxiter=self.max_inner, M=inverse)[0]
        size = float(np.linalg.norm(rhs))
        left = float(np.linalg.norm(apply(du) - rhs)) / size if size > 0 else 0.0
        return du, iterations, left


class _Assembly:
    """K'W M K as one sparse product of a fixed matrix with the entries of M, in a fixed pattern."""

    def __init__(self, problem: Any, rows: Any) -> None:
        operators = [o if sp.issparse(o) else sp.csr_array(o) for o in problem.operators]
        self.n = int(problem.unknowns)
        k = sp.csr_array(sp.vstack(operators, format="csr"))
        k.sort_indices()
        members = sp.csr_array(
            (np.ones(rows.labels.size), (rows.labels, np.arange(rows.labels.size))),
            shape=(rows.groups, rows.labels.size),
        )
        # pairs of rows within one group: the entries of M
        coupled = sp.coo_array(members.T @ members)
        self.left, self.right = coupled.row, coupled.col
        self.same = self.left == self.right
        # rows with many entries are left out, and join by a low-rank update: their outer products would fill the matrix
        single = np.bincount(rows.labels)[rows.labels] == 1
        self.wide_rows = np.flatnonzero((np.diff(k.indptr) > WIDE_ROW) & single)
        self.wide = k[self.wide_rows].toarray()
        if self.wide_rows.size:
            keep = np.ones(k.shape[0])
            keep[self.wide_rows] = 0.0
            k = sp.csr_array(sp.diags_array(keep) @ k)
            k.eliminate_zeros()
        counts = np.diff(k.indptr)
        sizes = counts[self.left] * counts[self.right]
        pair = np.repeat(np.arange(sizes.size), sizes)
        within = np.arange(pair.size) - np.repeat(np.cumsum(sizes) - sizes, sizes)
        width = np.maximum(counts[self.right], 1)[pair]
        first = k.indptr[self.left][pair] + within // width
        second = k.indptr[self.right][pair] + within % width
        positions = k.indices[first].astype(np.int64) * self.n + k.indices[second]
        diagonal = np.arange(self.n, dtype=np.int64) * (self.n + 1)
        self.places = np.unique(np.concatenate([positions, diagonal]))
        target = np.searchsorted(self.places, positions)
        self.map = sp.csr_array(
            (k.data[first] * k.data[second], (target, pair)), shape=(self.places.size, sizes.size)
        )
        self.rows, self.weights = rows, problem.term_weights
        self._base: Any = None

    def matrix(self, diagonal: FloatArray, coupling: tuple[FloatArray, FloatArray], base: Any) -> Any:
        """Base + K'W M K; sparse in csc form with entries that happen to vanish kept, dense where the base is."""
        y, e = coupling
        a, weights = self.rows.inner, self.weights
        outer = weights / a
        i, j = self.left, self.right
        entries = -0.5 * outer[i] * a[i] * a[j] * (y[i] * e[j] + y[j] * e[i])
        entries[self.same] += (weights * diagonal)[i[self.same]]
        values = self.map @ entries
        if not sp.issparse(base):
            dense = np.array(base, dtype=np.float64)
            dense[self.places // self.n, self.places % self.n] += values
            return dense
        if self._base is not base:
            self._merge(base)
        self._data[:] = self._base_data
        self._data[self._at] += values
        return sp.csc_array((self._data.copy(), self._indices, self._indptr), shape=(self.n, self.n))

    def _merge(self, base: Any) -> None:
        """The common pattern of the base and of K'K, by columns."""
        coo = sp.coo_array(base)
        own = coo.col.astype(np.int64) * self.n + coo.row
        ours = (self.places % self.n) * self.n + self.places // self.n
        keys = np.unique(np.concatenate([own, ours]))
        self._base_data = np.zeros(keys.size)
        np.add.at(self._base_data, np.searchsorted(keys, own), coo.data)
        self._at = np.searchsorted(keys, ours)
        self._indices = (keys % self.n).astype(np.int32)
        self._indptr = np.searchsorted(keys // self.n, np.arange(self.n + 1)).astype(np.int32)
        self._data = np.zeros(keys.size)
        self._base = base


class _Updated:
    """Solves (A + V'CV) x = b for a few rows V and C >= 0 diagonal (Sherman, Morrison and Woodbury)."""

    def __init__(self, factor: Factorization, rows: FloatArray, stiffness: FloatArray) -> None:
        self.factor, self.rows, self.stiffness = factor, rows, stiffness
        self.images = factor.solve(np.ascontiguousarray(rows.T))
        self.small = np.eye(stiffness.size) + stiffness[:, None] * (rows @ self.images)

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Return x, shape (n,)."""
        x = self.factor.solve(rhs)
        prices = np.linalg.solve(self.small, self.stiffness * (self.rows @ x))
        return np.asarray(x - self.images @ prices)


def _dense(matrix: Any) -> FloatArray:
    return np.asarray(matrix.toarray() if sp.issparse(matrix) else matrix)
