"""Time-dependent linear state equations M y' + A y = load, all time levels stacked as one state model."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError
from .linear.boundary import as_square, is_symmetric
from .linear.direct import Factorization, SingularMatrixError
from .time_grid import TimeGrid
from .validate import count, float_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


class TimeDependentState(TimeGrid):
    """The state equation M y' + A y = load on a time grid t_0 < ... < t_K, from a given initial state y_0.

    The unknown is the stack y = (y_1, ..., y_K) of shape (K * N,), time varies slowest; with tau_k = t_k - t_{k-1}, row
    k of E y = rhs is

        M (y_k - y_{k-1}) + tau_k A (theta y_k + (1 - theta) y_{k-1}) = rhs_k   (y_0 = 0),

    theta = 1 implicit Euler, 1/2 Crank-Nicolson. So rhs_k is the load integrated over step k, and what is known of y_0
    belongs to the source: ``source(load, initial)`` builds it.

    Parameters
    ----------
    M : array, shape (N,), or sparse array or array, shape (N, N)
        Mass: a lumped one as a vector, or any matrix.
    A : sparse array or array, shape (N, N)
        Symmetric or not.
    times : array, shape (K + 1,), optional
        t_0 < ... < t_K, equidistant or not.
    steps, duration : int and float, optional
        K equal steps from 0 to `duration`, instead of `times`.
    scheme : {"implicit Euler", "Crank-Nicolson"} or float
        The float is theta, between 1/2 and 1: below 1/2 the scheme is not stable for all steps.
    memory : int, optional
        Bytes for a trajectory in gradients of a control problem. A longer one is kept at checkpoints and computed again
        from there (`ssn.checkpoints`), where the whole state is observed with a lumped mass.

    Attributes
    ----------
    size : int
        K * N.
    steps, points : int
        K and N.
    times : array, shape (K + 1,)
    load_times : array, shape (K,)
        theta t_k + (1 - theta) t_{k-1}, where a load that is constant on step k is to be sampled.
    step_sizes : array, shape (K,)
        tau, equal to the last bit where the times are equidistant up to rounding.
    level_weights : array, shape (K,)
        theta tau_k + (1 - theta) tau_{k+1} (theta tau_K at the end), the scheme's own quadrature over the levels t_1,
        ..., t_K: the weights with which the adjoint sweep is the same scheme backwards in time. The part of t_0 is
        left out: it does not depend on a control.

    Raises
    ------
    InputError
        For matrices that are not square or do not fit, times that do not rise, or, at the first solve, a step
        matrix M + theta tau A that is singular.

    Notes
    -----
    A sweep counts as one state solve and costs K back substitutions. Each distinct step size takes one
    factorisation, at its first use. Memory is that of the trajectories in and out, and of the factors.
    Crank-Nicolson does not damp the rough part of an initial state that violates the boundary conditions.

    The adjoint p of `adjoint_solve` has one value a step, at `load_times` and with the density's scale: with
    `control_mass` and `observation_mass` from here, p tends to the continuous adjoint state with the order of the
    scheme, 1 for theta > 1/2 and 2 for theta = 1/2.

    Source: R. Becker, D. Meidner and B. Vexler, Optim. Methods Softw. 22 (2007) 813-833 (from memory), for schemes
    whose discrete adjoint is the adjoint's discretisation.

    Examples
    --------
    Heat conduction in a rod, a control in space and time that tracks z:

    >>> import numpy as np, scipy.sparse as sp, ssn
    >>> n, h = 9, 0.1
    >>> stiffness = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h
    >>> state = ssn.TimeDependentState(np.full(n, h), stiffness, steps=20, duration=1.0)
    >>> problem = ssn.ControlProblem(
    ...     state=state,
    ...     target=np.ones(state.size),
    ...     cost=ssn.SparseCost(0.01),
    ...     control_weight=1e-3,
    ...     control_operator=state.control_operator(),
    ...     control_mass=state.control_mass(),
    ...     observation_mass=state.observation_mass(),
    ... )
    >>> ssn.solve(problem).converged
    True
    """

    def __init__(
        self,
        M: Any,
        A: Any,
        times: Any = None,
        *,
        steps: int | None = None,
        duration: float | None = None,
        scheme: str | float = "implicit Euler",
        memory: int | None = None,
    ) -> None:
        self.memory = None if memory is None else count(memory, "memory")
        self.A = as_square(A, "A")
        if isinstance(self.A, LinearOperator) or isinstance(M, LinearOperator):
            raise InputError(
                "TimeDependentState needs explicit M and A; give an object with the StateModel members instead"
            )
        super().__init__(M, int(self.A.shape[0]), times, steps, duration, scheme)
        self.symmetric = is_symmetric(self.M) and is_symmetric(self.A)
        self.work = WorkCounts()
        self._factors: dict[int, Factorization] = {}
        self._explicit = [self._explicit_part(tau) for tau in self._sizes]
        self._transposed = (
            self._explicit
            if self.symmetric
            else [B.T.tocsr() if sp.issparse(B) else B.T for B in self._explicit]
        )

    def _explicit_part(self, tau: float) -> Any:
        """M - (1 - theta) tau A, what a level hands on to the next."""
        return self.M if self.theta == 1.0 else self.M - (1.0 - self.theta) * tau * self.A

    def _implicit_part(self, tau: float) -> Any:
        return self.M + self.theta * tau * self.A

    # the members of a state model

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        self.work = work
        for factor in self._factors.values():
            factor.work = work

    def _factor(self, step: int) -> Factorization:
        which = int(self._size_of_step[step])
        if which not in self._factors:
            matrix = self._implicit_part(self._sizes[which])
            definite = self.symmetric and bool((matrix.diagonal() > 0).all())
            try:
                self._factors[which] = Factorization(
                    matrix, symmetric=self.symmetric, positive_definite=definite, work=self.work
                )
            except SingularMatrixError as error:
                raise InputError(
                    f"the step matrix M + theta tau A is singular for tau = {self._sizes[which]:.6g} ({error})"
                ) from error
        return self._factors[which]

    def advance(self, k: int, earlier: FloatArray | None, load: FloatArray) -> FloatArray:
        """Level k, 1 to K, from the one before (None: zero) and its part of the right-hand side."""
        if earlier is not None and k > 1:
            load = load + self._explicit[self._size_of_step[k - 1]] @ earlier
        return self._factor(k - 1).solve(load)

    def retreat(self, k: int, later: FloatArray | None, load: FloatArray) -> FloatArray:
        """Level k of the adjoint from the one after (None at the end) and its part of the right-hand side."""
        if later is not None:
            load = load + self._transposed[self._size_of_step[k]] @ later
        return self._factor(k - 1).solve(load, transposed=not self.symmetric)

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E y = rhs by a sweep forward in time; one state solve."""
        loads = self.levels(rhs)
        result = np.empty((self.steps, self.points))
        for k in range(self.steps):
            result[k] = self.advance(k + 1, result[k - 1] if k else None, loads[k])
        self.work.state_solves += 1
        return result.ravel()

    def adjoint_solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E' p = rhs by a sweep backward in time; one state solve."""
        loads = self.levels(rhs)
        result = np.empty((self.steps, self.points))
        for k in reversed(range(self.steps)):
            result[k] = self.retreat(k + 1, result[k + 1] if k + 1 < self.steps else None, loads[k])
        self.work.state_solves += 1
        return result.ravel()

    def residual(self, y: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E y."""
        self.work.operator_products += 1
        levels = self.levels(y)
        result = self.levels(rhs).copy()
        for which, tau in enumerate(self._sizes):
            k = np.flatnonzero(self._size_of_step == which)
            later = k[k > 0]
            result[k] -= (self._implicit_part(tau) @ levels[k].T).T
            result[later] += (self._explicit[which] @ levels[later - 1].T).T
        return result.ravel()

    def adjoint_residual(self, p: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E' p."""
        self.work.operator_products += 1
        levels = self.levels(p)
        result = self.levels(rhs).copy()
        for which, tau in enumerate(self._sizes):
            k = np.flatnonzero(self._size_of_step == which)
            later = k[k > 0]
            result[k] -= (self._implicit_part(tau).T @ levels[k].T).T
            result[later - 1] += (self._transposed[which] @ levels[later].T).T
        return result.ravel()

    @cached_property
    def matrix(self) -> sp.csr_array:
        """E as a sparse array, assembled at the first use; the sweeps do without it."""
        rows: list[list[Any]] = [[None] * self.steps for _ in range(self.steps)]
        implicit = [sp.csr_array(self._implicit_part(tau)) for tau in self._sizes]
        for k, which in enumerate(self._size_of_step):
            rows[k][k] = implicit[which]
            if k:
                rows[k][k - 1] = -sp.csr_array(self._explicit[which])
        return sp.csr_array(sp.block_array(rows))

    # what a control problem is written with

    def source(self, load: Any = None, initial: Any = None) -> FloatArray:
        """Build the right-hand side of a load and an initial state.

        Parameters
        ----------
        load : function, or array of shape (N,) or (K, N), optional
            The load per unit of time, integrated over space: a function t -> array (N,), which is taken at both ends
            of each step with the weights of the scheme; constant in time; or one value a step.
        initial : array, shape (N,), optional
            y_0.

        Returns
        -------
        array, shape (K * N,)
        """
        result = self.integrated(load)
        if initial is not None:
            y0 = float_array(initial, "initial", shape=(self.points,))
            result[0] += self._explicit[self._size_of_step[0]] @ y0
        return result.ravel()
