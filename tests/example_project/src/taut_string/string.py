"""The string and its bed."""

import numpy as np
import scipy.sparse as sp

import ssn


class StringOverBed:
    """-T y'' + w - k max(0, bed - y) = 0 on (0, L), y = 0 at both ends, by central differences at n inner points.

    The string sags by its weight w (N/m) under the tension T (N); where it would sink below the bed, the bed pushes
    back with k (N/m^2).
    """

    def __init__(
        self, n: int, length: float = 2.0, tension: float = 50.0, weight: float = 20.0, stiffness: float = 1e4
    ) -> None:
        h = length / (n + 1)
        self.x = np.linspace(h, length - h, n)
        self.h, self.weight, self.stiffness = h, weight, stiffness
        self.bed = -0.12 + 0.02 * np.cos(4 * np.pi * self.x / length)
        off = -np.ones(n - 1)
        self.tension = sp.diags_array([off, 2.0 * np.ones(n), off], offsets=[-1, 0, 1]) * (tension / h)
        self.start = np.zeros(n)
        self.scale = weight * h  # N, the size of the terms of a row

    def depth(self, y: np.ndarray) -> np.ndarray:
        """How far the string is below the bed, m."""
        return self.bed - y

    def residual(self, y: np.ndarray) -> np.ndarray:
        """Force that is not balanced at each point, N."""
        push = self.stiffness * np.maximum(0.0, self.depth(y))
        return self.tension @ y + self.h * (self.weight - push)

    def linearize(self, y: np.ndarray) -> ssn.Linearization:
        """Residual, its Newton derivative, and where the string touches."""
        touching = self.depth(y) > 0.0
        derivative = self.tension + sp.diags_array(self.h * self.stiffness * touching)
        return ssn.Linearization(
            self.residual(y), derivative, {"bed": touching}, symmetric=True, positive_definite=True
        )

    def contact_length(self, y: np.ndarray) -> float:
        """Length on the bed, m."""
        return float(self.h * np.count_nonzero(self.depth(y) > 0.0))
