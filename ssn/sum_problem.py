"""Several nonsmooth terms with linear operators: minimise f(u) + sum_i g_i(K_i u - c_i)."""

from __future__ import annotations

import copy
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.linalg as sla
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .control import ControlProblem
from .control_part import ControlPart
from .costs import Bounds, GroupSparseCost, SparseCost
from .errors import InputError
from .inner import InnerProduct
from .linear.boundary import as_matrix, product, transpose_product
from .protocols import Cost, SmoothPart
from .validate import float_array, weight_array
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
    weights : array, shape (m,), optional
        Inner product of the term's argument, where the term is an integral (areas of cells, say): g is weighted by
        them, and the term's multiplier is a density with respect to them. Ones by default.
    """

    cost: Cost
    operator: Any = None
    offset: Any = None
    weights: Any = None


class SumProblem:
    """minimise f(u) + sum_i g_i(K_i u - c_i), f smooth and convex, g_i convex.

    Parameters
    ----------
    smooth : SmoothPart or ControlProblem
        f; its Hessian may be singular, also zero. Of a control problem (without state bounds) it is the tracking and
        the quadratic cost of the control, the state being eliminated; its own cost is one more term, named "cost",
        unless it is zero.
    terms : sequence of Term
    size : int, optional
        Number of unknowns, for a smooth part without a ``size`` member.

    Raises
    ------
    InputError
        Naming the term and what does not fit.

    Notes
    -----
    ``Solution.multipliers["term i"]`` is y_i, a subgradient of g_i at K_i u - c_i in the inner product of the term's
    weights w_i, with grad f(u) + sum_i K_i' (w_i y_i) = 0: the price of moving the term's argument.

    A norm with bounds (`SparseCost`, `GroupSparseCost`) counts as two terms with multipliers of their own, "term i" for
    the norm and "term i bounds" for the bounds.

    ``Solution.certificate`` is a distance bound where f is known to be strongly convex, and every term is finite at the
    returned point, which is otherwise left as it is: see `duality_gap.certify`.
    """

    convex = True

    def __init__(
        self, *, smooth: SmoothPart | ControlProblem, terms: Sequence[Term], size: int | None = None
    ) -> None:
        self.control = smooth if isinstance(smooth, ControlProblem) else None
        part: Any = ControlPart(smooth) if isinstance(smooth, ControlProblem) else smooth
        if not isinstance(part, SmoothPart):
            raise InputError(f"smooth must have value, gradient and hessian, got {type(smooth).__name__}")
        n = getattr(part, "size", None) or size
        if n is None:
            raise InputError(f"give size: {type(smooth).__name__} does not tell its number of unknowns")
        if not terms:
            raise InputError("terms is empty: use CompositeProblem, or give at least one Term")
        self.part = part
        self.unknowns = int(n)
        self.names: list[str] = []
        self.direct: list[bool] = []  # whether the term acts on the unknown itself
        self.costs: list[Cost] = []
        self.operators: list[Any] = []
        self.offsets: list[FloatArray] = []
        term_weights: list[FloatArray] = []
        stated = [(f"term {k}", f"terms[{k}]", term) for k, term in enumerate(terms)]
        if self.control is not None and not is_zero(self.control.cost):
            own = Term(self.control.cost, weights=self.control.weights)
            stated.append(("cost", "the cost of the control problem", own))
        for name, where, term in stated:
            if not isinstance(term, Term) or not isinstance(term.cost, Cost):
                raise InputError(f"{where} must be a ssn.Term with a cost, got {type(term).__name__}")
            if not term.cost.convex:
                raise InputError(f"{where}: {type(term.cost).__name__} is not convex")
            operator = (
                sp.eye_array(self.unknowns, format="csr")
                if term.operator is None
                else as_matrix(term.operator, f"{where}.operator", shape=(None, self.unknowns))
            )
            rows = int(operator.shape[0])
            term.cost.check_size(rows)
            weights = weight_array(term.weights, f"{where}.weights", rows)
            if hasattr(term.cost, "check_weights"):
                term.cost.check_weights(weights)
            offset = (
                np.zeros(rows)
                if term.offset is None
                else float_array(term.offset, f"{where}.offset", shape=(rows,))
            )
            for part_name, cost in _parts(name, term.cost):
                self.names.append(part_name)
                self.direct.append(term.operator is None)
                self.costs.append(cost)
                self.operators.append(operator)
                self.offsets.append(offset)
                term_weights.append(weights)
        self.splits = np.cumsum([0, *(o.size for o in self.offsets)])
        self.term_weights: FloatArray = np.concatenate(term_weights)
        self.weights = np.ones(self.unknowns) if self.control is None else self.control.weights
        self.controls = InnerProduct(self.weights)
        self.affine = bool(getattr(part, "affine_gradient", False))
        self.work = WorkCounts() if self.control is None else self.control.work
        self._norm: float | None = None
        self._strong: float | None = None
        self._unit: float | None = None

    def part_of(self, stacked: FloatArray, k: int) -> FloatArray:
        """The rows of term k in a stacked vector."""
        return stacked[self.splits[k] : self.splits[k + 1]]

    def forward(self, u: FloatArray) -> FloatArray:
        """K u, all terms stacked, without the offsets."""
        self.work.operator_products += len(self.operators)
        return np.concatenate([product(operator, u) for operator in self.operators])

    def adjoint(self, y: FloatArray) -> FloatArray:
        """K' W y for a stacked y, W the weights of the terms."""
        self.work.operator_products += len(self.operators)
        weighted = self.term_weights * y
        return np.sum(
            [transpose_product(o, self.part_of(weighted, k)) for k, o in enumerate(self.operators)], axis=0
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

    def smooth(self, u: FloatArray) -> tuple[float, FloatArray]:
        """Value and gradient of f, the gradient in the inner product of the unknown."""
        return self.smooth_value(u), self.gradient(u) / self.weights

    def value(self, u: FloatArray) -> FloatArray:
        """The Euclidean gradient of f."""
        return self.gradient(u)

    def derivative(self, u: FloatArray) -> Any:
        """The Hessian of f."""
        return self.part.hessian(u)

    def inside(self, u: FloatArray) -> FloatArray:
        """The unknown moved into the domains of those terms that act on it directly, one after the other."""
        for k, cost in enumerate(self.costs):
            if self.direct[k]:
                x = u - self.offsets[k]
                if not np.isfinite(cost.value(x)):
                    u = cost.prox(x, 1e-300) + self.offsets[k]
        return u

    def with_smooth(self, smooth: SmoothPart) -> SumProblem:
        """The same terms with another smooth part of the same size, and counters of its own."""
        if not isinstance(smooth, SmoothPart):
            raise InputError(f"smooth must have value, gradient and hessian, got {type(smooth).__name__}")
        other = copy.copy(self)
        other.part, other.control = smooth, None
        other.affine = bool(getattr(smooth, "affine_gradient", False))
        other.work = WorkCounts()
        other._strong = other._unit = None
        return other

    def natural_step(self) -> float:
        """1/alpha for a control problem with alpha > 0, as for the control problem alone; else just below 1/L."""
        if self.control is not None and self.control.alpha > 0.0:
            return 1.0 / self.control.alpha
        curvature = self.curvature()
        return 0.95 * float(self.weights.min()) / curvature if curvature > 0.0 else 1.0

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
            weights = self.part_of(self.term_weights, k)
            value = cost.value(x, weights)
            if not np.isfinite(value) and slack > 0:
                inside = cost.prox(x, 1e-300)
                if np.linalg.norm(inside - x) <= slack * (1.0 + np.linalg.norm(x)):
                    value = cost.value(inside, weights)
            total += value
        return total

    def operator_norm(self) -> float:
        """||K|| from the Euclidean product to that of the terms, by 30 power steps plus five percent."""
        if self._norm is None:
            self._norm = self._power(self.forward, self.adjoint)
        return self._norm

    def term_norms(self) -> list[float]:
        """||K_i|| of each term, likewise; known where the operator is the identity."""
        found = []
        for k, operator in enumerate(self.operators):
            weights = self.part_of(self.term_weights, k)
            if self.direct[k]:
                found.append(float(np.sqrt(weights.max())))
                continue

            def back(y: FloatArray, operator: Any = operator, weights: FloatArray = weights) -> FloatArray:
                return transpose_product(operator, weights * y)

            found.append(self._power(partial(product, operator), back))
        return found

    def _power(
        self, forward: Callable[[FloatArray], FloatArray], adjoint: Callable[[FloatArray], FloatArray]
    ) -> float:
        x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
        size = 0.0
        for _ in range(30):
            length = float(np.linalg.norm(x))
            if length == 0.0:
                break
            x = adjoint(forward(x / length))
            size = float(np.linalg.norm(x))
        return 1.05 * float(np.sqrt(size)) if size > 0 else 1.0

    def gradient_unit(self) -> float:
        """||f''|| / ||K||: what a change of K u is worth in the gradient."""
        if self._unit is None:
            curvature = self.curvature()
            self._unit = (curvature if curvature > 0 else 1.0) / self.operator_norm()
        return self._unit

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

    @property
    def strong_convexity(self) -> float:
        """A lower bound on the modulus of strong convexity of f, in the inner product of the unknown; 0: not known.

        Told by the smooth part, or for a constant explicit Hessian from its discs (Gershgorin), or up to 2000 unknowns
        from its eigenvalues.
        """
        if self._strong is None:
            told = getattr(self.part, "strong_convexity", None)
            self._strong = (
                float(told) if told is not None else self._least_curvature() if self.affine else 0.0
            )
        return self._strong

    def _least_curvature(self) -> float:
        hessian = self.part.hessian(np.zeros(self.unknowns))
        if isinstance(hessian, LinearOperator):
            return 0.0
        diagonal = np.asarray(hessian.diagonal())
        others = np.asarray(abs(hessian).sum(axis=1)).ravel() - np.abs(diagonal)
        least = float(((diagonal - others) / self.weights).min())
        if least > 0.0 or self.unknowns > 2000:
            return max(least, 0.0)
        dense = hessian.toarray() if sp.issparse(hessian) else np.asarray(hessian)
        root = np.sqrt(self.weights)
        values = sla.eigvalsh(dense / np.outer(root, root))
        rounding = 10.0 * self.unknowns * np.finfo(float).eps * float(np.abs(values).max(initial=0.0))
        return max(float(values[0]) - rounding, 0.0)

    def accuracy_of(self, u: FloatArray, y: FloatArray) -> tuple[float, float]:
        """Relative errors of stationarity and of y_i in the subdifferential of g_i, evaluated afresh.

        ||grad f + K'Wy|| / (||grad f|| + ||K'Wy||) in the dual norm of the unknown, and in the norm of the terms
        ||x - prox(x + y/s)|| / (||x|| + ||y||/s) with x = K u - c and s = ||y|| / ||x||.
        """
        gradient, pulled = self.gradient(u), self.adjoint(y)
        size = self.dual_norm(gradient) + self.dual_norm(pulled)
        stationarity = self.dual_norm(gradient + pulled) / size if size > 0 else 0.0
        x = self.arguments(u)
        length, price = self.term_norm(x), self.term_norm(y)
        s = price / length if price > 0 and length > 0 else 1.0
        gap = self.term_norm(x - self.prox(x + y / s, 1.0 / s))
        whole = length + price / s
        return stationarity, gap / whole if whole > 0 else gap

    def dual_norm(self, gradient: FloatArray) -> float:
        """Norm of a Euclidean gradient as a functional on the unknown."""
        return float(np.linalg.norm(gradient / np.sqrt(self.weights)))

    def term_norm(self, x: FloatArray) -> float:
        """Norm of stacked arguments or multipliers in the weights of the terms."""
        return float(np.linalg.norm(np.sqrt(self.term_weights) * x))


def _parts(name: str, cost: Any) -> list[tuple[str, Cost]]:
    """The cost by its name; a norm with bounds as the norm and the bounds, whose smoothed forms differ."""
    if type(cost) not in (SparseCost, GroupSparseCost):
        return [(name, cost)]
    free = np.isneginf(cost.lower).all() and np.isposinf(cost.upper).all()
    if free or not cost.beta.any():
        return [(name, cost)]
    norm: Cost = SparseCost(cost.beta)
    if isinstance(cost, GroupSparseCost):
        norm = GroupSparseCost(cost.beta, cost.groups.labels, inner_weights=cost.inner_weights)
    return [(name, norm), (f"{name} bounds", Bounds(cost.lower, cost.upper))]


def is_zero(cost: Any) -> bool:
    """Whether a cost is known to be zero everywhere."""
    return (
        isinstance(cost, SparseCost)
        and not cost.beta.any()
        and bool(np.isneginf(cost.lower).all() and np.isposinf(cost.upper).all())
    )
