"""Newton systems in state and adjoint by multigrid on the coupled system.

With q = p / sqrt(alpha) and the second equation divided by sqrt(alpha), both couplings are of one size:

    [[E, -T sqrt(alpha)],  [dy;     = - [r2;
     [Wy / sqrt(alpha), E]] dq]          r1 / sqrt(alpha)],    T = B D Wu^-1 B' / alpha,

E symmetric positive definite. One multigrid cycle for this pair is the preconditioner of a truncated flexible Krylov
iteration (generalised conjugate residuals), which takes what the cycle leaves. A cycle reduces the error by a factor of
about ten, whatever mesh and active sets; only the Galerkin products of T change from step to step. The state stays an
unknown: eliminating it would lose the residual of the adjoint equation.

Source: S. C. Eisenstat, H. C. Elman and M. H. Schultz, SIAM J. Numer. Anal. 20 (1983) 345-357, for the outer iteration
(from memory); the hierarchies name theirs.
"""

from __future__ import annotations

from typing import Any, Protocol

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..protocols import Direction, Evaluation
from .algebraic_multigrid import AlgebraicHierarchy
from .grid_multigrid import COARSEST, GridHierarchy
from .stencil import recognise

FloatArray = npt.NDArray[np.float64]

# entries of B D B' and C' Wy C, relative to those of E, up to which they count as local: a consistent mass on triangles
# has 7 times as many, on tetrahedra 15
LOCAL = 16
# directions kept by the outer iteration: below the first size many, above it few, to save memory
LARGE, MANY, FEW = 200_000, 12, 3
# cycles in a row without halving the residual after which the cycle counts as no preconditioner
IDLE = 6
# share of the curvature by which the slope along a direction may differ from it, and relative residual of the Newton
# system from which on that is not asked any more
NEAR, TIGHT = 0.1, 1e-10


class CoupledHierarchy(Protocol):
    """Cycles for [[K, -T], [W, K]]."""

    @property
    def name(self) -> str:
        """Which kind it is."""
        ...

    def refresh(self, active: Any) -> None:
        """Take T."""
        ...

    def correct(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for the coupled system."""
        ...

    def solve_each(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for K y = f and K q = g."""
        ...


class CoupledOperators:
    """What of a control problem the coupled system consists of, and its hierarchy.

    Parameters
    ----------
    problem : ControlProblem
        One for which `refusal` is None.
    """

    def __init__(self, problem: Any) -> None:
        self.problem, self.work = problem, problem.work
        self.root = float(np.sqrt(problem.alpha))
        self.matrix = self.state = problem.state.matrix  # E', which is E
        self.size = int(self.matrix.shape[0])
        self.control = problem.control_operator
        self.diagonal = _diagonal(self.control)
        self.mass = _observed_mass(problem)
        self._key: FloatArray | None = None
        self.active: Any = None
        self.hierarchy: CoupledHierarchy = self._geometric() or self._algebraic()

    def _geometric(self) -> CoupledHierarchy | None:
        if self.diagonal is None:
            return None
        found = recognise(self.matrix)
        if found is None or min(found[0]) <= COARSEST:
            return None
        shape, state = found
        centre = (0,) * len(shape)
        if isinstance(self.mass, np.ndarray):
            mass: Any = {centre: self.mass.reshape(shape) / self.root}
            if np.ptp(self.mass) <= 1e-14 * self.mass.max():
                mass = {centre: float(self.mass[0]) / self.root}
        else:
            again = recognise(self.mass)
            if again is None or again[0] != shape:
                return None
            mass = {offset: value / self.root for offset, value in again[1].items()}
        return GridHierarchy(shape, state, mass)

    def _algebraic(self) -> CoupledHierarchy:
        mass = sp.diags_array(self.mass) if isinstance(self.mass, np.ndarray) else self.mass
        pattern = None if self.diagonal is not None else abs(self.control) @ abs(self.control).T
        return AlgebraicHierarchy(self.matrix, mass / self.root, pattern)

    def activate(self, derivative: FloatArray) -> None:
        """Take the diagonal of D; Galerkin products only where it has changed."""
        if self._key is not None and np.array_equal(derivative, self._key):
            return
        scaled = derivative / (self.problem.weights * self.root)
        if self.diagonal is not None:
            self.active = self.diagonal**2 * scaled
        else:
            self.active = self.control @ sp.diags_array(scaled) @ self.control.T
        self.hierarchy.refresh(self.active)
        self._key = derivative.copy()

    def apply(self, y: FloatArray, q: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The coupled operator."""
        self.work.operator_products += 2
        coupled = self.active * q if isinstance(self.active, np.ndarray) else self.active @ q
        seen = self.mass * y if isinstance(self.mass, np.ndarray) else self.mass @ y
        return self.matrix @ y - coupled, seen / self.root + self.matrix @ q

    def correct(self, first: FloatArray, second: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for the coupled system."""
        self.work.multigrid_cycles += 1
        return self.hierarchy.correct(first, second)

    def errors(
        self, first: FloatArray, second: FloatArray, cycles: int = 1, enough: float = 0.05
    ) -> tuple[FloatArray, FloatArray]:
        """E^-1 applied to two vectors, by cycles until a correction is below `enough` of what there is."""
        self.work.multigrid_cycles += 1
        y, q = self.hierarchy.solve_each(first, second)
        for _ in range(cycles - 1):
            self.work.multigrid_cycles += 1
            self.work.operator_products += 2
            dy, dq = self.hierarchy.solve_each(first - self.matrix @ y, second - self.matrix @ q)
            y, q = y + dy, q + dq
            if max(_share(dy, y), _share(dq, q)) <= enough:
                break
        return y, q


def refusal(problem: Any) -> str | None:
    """Why the coupled multigrid does not fit a control problem with a `SteadyState`; None where it does."""
    state = problem.state
    if getattr(state, "matrix", None) is None or isinstance(state.matrix, LinearOperator):
        return "the state operator is not an explicit matrix"
    if not sp.issparse(state.matrix):
        return "the state operator is dense"
    if not getattr(state, "symmetric", False) or not (state.matrix.diagonal() > 0).all():
        return "the state operator is not symmetric with a positive diagonal"
    if problem.alpha <= 0 or problem.state_bounded:
        return "the control weight is zero, or the state has bounds"
    if problem.cost.prox_derivative(np.zeros(problem.unknowns), 1.0 / problem.alpha).diagonal is None:
        return "the cost is not separable"
    for name, matrix in (
        ("control operator", problem.control_operator),
        ("observation", problem.observation),
    ):
        if matrix is None:
            continue
        if not sp.issparse(matrix):
            return f"the {name} is not sparse"
        counts = np.bincount(sp.coo_array(matrix).col, minlength=matrix.shape[1])
        if name == "observation":
            counts = np.bincount(sp.coo_array(matrix).row, minlength=matrix.shape[0])
        if float(np.sum(counts.astype(float) ** 2)) > LOCAL * state.matrix.nnz:
            return f"the {name} is not local"
    return None


class CoupledSolver:
    """Newton systems of a `CoupledEquation` by cycles on the pair of state and adjoint.

    Parameters
    ----------
    equation : CoupledEquation
    max_inner : int
        Cycles at most in one Newton step.
    """

    name = "coupled"

    def __init__(self, equation: Any, *, max_inner: int = 60) -> None:
        self.equation, self.max_inner = equation, max_inner

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return [dy, dp]; the residual is that of the scaled pair, kept by recurrence."""
        operators: CoupledOperators = self.equation.operators
        size, root = operators.size, operators.root
        operators.activate(at.data.derivative.diagonal)
        left = np.stack([-at.residual[size:], -at.residual[:size] / root])
        norm = first = float(np.linalg.norm(left))
        if norm == 0.0:
            return Direction(np.zeros(2 * size), 0.0, 0)
        total = np.zeros_like(left)
        kept: list[tuple[FloatArray, FloatArray]] = []
        keep = FEW if size > LARGE else MANY
        inner = idle = 0
        target = forcing
        while inner < self.max_inner and idle < IDLE:
            if norm <= target * first:
                if self._serves(at, total) or target <= TIGHT:
                    break
                target = 0.1 * target
                continue
            # the evaluation has done the first cycle
            z = np.stack(operators.correct(left[0], left[1]) if inner else at.data.correction)
            inner += 1
            image = np.stack(operators.apply(z[0], z[1]))
            for old, old_image in kept:
                share = float(np.vdot(old_image, image))
                z -= share * old
                image -= share * old_image
            length = float(np.linalg.norm(image))
            if not np.isfinite(length) or length == 0.0:
                return Direction(
                    None, np.inf, inner, "singular", "the multigrid cycle returned NaN or nothing"
                )
            z /= length
            image /= length
            share = float(np.vdot(image, left))
            total += share * z
            left -= share * image
            new = float(np.linalg.norm(left))
            idle = idle + 1 if new > 0.5 * norm else 0
            norm = new
            kept.append((z, image))
            if len(kept) > keep:
                kept.pop(0)
        total[1] *= root
        status = "solved" if norm <= forcing * first else "inaccurate"
        return Direction(total.ravel(), norm / first, inner, status)

    def _serves(self, at: Evaluation, scaled: FloatArray) -> bool:
        """Whether the quadratic model of the dual function has its minimum along (dy, dq) near the full step.

        For an exact Newton direction the slope is minus the curvature. What a cycle leaves in it is rough, and the dual
        function magnifies what is rough: a direction with a small residual may be of no use to the search.
        """
        vector = np.concatenate([scaled[0], scaled[1] * self.equation.operators.root])
        line = self.equation.merit_line(at, vector)
        if line is None:
            return True
        slope, curvature, noise = line(0.0)
        return bool(abs(slope + curvature) <= max(NEAR * curvature, noise))


def _share(part: FloatArray, whole: FloatArray) -> float:
    size = float(np.linalg.norm(whole))
    return float(np.linalg.norm(part)) / size if size > 0.0 else 0.0


def _diagonal(matrix: Any) -> FloatArray | None:
    """The diagonal of a diagonal matrix, else None."""
    n = int(matrix.shape[0])
    if matrix.shape != (n, n) or matrix.nnz != n or not np.array_equal(matrix.indices, np.arange(n)):
        return None
    return np.asarray(matrix.diagonal())


def _observed_mass(problem: Any) -> Any:
    """C' Wy C, a vector where it is diagonal."""
    weight = problem.observations
    if problem.observation is None:
        return weight.vector if weight.vector is not None else weight.matrix
    inner = sp.diags_array(weight.vector) if weight.vector is not None else weight.matrix
    return sp.csr_array(problem.observation.T @ inner @ problem.observation)
