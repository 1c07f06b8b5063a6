"""Second-order conditions at a stationary point: the lowest curvature among the directions that the pieces leave free.

With D the derivative of the proximal map with step s at the point, self-adjoint in the weighted product, the directions
are the range of D, and the curvature of the cost there is (D^-1 - I)/s: f'' + (D^-1 - I)/s must not be negative on it.
For a diagonal D the range is a set of components; blocks and low-rank terms are taken apart by their eigenvectors.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.linalg as sla
from scipy.sparse.linalg import ArpackError, LinearOperator, eigsh

from .linear.boundary import product
from .protocols import FloatArray, ProxDerivative

# unknowns up to which matrices are written out
DENSE = 2000
# eigenvalues of D below this are zero
RANGE = 1e-9
# negative by less than this part of the largest curvature counts as rounding; for Lanczos, of 1/s
ROUNDING, LANCZOS_ROUNDING = 1e-10, 1e-7
LANCZOS_STEPS = 300


@dataclass(frozen=True)
class Curvature:
    """The lowest curvature, whether rounding explains a negative one, and its direction (norm one in the product)."""

    value: float
    negative: bool
    direction: FloatArray


def lowest_curvature(
    hessian: Any, weights: FloatArray, derivative: ProxDerivative, step: float
) -> Curvature | None:
    """Return the lowest curvature of f + g on the free directions.

    Parameters
    ----------
    hessian : array, sparse array or LinearOperator, shape (n, n)
        f'', Euclidean.
    weights : array, shape (n,)
        The inner product of the unknown.
    derivative : ProxDerivative
        D.
    step : float
        s.

    Returns
    -------
    Curvature or None
        None where nothing is free, and where it cannot be told: a derivative that is not diagonal with more than 2000
        unknowns, or a Lanczos iteration that does not end.
    """
    n, root = weights.size, np.sqrt(weights)
    if derivative.diagonal is not None:
        d = np.broadcast_to(derivative.diagonal, (n,))
        rows = np.flatnonzero(d > 0)
        if rows.size == 0:
            return None
        bend = (1.0 / d[rows] - 1.0) / step
        if rows.size > DENSE or isinstance(hessian, LinearOperator):
            return _by_lanczos(hessian, root, rows, bend, step)
        part = _written_out(hessian)[np.ix_(rows, rows)] / np.outer(root[rows], root[rows])
        basis = None
    else:
        if n > DENSE:
            return None
        matrix = root[:, None] * derivative.apply(np.eye(n)) / root
        sizes, vectors = sla.eigh(0.5 * (matrix + matrix.T))
        free = sizes > RANGE
        if not free.any():
            return None
        bend, basis = (1.0 / sizes[free] - 1.0) / step, vectors[:, free]
        part = basis.T @ (_written_out(hessian) / np.outer(root, root)) @ basis
    values, vectors = sla.eigh(part + np.diag(bend))
    direction = np.zeros(n)
    if basis is None:
        direction[rows] = vectors[:, 0]
    else:
        direction = basis @ vectors[:, 0]
    negative = bool(values[0] < -ROUNDING * np.abs(values).max())
    return Curvature(float(values[0]), negative, direction / root)


def _written_out(hessian: Any) -> FloatArray:
    if isinstance(hessian, LinearOperator):
        return np.asarray(hessian @ np.eye(hessian.shape[0]))
    return hessian.toarray() if hasattr(hessian, "toarray") else np.asarray(hessian)


def _by_lanczos(hessian: Any, root: FloatArray, rows: Any, bend: FloatArray, step: float) -> Curvature | None:
    def apply(x: FloatArray) -> FloatArray:
        full = np.zeros(root.size)
        full[rows] = np.ravel(x)
        return (product(hessian, full / root) / root)[rows] + bend * np.ravel(x)

    m = rows.size
    if m <= 2:
        matrix = np.stack([apply(e) for e in np.eye(m)], axis=1)
        values, vectors = sla.eigh(0.5 * (matrix + matrix.T))
    else:
        operator = LinearOperator((m, m), matvec=apply, dtype=np.float64)
        first = np.cos(np.arange(m) * 0.7) + 1.5
        try:
            values, vectors = eigsh(
                operator, k=1, which="SA", v0=first, tol=1e-6, maxiter=LANCZOS_STEPS, ncv=min(m, 20)
            )
        except ArpackError:
            return None
    direction = np.zeros(root.size)
    direction[rows] = vectors[:, 0]
    return Curvature(float(values[0]), bool(values[0] < -LANCZOS_ROUNDING / step), direction / root)
