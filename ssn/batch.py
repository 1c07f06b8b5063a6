"""Many small independent systems at once, vectorised over the batch: every system has its own search and outcome."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .status import Outcome
from .validate import count, float_array, scalar

FloatArray = npt.NDArray[np.float64]

# full steps that a system may take before its residual has to fall
PLAIN_STEPS = 8
HALVINGS = 12
# Levenberg-Marquardt parameters tried, relative to the diagonal
REGULARISATIONS = 10.0 ** np.arange(-6, 9, 2)
CODES = (Outcome.CONVERGED, Outcome.STEP_LIMIT, Outcome.STALLED, Outcome.NOT_FINITE)


@dataclass(frozen=True)
class ManySolutions:
    """The result of `solve_many`; every field has the batch as its first axis.

    Attributes
    ----------
    x : array, shape (batch, n)
    converged : bool array, shape (batch,)
    outcomes : array of Outcome, shape (batch,)
    residual_norm : array, shape (batch,)
        Root mean square of F / scale at x, computed afresh.
    steps : int array, shape (batch,)
    labels : int8 array, shape (batch, k), or None
        Pieces at x, where the function returns them.
    """

    x: FloatArray
    converged: npt.NDArray[np.bool_]
    outcomes: npt.NDArray[np.object_]
    residual_norm: FloatArray
    steps: npt.NDArray[np.int64]
    labels: npt.NDArray[np.integer] | None = None

    def count(self) -> dict[str, int]:
        """Return how many systems ended in each way."""
        return {o.value: int(np.sum(self.outcomes == o)) for o in CODES if (self.outcomes == o).any()}


def solve_many(
    function: Callable[..., Any],
    start: Any,
    *,
    parameters: Sequence[Any] = (),
    scale: Any = 1.0,
    tolerance: float = 1e-10,
    max_steps: int = 60,
) -> ManySolutions:
    """Solve F(x_k; parameters_k) = 0 for every k of a batch.

    Parameters
    ----------
    function : callable
        ``function(x, *parameters)`` with x of shape (m, n) returns F of shape (m, n) and the Newton derivative of shape
        (m, n, n), and optionally integer labels of the pieces, of shape (m, k). It is called on parts of the batch.
    start : array, shape (batch, n)
        Not changed.
    parameters : sequence of arrays
        Data of the systems, each with the batch as its first axis.
    scale : float or array (n,)
        Magnitude of the residual.
    tolerance : float
        Bound on the root mean square of F / scale.
    max_steps : int
        Newton steps at most, for every system.

    Returns
    -------
    ManySolutions
        Failed systems keep their best point.

    Raises
    ------
    InputError
        For shapes that do not fit.

    Notes
    -----
    Every system takes up to eight full steps, then searches from its best point: lengths 1, 1/2, ... until its
    residual falls, and a Levenberg-Marquardt step where none serves or the derivative is singular.
    """
    x = float_array(start, "start", ndim=2)
    batch, n = x.shape
    tolerance = scalar(tolerance, "tolerance", positive=True)
    count(max_steps, "max_steps", least=0)
    weight = float_array(scale, "scale")
    if weight.shape not in ((), (n,)) or (weight <= 0).any():
        raise InputError(f"scale must be positive, a number or of shape ({n},)")
    data = []
    for k, parameter in enumerate(parameters):
        array = np.asarray(parameter)
        if array.ndim == 0 or array.shape[0] != batch:
            raise InputError(
                f"parameters[{k}] has shape {array.shape}; its first axis must be the batch, {batch}"
            )
        data.append(array)
    solver = _Batch(function, data, 1.0 / weight, n)
    norm, _, _, labels = solver.evaluate(x, np.arange(batch))
    best_x, best_norm = x.copy(), norm.copy()
    steps = np.zeros(batch, dtype=np.int64)
    stalled = np.zeros(batch, dtype=bool)
    bad_start = ~np.isfinite(norm)
    for iteration in range(max_steps):
        open_ = np.flatnonzero((best_norm > tolerance) & ~stalled & ~bad_start)
        if open_.size == 0:
            break
        if iteration == PLAIN_STEPS:  # from now on the residual has to fall, from the best point
            x[open_], norm[open_] = best_x[open_], best_norm[open_]
        moved_x, moved_norm, ok = solver.step(x[open_], norm[open_], open_, monotone=iteration >= PLAIN_STEPS)
        steps[open_] += 1
        x[open_], norm[open_] = moved_x, moved_norm
        stalled[open_[~ok]] = True
        better = moved_norm < best_norm[open_]
        rows = open_[better]
        best_x[rows], best_norm[rows] = moved_x[better], moved_norm[better]
    final, _, _, labels = solver.evaluate(best_x, np.arange(batch))
    converged = final <= tolerance
    outcomes = np.empty(batch, dtype=object)
    outcomes[:] = Outcome.STEP_LIMIT
    outcomes[stalled] = Outcome.STALLED
    outcomes[bad_start] = Outcome.NOT_FINITE
    outcomes[converged] = Outcome.CONVERGED
    return ManySolutions(best_x, converged, outcomes, final, steps, labels)


class _Batch:
    """The function with its checks, on any part of the batch."""

    def __init__(self, function: Callable[..., Any], data: list[Any], weight: FloatArray, n: int) -> None:
        self.function, self.data, self.weight, self.n = function, data, weight, n
        self._last: tuple[Any, ...] = ()

    def evaluate(
        self, x: FloatArray, rows: npt.NDArray[np.intp]
    ) -> tuple[FloatArray, FloatArray, FloatArray, npt.NDArray[np.integer] | None]:
        """Norms (inf where not finite), residuals, derivatives and labels of some systems."""
        whole = self.data and rows.size == self.data[0].shape[0]
        part = self.data if whole else [d[rows] for d in self.data]
        with np.errstate(all="ignore"):
            result = self.function(x, *part)
        if not isinstance(result, tuple) or len(result) not in (2, 3):
            raise InputError("function must return (F, derivative) or (F, derivative, labels)")
        residual, derivative = (
            np.asarray(result[0], dtype=np.float64),
            np.asarray(result[1], dtype=np.float64),
        )
        m, n = x.shape
        if residual.shape != (m, n) or derivative.shape != (m, n, n):
            raise InputError(
                f"function returned shapes {residual.shape} and {derivative.shape}, expected {(m, n)} and {(m, n, n)}"
            )
        with np.errstate(all="ignore"):
            norm = np.sqrt(np.mean((residual * self.weight) ** 2, axis=1))
        norm[~np.isfinite(norm)] = np.inf
        return norm, residual, derivative, np.asarray(result[2]) if len(result) == 3 else None

    def step(
        self, x: FloatArray, norm: FloatArray, rows: npt.NDArray[np.intp], monotone: bool
    ) -> tuple[FloatArray, FloatArray, npt.NDArray[np.bool_]]:
        """One step of the systems `rows`, which are at x; the last value tells which made progress."""
        _, residual, derivative, _ = self.evaluate(x, rows)
        direction, regular = _directions(derivative, residual)
        new_x, new_norm = x.copy(), norm.copy()
        waiting = np.flatnonzero(regular)
        length = 1.0
        for _ in range(HALVINGS if monotone else 1):
            if waiting.size == 0:
                break
            trial = x[waiting] + length * direction[waiting]
            trial_norm = self.evaluate(trial, rows[waiting])[0]
            good = trial_norm < (1.0 - 1e-4 * length) * norm[waiting] if monotone else np.isfinite(trial_norm)
            taken = waiting[good]
            new_x[taken], new_norm[taken] = trial[good], trial_norm[good]
            waiting = waiting[~good]
            length *= 0.5
        ok = np.ones(rows.size, dtype=bool)
        left = np.union1d(waiting, np.flatnonzero(~regular))
        if left.size:
            ok[left] = self._least_squares(x, norm, rows, residual, derivative, left, new_x, new_norm)
        return new_x, new_norm, ok

    def _least_squares(
        self,
        x: FloatArray,
        norm: FloatArray,
        rows: npt.NDArray[np.intp],
        residual: FloatArray,
        derivative: FloatArray,
        left: npt.NDArray[np.intp],
        new_x: FloatArray,
        new_norm: FloatArray,
    ) -> npt.NDArray[np.bool_]:
        """Levenberg-Marquardt steps of growing regularisation for the systems `left`, until the residual falls."""
        done = np.zeros(left.size, dtype=bool)
        scaled = derivative[left] * np.broadcast_to(self.weight, (self.n,))[:, None]
        usable = np.isfinite(scaled).all(axis=(1, 2))
        scaled[~usable] = 0.0
        normal = np.einsum("bki,bkj->bij", scaled, scaled)
        gradient = np.einsum("bki,bk->bi", scaled, residual[left] * self.weight)
        diagonal = np.einsum("bii->bi", normal)
        diagonal = np.maximum(diagonal, 1e-8 * diagonal.max(axis=1, keepdims=True) + 1e-300)
        for mu in REGULARISATIONS:
            todo = np.flatnonzero(~done & usable)
            if todo.size == 0:
                break
            shifted = normal[todo].copy()
            np.einsum("bii->bi", shifted)[...] += mu * diagonal[todo]
            d, regular = _directions(shifted, gradient[todo])
            trial = x[left[todo]] + d
            trial_norm = self.evaluate(trial, rows[left[todo]])[0]
            good = regular & (trial_norm < norm[left[todo]])
            taken = left[todo[good]]
            new_x[taken], new_norm[taken] = trial[good], trial_norm[good]
            done[todo[good]] = True
        return done


def _directions(derivative: FloatArray, residual: FloatArray) -> tuple[FloatArray, Any]:
    """-G^-1 F for every system, and which of them have a regular, finite G."""
    regular: Any = np.isfinite(derivative).all(axis=(1, 2))
    safe = (
        derivative
        if regular.all()
        else np.where(regular[:, None, None], derivative, np.eye(derivative.shape[1]))
    )
    try:
        direction = np.linalg.solve(safe, -residual[..., None])[..., 0]
    except np.linalg.LinAlgError:
        singular: Any = np.asarray(np.linalg.matrix_rank(safe) < derivative.shape[1])
        safe = np.where(singular[:, None, None], np.eye(derivative.shape[1]), safe)
        regular = regular & ~singular
        direction = np.linalg.solve(safe, -residual[..., None])[..., 0]
    ok: Any = regular & np.isfinite(direction).all(axis=1)
    return np.asarray(direction, dtype=np.float64), ok
