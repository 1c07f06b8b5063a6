"""Smooth parts of composite problems, and smooth maps of complementarity problems."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator
from scipy.special import expit

from .errors import InputError
from .linear.boundary import as_matrix, as_square, is_symmetric, product, transpose_product
from .traced import TracedEquation
from .validate import float_array, weight_array

FloatArray = npt.NDArray[np.float64]


class Quadratic:
    """f(u) = 1/2 u' H u - b' u.

    Parameters
    ----------
    H : sparse array, array or LinearOperator, shape (n, n)
        Symmetric; explicit matrices are checked.
    b : array, shape (n,)

    Raises
    ------
    InputError
        For shapes that do not fit, entries that are not finite, or a matrix that is not symmetric.
    """

    affine_gradient = True

    def __init__(self, H: Any, b: Any) -> None:
        self.H = as_square(H, "H")
        self.b = float_array(b, "b", shape=(self.H.shape[0],))
        if not isinstance(self.H, LinearOperator) and not is_symmetric(self.H, 1e-10):
            raise InputError("H must be symmetric; give (H + H.T) / 2, which has the same quadratic form")
        self.size = int(self.H.shape[0])

    def value(self, u: FloatArray) -> float:
        """f(u)."""
        return float(0.5 * (u @ product(self.H, u)) - self.b @ u)

    def gradient(self, u: FloatArray) -> FloatArray:
        """H u - b."""
        return product(self.H, u) - self.b

    def hessian(self, u: FloatArray) -> Any:
        """H."""
        return self.H


class LeastSquares:
    """f(u) = 1/2 ||A u - b||^2, weighted; no 1/m.

    Parameters
    ----------
    A : sparse array, array or LinearOperator with an adjoint, shape (m, n)
    b : array, shape (m,)
    weights : array, shape (m,), optional
        Positive weights of the squares; ones by default.

    Raises
    ------
    InputError
        For shapes that do not fit or entries that are not finite.
    """

    affine_gradient = True

    def __init__(self, A: Any, b: Any, weights: Any = None) -> None:
        self.A = as_matrix(A, "A")
        self.b = float_array(b, "b", shape=(self.A.shape[0],))
        self.weights = weight_array(weights, "weights", self.A.shape[0])
        self.size = int(self.A.shape[1])

    def value(self, u: FloatArray) -> float:
        """f(u)."""
        misfit = product(self.A, u) - self.b
        return float(0.5 * (misfit @ (self.weights * misfit)))

    def gradient(self, u: FloatArray) -> FloatArray:
        """A' W (A u - b)."""
        return transpose_product(self.A, self.weights * (product(self.A, u) - self.b))

    def hessian(self, u: FloatArray) -> Any:
        """A' W A: an array where A is one of at most 2000 columns, else an operator."""
        n = self.size
        if isinstance(self.A, np.ndarray) and n <= 2000:
            return (self.A.T * self.weights) @ self.A
        return LinearOperator(
            (n, n),
            matvec=lambda x: transpose_product(self.A, self.weights * product(self.A, np.ravel(x))),
            dtype=np.float64,
        )


class Logistic:
    """f(u) = sum_i log(1 + exp(-labels_i (A u)_i)).

    Parameters
    ----------
    A : sparse array or array, shape (m, n)
    labels : array, shape (m,)
        -1 or +1.

    Raises
    ------
    InputError
        For labels other than -1 and +1, or shapes that do not fit.
    """

    affine_gradient = False

    def __init__(self, A: Any, labels: Any) -> None:
        self.A = as_matrix(A, "A")
        if isinstance(self.A, LinearOperator):
            raise InputError("Logistic needs an explicit matrix A")
        self.labels = float_array(labels, "labels", shape=(self.A.shape[0],))
        wrong = np.abs(self.labels) != 1.0
        if wrong.any():
            index = int(np.argmax(wrong))
            raise InputError(f"labels[{index}] is {self.labels[index]}; labels are -1 or +1")
        self.size = int(self.A.shape[1])

    def value(self, u: FloatArray) -> float:
        """f(u)."""
        return float(np.logaddexp(0.0, -self.labels * product(self.A, u)).sum())

    def gradient(self, u: FloatArray) -> FloatArray:
        """The gradient."""
        margin = self.labels * product(self.A, u)
        return transpose_product(self.A, -self.labels * expit(-margin))

    def hessian(self, u: FloatArray) -> Any:
        """A' diag(s (1 - s)) A."""
        s = expit(product(self.A, u))
        d = s * (1.0 - s)
        if sp.issparse(self.A):
            return sp.csr_array(self.A.T @ (sp.diags_array(d) @ self.A))
        return (self.A.T * d) @ self.A


class AffineMap:
    """F(x) = M x + q, for complementarity problems.

    Parameters
    ----------
    M : sparse array, array or LinearOperator, shape (n, n)
        Newton systems of an operator are solved by conjugate gradients where it is symmetric, by GMRES otherwise.
    q : array, shape (n,)
    diagonal : array, shape (n,), optional
        Of an operator, needed: it brings F to the unit of x and preconditions.
    symmetric : bool, optional
        Whether an operator is symmetric, needed; `ssn.evidence.check_derivative` tests it. Explicit matrices are
        looked at.

    Raises
    ------
    InputError
        For shapes that do not fit, entries that are not finite, an operator without `diagonal` or `symmetric`, or an
        explicit matrix with them.
    """

    affine = True

    def __init__(self, M: Any, q: Any, *, diagonal: Any = None, symmetric: bool | None = None) -> None:
        self.M = as_square(M, "M")
        self.q = float_array(q, "q", shape=(self.M.shape[0],))
        self.size = int(self.M.shape[0])
        self.diagonal: FloatArray | None = None
        if isinstance(self.M, LinearOperator):
            if diagonal is None or symmetric is None:
                raise InputError(
                    "an operator M does not show its diagonal and symmetry: give diagonal= and symmetric="
                )
            self.diagonal = float_array(diagonal, "diagonal", shape=(self.size,))
            self.symmetric = bool(symmetric)
            return
        if diagonal is not None or symmetric is not None:
            raise InputError("diagonal= and symmetric= are for an operator M; an explicit matrix shows them")
        self.symmetric = is_symmetric(self.M)

    def value(self, x: FloatArray) -> FloatArray:
        """M x + q."""
        return product(self.M, x) + self.q

    def derivative(self, x: FloatArray) -> Any:
        """M."""
        return self.M


class SmoothMap:
    """A smooth map with its derivative, from two functions.

    Parameters
    ----------
    value : callable
        x (n,) -> F(x) (n,).
    derivative : callable
        x (n,) -> sparse array or array (n, n).
    """

    affine = False
    symmetric = False

    def __init__(self, value: Callable[[FloatArray], Any], derivative: Callable[[FloatArray], Any]) -> None:
        if not callable(value) or not callable(derivative):
            raise InputError("SmoothMap needs two functions: value(x) and derivative(x)")
        self._value, self._derivative = value, derivative

    def value(self, x: FloatArray) -> FloatArray:
        """F(x)."""
        return np.asarray(self._value(x.copy()), dtype=np.float64)

    def derivative(self, x: FloatArray) -> Any:
        """F'(x)."""
        return self._derivative(x.copy())


class TracedMap:
    """A map given by a plain function of NumPy arrays; its derivative follows from its operations."""

    affine = False
    symmetric = False

    def __init__(self, function: Callable[[FloatArray], Any], size: int) -> None:
        self._equation = TracedEquation(function, np.zeros(size))
        self.size = size

    def value(self, x: FloatArray) -> FloatArray:
        """F(x)."""
        return self._equation.residual(x)

    def derivative(self, x: FloatArray) -> Any:
        """F'(x)."""
        return self._equation.linearize(x).derivative
