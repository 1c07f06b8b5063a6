"""Small problems and equations that the tests of the kernel share."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

import ssn


class Contact:
    """K u - load + rho max(0, u - ceiling) = 0 as a user's `Equation`, with a derivative of the wanted kind."""

    def __init__(self, kind="sparse", n=40, rho=1e3):
        self.kind, self.rho = kind, rho
        self.K = sp.csr_array(
            sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
        )
        self.load, self.ceiling = np.full(n, 0.02), 1.5
        self.residuals = self.linearizations = 0

    def residual(self, u):
        self.residuals += 1
        return self.K @ u - self.load + self.rho * np.maximum(0.0, u - self.ceiling)

    def linearize(self, u):
        self.linearizations += 1
        over = u > self.ceiling
        matrix = sp.csr_array(self.K + sp.diags_array(self.rho * over))
        if self.kind == "dense":
            derivative = matrix.toarray()
        elif self.kind == "operator":
            derivative = LinearOperator(
                matrix.shape, matvec=lambda x: matrix @ x, rmatvec=lambda x: matrix.T @ x
            )
        elif self.kind == "lil":
            derivative = matrix.tolil()
        else:
            derivative = matrix
        return ssn.Linearization(
            self.K @ u - self.load + self.rho * np.maximum(0.0, u - self.ceiling),
            derivative,
            {"contact": over},
            symmetric=True,
            positive_definite=True,
        )


class Scalar:
    """One equation f(x) = 0 with its derivative."""

    def __init__(self, f, df, **members):
        self.f, self.df = f, df
        self.linearizations = 0
        vars(self).update(members)

    def residual(self, x):
        return np.array([self.f(float(x[0]))])

    def linearize(self, x):
        self.linearizations += 1
        return ssn.Linearization(self.residual(x), np.array([[self.df(float(x[0]))]]))


def cyclic(n, a):
    """F(x) = (I + a P) x - 1, P the cyclic shift: a P-matrix for odd n, x >= 0, F >= 0, x F = 0.

    I. Ben Gharbia and J. C. Gilbert, Math. Program. 134 (2012) 349-364 (the family from memory of the abstract).
    """
    return ssn.ComplementarityProblem(
        ssn.AffineMap(np.eye(n) + a * np.roll(np.eye(n), 1, axis=1), -np.ones(n))
    )


def control(n=12, *, alpha=1e-4, beta=1e-3, bound=30.0, **changes):
    """Sparse elliptic control by finite differences on the unit square."""
    h = 1.0 / (n + 1)
    line = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    stiffness = sp.csr_array(sp.kron(line, sp.eye_array(n)) + sp.kron(sp.eye_array(n), line))
    x, y = np.meshgrid(np.arange(1, n + 1) * h, np.arange(1, n + 1) * h)
    target = (np.sin(2 * np.pi * x) * np.sin(2 * np.pi * y) * np.exp(2 * x) / 6).ravel()
    mass = np.full(n * n, h * h)
    arguments = {
        "state": ssn.SteadyState(stiffness),
        "target": target,
        "cost": ssn.SparseCost(beta, -bound, bound),
        "control_weight": alpha,
        "state_mass": mass,
        "control_mass": mass,
    }
    return ssn.ControlProblem(**(arguments | changes))
