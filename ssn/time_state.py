"""Time-dependent linear state equations M y' + A y = load, all time levels stacked as one state model."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError
from .linear.boundary import as_matrix, as_square, is_symmetric
from .linear.direct import Factorization, SingularMatrixError
from .validate import count, float_array, scalar, weight_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]

SCHEMES = {"implicit Euler": 1.0, "Crank-Nicolson": 0.5}
# steps that differ by less than this many roundings of the times are one step size
ROUNDINGS = 8.0


class TimeDependentState:
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
    ) -> None:
        self.A = as_square(A, "A")
        if isinstance(self.A, LinearOperator) or isinstance(M, LinearOperator):
            raise InputError(
                "TimeDependentState needs explicit M and A; give an object with the StateModel members instead"
            )
        self.points = int(self.A.shape[0])
        lumped = not sp.issparse(M) and np.ndim(M) == 1
        self.M: Any = (
            sp.csr_array(sp.diags_array(float_array(M, "M", shape=(self.points,))))
            if lumped
            else as_square(M, "M", self.points)
        )
        self.theta = _theta(scheme)
        self.times = _times(times, steps, duration)
        self.steps = self.times.size - 1
        self.size = self.steps * self.points
        self._sizes, self._size_of_step = _distinct(self.times)
        self.step_sizes: FloatArray = self._sizes[self._size_of_step]
        self.load_times = self.theta * self.times[1:] + (1.0 - self.theta) * self.times[:-1]
        self.level_weights = self.theta * self.step_sizes
        self.level_weights[:-1] += (1.0 - self.theta) * self.step_sizes[1:]
        for array in (self.times, self.step_sizes, self.load_times, self.level_weights):
            array.setflags(write=False)
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

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E y = rhs by a sweep forward in time; one state solve."""
        loads = self._levels(rhs)
        result = np.empty((self.steps, self.points))
        for k in range(self.steps):
            load = loads[k]
            if k:
                load = load + self._explicit[self._size_of_step[k]] @ result[k - 1]
            result[k] = self._factor(k).solve(load)
        self.work.state_solves += 1
        return result.ravel()

    def adjoint_solve(self, rhs: FloatArray) -> FloatArray:
        """Solve E' p = rhs by a sweep backward in time; one state solve."""
        loads = self._levels(rhs)
        result = np.empty((self.steps, self.points))
        for k in reversed(range(self.steps)):
            load = loads[k]
            if k + 1 < self.steps:
                load = load + self._transposed[self._size_of_step[k + 1]] @ result[k + 1]
            result[k] = self._factor(k).solve(load, transposed=not self.symmetric)
        self.work.state_solves += 1
        return result.ravel()

    def residual(self, y: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E y."""
        self.work.operator_products += 1
        levels = self._levels(y)
        result = self._levels(rhs).copy()
        for which, tau in enumerate(self._sizes):
            k = np.flatnonzero(self._size_of_step == which)
            later = k[k > 0]
            result[k] -= (self._implicit_part(tau) @ levels[k].T).T
            result[later] += (self._explicit[which] @ levels[later - 1].T).T
        return result.ravel()

    def adjoint_residual(self, p: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E' p."""
        self.work.operator_products += 1
        levels = self._levels(p)
        result = self._levels(rhs).copy()
        for which, tau in enumerate(self._sizes):
            k = np.flatnonzero(self._size_of_step == which)
            later = k[k > 0]
            result[k] -= (self._implicit_part(tau).T @ levels[k].T).T
            result[later - 1] += (self._transposed[which] @ levels[later].T).T
        return result.ravel()

    def _levels(self, stacked: FloatArray) -> FloatArray:
        return np.reshape(stacked, (self.steps, self.points))

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

    @cached_property
    def lumped_mass(self) -> FloatArray:
        """The row sums of M, shape (N,)."""
        return np.asarray(self.M.sum(axis=1), dtype=np.float64).ravel()

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
        result = np.zeros((self.steps, self.points))
        if callable(load):
            values = np.stack(
                [float_array(load(t), f"load({t:.6g})", shape=(self.points,)) for t in self.times.tolist()]
            )
            result += self.theta * values[1:] + (1.0 - self.theta) * values[:-1]
        elif load is not None:
            shape = (self.points,) if np.ndim(load) == 1 else (self.steps, self.points)
            result += float_array(load, "load", shape=shape)
        result *= self.step_sizes[:, None]
        if initial is not None:
            y0 = float_array(initial, "initial", shape=(self.points,))
            result[0] += self._explicit[self._size_of_step[0]] @ y0
        return result.ravel()

    def control_operator(self, shapes: Any = None, amplitudes: Any = None) -> sp.csr_array:
        """B = (diag(tau) T) kron S of controls u = (amplitude in time, shape in space), time slowest.

        Parameters
        ----------
        shapes : sparse array or array, shape (N, m), optional
            S, column j the load of unit control j, integrated over space: the lumped mass times the indicator of a
            patch, for instance. By default diag(lumped mass), a control at every point.
        amplitudes : sparse array or array, shape (K, q), optional
            T, column i the values of amplitude i on the K steps. By default the identity, a value a step. ``np.ones((K,
            1))`` makes controls that are constant in time.

        Returns
        -------
        sparse array, shape (K * N, q * m)
        """
        S = (
            sp.diags_array(self.lumped_mass)
            if shapes is None
            else _explicit_matrix(shapes, "shapes", self.points)
        )
        T = (
            sp.eye_array(self.steps)
            if amplitudes is None
            else _explicit_matrix(amplitudes, "amplitudes", self.steps)
        )
        return sp.csr_array(sp.kron(sp.diags_array(self.step_sizes) @ T, S, format="csr"))

    def control_mass(self, mass: Any = None, amplitudes: Any = None) -> FloatArray:
        """Lumped mass of the controls of `control_operator`, shape (q * m,).

        Parameters
        ----------
        mass : array, shape (m,), optional
            Mass in space of each control, for instance the area of a patch; the lumped mass by default.
        amplitudes : sparse array or array, shape (K, q), optional
            As in `control_operator`. The mass in time of an amplitude is its integral, which lumps a partition of
            unity; weights that are not positive are refused.
        """
        space = self._space_mass(mass)
        if amplitudes is None:
            return np.asarray(np.kron(self.step_sizes, space), dtype=np.float64)
        T = _explicit_matrix(amplitudes, "amplitudes", self.steps)
        time = np.asarray(T.T @ self.step_sizes)
        time = weight_array(time, "integral of amplitudes", time.size)
        return np.asarray(np.kron(time, space), dtype=np.float64)

    def observation_mass(self, mass: Any = None, levels: Any = None) -> FloatArray:
        """Mass of the observation, shape (levels * m,): `level_weights` times the mass in space.

        Parameters
        ----------
        mass : array, shape (m,), optional
            The lumped mass by default.
        levels : sequence of int, optional
            As in `observation_operator`; each then has weight 1 in time.
        """
        time = self.level_weights if levels is None else np.ones(len(self._chosen(levels)))
        return np.asarray(np.kron(time, self._space_mass(mass)), dtype=np.float64)

    def observation_operator(self, observation: Any = None, levels: Any = None) -> sp.csr_array:
        """C that observes some levels, or something of each level.

        Parameters
        ----------
        observation : sparse array or array, shape (m, N), optional
            What is observed at a level; the whole state by default.
        levels : sequence of int, optional
            Numbers of levels from 1 to K, or from -1 backwards: ``[-1]`` is the final time. All by default.

        Returns
        -------
        sparse array, shape (levels * m, K * N)
        """
        chosen = np.arange(self.steps) if levels is None else self._chosen(levels)
        take = sp.csr_array(
            (np.ones(chosen.size), (np.arange(chosen.size), chosen)), shape=(chosen.size, self.steps)
        )
        C = (
            sp.eye_array(self.points)
            if observation is None
            else _explicit_matrix(observation, "observation", None, self.points)
        )
        return sp.csr_array(sp.kron(take, C, format="csr"))

    def _chosen(self, levels: Any) -> npt.NDArray[np.intp]:
        chosen = np.asarray(levels)
        if chosen.ndim != 1 or chosen.size == 0 or not np.issubdtype(chosen.dtype, np.integer):
            raise InputError(f"levels must be a sequence of whole numbers, got {levels!r}")
        found = np.where(chosen < 0, chosen + self.steps, chosen - 1)
        bad = (found < 0) | (found >= self.steps)
        if bad.any():
            raise InputError(
                f"levels has {chosen[int(np.argmax(bad))]}, expected 1 to {self.steps} or -{self.steps} to -1"
            )
        return np.asarray(found, dtype=np.intp)

    def _space_mass(self, mass: Any) -> FloatArray:
        if mass is None:
            return weight_array(self.lumped_mass, "row sums of M", self.points)
        array = float_array(mass, "mass", ndim=1)
        return weight_array(array, "mass", array.size)


def _theta(scheme: str | float) -> float:
    if isinstance(scheme, str):
        if scheme not in SCHEMES:
            raise InputError(f"scheme must be 'implicit Euler', 'Crank-Nicolson' or theta, got {scheme!r}")
        return SCHEMES[scheme]
    theta = scalar(scheme, "scheme (theta)")
    if not 0.5 <= theta <= 1.0:
        raise InputError(f"theta must lie between 1/2 and 1, got {theta}: below 1/2 large steps are unstable")
    return theta


def _times(times: Any, steps: Any, duration: Any) -> FloatArray:
    if (times is None) == (steps is None and duration is None):
        raise InputError("give either times, or steps and duration")
    if times is None:
        if steps is None or duration is None:
            raise InputError(f"{'steps' if steps is None else 'duration'} is missing: give both, or times")
        steps = count(steps, "steps")
        return scalar(duration, "duration", positive=True) * np.arange(steps + 1) / steps
    array = float_array(times, "times", ndim=1)
    if array.size < 2:
        raise InputError(f"times needs at least two entries, got {array.size}")
    falls = np.diff(array) <= 0
    if falls.any():
        k = int(np.argmax(falls))
        raise InputError(f"times must rise: times[{k + 1}] = {array[k + 1]} after {array[k]}")
    return array


def _distinct(times: FloatArray) -> tuple[FloatArray, npt.NDArray[np.intp]]:
    """The distinct step sizes, up to the rounding of the times, and which of them each step has."""
    tau = np.diff(times)
    order = np.argsort(tau, kind="stable")
    rounding = ROUNDINGS * np.finfo(float).eps * np.abs(times).max()
    group = np.concatenate([[0], np.cumsum(np.diff(tau[order]) > rounding)])
    which = np.empty(tau.size, dtype=np.intp)
    which[order] = group
    sizes = np.bincount(which, weights=tau) / np.bincount(which)
    return sizes, which


def _explicit_matrix(value: Any, name: str, rows: int | None, columns: int | None = None) -> Any:
    matrix = as_matrix(value, name, shape=(rows, columns))
    if isinstance(matrix, LinearOperator):
        raise InputError(f"{name} must be an explicit matrix")
    return matrix
