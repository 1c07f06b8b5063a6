"""A user's own F(x) = 0 as the loop sees it, with a least-squares step behind the Newton direction."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..errors import InputError
from ..linear.boundary import transpose_product
from ..linear.direct import Factorization, SingularMatrixError
from ..pieces import Pieces
from ..protocols import Evaluation, FallbackStep, Linearization
from ..validate import float_array
from ..work import WorkCounts

FloatArray = npt.NDArray[np.float64]


class GeneralEquation:
    """Wraps an object with the `Equation` protocol; shapes and finiteness of what it returns are checked.

    The norm is the root mean square of F / scale, and so is the accuracy.
    """

    piecewise_affine = False

    def __init__(self, equation: Any, size: int, work: WorkCounts | None = None) -> None:
        self.user = equation
        self.size = size
        self.work = work if work is not None else WorkCounts()
        scale = float_array(getattr(equation, "scale", 1.0), "scale")
        if scale.shape not in ((), (size,)) or (scale <= 0).any():
            raise InputError(f"scale must be positive, a number or shape ({size},); got shape {scale.shape}")
        self.scale = scale
        self.own_norm: Callable[[FloatArray], float] | None = None
        self._linearized: tuple[Any, Linearization | None] = (None, None)
        self.linear_note = ""  # what the linear solver has decided

    def _checked(self, value: Any, what: str) -> FloatArray:
        array = np.asarray(value, dtype=np.float64)
        if array.shape != (self.size,):
            raise InputError(f"{what} has shape {array.shape}, expected ({self.size},) like the start")
        return array

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The residual alone; derivative and pieces wait for `complete`."""
        self.work.operator_products += 1
        with np.errstate(all="ignore"):
            residual = self._checked(self.user.residual(x.copy()), "the residual")
        norm = np.inf
        if np.isfinite(residual).all():
            own = self.own_norm
            norm = float(
                np.sqrt(np.mean((residual / self.scale) ** 2)) if own is None else own(residual.copy())
            )
        if not np.isfinite(norm):
            return Evaluation(x, residual, np.inf, np.inf, Pieces())
        return Evaluation(x, residual, norm, norm, Pieces())

    def complete(self, at: Evaluation) -> Evaluation:
        """Add the pieces of an evaluation that the loop goes on from."""
        pieces = self.linearize(at.x).pieces
        return replace(at, pieces=pieces if isinstance(pieces, Pieces) else Pieces(pieces))

    @property
    def can_be_smoothed(self) -> bool:
        """Whether the user's equation has a smoothed form (traced functions have)."""
        return hasattr(self.user, "smoothed")

    def smoothed(self, eps: float) -> GeneralEquation:
        """The equation with its nonsmooth operations smoothed; shares the work counters."""
        return SmoothedEquation(self, eps) if eps > 0 else self

    def smoothing_scale(self, at: Evaluation) -> float:
        """A first smoothing parameter: the root mean square of x, or 1 at zero; one number for all kinks."""
        size = float(np.sqrt(np.mean(at.x**2)))
        return size if size > 0 else 1.0

    def linearize(self, x: FloatArray) -> Linearization:
        """Return the user's linearisation, once a point."""
        known, linearization = self._linearized
        if linearization is None or known is not x:
            with np.errstate(all="ignore"):
                linearization = self.user.linearize(x.copy())
            for member in ("residual", "derivative", "pieces"):
                if not hasattr(linearization, member):
                    raise InputError(f"linearize(x) must return a ssn.Linearization; it has no {member!r}")
            shape = getattr(linearization.derivative, "shape", None)
            if shape != (self.size, self.size):
                raise InputError(f"the derivative has shape {shape}, expected ({self.size}, {self.size})")
            self._linearized = (x, linearization)
        return linearization

    def merit_line(self, at: Evaluation, direction: FloatArray) -> None:
        """None: no merit function that is cheap along a line."""
        return None

    def stationary(self, at: Evaluation) -> bool:
        """Whether a move by the size of x promises to change the squared residual by a ten-thousandth only."""
        gradient = transpose_product(self.linearize(at.x).derivative, at.residual / self.scale**2)
        reach = 1.0 + float(np.linalg.norm(at.x))
        return bool(np.linalg.norm(gradient) * reach <= 1e-4 * np.sum((at.residual / self.scale) ** 2))

    def fallback(self, at: Evaluation) -> FallbackStep | None:
        """A Levenberg-Marquardt step, regularised until the squared residual falls; steepest descent for operators."""
        derivative = self.linearize(at.x).derivative
        return least_squares_step(self, at, derivative, np.broadcast_to(1.0 / self.scale, (self.size,)))


class SmoothedEquation(GeneralEquation):
    """The smoothed form; its accuracy is the residual relative to what smoothing changes, which is all it needs."""

    def __init__(self, plain: GeneralEquation, eps: float) -> None:
        super().__init__(plain.user.smoothed(eps), plain.size, plain.work)
        self.plain = plain

    def evaluate(self, x: FloatArray) -> Evaluation:
        """The smoothed residual."""
        at = super().evaluate(x)
        if not at.finite:
            return at
        exact = self.plain.evaluate(x)
        change = (
            float(np.sqrt(np.mean(((at.residual - exact.residual) / self.scale) ** 2)))
            if exact.finite
            else np.inf
        )
        return replace(at, accuracy=at.norm / change if change > 0 else 0.0)


def least_squares_step(
    equation: Any, at: Evaluation, derivative: Any, row_scale: FloatArray
) -> FallbackStep | None:
    """The first of a family of regularised least-squares steps that lowers the squared residual.

    (G' W^2 G + mu diag) d = -G' W^2 F with mu = 1e-6, 1e-4, ..., 1e6; along -G'F by backtracking for an operator G.
    Source: K. Levenberg, Quart. Appl. Math. 2 (1944) 164-168 (from memory).
    """
    r = row_scale * at.residual
    merit = float(r @ r)
    gradient = transpose_product(derivative, row_scale * r)
    if not np.isfinite(gradient).all() or not gradient.any():
        return None

    def lower(x: FloatArray, predicted: float) -> float | None:
        trial = equation.evaluate(x)
        if not trial.finite:
            return None
        value = float(np.sum((row_scale * trial.residual) ** 2))
        return merit - value if value <= merit - 1e-4 * abs(predicted) and value < merit else None

    if isinstance(derivative, LinearOperator):
        image = row_scale * np.asarray(derivative @ gradient)
        t = float(gradient @ gradient) / max(float(image @ image), 1e-300)
        for _ in range(40):
            gain = lower(at.x - t * gradient, t * float(gradient @ gradient))
            if gain is not None:
                return FallbackStep(at.x - t * gradient, "steepest descent", gain)
            t *= 0.25
        return None
    weighted = (
        sp.diags_array(row_scale) @ derivative if sp.issparse(derivative) else row_scale[:, None] * derivative
    )
    normal = weighted.T @ weighted
    diagonal = normal.diagonal()
    diagonal = np.maximum(diagonal, 1e-8 * max(float(diagonal.max()), 1e-300))
    for power in range(-6, 9, 2):
        mu = 10.0**power
        shifted = normal + (mu * sp.diags_array(diagonal) if sp.issparse(normal) else mu * np.diag(diagonal))
        try:
            d = -Factorization(shifted, positive_definite=True, work=equation.work).solve(gradient)
        except SingularMatrixError:
            continue
        gain = lower(at.x + d, float(gradient @ d))
        if gain is not None:
            return FallbackStep(at.x + d, "regularised least squares", gain)
    return None
