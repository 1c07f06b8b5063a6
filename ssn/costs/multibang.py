"""Convex envelope of a quadratic on a list of settings: controls that take listed values."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..validate import float_array, scalar
from .piecewise import PiecewiseQuadraticCost

FloatArray = npt.NDArray[np.float64]


class MultiBangCost(PiecewiseQuadraticCost):
    """The convex envelope of alpha/2 u^2 on the settings u_1 < ... < u_d: affine between neighbours.

    Parameters
    ----------
    settings : array, shape (d,)
        At least two, in the unit of u; they are sorted.
    alpha : float
        Weight of u^2/2, not negative; with alpha = 0 only the outermost settings matter.

    Raises
    ------
    InputError
        For fewer than two settings, equal ones, or a negative weight.

    Notes
    -----
    Slope alpha (u_i + u_{i+1})/2 between neighbours; the domain is [u_1, u_d]. The subdifferential of the conjugate is
    the staircase with steps at these slopes: a minimiser lies on a setting wherever -grad f is not exactly at one of
    them, which for a reachable target it may be on a large set. `regularised_staircase` is its Moreau-Yosida form.
    Labels: "setting 1", "between 1 and 2", "setting 2", ...
    Source: C. Clason and K. Kunisch, ESAIM COCV 20 (2014) 1-40 and Ann. Inst. H. Poincare C 33 (2016) 1109-1130 (from
    memory).
    """

    def __init__(self, settings: Any, alpha: float) -> None:
        given = np.sort(float_array(settings, "settings", ndim=1))
        if given.size < 2:
            raise InputError(f"settings must be at least two, got {given.size}")
        if (np.diff(given) == 0).any():
            raise InputError(
                f"settings must differ, but {given[int(np.argmax(np.diff(given) == 0))]} is there twice"
            )
        self.settings, self.alpha = given, scalar(alpha, "alpha", nonnegative=True)
        self.jumps = 0.5 * self.alpha * (given[:-1] + given[1:])
        super().__init__(
            given[1:-1],
            self.jumps,
            lower=given[0],
            upper=given[-1],
            value_at=(given[0], 0.5 * self.alpha * given[0] ** 2),
        )

    def __repr__(self) -> str:
        return f"MultiBangCost({self.settings.tolist()}, alpha={self.alpha})"

    def _legend(self) -> tuple[str, ...]:
        words = ["setting 1"]
        for k in range(2, self.settings.size + 1):
            words += [f"between {k - 1} and {k}", f"setting {k}"]
        return tuple(words)

    def staircase(self, y: FloatArray) -> FloatArray:
        """The setting that maximises u y - g(u); at a step the lower one."""
        return self.settings[np.searchsorted(self.jumps, y, side="left")]

    def regularised_staircase(self, y: FloatArray, gamma: float) -> FloatArray:
        """The staircase of g + gamma/2 u^2: slope 1/gamma from jump_i + gamma u_i to jump_i + gamma u_{i+1}."""
        gamma = scalar(gamma, "gamma", positive=True)
        return self.prox(y / gamma, 1.0 / gamma)

    def share_between(
        self, u: FloatArray, weights: FloatArray | None = None, tolerance: float = 0.0
    ) -> float:
        """The share of the components (of their weights) that are further than `tolerance` from every setting."""
        gap = np.abs(np.asarray(u)[:, None] - self.settings).min(axis=1)
        w = np.ones(gap.shape) if weights is None else weights
        return float(w[gap > tolerance].sum() / w.sum())
