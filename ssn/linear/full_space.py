"""Newton systems in state and adjoint: one sparse factorisation of a matrix whose pattern stays.

The control, and where there is one the observation, are kept as unknowns, so that neither B D B' nor C' Wy C is ever
formed and a B or C with a few dense columns or rows stays cheap:

    [[W0 + gamma M chi, E',   0,  C' Wy],      dy
     [E,                0,   -B,  0    ],      dp
     [0, -D Wu^-1 B'/alpha,   I,  0    ],      du
     [-C,               0,    0,  I    ]]      dq

with W0 = Wy and no fourth row where the whole state is observed, else W0 = 0. Entries that are zero for the active
sets of the moment stay in the pattern.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from ..protocols import Direction, Evaluation
from .direct import Factorization, SingularMatrixError

FloatArray = npt.NDArray[np.float64]


class FullSpaceSolver:
    """Factorise the Newton matrix of a `FullSpaceEquation`, keeping it while active sets and penalty stay.

    Parameters
    ----------
    equation : FullSpaceEquation
        May be replaced by that of another penalty: attribute `equation`.
    """

    name = "full space"

    def __init__(self, equation: Any) -> None:
        self.equation = equation
        self._factor: Factorization | None = None
        self._key: Any = None
        self._assemble(equation.problem)

    def _assemble(self, problem: Any) -> None:
        """Rows, columns and constant values of all entries, and where the changing ones are."""
        size, n = int(problem.state.size), problem.unknowns
        model = problem.state
        self._changing = hasattr(
            model, "derivative_matrix"
        )  # semilinear: other values at each y, the pattern stays
        state = sp.coo_array(model.derivative_matrix(model.start) if self._changing else model.matrix)
        control = sp.coo_array(problem.control_operator)
        weight = problem.observations
        observed = sp.coo_array(weight.matrix if weight.matrix is not None else sp.diags_array(weight.vector))
        nodes, controls = np.arange(size), 2 * size + np.arange(n)
        entries: list[tuple[Any, Any, Any]] = [(nodes, nodes, np.zeros(size))]
        if problem.observation is None:
            on_diagonal = observed.row == observed.col
            np.add.at(entries[0][2], observed.row[on_diagonal], observed.data[on_diagonal])
            off = ~on_diagonal
            entries.append((observed.row[off], observed.col[off], observed.data[off]))
        self._diagonal = entries[0][2]
        before = sum(part[2].size for part in entries)
        self._state_values = slice(before, before + state.data.size)
        entries.append((state.col, size + state.row, state.data))
        entries.append((size + state.row, state.col, state.data))
        entries.append((size + control.row, 2 * size + control.col, -control.data))
        self._first_scaled = sum(part[2].size for part in entries)
        self._scaled_rows = control.col
        self._scaled = -control.data / (problem.weights[control.col] * problem.alpha)
        entries.append((2 * size + control.col, size + control.row, self._scaled))
        entries.append((controls, controls, np.ones(n)))
        total = 2 * size + n
        if problem.observation is not None:
            matrix = sp.csr_array(problem.observation)
            back = sp.coo_array(matrix.T @ observed)
            seen = sp.coo_array(matrix)
            extra = total + np.arange(matrix.shape[0])
            entries.append((back.row, total + back.col, back.data))
            entries.append((total + seen.row, seen.col, -seen.data))
            entries.append((extra, extra, np.ones(matrix.shape[0])))
            total += int(matrix.shape[0])
        rows, columns, self._values = (np.concatenate([part[k] for part in entries]) for k in range(3))
        self._order = np.lexsort((rows, columns))
        self._indices = rows[self._order].astype(np.int32)
        self._indptr = np.concatenate([[0], np.cumsum(np.bincount(columns, minlength=total))]).astype(
            np.int32
        )
        self._total, self._size = total, size

    def matrix(self, at: Evaluation) -> sp.csc_array:
        """The Newton matrix, explicit zeros included."""
        equation = self.equation
        values = self._values.copy()
        penalty = equation.gamma * equation.problem.bound_mass * at.data.active
        values[: self._size] = self._diagonal + penalty + at.data.curvature
        if self._changing:
            one = self._state_values
            values[one] = values[one.stop : 2 * one.stop - one.start] = at.data.matrix.data
        last = self._first_scaled + self._scaled.size
        values[self._first_scaled : last] = self._scaled * at.data.derivative.diagonal[self._scaled_rows]
        return sp.csc_array(
            (values[self._order], self._indices, self._indptr), shape=(self._total, self._total)
        )

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return the direction in (y, p); its residual is computed."""
        d, message = self.apply_inverse(at, -at.residual)
        if d is None:
            return Direction(None, np.inf, 0, "singular", message)
        image = product_residual(self._last, d, -at.residual)
        left = image / max(float(np.linalg.norm(at.residual)), 1e-300)
        return Direction(d[: 2 * self._size], left, 0, "solved" if left < 1e-6 else "inaccurate")

    def sensitivity(self, at: Evaluation, load: FloatArray) -> FloatArray | None:
        """Solve G d = load for the first row of the system, with the factor of the point; None where singular."""
        d, _ = self.apply_inverse(at, np.concatenate([load, np.zeros(self._size)]))
        return None if d is None else d[: 2 * self._size]

    def apply_inverse(self, at: Evaluation, rhs: FloatArray) -> tuple[FloatArray | None, str]:
        """Solve with the matrix of the point, for a right-hand side in (y, p); refined once."""
        work = self.equation.work
        point = at.data
        key: Any = (self.equation.gamma, point.active.tobytes(), point.derivative.diagonal.tobytes())
        if self._changing:
            key = (*key, point.matrix.data.tobytes(), point.curvature.tobytes())
        try:
            if self._factor is None or key != self._key:
                self._key = None
                self._last = self.matrix(at)
                if self._factor is None:
                    self._factor = Factorization(self._last, work=work)
                else:
                    self._factor.refactorize(self._last)
                self._key = key
        except SingularMatrixError as error:
            self._factor = None
            return None, f"singular Newton system: {error}"
        full = np.zeros(self._total)
        full[: 2 * self._size] = rhs
        work.linear_solves += 2
        d = self._factor.solve(full)
        return d + self._factor.solve(full - self._last @ d), ""


def product_residual(matrix: sp.csc_array, d: FloatArray, rhs: FloatArray) -> float:
    """||matrix d - [rhs, 0]||."""
    left = matrix @ d
    left[: rhs.size] -= rhs
    return float(np.linalg.norm(left))
