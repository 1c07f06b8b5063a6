"""Problems as sparse quadratic programs, with the state as a variable, and clarabel's solution of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from ..complementarity import ComplementarityProblem
from ..composite import CompositeProblem
from ..control import ControlProblem
from ..costs import SparseCost
from ..protocols import FloatArray
from ..smooth import LeastSquares, Quadratic
from ..states import SteadyState

# variables from which on an interior-point factorisation is too much for a comparison in passing
LARGEST = 20_000
GAP = 1e-11


@dataclass(frozen=True)
class LibraryResult:
    """A point with what the library says of it."""

    x: FloatArray
    converged: bool
    outcome: str
    iterations: int | None


@dataclass(frozen=True)
class QuadraticProgram:
    """1/2 v'Pv + q'v with rows A v = b (the first `equalities`) and A v <= b; u are the first n entries of v."""

    p: Any
    q: FloatArray
    a: Any
    b: FloatArray
    equalities: int
    unknowns: int


def quadratic_program(problem: Any) -> QuadraticProgram | None:
    """The problem as a sparse quadratic program with the state as a variable, or None where it has no matrices."""
    n = problem.unknowns
    cost: SparseCost = problem.cost
    weights = np.asarray(getattr(problem, "weights", np.ones(n)))
    blocks = _smooth_blocks(problem)
    if blocks is None:
        return None
    hessian, linear, rows, right = blocks
    size = hessian.shape[0]
    price = np.broadcast_to(cost.beta, (n,)) * weights
    lower, upper = (np.broadcast_to(b, (n,)) for b in (cost.lower, cost.upper))
    extra = n if price.any() else 0
    if size + extra > LARGEST:
        return None
    total = size + extra
    p = (
        sp.block_diag([hessian, sp.csc_array((extra, extra))], format="csc")
        if extra
        else sp.csc_array(hessian)
    )
    q = np.concatenate([linear, price]) if extra else linear
    pick = sp.eye_array(n, total, format="csr")
    equal = sp.hstack([rows, sp.csr_array((rows.shape[0], extra))]) if extra else rows
    above, below = np.isfinite(upper), np.isfinite(lower)
    unequal = [pick[above], -pick[below]]
    limits = [upper[above], -lower[below]]
    if extra:
        slack = sp.eye_array(n, total, k=size, format="csr")
        unequal += [pick - slack, -pick - slack]
        limits += [np.zeros(n), np.zeros(n)]
    if getattr(problem, "state_bounded", False):
        state = sp.eye_array(problem.state.size, total, k=n, format="csr")
        for bound, sign in ((problem.state_upper, 1.0), (problem.state_lower, -1.0)):
            if bound is not None:
                full = np.broadcast_to(bound, (problem.state.size,))
                finite = np.isfinite(full)
                unequal.append(sign * state[finite])
                limits.append(sign * full[finite])
    a = sp.csc_array(sp.vstack([equal, *unequal]))
    return QuadraticProgram(p, q, a, np.concatenate([right, *limits]), rows.shape[0], n)


def _smooth_blocks(problem: Any) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    """Hessian, linear part, equality rows and right side of the smooth part, in v = (u, auxiliary variables)."""
    n = problem.unknowns
    none = sp.csr_array((0, n))
    if isinstance(problem, ComplementarityProblem):
        matrix = problem.derivative(problem.start())
        if isinstance(matrix, LinearOperator):
            return None
        return sp.csc_array(matrix), problem.value(np.zeros(n)), none, np.zeros(0)
    if isinstance(problem, CompositeProblem):
        return part_blocks(problem.part, n)
    return control_blocks(problem)


def part_blocks(part: Any, n: int) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    """Those of a quadratic or least-squares part with explicit matrices, else None."""
    if isinstance(part, Quadratic) and not isinstance(part.H, LinearOperator):
        return sp.csc_array(part.H), -part.b, sp.csr_array((0, n)), np.zeros(0)
    if isinstance(part, LeastSquares) and not isinstance(part.A, LinearOperator):
        m = part.b.size
        hessian = sp.block_diag([sp.csc_array((n, n)), sp.diags_array(part.weights)], format="csc")
        rows = sp.hstack([sp.csr_array(part.A), -sp.eye_array(m)])  # r = A u - b
        return hessian, np.zeros(n + m), rows, part.b
    return None


def control_blocks(problem: ControlProblem) -> tuple[Any, FloatArray, Any, FloatArray] | None:
    """Those of a control problem with a steady state and explicit matrices, else None."""
    operators = (problem.control_operator, problem.observation)
    if not isinstance(problem.state, SteadyState) or any(isinstance(o, LinearOperator) for o in operators):
        return None
    size = problem.state.size
    observe = sp.eye_array(size) if problem.observation is None else sp.csr_array(problem.observation)
    product = problem.observations
    mass = product.matrix if product.matrix is not None else sp.diags_array(product.vector)
    tracking = observe.T @ mass @ observe
    hessian = sp.block_diag([sp.diags_array(problem.alpha * problem.weights), tracking], format="csc")
    linear = np.concatenate([np.zeros(problem.unknowns), -(observe.T @ product.apply(problem.target))])
    rows = sp.hstack([-sp.csr_array(problem.control_operator), problem.state.matrix])
    right = np.zeros(size) if problem.source is None else problem.source
    return hessian, linear, rows, right


def clarabel_solution(program: QuadraticProgram, budget: float) -> tuple[FloatArray, FloatArray, str]:
    """Variables, multipliers of the rows, and clarabel's status with the number of iterations."""
    import clarabel

    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.time_limit = max(budget, 0.1)
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = GAP
    rest = program.b.size - program.equalities
    cones = [clarabel.ZeroConeT(program.equalities)] if program.equalities else []
    cones += [clarabel.NonnegativeConeT(rest)] if rest else []
    if not cones:  # clarabel wants a row: one that says 0 <= 1
        program = QuadraticProgram(
            program.p, program.q, sp.csc_array((1, program.q.size)), np.ones(1), 0, program.unknowns
        )
        cones = [clarabel.NonnegativeConeT(1)]
    solver = clarabel.DefaultSolver(
        sp.csc_matrix(sp.triu(program.p)), program.q, sp.csc_matrix(program.a), program.b, cones, settings
    )
    result = solver.solve()
    status = f"{str(result.status).lower()} in {int(result.iterations)}"
    return np.array(result.x), np.array(result.z), status
