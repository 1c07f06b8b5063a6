"""Several terms as a conic program: the independent general solver for total variation, budgets and bounds.

Variables v = (u, auxiliary ones of the smooth part, an epigraph variable for each group of a norm); a norm of a group
is a second-order cone, an absolute value two inequalities, bounds are inequalities, equal bounds an equation; a
quadratic joins the objective.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..costs import ElasticNetCost, GroupSparseCost, SparseCost
from ..norm_terms import NORM, QUADRATIC, kind_of
from ..protocols import FloatArray
from ..sum_problem import SumProblem

# asked for more than it reaches: it stops where rounding does not let it go on, and says "almost solved"
GAP = 1e-13
REGULARIZATION = 1e-12


class ConicProgram:
    """1/2 v'Pv + q'v with A v + s = b, s in a product of cones: zero, nonnegative, second order (sizes in order).

    Parameters
    ----------
    problem : SumProblem
    smooth : tuple
        Hessian, linear part, equality rows and right side of the smooth part in (u, auxiliary variables).
    """

    def __init__(self, problem: SumProblem, smooth: tuple[Any, FloatArray, Any, FloatArray]) -> None:
        hessian, linear, rows, right = smooth
        self.unknowns = problem.unknowns
        base = int(hessian.shape[0])
        sizes = [o.size for o in problem.offsets]
        groups = [_groups(cost, size) for cost, size in zip(problem.costs, sizes, strict=True)]
        extra = sum(0 if g is None else int(g.max()) + 1 for g in groups)
        total = base + extra
        p = sp.block_diag([hessian, sp.csc_array((extra, extra))], format="csc") if extra else hessian
        q = np.concatenate([linear, np.zeros(extra)])
        equal: list[Any] = [_wide(rows, total)]
        equal_to: list[FloatArray] = [right]
        below: list[Any] = []
        below_to: list[FloatArray] = []
        cones: list[Any] = []
        cones_to: list[FloatArray] = []
        self.cone_sizes: list[int] = []
        used = base
        for k, cost in enumerate(problem.costs):
            operator = sp.csr_array(problem.operators[k])
            k_wide, c = _wide(operator, total), problem.offsets[k]
            w = problem.part_of(problem.term_weights, k)
            kind = kind_of(cost)
            if kind == NORM:
                labels = groups[k]
                assert labels is not None
                number = int(labels.max()) + 1
                pick = sp.eye_array(number, total, k=used, format="csr")
                count = np.bincount(labels)
                if isinstance(cost, GroupSparseCost):
                    outer = np.bincount(labels, weights=w / cost.inner_weights) / count
                    q[used : used + number] = outer * np.broadcast_to(cost.beta, (number,))
                    root = np.sqrt(cost.inner_weights)
                    scaled = sp.csr_array(sp.diags_array(root) @ k_wide)
                    # the epigraph variable of each group, then its members
                    order = np.argsort(np.concatenate([np.arange(number), labels]), kind="stable")
                    cones.append(sp.csr_array(sp.vstack([-pick, -scaled]))[order])
                    cones_to.append(np.concatenate([np.zeros(number), -root * c])[order])
                    self.cone_sizes += [1 + int(size) for size in count]
                else:
                    assert isinstance(cost, SparseCost)
                    q[used : used + number] = w * cost.beta
                    below += [k_wide - pick, -k_wide - pick]
                    below_to += [c, -c]
                used += number
            elif kind == QUADRATIC:
                assert isinstance(cost, ElasticNetCost)
                curvature = sp.diags_array(w * np.broadcast_to(cost.gamma, w.shape))
                p = sp.csc_array(p + k_wide.T @ curvature @ k_wide)
                q = q - k_wide.T @ (curvature @ c)
            else:
                assert isinstance(cost, SparseCost)
                lower, upper = (np.broadcast_to(b, w.shape) for b in (cost.lower, cost.upper))
                fixed = lower == upper
                above, under = np.isfinite(upper) & ~fixed, np.isfinite(lower) & ~fixed
                equal.append(k_wide[fixed])
                equal_to.append((c + upper)[fixed])
                below += [k_wide[above], -k_wide[under]]
                below_to += [(c + upper)[above], -(c + lower)[under]]
        self.p, self.q = sp.csc_array(p), q
        self.equalities = sum(part.size for part in equal_to)
        self.inequalities = sum(part.size for part in below_to)
        self.a = sp.csc_array(sp.vstack([*equal, *below, *cones]))
        self.b = np.concatenate([*equal_to, *below_to, *cones_to])


def can_state(problem: SumProblem) -> bool:
    """Whether every operator is a matrix, and every cost a norm, a quadratic or bounds."""
    if any(isinstance(o, LinearOperator) for o in problem.operators):
        return False
    return all(
        kind_of(cost) in (NORM, QUADRATIC) or (isinstance(cost, SparseCost) and not cost.beta.any())
        for cost in problem.costs
    )


def solve_conic(program: ConicProgram, budget: float) -> tuple[FloatArray, bool, str, int]:
    """Run clarabel's primal-dual interior-point method: u, whether solved, the status, iterations."""
    import clarabel

    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.static_regularization_constant = REGULARIZATION
    settings.time_limit = max(budget, 0.1)
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = GAP
    cones = [clarabel.ZeroConeT(program.equalities)] if program.equalities else []
    cones += [clarabel.NonnegativeConeT(program.inequalities)] if program.inequalities else []
    cones += [clarabel.SecondOrderConeT(size) for size in program.cone_sizes]
    # its tolerances are absolute, too: weights of the order of a cell's area would pass them at once
    unit = float(np.abs(program.q).max(initial=0.0)) or 1.0
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(sp.triu(program.p)) / unit,
        program.q / unit,
        sp.csc_matrix(program.a),
        program.b,
        cones,
        settings,
    )
    result = solver.solve()
    status = str(result.status)
    return np.array(result.x)[: program.unknowns], "Solved" in status, status.lower(), int(result.iterations)


def _groups(cost: Any, size: int) -> Any:
    """The group of each row of a norm, else None."""
    if kind_of(cost) != NORM:
        return None
    return cost.groups.labels if isinstance(cost, GroupSparseCost) else np.arange(size)


def _wide(matrix: Any, total: int) -> sp.csr_array:
    """The matrix with zero columns appended."""
    a = sp.csr_array(matrix)
    return sp.csr_array((a.data, a.indices, a.indptr), shape=(a.shape[0], total))
