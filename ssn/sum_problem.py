"""Several nonsmooth terms with linear operators: minimise f(u) + sum_i g_i(K_i u - c_i)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .errors import InputError
from .inner import InnerProduct
from .linear.boundary import as_matrix, product, transpose_product
from .protocols import Cost, SmoothPart
from .validate import float_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Term:
    """One nonsmooth term g(K u - c).

    Parameters
    ----------
    cost : Cost
        g, convex: a cost, the indicator of a set, or ``Bounds(0, 0)`` for the equation K u = c.
    operator : sparse array, array or LinearOperator, shape (m, n), optional
        K; the identity by default. A difference operator gives total variation.
    offset : array, shape (m,), optional
        c; zero by default.
    """

    cost: Cost
    operator: Any = None
    offset: Any = None


class SumProblem:
    """minimise f(u) + sum_i g_i(K_i u - c_i), f smooth and convex, g_i convex.

    Parameters
    ----------
    smooth : SmoothPart
        f; its Hessian may be singular, also zero.
    terms : sequence of Term
    size : int, optional
        Number of unknowns, for a smooth part without a ``size`` member.

    Raises
    ------
    InputError
        Naming the term and what does not fit.

    Notes
    -----
    ``Solution.multipliers["term i"]`` is y_i, a subgradient of g_i at K_i u - c_i, with
    grad f(u) + sum_i K_i' y_i = 0: the price of moving the term's argument.
    """

    convex = True

    def __init__(self, *, smooth: SmoothPart, terms: Sequence[Term], size: int | None = None) -> None:
        if not isinstance(smooth, SmoothPart):
            raise InputError(f"smooth must have value, gradient and hessian, got {type(smooth).__name__}")
        n = getattr(smooth, "size", None) or size
        if n is None:
            raise InputError(f"give size: {type(smooth).__name__} does not tell its number of unknowns")
        if not terms:
            raise InputError("terms is empty: use CompositeProblem, or give at least one Term")
        self.part = smooth
        self.unknowns = int(n)
        self.costs: list[Cost] = []
        self.operators: list[Any] = []
        self.offsets: list[FloatArray] = []
        for k, term in enumerate(terms):
            if not isinstance(term, Term) or not isinstance(term.cost, Cost):
                raise InputError(f"terms[{k}] must be a ssn.Term with a cost, got {type(term).__name__}")
            if not term.cost.convex:
                raise InputError(f"terms[{k}]: {type(term.cost).__name__} is not convex")
            operator = (
                sp.eye_array(self.unknowns, format="csr")
                if term.operator is None
                else as_matrix(term.operator, f"terms[{k}].operator", shape=(None, self.unknowns))
            )
            rows = int(operator.shape[0])
            term.cost.check_size(rows)
            offset = (
                np.zeros(rows)
                if term.offset is None
                else float_array(term.offset, f"terms[{k}].offset", shape=(rows,))
            )
            self.costs.append(term.cost)
            self.operators.append(operator)
            self.offsets.append(offset)
        self.splits = np.cumsum([0, *(o.size for o in self.offsets)])
        self.controls = InnerProduct(np.ones(self.unknowns))
        self.weights = np.ones(self.unknowns)
        self.affine = bool(getattr(smooth, "affine_gradient", False))
        self.work = WorkCounts()
        self._norm: float | None = None

    def part_of(self, stacked: FloatArray, k: int) -> FloatArray:
        """The rows of term k in a stacked vector."""
        return stacked[self.splits[k] : self.splits[k + 1]]

    def forward(self, u: FloatArray) -> FloatArray:
        """K u, all terms stacked, without the offsets."""
        self.work.operator_products += len(self.operators)
        return np.concatenate([product(operator, u) for operator in self.operators])

    def adjoint(self, y: FloatArray) -> FloatArray:
        """K' y for a stacked y."""
        self.work.operator_products += len(self.operators)
        return np.sum(
            [transpose_product(o, self.part_of(y, k)) for k, o in enumerate(self.operators)], axis=0
        )

    def arguments(self, u: FloatArray) -> FloatArray:
        """K u - c, stacked."""
        return self.forward(u) - np.concatenate(self.offsets)

    def prox(self, w: FloatArray, step: float) -> FloatArray:
        """The proximal maps of all terms."""
        self.work.proximal_maps += 1
        return np.concatenate([cost.prox(self.part_of(w, k), step) for k, cost in enumerate(self.costs)])

    def gradient(self, u: FloatArray) -> FloatArray:
        """The gradient of f, checked for shape."""
        self.work.operator_products += 1
        gradient = np.asarray(self.part.gradient(u), dtype=np.float64)
        if gradient.shape != (self.unknowns,):
            raise InputError(f"the gradient has shape {gradient.shape}, expected ({self.unknowns},)")
        return gradient

    def smooth_value(self, u: FloatArray) -> float:
        """f(u)."""
        self.work.operator_products += 1
        return float(self.part.value(u))

    def objective(self, u: FloatArray, slack: float = 0.0) -> float:
        """f(u) + sum g_i; arguments are first moved into the domain of g_i where they lie within `slack` of it."""
        arguments = self.arguments(u)
        total = self.smooth_value(u)
        for k, cost in enumerate(self.costs):
            x = self.part_of(arguments, k)
            value = cost.value(x)
            if not np.isfinite(value) and slack > 0:
                inside = cost.prox(x, 1e-300)
                if np.linalg.norm(inside - x) <= slack * (1.0 + np.linalg.norm(x)):
                    value = cost.value(inside)
            total += value
        return total

    def operator_norm(self) -> float:
        """||K||, by 30 power steps plus five percent."""
        if self._norm is None:
            x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
            size = 0.0
            for _ in range(30):
                length = float(np.linalg.norm(x))
                if length == 0.0:
                    break
                x = self.adjoint(self.forward(x / length))
                size = float(np.linalg.norm(x))
            self._norm = 1.05 * float(np.sqrt(size)) if size > 0 else 1.0
        return self._norm

    def curvature(self) -> float:
        """The largest eigenvalue of the Hessian of f at zero, by 20 power steps; 0 where f is linear."""
        hessian = self.part.hessian(np.zeros(self.unknowns))
        x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
        size = 0.0
        for _ in range(20):
            length = float(np.linalg.norm(x))
            if length == 0.0:
                break
            x = product(hessian, x / length)
            size = float(np.linalg.norm(x))
        return size

    def accuracy_of(self, u: FloatArray, y: FloatArray) -> tuple[float, float]:
        """Relative errors of stationarity and of y_i in the subdifferential of g_i, evaluated afresh.

        ||grad f + K'y|| / (||grad f|| + ||K'y||), and ||x - prox(x + y/s)|| / (||x|| + ||y||/s) with x = K u - c and
        s = ||y|| / ||x||.
        """
        gradient, pulled = self.gradient(u), self.adjoint(y)
        size = float(np.linalg.norm(gradient) + np.linalg.norm(pulled))
        stationarity = float(np.linalg.norm(gradient + pulled)) / size if size > 0 else 0.0
        x = self.arguments(u)
        length, price = float(np.linalg.norm(x)), float(np.linalg.norm(y))
        s = price / length if price > 0 and length > 0 else 1.0
        gap = float(np.linalg.norm(x - self.prox(x + y / s, 1.0 / s)))
        whole = length + price / s
        return stationarity, gap / whole if whole > 0 else gap
