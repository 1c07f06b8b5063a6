"""What "auto" decides: from a problem statement to an equation, a linear solver and a globalisation, and why."""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .augmented_lagrangian import MultiplierPath
from .complementarity import ComplementarityProblem
from .composite import CompositeProblem, LeastSquaresMap
from .control import ControlProblem
from .costs import GroupSparseCost
from .costs.derivative import LARGEST_BLOCK
from .easier_weight import TINY, Detour
from .envelope_start import EnvelopeStart, control_equation, has_relaxation
from .equations.augmented import AugmentedEquation
from .equations.complementarity import FischerBurmeisterEquation, MidEquation, inside_bounds
from .equations.coupled import CoupledEquation
from .equations.dual import DualEquation
from .equations.factorised_pair import FactorisedPairEquation
from .equations.full_space import FullSpaceEquation, has_dual
from .equations.general import GeneralEquation
from .equations.natural import NaturalEquation
from .equations.primal_dual import PrimalDualEquation
from .errors import InputError, StateSolveError
from .gap_path import GapPath
from .globalization import CATALOGUE, DualSearch, EnvelopeSearch, ResidualSearch
from .inner import relative
from .linear import CATALOGUE as LINEAR
from .linear import (
    AugmentedSolver,
    CoupledSolver,
    FullSpaceSolver,
    GeneralSolver,
    PrimalDualSolver,
    ReducedSolver,
    SchurSolver,
    SubspaceSolver,
)
from .linear.augmented import explicit_complement
from .linear.coupled import refusal
from .linear.primal_dual import WIDE_ROW
from .linear.schur import refusal as schur_refusal
from .moreau_yosida import PenaltyPath, first_penalty
from .nonlinear_control import NonlinearControlProblem
from .norm_terms import NORM, OTHER, QUADRATIC, NormRows
from .primal_dual_path import PrimalDualPath, first_gammas
from .protocols import FloatArray, Globalization, LinearSolver
from .proximal_newton import ControlEquation, ObjectiveSearch, ProximalNewtonSolver
from .proximal_point import ProximalPointPath
from .smooth import LeastSquares
from .smoothing_path import SmoothingPath
from .states import SteadyState
from .sum_problem import SumProblem
from .traced import TracedEquation
from .validate import float_array

# full steps tried first on a general equation: piecewise smooth ones settle within them or cycle
PLAIN_STEPS = 12

# steps of a residual search at a point of the penalty path before a dual search takes over
QUICK = 6

LOCAL_CHOICES = {
    "equation": "natural residual",
    "globalization": "envelope: the forward-backward envelope falls at every step",
}
# rows with more than WIDE_ROW entries that may join a Newton matrix by a low-rank update
MOST_WIDE = 20

LINEAR_CHOICES = ("auto", *LINEAR)

# states from which on cycles on the coupled system beat solves with a factorised state operator
COUPLED_FROM = 30_000


@dataclass
class Plan:
    """A problem made ready for the loop: equation, linear solver, globalisation, start, and why."""

    problem: Any
    equation: Any
    solver: LinearSolver
    globalization: Globalization
    start: FloatArray
    choices: dict[str, str]
    path: GapPath | ProximalPointPath | None = None
    polish: NaturalEquation | None = None
    smoothing: SmoothingPath | None = None
    penalty: PenaltyPath | None = None
    plain_steps: int = 0
    multipliers: MultiplierPath | None = None
    relaxation: EnvelopeStart | None = None
    primal_dual: PrimalDualPath | None = None
    unpack: Callable[[FloatArray], Any] | None = None
    otherwise: Callable[[FloatArray], Plan] | None = None
    detour: Detour | None = None


def prepare(
    problem: Any, start: Any = None, *, globalization: str | Globalization = "auto", linear: str = "auto"
) -> Plan:
    """Choose equation, linear solver and globalisation for a problem, and check that the choices fit."""
    if linear not in LINEAR_CHOICES:
        raise InputError(f"linear must be one of {', '.join(LINEAR_CHOICES)}, got {linear!r}")
    if isinstance(globalization, str) and globalization not in ("auto", "smoothing", *CATALOGUE):
        names = ", ".join(map(repr, CATALOGUE))
        raise InputError(f"globalization must be 'auto', {names} or 'smoothing', got {globalization!r}")
    if isinstance(problem, ControlProblem):
        plan = _prepare_control(problem, start, globalization, linear)
    elif isinstance(problem, NonlinearControlProblem):
        plan = _prepare_nonlinear(problem, start)
    elif isinstance(problem, CompositeProblem):
        plan = _prepare_composite(problem, start, globalization)
    elif isinstance(problem, SumProblem):
        plan = _prepare_sum(problem, start)
    elif isinstance(problem, ComplementarityProblem):
        plan = _prepare_complementarity(problem, start)
    elif hasattr(problem, "residual") and hasattr(problem, "linearize"):
        plan = _prepare_equation(problem, start)
    elif callable(problem):
        if start is None:
            raise InputError("give start: a function does not tell its number of unknowns")
        traced = TracedEquation(problem, start)
        plan = _prepare_equation(traced, None)
        plan.unpack = traced.unpack
    else:
        raise InputError(
            f"cannot solve a {type(problem).__name__}: give a ControlProblem, NonlinearControlProblem, "
            "CompositeProblem, ComplementarityProblem, "
            "a function of NumPy arrays, or an object with residual(x) and linearize(x)"
        )
    if linear not in ("auto", plan.solver.name):
        raise InputError(f"linear={linear!r} does not fit this problem; it is solved by {plan.solver.name!r}")
    if isinstance(plan.equation, ControlEquation) and globalization != "auto":
        raise InputError(
            f"globalization={globalization!r} does not fit a nonlinear state; use 'auto': a search on the objective"
        )
    several = plan.multipliers is not None or plan.primal_dual is not None
    if several and globalization not in ("auto", "dual"):
        raise InputError(f"globalization={globalization!r} does not fit several terms; use 'auto'")
    if isinstance(globalization, str) and globalization == "smoothing":
        if not getattr(plan.equation, "can_be_smoothed", hasattr(plan.equation, "smoothed")):
            raise InputError(
                "globalization='smoothing' needs complementarity, a composite problem without a dual, "
                "or a traced function"
            )
        plan.smoothing = SmoothingPath()
        plan.choices["globalization"] = "smoothing: asked for"
    elif globalization != "auto":
        plan.smoothing, plan.plain_steps, plan.relaxation = None, 0, None
        if plan.penalty is not None:
            plan.penalty = replace(plan.penalty, quick_steps=0)
        plan.globalization = _forced(globalization, plan.equation)
        plan.choices["globalization"] = f"{plan.globalization.name}: asked for"
    return plan


def _forced(choice: str | Globalization, equation: Any) -> Globalization:
    made: Any = CATALOGUE[choice]() if isinstance(choice, str) else choice
    if not hasattr(made, "advance"):
        raise InputError(f"globalization must have an advance method, got {type(made).__name__}")
    dual = (
        isinstance(equation, DualEquation)
        or (isinstance(equation, FullSpaceEquation) and has_dual(equation.problem))
        or (isinstance(equation, CoupledEquation) and equation.has_dual)
    )
    if isinstance(made, DualSearch) and not dual:
        raise InputError(
            "globalization='dual' needs a control problem or least squares with a convex cost; with state bounds, "
            "the whole state observed and a lumped mass"
        )
    if isinstance(made, EnvelopeSearch) and getattr(equation, "potential", None) is None:
        raise InputError(
            "globalization='envelope' needs an objective: a composite problem or symmetric complementarity"
        )
    return made.fresh() if isinstance(made, ResidualSearch) else made


def _start_array(start: Any, size: int, name: str = "start") -> FloatArray | None:
    return None if start is None else float_array(start, name, shape=(size,))


def _prepare_control(problem: ControlProblem, start: Any, globalization: Any, linear: str) -> Plan:
    pair = _start_pair(start, problem.state.size)
    if pair is not None and (problem.alpha == 0.0 or problem.state_bounded):
        raise InputError("start: a pair (state, adjoint) needs control_weight > 0 and a state without bounds")
    if pair is not None and not problem.convex:
        raise InputError("start: a pair (state, adjoint) needs a convex cost; give a control")
    control = _start_array(start, problem.unknowns) if pair is None else None
    if not problem.convex:
        return _prepare_nonconvex_control(problem, control)
    if problem.state_bounded:
        return _prepare_state_bounds(problem, control)
    searched = globalization == "auto" or isinstance(globalization, DualSearch) or globalization == "dual"
    if linear == "coupled" or (linear == "auto" and searched and problem.state.size >= COUPLED_FROM):
        reason = (
            refusal(problem) if isinstance(problem.state, SteadyState) else "the state is not a SteadyState"
        )
        if reason is None and (problem.observation is None or linear == "coupled"):
            return _prepare_coupled(problem, control, pair, linear)
        if linear == "coupled":
            raise InputError(f"linear='coupled' does not fit this problem: {reason}")
    if linear == "schur":
        reason = schur_refusal(problem)
        if reason is not None:
            raise InputError(f"linear='schur' does not fit this problem: {reason}")
        return _prepare_schur(problem, control, pair)
    path = _path_without_quadratic(problem)
    alpha = problem.alpha if problem.alpha > 0 else 1.0
    equation = DualEquation(problem, problem.reduced_target(), alpha, problem.cost)
    choices = {
        "equation": "dual equation: quadratic tracking, convex cost",
        "globalization": "dual: the dual function is convex, exact search costs no solve",
        "linear": "subspace: one factorisation of the state operator, basis kept between steps",
    }
    if path is not None:
        choices["path"] = (
            "Moreau-Yosida, ended on the active sets of the problem itself by the duality gap: control_weight is 0"
            if isinstance(path, GapPath)
            else "proximal point: control_weight is 0, and no duality gap is known"
        )
        x = np.zeros(problem.unknowns) if control is None else control
    elif pair is not None:
        x = equation.start_from(problem.observe(pair[0] - problem.offset()))
    else:
        x = equation.start(control)
    plan = Plan(problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, path)
    if path is None:
        plan.detour = _dual_detour(plan)
    return plan


def _dual_detour(plan: Plan) -> Detour:
    """The dual equation with another weight, with the basis of the linear solver."""
    equation: DualEquation = plan.equation

    def make(factor: float) -> tuple[DualEquation, SubspaceSolver]:
        easier = DualEquation(equation.tracking, equation.target, factor * equation.alpha, equation.cost)
        solver = SubspaceSolver(easier)
        solver.carry_over(plan.solver)  # type: ignore[arg-type]
        return easier, solver

    # the start knows S* q for one q: a lower bound of ||S||
    tracking = equation.tracking
    q, lifted = plan.start[: equation.size], plan.start[equation.size :]
    size = relative(tracking.controls.norm(lifted), tracking.observations.norm(q))
    return Detour(make, at_once=equation.alpha < TINY * size**2)


def _start_pair(start: Any, size: int) -> tuple[FloatArray, FloatArray] | None:
    """State and adjoint where the start is a pair of arrays, else None."""
    if not isinstance(start, tuple):
        return None
    if len(start) != 2:
        raise InputError(f"start: a tuple is a pair (state, adjoint), got {len(start)} entries")
    y, p = (float_array(part, f"start[{k}]", shape=(size,)) for k, part in enumerate(start))
    return y, p


def _prepare_coupled(
    problem: ControlProblem,
    control: FloatArray | None,
    pair: tuple[FloatArray, FloatArray] | None,
    linear: str,
) -> Plan:
    equation = CoupledEquation(problem)
    kind = equation.operators.hierarchy.name
    choices = {
        "equation": "state and adjoint, control eliminated",
        "globalization": "dual: the dual function is convex, exact search costs products only"
        if equation.has_dual
        else "residual search: the state cannot be eliminated",
        "linear": f"coupled: {kind} on the pair of state and adjoint, "
        + ("asked for" if linear != "auto" else f"{problem.state.size} states are too many to factorise"),
    }
    search: Globalization = DualSearch() if equation.has_dual else ResidualSearch().fresh()
    plan = Plan(
        problem, equation, CoupledSolver(equation), search, equation.start(control, pair), choices
    )  # fmt: skip
    if equation.has_dual:
        plan.detour = Detour(lambda factor: _coupled_with_weight(problem, factor))
    if linear == "auto":
        plan.otherwise = lambda best: _prepare_control(problem, best, "auto", "subspace")
    return plan


def _coupled_with_weight(problem: ControlProblem, factor: float) -> tuple[CoupledEquation, CoupledSolver]:
    easier = copy.copy(problem)
    easier.alpha = factor * problem.alpha
    equation = CoupledEquation(easier)
    return equation, CoupledSolver(equation)


def _prepare_nonconvex_control(problem: ControlProblem, control: FloatArray | None) -> Plan:
    if problem.state_bounded:
        raise InputError(f"{type(problem.cost).__name__} is not convex: state bounds need a convex cost")
    equation = control_equation(problem)
    x = np.zeros(problem.unknowns) if control is None else control
    plan = Plan(problem, equation, ReducedSolver(equation), EnvelopeSearch(), x, dict(LOCAL_CHOICES))
    return _relaxed_first(plan, control)


def _relaxed_first(plan: Plan, start: FloatArray | None) -> Plan:
    """The plan with the convex envelope before it, where there is one and no start was given."""
    if start is None and has_relaxation(plan.problem):
        plan.relaxation = EnvelopeStart()
        plan.choices["path"] = "convex envelope: starts and a lower bound, then Newton steps on the support"
    return plan


def _path_without_quadratic(problem: ControlProblem) -> GapPath | ProximalPointPath | None:
    if problem.alpha > 0:
        return None
    return GapPath() if problem.has_gap else ProximalPointPath()


def _prepare_schur(
    problem: ControlProblem, control: FloatArray | None, pair: tuple[FloatArray, FloatArray] | None
) -> Plan:
    equation = FactorisedPairEquation(problem)
    factors = "cycles of multigrid" if equation.operators.multigrid else "one factorisation an active set"
    choices = {
        "equation": "state and adjoint, control eliminated",
        "globalization": "dual: the dual function is convex, exact search costs products only"
        if equation.has_dual
        else "residual search: the state cannot be eliminated",
        "linear": f"schur: Krylov iteration, Schur complement by matching, {factors}; asked for",
    }
    search: Globalization = DualSearch() if equation.has_dual else ResidualSearch().fresh()
    return Plan(problem, equation, SchurSolver(equation), search, equation.start(control, pair), choices)


def _prepare_state_bounds(
    problem: ControlProblem | NonlinearControlProblem, control: FloatArray | None
) -> Plan:
    if getattr(problem.state, "matrix", None) is None and not hasattr(problem.state, "derivative_matrix"):
        raise InputError(
            f"state bounds need the explicit matrix of the state equation, which {type(problem.state).__name__} hides"
        )
    for name, matrix in (
        ("control_operator", problem.control_operator),
        ("observation", problem.observation),
    ):
        if isinstance(matrix, LinearOperator):
            raise InputError(f"state bounds need {name} as a matrix, got a LinearOperator")
    if problem.cost.prox_derivative(np.zeros(problem.unknowns), 1.0 / problem.alpha).diagonal is None:
        raise InputError(f"state bounds need a separable cost; {type(problem.cost).__name__} is not")
    gamma = problem.state_penalty if problem.state_penalty is not None else first_penalty(problem)
    equation = FullSpaceEquation(problem, gamma)
    first = "proximal Newton" if equation.nonlinear else "dual search"
    choices = {
        "equation": "state and adjoint, control eliminated, state bounds penalised",
        "globalization": "residual search, and dual search behind it: the dual function of each point is convex"
        if has_dual(problem)
        else "residual search at each point of the path, which goes back where it fails",
        "linear": "full space: one sparse factorisation a step, pattern kept",
        "path": f"Moreau-Yosida: the penalty rises from 0 ({first}) by a model of the value function",
    }
    search = ResidualSearch().fresh()
    path = PenaltyPath(control, quick_steps=QUICK if has_dual(problem) else 0)
    try:
        x = equation.start(control)
    except StateSolveError:
        x = np.zeros(2 * equation.size)  # the path says why it cannot begin
    return Plan(problem, equation, FullSpaceSolver(equation), search, x, choices, penalty=path)


def _prepare_nonlinear(problem: NonlinearControlProblem, start: Any) -> Plan:
    control = _start_array(start, problem.unknowns)
    if problem.state_bounded:
        return _prepare_state_bounds(problem, control)
    equation = ControlEquation(problem)
    solver = ProximalNewtonSolver(equation)
    choices = {
        "equation": "u = prox(B* p / alpha) with the state and adjoint of u",
        "globalization": "objective: every step lowers it; steps to where there is no state are shortened",
        "linear": "proximal Newton: Gauss-Newton models by their dual equation, then the full Hessian by GMRES",
    }
    x = problem.cost.prox(np.zeros(problem.unknowns) if control is None else control, 1e-300)
    search = ObjectiveSearch(lambda at: solver.gauss_newton(at, 1e-6))
    return Plan(problem, equation, solver, search, x, choices)


def _prepare_composite(problem: CompositeProblem, start: Any, globalization: Any) -> Plan:
    u = _start_array(start, problem.unknowns)
    wants_dual = globalization in ("auto", "dual") or isinstance(globalization, DualSearch)
    if isinstance(problem.part, LeastSquares) and problem.cost.convex and wants_dual:
        tracking = LeastSquaresMap(problem.part, problem.weights, problem.work)
        equation: Any = DualEquation(tracking, problem.part.b, 1.0, problem.cost)
        choices = {
            "equation": "dual equation: least squares, convex cost",
            "globalization": "dual: the dual function is convex, exact search costs no product",
            "path": "proximal point: no strong convexity is assumed",
        }
        x = np.zeros(problem.unknowns) if u is None else u
        return Plan(
            problem, equation, SubspaceSolver(equation), DualSearch(), x, choices, ProximalPointPath(),
            _natural_equation(problem),
        )  # fmt: skip
    equation = _natural_equation(problem)
    x = problem.cost.prox(np.zeros(problem.unknowns) if u is None else u, 1e-300)
    plan = Plan(
        problem,
        equation,
        ReducedSolver(equation),
        EnvelopeSearch(),
        x if u is None else u,
        dict(LOCAL_CHOICES),
    )
    return plan if problem.cost.convex else _relaxed_first(plan, u)


def _natural_equation(problem: CompositeProblem) -> NaturalEquation:
    return NaturalEquation(
        problem,
        problem.cost,
        problem.natural_step(),
        problem.weights,
        potential=problem.potential,
        work=problem.work,
    )


# distances inside the bounds tried where F or F' is not defined at the start
START_DISTANCES = (0.0, 1e-3, 1e-2, 1e-1, 1.0)

COMPLEMENTARITY_EQUATIONS = {
    "mid": (MidEquation, "mid(x - upper, x - lower, F / |diagonal of F'|)"),
    "fischer-burmeister": (
        FischerBurmeisterEquation,
        "Fischer-Burmeister function of x - lower, upper - x and F / |diagonal of F'|",
    ),
}


def _prepare_complementarity(problem: ComplementarityProblem, start: Any) -> Plan:
    given = _start_array(start, problem.unknowns)
    x, moved = _where_defined(problem, problem.start() if given is None else given)
    step = problem.row_step(x)
    kind, name = COMPLEMENTARITY_EQUATIONS[problem.form]
    equation = kind(problem, step, problem.magnitude(x, step))
    equation.start_at(x)
    choices = {
        "equation": name,
        "globalization": "smoothing path, which tries plain steps first and at every point, then residual search: "
        "plain steps may cycle, or take one step an unknown or a layer of the contact set; where the path fails, plain "
        "steps, the path in the other form, and paths from inside the bounds",
    }
    if moved:
        choices["start"] = moved
    search = ResidualSearch().fresh()
    return Plan(problem, equation, ReducedSolver(equation), search, x, choices, smoothing=SmoothingPath())


def _where_defined(problem: ComplementarityProblem, x: FloatArray) -> tuple[FloatArray, str]:
    """Return the start, moved to or inside the bounds where F or its derivative is not defined, and what was done."""
    if problem.affine or _defined(problem, x):
        return x, ""
    for distance in START_DISTANCES:
        inside = inside_bounds(x, problem.lower, problem.upper, distance)
        if _defined(problem, inside):
            where = f"{distance:g} inside the bounds" if distance else "the bounds"
            return inside, f"moved to {where}: F or its derivative is not defined at the start"
    return x, ""


def _defined(problem: ComplementarityProblem, x: FloatArray) -> bool:
    with np.errstate(all="ignore"):
        if not np.isfinite(problem.value(x)).all():
            return False
        derivative = problem.derivative(x)
    if isinstance(derivative, LinearOperator):
        return True
    return bool(np.isfinite(derivative.data if sp.issparse(derivative) else np.asarray(derivative)).all())


def _prepare_sum(problem: SumProblem, start: Any) -> Plan:
    given = _start_array(start, problem.unknowns)
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


def _prepare_equation(problem: Any, start: Any) -> Plan:
    given = start if start is not None else getattr(problem, "start", None)
    if given is None:
        raise InputError("give start: an Equation does not tell its number of unknowns")
    traced = isinstance(problem, TracedEquation)
    x = problem.pack(given) if traced and given is not problem.start else float_array(given, "start", ndim=1)
    equation = GeneralEquation(problem, x.size)
    last = ", then the smoothing path" if hasattr(problem, "smoothed") else ""
    choices = {
        "equation": "derived from the operations of the function" if traced else "given by the caller",
        "globalization": f"a few full steps, then residual search (nonmonotone, least squares behind it){last}",
    }
    search = ResidualSearch().fresh()
    return Plan(problem, equation, GeneralSolver(equation), search, x, choices, plain_steps=PLAIN_STEPS)
