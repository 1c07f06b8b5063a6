"""Plans for several nonsmooth terms with linear operators."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..augmented_lagrangian import MultiplierPath
from ..costs import GroupSparseCost
from ..costs.derivative import LARGEST_BLOCK
from ..equations.augmented import AugmentedEquation
from ..equations.primal_dual import PrimalDualEquation
from ..globalization import DualSearch
from ..linear import (
    AugmentedSolver,
    PrimalDualSolver,
)
from ..linear.augmented import explicit_complement
from ..linear.primal_dual import WIDE_ROW
from ..norm_terms import NORM, OTHER, QUADRATIC, NormRows
from ..primal_dual_path import PrimalDualPath, first_gammas
from ..sum_problem import SumProblem
from .plan import Plan, start_array

# rows with more than WIDE_ROW entries that may join a Newton matrix by a low-rank update
MOST_WIDE = 20


def plan_sum(problem: SumProblem, start: Any) -> Plan:
    """Primal-dual steps where all terms are norms, else the method of multipliers."""
    given = start_array(start, problem.unknowns)
    x = np.zeros(problem.unknowns) if given is None else given
    zero = np.zeros(int(problem.splits[-1]))
    rows = NormRows(problem)
    fits, why = _fits_primal_dual(problem, rows)
    if fits:
        smoothed = PrimalDualEquation(problem, rows, first_gammas(problem), zero)
        choices = {
            "equation": f"primal-dual: {why}",
            "globalization": "dual: the smoothed objective is convex, the search needs products only",
            "linear": "primal-dual: multipliers eliminated, matrix made symmetric and positive; "
            + _how_factorised(problem),
            "path": "gamma falls from the balance of f and terms, multipliers of the last point as centre; ends at the "
            "optimality errors for gamma = 0",
        }
        return Plan(
            problem, smoothed, PrimalDualSolver(smoothed), DualSearch(), np.concatenate([x, zero]), choices,
            primal_dual=PrimalDualPath(),
        )  # fmt: skip
    equation = AugmentedEquation(problem, zero, 1.0, x, 0.0)
    choices = {
        "equation": f"stationarity of the augmented Lagrangian: {why}",
        "globalization": "dual: the augmented Lagrangian is convex and smooth, the search needs products only",
        "linear": "augmented: Cholesky where every part is explicit, conjugate gradients otherwise",
        "path": "method of multipliers: the penalty grows while the terms are the less accurate part",
    }
    return Plan(
        problem, equation, AugmentedSolver(equation), DualSearch(), x, choices, multipliers=MultiplierPath()
    )


def _fits_primal_dual(problem: SumProblem, rows: NormRows) -> tuple[bool, str]:
    """Whether primal-dual steps fit the terms, and why or why not."""
    hidden = [
        name
        for name, o in zip(problem.names, problem.operators, strict=True)
        if isinstance(o, LinearOperator)
    ]
    if hidden:
        return False, f"the operator of {hidden[0]} is no matrix"
    if NORM not in rows.kinds and QUADRATIC not in rows.kinds:
        return False, "no term is a norm, whose multiplier primal-dual steps keep in its ball"
    if rows.largest_group > LARGEST_BLOCK:
        return False, f"a norm couples {rows.largest_group} components, too many to write out their block"
    wide = 0
    for name, kind, operator in zip(problem.names, rows.kinds, problem.operators, strict=True):
        if sp.issparse(operator):
            entries = np.diff(operator.indptr)
        else:
            entries = np.full(operator.shape[0], operator.shape[1])
        wide += int(np.count_nonzero(entries > WIDE_ROW))
        grouped = kind == NORM and isinstance(problem.costs[problem.names.index(name)], GroupSparseCost)
        if wide > MOST_WIDE or (grouped and entries.max(initial=0) > WIDE_ROW):
            return (
                False,
                f"rows of the operator of {name} have {entries.max()} entries, which would fill the matrix",
            )
        if kind == OTHER:
            zero = np.zeros(operator.shape[0])
            derivative = problem.costs[problem.names.index(name)].prox_derivative(zero, 1.0)
            if explicit_complement(derivative) is None:
                return False, f"the proximal derivative of {name} is not sparse"
    norms = ", ".join(name for name, kind in zip(problem.names, rows.kinds, strict=True) if kind == NORM)
    return True, f"norms, whose multipliers are kept in their balls ({norms})" if norms else "quadratic terms"


def _how_factorised(problem: SumProblem) -> str:
    if problem.control is not None:
        return "conjugate gradients, preconditioned by Cholesky of all but the state equation's part"
    return "sparse Cholesky with its pattern kept, conjugate gradients where the Hessian is an operator"
