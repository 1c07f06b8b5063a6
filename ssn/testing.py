"""Assertions for the test suites of solvers that depend on ssn: the evidence of `ssn.evidence`, pass or fail.

Each raises AssertionError with what was measured: outcome, steps and contractions included. Evidence that is
"undecided" is not a pass. Unusable input raises `InputError`, as everywhere.

    def test_contact():
        problem = build(n=50)
        assert_newton_differentiable(problem)
        solution = assert_superlinear(problem)
        assert_matches_reference(problem, solution=solution)
        assert_mesh_independent(build, [50, 100, 200])
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from .errors import InputError
from .evidence import Check, KnownValue, MeshStudy, check_derivative, mesh_study, rate
from .evidence.agreement import checked_tolerance, decide
from .evidence.known import known_values
from .evidence.mesh_study import MeshRow
from .evidence.method_result import MethodResult, ours
from .evidence.own_methods import Methods, named, run_method
from .evidence.rate import RateVerdict
from .evidence.references import references
from .solution import Solution
from .solve import solve
from .validate import scalar

__all__ = [
    "assert_matches_reference",
    "assert_mesh_independent",
    "assert_newton_differentiable",
    "assert_superlinear",
]


def assert_newton_differentiable(problem: Any, at: Any = None, *, seed: int = 0) -> tuple[Check, ...]:
    """Assert that derivatives, adjoints, proximal map and active sets are what the problem says they are.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, or object with the Equation protocol
    at : array, optional
        Where; a control for control problems. The problem's own start by default. Points near it and on the nearest
        kink are looked at, too.
    seed : int
        Of all random directions.

    Returns
    -------
    tuple of Check
        What was checked: see `ssn.evidence.check_derivative`.

    Raises
    ------
    AssertionError
        Naming each check that fails, with what was measured.
    """
    __tracebackhide__ = True
    checks = check_derivative(problem, at, seed=seed)
    failed = [check for check in checks if not check.holds]
    if failed or not checks:
        lines = [f"{_name(problem)}: {len(failed)} of {len(checks)} derivative checks fail"]
        lines += [f"  fails  {check.name}: {check.detail}" for check in failed]
        lines += [f"  holds  {check.name}: {check.detail}" for check in checks if check.holds]
        raise AssertionError("\n".join(lines))
    return checks


def assert_superlinear(
    problem: Any,
    solution: Solution | None = None,
    *,
    least_order: float | None = None,
    start: Any = None,
    tolerance: float = 1e-9,
    seed: int = 0,
) -> Solution:
    """Assert that the problem is solved and that full Newton steps near the solution converge superlinearly.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, or object with the Equation protocol
    solution : Solution, optional
        Of `problem`; solved for by default.
    least_order : float, optional
        The observed order may not be lower; above 1. Exact convergence after finitely many steps passes any order.
    start : array, optional
        For the solve; only without `solution`.
    tolerance : float
        For the solve.
    seed : int
        Of the perturbations of the solution.

    Returns
    -------
    Solution

    Raises
    ------
    AssertionError
        With outcome, contractions and history.
    """
    __tracebackhide__ = True
    if least_order is not None and not scalar(least_order, "least_order") > 1.0:
        raise InputError(f"least_order must be above 1, got {least_order}")
    if solution is not None and start is not None:
        raise InputError("start has no effect where the solution is given")
    if solution is None:
        solution = solve(problem, start, tolerance=tolerance)
    if not solution.converged:
        raise AssertionError(f"{_name(problem)}: not solved\n{_story(solution)}")
    speed = rate(problem, solution, seed=seed)
    complaint = ""
    if not speed.holds:
        complaint = f"the rate is {speed.verdict!r}, not superlinear"
    elif least_order is not None and speed.order is not None and speed.order < least_order:
        complaint = f"the observed order {speed.order:.2f} is below {least_order:g}"
    if complaint:
        raise AssertionError(f"{_name(problem)}: {complaint}\n{_rate_table(speed)}\n{_story(solution)}")
    return solution


def assert_matches_reference(
    problem: Any,
    *,
    solution: Solution | None = None,
    start: Any = None,
    agreement_tolerance: float = 1e-6,
    methods: Methods | None = None,
    known: Callable[[Any, Solution], Any] | None = None,
    budget: float = 20.0,
    tolerance: float = 1e-9,
) -> Solution:
    """Assert that independent methods find the same solution, and that values known from elsewhere agree.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, or object with the Equation protocol
    solution : Solution, optional
        To be judged instead of solving.
    start : array, optional
        For the solve; only without `solution`.
    agreement_tolerance : float
        Relative distance within which methods agree; at most 1e-3.
    methods : mapping of str to callable, or iterable of callables, optional
        Methods of your own beside the built-in reference: see `ssn.evidence.compare`. One that raises fails.
    known : callable, optional
        ``known(problem, solution)`` of a problem file.
    budget : float
        Seconds for each method. A reference that has not come near enough within it makes the agreement undecided.
    tolerance : float
        For the solve.

    Returns
    -------
    Solution

    Raises
    ------
    AssertionError
        Unless agreement "holds" and all known values do: with a table of the methods and the history.

    Notes
    -----
    The built-in reference shares the gradient and the proximal map with the kernel: agreement says nothing about
    errors in those. `assert_newton_differentiable` does.
    """
    __tracebackhide__ = True
    agreement_tolerance = checked_tolerance(agreement_tolerance)
    if solution is not None and start is not None:
        raise InputError("start has no effect where the solution is given")
    if solution is None:
        solution = solve(problem, start, tolerance=tolerance)
    if not solution.converged:
        raise AssertionError(f"{_name(problem)}: not solved\n{_story(solution)}")
    others = references(problem, solution, budget=budget, agreement_tolerance=agreement_tolerance)
    for name, method in named(methods).items():
        others.append(run_method(problem, solution, name, method, budget=budget))
    verdict, note = decide(problem, solution, others, agreement_tolerance)
    complaints = [] if verdict == "holds" else [f"agreement {verdict}: {note}"]
    complaints += [f"method {m.name} raised {m.note}" for m in others if m.x is None]
    values, checks = known_values(known, problem, solution)
    complaints += [f"{check.name}: {check.detail}" for check in checks if not check.holds]
    if complaints:
        text = "\n".join(complaints)
        table = _method_table([ours(problem, solution, float("nan")), *others])
        raise AssertionError(f"{_name(problem)}: {text}\n{table}\n{_known_lines(values)}{_story(solution)}")
    return solution


def assert_mesh_independent(
    build: Callable[..., Any],
    sizes: Sequence[int],
    *,
    parameters: Mapping[str, Any] | None = None,
    known: Callable[[Any, Solution], Any] | None = None,
    tolerance: float = 1e-9,
) -> MeshStudy:
    """Assert that every mesh is solved and that the number of steps does not grow with the mesh.

    Parameters
    ----------
    build : callable
        ``build(n=..., **parameters)`` of a problem file.
    sizes : sequence of int
        At least two values of n, rising.
    parameters : mapping, optional
        The other parameters of `build`.
    known : callable, optional
        ``known(problem, solution)`` of a problem file, called on every mesh.
    tolerance : float
        For the solves.

    Returns
    -------
    MeshStudy

    Raises
    ------
    AssertionError
        With one line a mesh.
    """
    __tracebackhide__ = True
    if len(sizes) < 2:
        raise InputError(f"sizes must hold at least two meshes, got {list(sizes)}")
    study = mesh_study(build, sizes, parameters=parameters, known=known, tolerance=tolerance)
    if study.mesh_independent is not True or not study.holds:
        text = "\n".join(check.detail for check in study.checks() if not check.holds)
        name = getattr(build, "__qualname__", type(build).__name__)
        raise AssertionError(f"{name}: {text or study.note}\n{_mesh_table(study.rows)}")
    return study


def _name(problem: Any) -> str:
    return getattr(problem, "__qualname__", type(problem).__name__)


def _story(solution: Solution) -> str:
    """Outcome, history and contractions of the actual run."""
    outcome = solution.outcome
    contractions = ", ".join(f"{q:.1e}" for q in solution.contractions) or "none: no step was taken"
    return (
        f"outcome: {outcome.value} after {len(solution.steps)} steps, accuracy {solution.accuracy:.1e} "
        f"(tolerance {solution.tolerance:.1e}). {solution.message or outcome.explanation} {outcome.advice}\n"
        f"{solution.history()}\ncontractions of the run: {contractions}"
    )


def _rate_table(speed: RateVerdict) -> str:
    """The contractions measured around the solution."""
    lines = ["one full Newton step from perturbations of the solution:", "     delta  worst contraction"]
    lines += [f"{delta:10.0e}  {q:.1e}" for delta, q in speed.contractions]
    return "\n".join([*lines, f"({speed.note})"])


def _method_table(methods: Sequence[MethodResult]) -> str:
    lines = [f"{'method':<26} {'outcome':<16} {'objective':>16} {'accuracy':>9} {'steps':>6} {'distance':>9}"]
    for m in methods:
        steps = "-" if m.steps is None else str(m.steps)
        bound = "" if m.bound is None else f"  proven to {m.bound:.1e}"
        lines.append(
            f"{m.name:<26} {m.outcome:<16} {m.objective:16.9e} {m.accuracy:9.1e} {steps:>6} "
            f"{m.distance:9.1e}{bound}"
        )
    return "\n".join(lines)


def _known_lines(values: Sequence[KnownValue]) -> str:
    return "".join(
        f"{'holds' if v.holds else 'fails'}  {v.what}: expected {v.expected}, computed {v.computed}, "
        f"tolerance {v.tolerance} ({v.source})\n"
        for v in values
    )


def _mesh_table(rows: Sequence[MeshRow]) -> str:
    lines = [f"{'n':>6} {'unknowns':>9} {'steps':>6} {'state solves':>12} {'accuracy':>9}  outcome"]
    lines += [
        f"{r.n:>6} {r.unknowns:>9} {r.steps:>6} {r.state_solves:>12} {r.accuracy:9.1e}  {r.outcome}"
        for r in rows
    ]
    return "\n".join(lines)
