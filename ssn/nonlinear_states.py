"""Nonlinear state models E(y) = load: what a control problem asks of them, and the steady semilinear one."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError, StateSolveError
from .linear.boundary import as_square, is_symmetric
from .linear.direct import Factorization, SingularMatrixError
from .states import StateModel, SteadyState
from .validate import weight_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]
Solve = Callable[[FloatArray], FloatArray]

# Newton steps and halvings of one state solve
MAX_STEPS, MAX_HALVINGS = 60, 20
# a correction with the matrix of the one before leaves itself times the ratio of the two: the last one where that is
# below LEFT, relative to the state, or where corrections of less than SMALL no longer fall, which is rounding
LEFT, SMALL = 1e-16, 1e-8
ROUNDING = 1e-14


@runtime_checkable
class NonlinearStateModel(Protocol):
    """A nonlinear state equation E(y) = load. A host's own simulator fits by having these members.

    One more member is optional: ``second_derivative(y, p)`` returns the derivative of E'(y)' p with respect to y, a
    symmetric matrix or LinearOperator of shape (N, N). Without it differences of ``linearize(y).adjoint_residual``
    serve, see `second_derivative`.
    """

    size: int

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        ...

    def solve(self, load: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve E(y) = load, from a start if one is given; raise `StateSolveError` where that fails.

        Without a start the result must depend on the load only: what is returned is checked that way.
        """
        ...

    def residual(self, y: FloatArray, load: FloatArray) -> FloatArray:
        """Return load - E(y)."""
        ...

    def linearize(self, y: FloatArray) -> StateModel:
        """E'(y) as a linear state model, whose solves may raise `StateSolveError` where it is singular."""
        ...


def second_derivative(state: Any, y: FloatArray, p: FloatArray) -> Any:
    """The derivative of E'(y)' p with respect to y; by central differences where the model does not have it.

    The differences have a relative error of about 1e-10: good enough for the steps of an optimisation, which they do
    not keep from converging.
    """
    if hasattr(state, "second_derivative"):
        return state.second_derivative(y, p)
    zero = np.zeros(state.size)
    size = 1.0 + float(np.abs(y).max(initial=0.0))

    def apply(direction: FloatArray) -> FloatArray:
        d = np.ravel(direction)
        length = float(np.abs(d).max(initial=0.0))
        if length == 0.0:
            return np.zeros(state.size)
        t = np.finfo(float).eps ** (1 / 3) * size / length
        below = state.linearize(y - t * d).adjoint_residual(p, zero)
        return np.asarray((below - state.linearize(y + t * d).adjoint_residual(p, zero)) / (2.0 * t))

    return LinearOperator((state.size, state.size), matvec=apply, rmatvec=apply, dtype=np.float64)


class LinearisedState(SteadyState):
    """E'(y) of a nonlinear model as a linear one; singular is a failed state solve here, not an input error."""

    def factor(self) -> Any:
        """Return the factorisation, computed at the first call."""
        try:
            return super().factor()
        except InputError as error:
            raise StateSolveError(
                "the linearised state operator is singular: the state may be at a turning point"
            ) from error


@np.errstate(
    over="ignore", invalid="ignore"
)  # what is not finite shortens a step, or ends the solve with a reason
def damped_newton(
    residual: Callable[[FloatArray], FloatArray],
    linearised: Callable[[FloatArray], Solve],
    start: FloatArray,
    where: str = "",
) -> FloatArray:
    """Solve r(y) = 0 by Newton's method, r = load - E, with steps halved until the next correction is smaller.

    Parameters
    ----------
    residual : callable
        y -> r(y).
    linearised : callable
        y -> the function that solves with E'(y); raises `SingularMatrixError`.
    start : array
    where : str
        For messages.

    Raises
    ------
    StateSolveError
        Where r or E' is not finite, E' singular, or no step length serves.

    Notes
    -----
    The test compares Newton corrections taken with the same matrix, ||E'^-1 r(y + t d)|| <= (1 - t/4) ||d||, which
    does not depend on how the equations are scaled: P. Deuflhard, Newton Methods for Nonlinear Problems, Springer,
    2004, ch. 3 (natural monotonicity, from memory).
    """
    y = start.copy()
    r = residual(y)
    if not np.isfinite(r).all():
        raise StateSolveError(f"the state equation{where} is NaN or infinite at the start of its solve")
    for _ in range(MAX_STEPS):
        try:
            solve = linearised(y)
            d = solve(r)
        except (SingularMatrixError, np.linalg.LinAlgError) as error:
            raise StateSolveError(f"the linearised state equation{where} is singular ({error})") from error
        size, scale = _norm(d), _norm(y)
        if not np.isfinite(size):
            raise StateSolveError(f"the Newton correction of the state{where} is not finite")
        if size <= ROUNDING * scale:
            return y
        t = 1.0
        for _ in range(MAX_HALVINGS + 1):
            trial = y + t * d
            r = residual(trial)
            if np.isfinite(r).all():
                correction = solve(r)
                left = _norm(correction)
                if left <= (1.0 - 0.25 * t) * size or max(left, size) <= SMALL * scale:
                    break
            t *= 0.5
        else:
            raise StateSolveError(
                f"no step length brings the state{where} nearer to a solution of its equation; the equation may have "
                "none for this load, or its derivative is wrong"
            )
        y = trial
        scale = _norm(y)
        if t == 1.0 and left * left <= LEFT * scale * size:
            return y + correction
        if t == 1.0 and left <= SMALL * scale and left > 0.1 * size:
            return y
    raise StateSolveError(f"{MAX_STEPS} Newton steps did not solve the state equation{where}")


def _norm(x: FloatArray) -> float:
    """The Euclidean norm; `np.linalg.norm` takes longer than a step of a small system."""
    return math.sqrt(float(x @ x))


class Reaction:
    """A function of the state at each point with its derivatives, checked where they are evaluated.

    Parameters
    ----------
    value, derivative : callable
        y (N,) -> d(y), d'(y) (N,).
    second : callable, optional
        d''(y); without it central differences of the derivative.
    """

    def __init__(self, value: Any, derivative: Any, second: Any) -> None:
        for name, function in (("reaction", value), ("reaction_derivative", derivative)):
            if not callable(function):
                raise InputError(f"{name} must be a function of the state, got {type(function).__name__}")
        if second is not None and not callable(second):
            raise InputError(f"reaction_second must be a function of the state, got {type(second).__name__}")
        self._value, self._derivative, self._second = value, derivative, second

    def value(self, y: FloatArray) -> FloatArray:
        """d(y), whatever it is."""
        return _at(self._value, "reaction", y)

    def derivative(self, y: FloatArray) -> FloatArray:
        """d'(y); `StateSolveError` where it is not finite."""
        return _finite(_at(self._derivative, "reaction_derivative", y), "reaction_derivative", y)

    def second(self, y: FloatArray) -> FloatArray:
        """d''(y); `StateSolveError` where it is not finite."""
        if self._second is not None:
            return _finite(_at(self._second, "reaction_second", y), "reaction_second", y)
        t = np.finfo(float).eps ** (1 / 3) * (1.0 + np.abs(y))
        return (self.derivative(y + t) - self.derivative(y - t)) / (2.0 * t)


def _at(function: Any, name: str, y: FloatArray) -> FloatArray:
    with np.errstate(all="ignore"):
        value = np.asarray(function(y.copy()), dtype=np.float64)
    if value.shape not in ((), y.shape):
        raise InputError(f"{name}(y) has shape {value.shape}, expected {y.shape}")
    return np.broadcast_to(value, y.shape)


def _finite(value: FloatArray, name: str, y: FloatArray) -> FloatArray:
    bad = ~np.isfinite(value)
    if bad.any():
        k = int(np.argmax(bad))
        raise StateSolveError(f"{name} is {value[k]} at y[{k}] = {y[k]:.6g}")
    return value


class SparseSum:
    """K + M diag(d) for changing d, its pattern fixed, entries that vanish included."""

    def __init__(self, K: Any, M: Any) -> None:
        k, m = sp.coo_array(K), sp.coo_array(M)
        n = int(K.shape[0])
        keys = [part.row.astype(np.int64) * n + part.col for part in (k, m)]
        union = np.unique(np.concatenate([*keys, np.arange(n, dtype=np.int64) * (n + 1)]))
        self._k, self._m = (np.searchsorted(union, key) for key in keys)
        self._k_data, self._m_data, self._column = k.data, m.data, m.col
        self._indices = (union % n).astype(np.int32)
        self._indptr = np.searchsorted(union, np.arange(n + 1, dtype=np.int64) * n).astype(np.int32)
        self._shape = (n, n)

    def matrix(self, d: FloatArray) -> sp.csr_array:
        """K + M diag(d)."""
        data = np.zeros(self._indices.size)
        data[self._k] += self._k_data
        data[self._m] += self._m_data * d[self._column]
        return sp.csr_array((data, self._indices, self._indptr), shape=self._shape)


class SemilinearState:
    """The steady semilinear state equation K y + M d(y) = load, solved by Newton's method with a line search.

    Parameters
    ----------
    K : sparse array or array, shape (N, N)
        Symmetric or not.
    reaction, reaction_derivative : callable
        d and d' at each point: y (N,) -> (N,).
    reaction_second : callable, optional
        d''; by differences of d' where it is not given.
    mass : array (N,) or sparse array (N, N), optional
        M; a lumped one as a vector, ones by default.
    start : float or array, shape (N,)
        Where a state solve begins that is given no start.

    Attributes
    ----------
    size : int
        N.

    Raises
    ------
    InputError
        For matrices that do not fit, or something that is not a function.

    Notes
    -----
    Where K is positive definite and d does not fall, there is one state for each load and the solve finds it. Where
    d falls (an exothermic reaction: d(y) = -exp(y)), there may be none or several; then `solve` raises
    `StateSolveError`, or finds the one that Newton's method leads to from `start`, the smallest one as a rule where
    `start` is below it.

    Examples
    --------
    >>> import numpy as np, scipy.sparse as sp, ssn
    >>> n, h = 49, 0.02
    >>> stiffness = sp.diags_array([-np.ones(n - 1), 2 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1]) / h
    >>> state = ssn.SemilinearState(
    ...     stiffness, lambda y: y**3, lambda y: 3 * y**2, lambda y: 6 * y, mass=np.full(n, h)
    ... )
    >>> problem = ssn.NonlinearControlProblem(
    ...     state=state,
    ...     target=np.ones(n),
    ...     cost=ssn.SparseCost(0.01),
    ...     control_weight=1e-4,
    ...     state_mass=np.full(n, h),
    ...     control_mass=np.full(n, h),
    ... )
    >>> ssn.solve(problem).converged
    True
    """

    def __init__(
        self,
        K: Any,
        reaction: Callable[[FloatArray], Any],
        reaction_derivative: Callable[[FloatArray], Any],
        reaction_second: Callable[[FloatArray], Any] | None = None,
        mass: Any = None,
        *,
        start: Any = 0.0,
    ) -> None:
        self.K = as_square(K, "K")
        if isinstance(self.K, LinearOperator) or isinstance(mass, LinearOperator):
            raise InputError(
                "SemilinearState needs explicit K and mass; give an object with the NonlinearStateModel members instead"
            )
        self.size = int(self.K.shape[0])
        self.M: Any = as_mass(mass, "mass", self.size)
        self.reaction = Reaction(reaction, reaction_derivative, reaction_second)
        self.start = np.array(np.broadcast_to(np.asarray(start, dtype=np.float64), (self.size,)))
        if not np.isfinite(self.start).all():
            raise InputError("start must be finite")
        self.work = WorkCounts()
        self._sum = SparseSum(self.K, self.M)
        self._lumped = bool((abs(self.M).sum(axis=1) == abs(self.M.diagonal())).all())
        self.symmetric = self._lumped and is_symmetric(self.K)
        self._factor: Factorization | None = None

    def attach(self, work: WorkCounts) -> None:
        """Count in `work` from now on."""
        self.work = work
        if self._factor is not None:
            self._factor.work = work

    def residual(self, y: FloatArray, load: FloatArray) -> FloatArray:
        """Return load - K y - M d(y)."""
        self.work.operator_products += 1
        return load - np.asarray(self.K @ y) - np.asarray(self.M @ self.reaction.value(y))

    def derivative_matrix(self, y: FloatArray) -> sp.csr_array:
        """E'(y) = K + M diag(d'(y)), the pattern the same for all y."""
        return self._sum.matrix(self.reaction.derivative(y))

    def _linearised(self, y: FloatArray) -> Solve:
        matrix = self.derivative_matrix(y)
        definite = self.symmetric and bool((matrix.diagonal() > 0).all())
        if self._factor is None or self._factor.positive_definite != definite:
            self._factor = None
            self._factor = Factorization(
                matrix, symmetric=self.symmetric, positive_definite=definite, work=self.work
            )
        else:
            factor, self._factor = self._factor, None  # kept only where it is regular
            factor.refactorize(matrix)
            self._factor = factor
        regular = self._factor

        def solve(r: FloatArray) -> FloatArray:
            self.work.state_solves += 1
            return regular.solve(r)

        return solve

    def solve(self, load: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve K y + M d(y) = load; a state solve is counted for each Newton correction."""
        return damped_newton(
            lambda y: self.residual(y, load), self._linearised, self.start if start is None else start
        )

    def linearize(self, y: FloatArray) -> LinearisedState:
        """E'(y) as a linear state model."""
        state = LinearisedState(self.derivative_matrix(y))
        state.attach(self.work)
        return state

    def second_derivative(self, y: FloatArray, p: FloatArray) -> sp.csr_array:
        """diag(d''(y) M' p)."""
        return sp.csr_array(sp.diags_array(self.curvature(y, p)))

    def curvature(self, y: FloatArray, p: FloatArray) -> FloatArray:
        """The diagonal of `second_derivative`."""
        return self.reaction.second(y) * np.asarray(self.M.T @ p)


def as_mass(value: Any, name: str, size: int) -> sp.csr_array:
    """A lumped mass, a matrix or None for ones, as a sparse matrix."""
    if value is None or (not sp.issparse(value) and np.ndim(value) < 2):
        return sp.csr_array(sp.diags_array(weight_array(value, name, size)))
    return sp.csr_array(as_square(value, name, size))
