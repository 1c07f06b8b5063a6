"""What a primal-dual Newton method must know of a term: a norm with a bounded dual, a quadratic, or neither.

A norm is a sum over groups beta_g ||x_g||, whose multiplier lies in the ball ||y_g|| <= beta_g: `SparseCost` (groups
of one) and `GroupSparseCost`, both without bounds. A quadratic is gamma/2 ||x||^2: `ElasticNetCost` without its L1 part
and without bounds.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from .costs import ElasticNetCost, GroupSparseCost, SparseCost

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

NORM, QUADRATIC, OTHER = "norm", "quadratic", "other"


class NormRows:
    """The rows of all terms, stacked, sorted into norms, quadratics and the rest.

    Parameters
    ----------
    problem : SumProblem

    Attributes
    ----------
    kinds : list of str
        "norm", "quadratic" or "other", one a term.
    is_norm : bool array, shape (m,)
        The rows of norms. beta (0 elsewhere), inner (weights inside the norm) and labels (groups, numbered through over
        all terms; a group of its own for every row of another kind) belong to all rows.
    curvature : array, shape (m,)
        gamma in the rows of quadratics, else 0.
    """

    def __init__(self, problem: Any) -> None:
        self.problem = problem
        total = int(problem.splits[-1])
        self.kinds = [kind_of(cost) for cost in problem.costs]
        self.beta, self.inner, self.curvature = np.zeros(total), np.ones(total), np.zeros(total)
        self.labels: IntArray = np.zeros(total, dtype=np.intp)
        self.is_norm = np.zeros(total, dtype=bool)
        self.groups = 0
        for k, cost in enumerate(problem.costs):
            rows = slice(int(problem.splits[k]), int(problem.splits[k + 1]))
            size = rows.stop - rows.start
            grouped = isinstance(cost, GroupSparseCost) and self.kinds[k] == NORM
            labels = cost.groups.labels if grouped else np.arange(size)
            self.labels[rows] = self.groups + labels
            self.groups += int(labels.max(initial=-1)) + 1
            if self.kinds[k] == NORM:
                self.is_norm[rows] = True
                beta = np.broadcast_to(cost.beta, (cost.groups.number,))[labels] if grouped else cost.beta
                self.beta[rows] = beta
                if grouped:
                    self.inner[rows] = cost.inner_weights
            elif self.kinds[k] == QUADRATIC:
                self.curvature[rows] = cost.gamma
        self.largest_group = int(np.bincount(self.labels).max(initial=0)) if total else 0

    def sums(self, x: FloatArray) -> FloatArray:
        """Sums over the groups, spread to the rows."""
        sums: FloatArray = np.bincount(self.labels, weights=x, minlength=self.groups).astype(np.float64)
        return sums[self.labels]

    def lengths(self, x: FloatArray) -> FloatArray:
        """The norm of its group for each row, in the weights inside the norm."""
        return np.sqrt(self.sums(self.inner * x * x))

    def into_balls(self, y: FloatArray) -> FloatArray:
        """The multipliers with those of norms projected into their balls."""
        excess = self.lengths(y)
        factor = np.where(self.is_norm & (excess > self.beta), self.beta / np.maximum(excess, 1e-300), 1.0)
        return factor * y


def kind_of(cost: Any) -> str:
    """Whether a cost is a norm, a quadratic, or neither."""
    lower, upper = getattr(cost, "lower", None), getattr(cost, "upper", None)
    if lower is None or upper is None or not (np.isneginf(lower).all() and np.isposinf(upper).all()):
        return OTHER
    if isinstance(cost, SparseCost | GroupSparseCost):
        return NORM
    if isinstance(cost, ElasticNetCost) and not cost.beta.any():
        return QUADRATIC
    return OTHER
