"""Nonlinear state equations in time, all levels stacked as one state model: semilinear, and ordinary systems."""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError, StateSolveError
from .linear.boundary import as_square, is_symmetric
from .linear.direct import Factorization, SingularMatrixError
from .nonlinear_states import LinearisedState, Reaction, Solve, SparseSum, as_mass, damped_newton
from .states import StateModel
from .time_grid import TimeGrid
from .validate import float_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]

# small steps in place of one, where a start for its equation is wanted
SMALL_STEPS = (8, 64, 512)


class NonlinearTimeState(TimeGrid):
    """M y' + G(t, y) = load on a time grid; the base of the two models below.

    The unknown is the stack y = (y_1, ..., y_K); with tau_k = t_k - t_{k-1} and y_0 given, row k of E(y) is

        M (y_k - y_{k-1}) + tau_k (theta G(t_k, y_k) + (1 - theta) G(t_{k-1}, y_{k-1})),

    theta = 1 implicit Euler, 1/2 Crank-Nicolson. A load is integrated over its step, as in `TimeDependentState`.
    """

    initial: FloatArray
    work: WorkCounts

    def term(self, t: float, y: FloatArray) -> FloatArray:
        """G(t, y)."""
        raise NotImplementedError

    def step_solver(self, t: float, y: FloatArray, scale: float) -> Solve:
        """The function that solves with M + scale dG/dy."""
        raise NotImplementedError

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        self.work = work

    def source(self, load: Any = None) -> FloatArray:
        """Build the right-hand side of a load, see `TimeDependentState.source`; y_0 belongs to the model here."""
        return self.integrated(load).ravel()

    def solve(self, load: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve E(y) = load by Newton's method in each step; counts as one state solve a Newton correction and level.

        Raises
        ------
        StateSolveError
            Naming the time at which the solve failed.
        """
        loads = self.levels(load)
        guesses = None if start is None else self.levels(start)
        result = np.empty((self.steps, self.points))
        before = self.initial
        done = 0
        for k in range(self.steps):
            t, tau = float(self.times[k + 1]), float(self.step_sizes[k])
            known = loads[k] + self.M @ before
            if self.theta < 1.0:
                known = known - tau * (1.0 - self.theta) * self.term(float(self.times[k]), before)

            def residual(
                y: FloatArray, t: float = t, known: FloatArray = known, scale: float = tau * self.theta
            ) -> FloatArray:
                return np.asarray(known - self.M @ y - scale * self.term(t, y))

            def linearised(y: FloatArray, t: float = t, scale: float = tau * self.theta) -> Solve:
                nonlocal done
                done += 1
                return self.step_solver(t, y, scale)

            where = f" at t = {t:.6g}"
            guess = before if guesses is None else guesses[k]
            try:
                result[k] = damped_newton(residual, linearised, guess, where)
            except StateSolveError as error:
                guess = self._by_small_steps(k, before, loads[k], linearised, error)
                result[k] = damped_newton(residual, linearised, guess, where)
            before = result[k]
        # a sweep is a state solve: K levels make one
        self.work.state_solves += -(-done // self.steps)
        return result.ravel()

    def _by_small_steps(
        self,
        k: int,
        before: FloatArray,
        load: FloatArray,
        linearised: Callable[..., Solve],
        error: StateSolveError,
    ) -> FloatArray:
        """The state at the end of a step by many small ones of implicit Euler: a start where the plain one fails.

        During an ignition the equation of a large step has several solutions, or none near the level before.
        """
        begin, tau = float(self.times[k]), float(self.step_sizes[k])
        for parts in SMALL_STEPS:
            y, small = before, tau / parts
            try:
                for j in range(1, parts + 1):
                    t = begin + j * small
                    known = load / parts + self.M @ y

                    def residual(
                        x: FloatArray, t: float = t, known: FloatArray = known, small: float = small
                    ) -> FloatArray:
                        return np.asarray(known - self.M @ x - small * self.term(t, x))

                    def solver(x: FloatArray, t: float = t, small: float = small) -> Solve:
                        return linearised(x, t, small)

                    y = damped_newton(residual, solver, y, f" at t = {t:.6g}")
                return y
            except StateSolveError:
                continue
        raise error

    def residual(self, y: FloatArray, load: FloatArray) -> FloatArray:
        """Return load - E(y)."""
        self.work.operator_products += 1
        levels = np.vstack([self.initial, self.levels(y)])
        terms = np.stack([self.term(t, x) for t, x in zip(self.times.tolist(), levels, strict=True)])
        mixed = self.theta * terms[1:] + (1.0 - self.theta) * terms[:-1]
        change = np.asarray(self.M @ np.diff(levels, axis=0).T).T
        return np.asarray((self.levels(load) - change - self.step_sizes[:, None] * mixed).ravel())

    def mixed(self, p: FloatArray) -> FloatArray:
        """theta tau_k p_k + (1 - theta) tau_{k+1} p_{k+1}: what meets G(t_k, y_k) in p' E(y), shape (K, N)."""
        levels = self.levels(p)
        result = self.theta * self.step_sizes[:, None] * levels
        result[:-1] += (1.0 - self.theta) * self.step_sizes[1:, None] * levels[1:]
        return result


class LinearisedSweep:
    """B_k y_k - C_k y_{k-1} = rhs_k with sparse matrices of each step: E'(y) of a semilinear model, swept in time."""

    def __init__(self, implicit: list[Any], explicit: list[Any], symmetric: bool, work: WorkCounts) -> None:
        self.implicit, self.explicit, self.symmetric = implicit, explicit, symmetric
        self.steps, self.points = len(implicit), int(implicit[0].shape[0])
        self.size = self.steps * self.points
        self.work = work
        self._factors: list[Factorization | None] = [None] * self.steps
        self._back = explicit if symmetric else [C.T.tocsr() for C in explicit]

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        self.work = work
        for factor in self._factors:
            if factor is not None:
                factor.work = work

    def _factor(self, k: int) -> Factorization:
        factor = self._factors[k]
        if factor is None:
            matrix = self.implicit[k]
            definite = self.symmetric and bool((matrix.diagonal() > 0).all())
            try:
                factor = Factorization(
                    matrix, symmetric=self.symmetric, positive_definite=definite, work=self.work
                )
            except SingularMatrixError as error:
                raise StateSolveError(
                    f"the linearised state equation is singular in step {k + 1} ({error})"
                ) from error
            self._factors[k] = factor
        return factor

    def solve(self, rhs: FloatArray) -> FloatArray:
        """Solve by a sweep forward in time; one state solve."""
        loads = np.reshape(rhs, (self.steps, self.points))
        result = np.empty_like(loads)
        for k in range(self.steps):
            load = loads[k] + self.explicit[k] @ result[k - 1] if k else loads[k]
            result[k] = self._factor(k).solve(load)
        self.work.state_solves += 1
        return result.ravel()

    def adjoint_solve(self, rhs: FloatArray) -> FloatArray:
        """Solve the transposed system by a sweep backward in time; one state solve."""
        loads = np.reshape(rhs, (self.steps, self.points))
        result = np.empty_like(loads)
        for k in reversed(range(self.steps)):
            load = loads[k] + self._back[k + 1] @ result[k + 1] if k + 1 < self.steps else loads[k]
            result[k] = self._factor(k).solve(load, transposed=not self.symmetric)
        self.work.state_solves += 1
        return result.ravel()

    def residual(self, y: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs - E' y."""
        self.work.operator_products += 1
        levels = np.reshape(y, (self.steps, self.points))
        result = np.reshape(rhs, (self.steps, self.points)).copy()
        for k in range(self.steps):
            result[k] -= self.implicit[k] @ levels[k]
            if k:
                result[k] += self.explicit[k] @ levels[k - 1]
        return result.ravel()

    def adjoint_residual(self, p: FloatArray, rhs: FloatArray) -> FloatArray:
        """Return rhs minus the transpose of E' times p."""
        self.work.operator_products += 1
        levels = np.reshape(p, (self.steps, self.points))
        result = np.reshape(rhs, (self.steps, self.points)).copy()
        for k in range(self.steps):
            result[k] -= self.implicit[k].T @ levels[k]
            if k:
                result[k - 1] += self._back[k] @ levels[k]
        return result.ravel()


class TimeDependentSemilinearState(NonlinearTimeState):
    """The state equation M y' + A y + D d(y) = load on a time grid, from a given initial state.

    Parameters
    ----------
    M : array, shape (N,), or sparse array or array, shape (N, N)
        Mass: a lumped one as a vector, or any matrix.
    A : sparse array or array, shape (N, N)
        Symmetric or not.
    reaction, reaction_derivative : callable
        d and d' at each point: y (N,) -> (N,).
    reaction_second : callable, optional
        d''; by differences of d' where it is not given.
    times, steps, duration, scheme
        As in `TimeDependentState`.
    initial : array, shape (N,), optional
        y_0; zero by default.
    reaction_mass : array (N,) or sparse array (N, N), optional
        D; the row sums of M by default.

    Attributes
    ----------
    size, steps, points, times, load_times, step_sizes, level_weights
        As in `TimeDependentState`.

    Raises
    ------
    InputError
        For what does not fit.

    Notes
    -----
    A sweep forward takes a few factorisations a step, the linearised equation one a step; they are kept for as long as
    the linearised model lives. The second derivative is exact, so gradient and Hessian are those of the discrete
    problem.
    """

    def __init__(
        self,
        M: Any,
        A: Any,
        reaction: Callable[[FloatArray], Any],
        reaction_derivative: Callable[[FloatArray], Any],
        reaction_second: Callable[[FloatArray], Any] | None = None,
        times: Any = None,
        *,
        steps: int | None = None,
        duration: float | None = None,
        scheme: str | float = "implicit Euler",
        initial: Any = None,
        reaction_mass: Any = None,
    ) -> None:
        self.A = as_square(A, "A")
        if any(isinstance(matrix, LinearOperator) for matrix in (self.A, M, reaction_mass)):
            raise InputError("TimeDependentSemilinearState needs explicit matrices")
        super().__init__(M, int(self.A.shape[0]), times, steps, duration, scheme)
        self.reaction = Reaction(reaction, reaction_derivative, reaction_second)
        self.initial = (
            np.zeros(self.points)
            if initial is None
            else float_array(initial, "initial", shape=(self.points,))
        )
        self.D: Any = as_mass(
            self.lumped_mass if reaction_mass is None else reaction_mass, "reaction_mass", self.points
        )
        lumped = bool((abs(self.D).sum(axis=1) == abs(self.D.diagonal())).all())
        self.symmetric = lumped and is_symmetric(self.M) and is_symmetric(self.A)
        self.work = WorkCounts()
        self._jacobian = SparseSum(self.A, self.D)
        self._step_matrices: dict[float, SparseSum] = {}
        self._step_factor: Factorization | None = None

    def term(self, t: float, y: FloatArray) -> FloatArray:
        """A y + D d(y)."""
        return np.asarray(self.A @ y) + np.asarray(self.D @ self.reaction.value(y))

    def step_solver(self, t: float, y: FloatArray, scale: float) -> Solve:
        """The function that solves with M + scale (A + D diag(d'(y))); the ordering is kept between steps."""
        if scale not in self._step_matrices:
            self._step_matrices[scale] = SparseSum(self.M + scale * self.A, scale * self.D)
        matrix = self._step_matrices[scale].matrix(self.reaction.derivative(y))
        definite = self.symmetric and bool((matrix.diagonal() > 0).all())
        factor, self._step_factor = self._step_factor, None  # kept only where it is regular
        if factor is None or factor.positive_definite != definite:
            factor = Factorization(
                matrix, symmetric=self.symmetric, positive_definite=definite, work=self.work
            )
        else:
            factor.work = self.work
            factor.refactorize(matrix)
        self._step_factor = factor
        return factor.solve

    def linearize(self, y: FloatArray) -> LinearisedSweep:
        """E'(y) as a linear state model."""
        levels = np.vstack([self.initial, self.levels(y)])
        jacobians = [self._jacobian.matrix(self.reaction.derivative(x)) for x in levels]
        theta = self.theta
        implicit = [self.M + theta * tau * J for tau, J in zip(self.step_sizes, jacobians[1:], strict=True)]
        if theta == 1.0:
            explicit = [self.M] * self.steps
        else:
            explicit = [
                self.M - (1.0 - theta) * tau * J
                for tau, J in zip(self.step_sizes, jacobians[:-1], strict=True)
            ]
        return LinearisedSweep(
            [sp.csr_array(B) for B in implicit],
            [sp.csr_array(C) for C in explicit],
            self.symmetric,
            self.work,
        )

    def second_derivative(self, y: FloatArray, p: FloatArray) -> sp.csr_array:
        """A diagonal matrix: d''(y_k) times D' of what meets it."""
        weights = np.asarray(self.D.T @ self.mixed(p).T).T
        second = np.stack([self.reaction.second(x) for x in self.levels(y)])
        return sp.csr_array(sp.diags_array((second * weights).ravel()))


class OrdinaryDifferentialSystem(NonlinearTimeState):
    """A system y' = rhs(t, y) + load of ordinary differential equations on a time grid, for instance load = B(t) u(t).

    Parameters
    ----------
    rhs : callable
        (t, y (N,)) -> (N,).
    jacobian : callable
        (t, y) -> array (N, N) of the derivatives of rhs, row i those of component i.
    initial : array, shape (N,)
        y_0.
    times, steps, duration, scheme
        As in `TimeDependentState`.
    hessian : callable, optional
        (t, y, q) -> array (N, N): sum_i q_i times the matrix of second derivatives of component i. By central
        differences of the Jacobian where it is not given, with a relative error of about 1e-10 and 2 N calls a level.

    Attributes
    ----------
    size, steps, points, times, load_times, step_sizes, level_weights
        As in `TimeDependentState`; points is N.

    Raises
    ------
    InputError
        For what does not fit.

    Notes
    -----
    Meant for up to some dozens of components: the Jacobians are dense. The linearised system is factorised as one
    sparse matrix. ``control_operator(shapes)`` makes the B of m controls with a value a step, `shapes` an array (N, m)
    or a function t -> array (N, m).

    Examples
    --------
    A pendulum brought to rest by a torque:

    >>> import numpy as np, ssn
    >>> state = ssn.OrdinaryDifferentialSystem(
    ...     lambda t, y: np.array([y[1], -np.sin(y[0])]),
    ...     lambda t, y: np.array([[0.0, 1.0], [-np.cos(y[0]), 0.0]]),
    ...     initial=[1.0, 0.0],
    ...     steps=50,
    ...     duration=5.0,
    ...     scheme="Crank-Nicolson",
    ... )
    >>> problem = ssn.NonlinearControlProblem(
    ...     state=state,
    ...     target=np.zeros(state.size),
    ...     cost=ssn.SparseCost(0.05, -1.0, 1.0),
    ...     control_weight=0.01,
    ...     control_operator=state.control_operator([[0.0], [1.0]]),
    ...     control_mass=state.control_mass([1.0]),
    ...     observation_mass=state.observation_mass(),
    ... )
    >>> ssn.solve(problem).converged
    True
    """

    def __init__(
        self,
        rhs: Callable[[float, FloatArray], Any],
        jacobian: Callable[[float, FloatArray], Any],
        initial: Any,
        times: Any = None,
        *,
        steps: int | None = None,
        duration: float | None = None,
        scheme: str | float = "implicit Euler",
        hessian: Callable[[float, FloatArray, FloatArray], Any] | None = None,
    ) -> None:
        functions: tuple[tuple[str, Any], ...] = (("rhs", rhs), ("jacobian", jacobian), ("hessian", hessian))
        for name, function in functions:
            if not callable(function) and not (name == "hessian" and function is None):
                raise InputError(f"{name} must be a function, got {type(function).__name__}")
        self.initial = float_array(initial, "initial", ndim=1)
        super().__init__(np.ones(self.initial.size), self.initial.size, times, steps, duration, scheme)
        self._rhs, self._user_jacobian, self._hessian = rhs, jacobian, hessian
        self.work = WorkCounts()

    @cached_property
    def _eye(self) -> FloatArray:
        return np.eye(self.points)

    def _called(self, function: Any, name: str, shape: tuple[int, ...], *arguments: Any) -> FloatArray:
        with np.errstate(all="ignore"):
            value = np.asarray(function(*arguments), dtype=np.float64)
        if value.shape != shape:
            raise InputError(f"{name} has shape {value.shape} at t = {arguments[0]:.6g}, expected {shape}")
        return value

    def term(self, t: float, y: FloatArray) -> FloatArray:
        """-rhs(t, y)."""
        return -self._called(self._rhs, "rhs", (self.points,), t, y.copy())

    def jacobian(self, t: float, y: FloatArray) -> FloatArray:
        """The derivative of rhs, checked."""
        value = self._called(self._user_jacobian, "jacobian", (self.points, self.points), t, y.copy())
        if not np.isfinite(value).all():
            i, j = (int(k) for k in np.argwhere(~np.isfinite(value))[0])
            raise StateSolveError(f"jacobian[{i}, {j}] is {value[i, j]} at t = {t:.6g}")
        return value

    def step_solver(self, t: float, y: FloatArray, scale: float) -> Solve:
        """The function that solves with I - scale times the Jacobian."""
        matrix = self._eye - scale * self.jacobian(t, y)
        inverse: FloatArray = np.asarray(
            np.linalg.inv(matrix), dtype=np.float64
        )  # small, and used a few times
        return lambda r: inverse @ r

    def linearize(self, y: FloatArray) -> StateModel:
        """E'(y) as a linear state model, block bidiagonal."""
        K, N = self.steps, self.points
        levels = np.vstack([self.initial, self.levels(y)])
        jacobians = np.stack([self.jacobian(t, x) for t, x in zip(self.times.tolist(), levels, strict=True)])
        tau = self.step_sizes[:, None, None]
        blocks = np.empty((2 * K - 1, N, N))
        blocks[::2] = self._eye - self.theta * tau * jacobians[1:]
        blocks[1::2] = -(self._eye + (1.0 - self.theta) * tau[1:] * jacobians[1:-1])
        # row 0: [0]; row k: [k - 1, k]
        columns = np.concatenate([[0], np.stack([np.arange(K - 1), np.arange(1, K)], axis=1).ravel()])
        pointers = np.concatenate([[0], 2 * np.arange(1, K + 1) - 1])
        matrix = sp.bsr_array((blocks, columns, pointers), shape=(K * N, K * N))
        state = LinearisedState(sp.csr_array(matrix))
        state.attach(self.work)
        return state

    def second_derivative(self, y: FloatArray, p: FloatArray) -> sp.csr_array:
        """Block diagonal: minus the second derivatives of rhs, weighted by what meets them."""
        levels, weights = self.levels(y), self.mixed(p)
        times = self.times[1:].tolist()
        blocks = -np.stack([self._second(*one) for one in zip(times, levels, weights, strict=True)])
        K = self.steps
        matrix = sp.bsr_array((blocks, np.arange(K), np.arange(K + 1)), shape=(self.size, self.size))
        return sp.csr_array(matrix)

    def _second(self, t: float, y: FloatArray, q: FloatArray) -> FloatArray:
        shape = (self.points, self.points)
        if self._hessian is not None:
            value = self._called(self._hessian, "hessian", shape, t, y.copy(), q.copy())
        else:
            value = np.zeros(shape)
            for i in range(self.points):
                move = self._eye[i] * np.finfo(float).eps ** (1 / 3) * (1.0 + abs(y[i]))
                change = self.jacobian(t, y + move) - self.jacobian(t, y - move)
                value[:, i] = change.T @ q / (2.0 * move[i])
            value = 0.5 * (value + value.T)
        if not np.isfinite(value).all():
            raise StateSolveError(f"hessian is not finite at t = {t:.6g}")
        return value
