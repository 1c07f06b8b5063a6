"""A time grid with its scheme, and what a control problem in time is written with."""

from __future__ import annotations

from functools import cached_property
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .errors import InputError
from .linear.boundary import as_matrix, as_square
from .validate import count, float_array, scalar, weight_array

FloatArray = npt.NDArray[np.float64]

SCHEMES = {"implicit Euler": 1.0, "Crank-Nicolson": 0.5}
# steps that differ by less than this many roundings of the times are one step size
ROUNDINGS = 8.0


class TimeGrid:
    """Mass, times and scheme of a state equation on t_0 < ... < t_K; the base of time-dependent state models.

    Parameters
    ----------
    M : array, shape (N,), or sparse array or array, shape (N, N)
    points : int
        N.
    times, steps, duration, scheme
        As in `TimeDependentState`, whose attributes `size`, `steps`, `points`, `times`, `load_times`, `step_sizes` and
        `level_weights` are set here.
    """

    def __init__(
        self, M: Any, points: int, times: Any, steps: int | None, duration: float | None, scheme: str | float
    ) -> None:
        self.points = points
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

    def levels(self, stacked: FloatArray) -> FloatArray:
        """The stack (K * N,) as an array (K, N)."""
        return np.reshape(stacked, (self.steps, self.points))

    def integrated(self, load: Any = None) -> FloatArray:
        """A load, see `source`, integrated over each step, shape (K, N)."""
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
        return result

    # what a control problem is written with

    @cached_property
    def lumped_mass(self) -> FloatArray:
        """The row sums of M, shape (N,)."""
        return np.asarray(self.M.sum(axis=1), dtype=np.float64).ravel()

    def control_operator(self, shapes: Any = None, amplitudes: Any = None) -> sp.csr_array:
        """B = (diag(tau) T) kron S of controls u = (amplitude in time, shape in space), time slowest.

        Parameters
        ----------
        shapes : sparse array or array, shape (N, m), or function, optional
            S, column j the load of unit control j, integrated over space: the lumped mass times the indicator of a
            patch, for instance. By default diag(lumped mass), a control at every point. A function t -> array (N, m) is
            taken at both ends of each step with the weights of the scheme.
        amplitudes : sparse array or array, shape (K, q), optional
            T, column i the values of amplitude i on the K steps. By default the identity, a value a step. ``np.ones((K,
            1))`` makes controls that are constant in time.

        Returns
        -------
        sparse array, shape (K * N, q * m)
        """
        T = (
            sp.eye_array(self.steps)
            if amplitudes is None
            else _explicit_matrix(amplitudes, "amplitudes", self.steps)
        )
        time = sp.csr_array(sp.diags_array(self.step_sizes) @ T)
        if callable(shapes) and not isinstance(shapes, LinearOperator):
            at = [
                sp.csr_array(_explicit_matrix(shapes(t), f"shapes({t:.6g})", self.points))
                for t in self.times.tolist()
            ]
            mixed = [self.theta * b + (1.0 - self.theta) * a for a, b in pairwise(at)]
            return sp.csr_array(sp.vstack([sp.kron(time[[k]], part) for k, part in enumerate(mixed)]))
        S = (
            sp.diags_array(self.lumped_mass)
            if shapes is None
            else _explicit_matrix(shapes, "shapes", self.points)
        )
        return sp.csr_array(sp.kron(time, S, format="csr"))

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
