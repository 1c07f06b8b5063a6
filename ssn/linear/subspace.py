"""Galerkin solution of (I + S D S*/a) d = b in a subspace that is kept between Newton steps.

Only D changes from step to step. With W an orthonormal basis of the subspace and V = S* W, both kept, the
Galerkin matrix I + V* D V/a is formed for any D without applying S or S*, so a new Newton step starts from the
best direction in everything seen so far, and the residual tells which direction to add (one application of S
for the residual, one of S* for the new direction). From an empty basis and for fixed D the directions span the
Krylov space and the iterates are those of conjugate gradients; what is kept spans the dominant singular vectors
of S, which is why later steps need few additions, at any alpha and active set.

Galerkin and augmented Krylov methods: Y. Saad, Iterative Methods for Sparse Linear Systems, 2003, ch. 5-6, 9.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla

from ..protocols import Direction, Evaluation

FloatArray = npt.NDArray[np.float64]


# of a new direction, what the basis leaves of it: below the first figure it is applied to S* afresh, since the
# difference of known images has lost digits; below the second it is rounding
FRESH, ROUNDING = 1e-2, 1e-10
# additions in a row that did not halve the residual of the Newton system, which is below the second figure already,
# after which it is at rounding level
STAGNANT, NEAR_ROUNDING = 4, 1e-9


class SubspaceSolver:
    """Newton systems of a dual equation by Galerkin projection with a recycled basis.

    Parameters
    ----------
    equation : DualEquation
    max_inner : int
        Directions added at most in one Newton step.
    memory : float
        Bytes that the basis may take; when it is full the half that S* amplifies least is dropped. More saves state
        solves, but passes over a large basis cost more than cheap solves do.
    """

    name = "subspace"

    def __init__(self, equation: Any, *, max_inner: int = 400, memory: float = 2e8) -> None:
        self.equation = equation
        self.max_inner = max_inner
        tracking = equation.tracking
        self._m, self._n = tracking.observations.size, tracking.controls.size
        # beyond m directions (I + S D S*) is represented exactly; below 16 recycling would not pay
        self.capacity = int(min(self._m, max(16, memory // (8 * (self._m + self._n)))))
        self._basis = np.empty((min(32, self.capacity), self._m))
        self._lifted = np.empty((min(32, self.capacity), self._n))
        self._rank = 0

    @property
    def rank(self) -> int:
        """Dimension of the subspace kept."""
        return self._rank

    def carry_over(self, other: SubspaceSolver) -> None:
        """Take the basis of a solver for the same S (another alpha, cost or target)."""
        self._basis, self._lifted, self._rank = other._basis, other._lifted, other._rank
        self.capacity = other.capacity

    def solve(self, at: Evaluation, forcing: float) -> Direction:
        """Return [d, S* d] with ||(I + S D S*/a) d + r|| <= forcing ||r||, residual computed, not estimated."""
        equation, tracking = self.equation, self.equation.tracking
        derivative, alpha = at.data.derivative, equation.alpha
        b, norm_b = -at.residual, at.norm
        if norm_b == 0.0:
            return Direction(np.zeros(self._m + self._n), 0.0, 0)
        observations = tracking.observations
        diagonal = derivative.diagonal
        support = None if diagonal is None else np.flatnonzero(diagonal)
        if support is not None and support.size == 0:
            return Direction(np.concatenate([b, -at.data.adjoint_residual]), 0.0, 0)
        new, new_lifted = b, -at.data.adjoint_residual
        residual_norm, inner, idle = np.inf, 0, 0
        gram = np.empty((0, 0))
        covered = 0
        best: tuple[float, FloatArray, FloatArray] | None = None
        while True:
            if self._rank >= self.capacity and self.capacity < self._m:
                self._compress()
                covered = 0
                if best is not None:
                    self._append(best[1], best[2])
            grew = self._append(new, new_lifted)
            if not grew and inner:
                break
            gram = self._gram(gram, covered, derivative, support, alpha)
            covered = self._rank
            basis, lifted = self._basis[: self._rank], self._lifted[: self._rank]
            factor = sla.cho_factor(np.eye(self._rank) + gram, lower=True, check_finite=False)
            coefficients = sla.cho_solve(factor, basis @ observations.apply(b), check_finite=False)
            d, lifted_d = coefficients @ basis, coefficients @ lifted
            residual = b - d - tracking.forward(derivative.apply(lifted_d)) / alpha
            residual_norm = observations.norm(residual)
            if not np.isfinite(residual_norm):
                return Direction(
                    None, np.inf, inner, "singular", "the Newton operator returned NaN or infinity"
                )
            no_gain = best is not None and residual_norm > 0.5 * best[0] and best[0] < NEAR_ROUNDING * norm_b
            idle = idle + 1 if no_gain else 0
            if best is None or residual_norm < best[0]:
                best = (residual_norm, d, lifted_d)
            if residual_norm <= forcing * norm_b or inner >= self.max_inner or idle >= STAGNANT:
                break
            new, new_lifted = residual, tracking.adjoint(residual)
            inner += 1
        assert best is not None
        status = "solved" if best[0] <= forcing * norm_b else "inaccurate"
        return Direction(np.concatenate([best[1], best[2]]), best[0] / norm_b, inner, status)

    def _gram(
        self, known: FloatArray, covered: int, derivative: Any, support: Any, alpha: float
    ) -> FloatArray:
        """V* D V / a, of which the leading `covered` rows and columns are known."""
        controls = self.equation.tracking.controls
        rank = self._rank
        lifted = self._lifted[:rank]
        fresh = lifted[covered:]
        if support is not None:
            scaled = fresh[:, support] * (controls.vector * derivative.diagonal / alpha)[support]
            part = scaled @ lifted[:, support].T
        else:
            applied = derivative.apply(np.ascontiguousarray(fresh.T)) / alpha
            if controls.vector is not None:
                part = (applied.T * controls.vector) @ lifted.T
            else:
                part = np.stack([controls.apply(column) for column in applied.T]) @ lifted.T
        gram = np.empty((rank, rank))
        gram[:covered, :covered] = known[:covered, :covered]
        gram[covered:] = part
        gram[:covered, covered:] = part[:, :covered].T
        gram[covered:, covered:] = 0.5 * (part[:, covered:] + part[:, covered:].T)
        return gram

    def _append(self, vector: FloatArray, lifted: FloatArray) -> bool:
        """Orthonormalise and add a direction; False where it lies in the subspace already."""
        if self._rank == self._m:
            return False
        observations = self.equation.tracking.observations
        size = observations.norm(vector)
        if size == 0.0:
            return False
        basis, kept = self._basis[: self._rank], self._lifted[: self._rank]
        vector, lifted = vector / size, lifted / size
        for _ in range(2):
            coefficients = basis @ observations.apply(vector)
            vector = vector - coefficients @ basis
            lifted = lifted - coefficients @ kept
            if coefficients @ coefficients < 0.5:  # little was taken away, so rounding took nothing either
                break
        rest = observations.norm(vector)
        if rest < ROUNDING:
            return False
        if rest < FRESH:
            vector = vector - (basis @ observations.apply(vector)) @ basis
            rest = observations.norm(vector)
            lifted = self.equation.tracking.adjoint(vector / rest) * rest
        if self._rank == len(self._basis):
            rows = min(2 * self._rank, self.capacity)
            for name, width in (("_basis", self._m), ("_lifted", self._n)):
                larger = np.empty((rows, width))
                larger[: self._rank] = getattr(self, name)
                setattr(self, name, larger)
        self._basis[self._rank] = vector / rest
        self._lifted[self._rank] = lifted / rest
        self._rank += 1
        return True

    def _compress(self) -> None:
        """Keep the half of the subspace on which S* is largest."""
        controls = self.equation.tracking.controls
        lifted = self._lifted[: self._rank]
        weighted = (
            lifted * controls.vector
            if controls.vector is not None
            else np.stack([controls.apply(r) for r in lifted])
        )
        _, vectors = sla.eigh(weighted @ lifted.T)
        keep = vectors[:, -(self._rank // 2) :].T
        rows = keep.shape[0]
        self._basis[:rows] = keep @ self._basis[: self._rank]
        self._lifted[:rows] = keep @ lifted
        self._rank = rows
