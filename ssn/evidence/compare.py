"""All evidence about one problem: solution, independent methods, rate, derivatives, certificate, known values."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np

from ..nonlinear_control import NonlinearControlProblem
from ..solution import Solution
from ..solve import solve
from ..sum_problem import SumProblem
from ..validate import count, scalar
from . import judge
from .agreement import checked_tolerance, decide, objective_check
from .certificate import certificate
from .check import Check, describe, plain
from .derivative import derivative_checks
from .known import KnownValue, known_values
from .library_methods import library_methods
from .method_result import MethodResult, ours
from .own_methods import FILES_REFERENCE, Method, Methods, named, run_method
from .rate import RateVerdict, rate
from .references import reference_name, references

SLOW = 0.3
# beyond this number of unknowns the rate is measured from two directions of each kind
LARGE = 20_000
# iterations of a reference at the last penalty of hard state bounds, where it does not get anywhere
BRIEF = 500
# and where each of them solves a nonlinear state equation
NONLINEAR = 100


@dataclass(frozen=True)
class Assessment:
    """The evidence about one problem.

    Attributes
    ----------
    name : str
    parameters : dict
    unknowns : int
    solution : Solution
    methods : tuple of MethodResult
        "semismooth Newton" first, then the built-in reference, the problem's own and the user's.
    agreement : {"holds", "fails", "undecided"}
    agreement_tolerance : float
    agreement_note : str
    rate : RateVerdict
    active : dict
        ``sizes`` of the active sets at the solution and ``changes`` in each step.
    known : tuple of KnownValue
    checks : tuple of Check
        Everything that can fail, agreement, rate and known values included.
    """

    name: str
    parameters: dict[str, Any]
    unknowns: int
    solution: Solution
    methods: tuple[MethodResult, ...]
    agreement: str
    agreement_tolerance: float
    agreement_note: str
    rate: RateVerdict
    active: dict[str, Any]
    known: tuple[KnownValue, ...]
    checks: tuple[Check, ...]

    @property
    def holds(self) -> bool:
        """Whether all evidence holds; "undecided" does not."""
        return all(check.holds for check in self.checks)

    def failures(self) -> list[str]:
        """What does not hold, one sentence each, the name of the check first."""
        return [f"{check.name}: {check.detail}" for check in self.checks if not check.holds]

    def check(self, name: str) -> Check:
        """The check of that name."""
        return next(check for check in self.checks if check.name == name)

    def as_dict(self) -> dict[str, Any]:
        """Return the result object of ``compare --json``."""
        return {
            "problem": self.name,
            "parameters": plain(self.parameters),
            "unknowns": self.unknowns,
            "methods": [method.as_dict() for method in self.methods],
            "agreement": self.agreement,
            "agreement_tolerance": self.agreement_tolerance,
            "rate": self.rate.as_dict(),
            "active": plain(self.active),
            "known": [value.as_dict() for value in self.known],
            "checks": [check.as_dict() for check in self.checks],
            "steps": [plain(record.as_dict()) for record in self.solution.steps],
        }


def compare(problem: Any, methods: Methods | None = None, **options: Any) -> Assessment:
    """Compare our solution of a problem with the built-in reference and with methods of your own.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, SumProblem, or object with the Equation protocol
    methods : mapping of str to callable, or iterable of callables, optional
        Each gets the problem, and ``budget`` in seconds if it has such an argument; it returns the point, or an
        object with a member ``x`` (and converged, outcome, iterations, bound, work where it has them).
    **options
        Passed on to `assess`.

    Returns
    -------
    Assessment
    """
    return assess(problem, methods=methods, **options)


def assess(
    problem: Any,
    *,
    parameters: Mapping[str, Any] | None = None,
    name: str | None = None,
    known: Callable[[Any, Solution], Any] | None = None,
    reference: Method | None = None,
    methods: Methods | None = None,
    budget: float = 20.0,
    progress: Callable[..., Any] | None = None,
    tolerance: float = 1e-9,
    agreement_tolerance: float = 1e-6,
    solution: Solution | None = None,
    seed: int = 0,
    libraries: bool | None = None,
    iterations: int | None = None,
) -> Assessment:
    """Solve a problem and collect the evidence for and against the solution.

    Parameters
    ----------
    problem : ControlProblem, CompositeProblem, ComplementarityProblem, SumProblem, or object with the Equation protocol
    parameters : mapping, optional
        What the problem was built with; goes into the result.
    name : str, optional
        The type of the problem by default.
    known : callable, optional
        ``known(problem, solution)`` of a problem file: a list of dicts with the keys what, expected, computed,
        tolerance, source and holds.
    reference : callable, optional
        ``reference(problem, budget)`` of a problem file, for problems about which the built-in methods tell little: the
        unknown by an independent method, in the form of `compare`'s methods. Agreement then needs its point.
    methods : mapping of str to callable, or iterable of callables, optional
        The user's own methods, see `compare`.
    budget : float
        Seconds for each independent method.
    progress : callable, optional
        Gets a text about what is being done.
    tolerance : float
        For our solve.
    agreement_tolerance : float
        Relative distance within which methods agree; at most 1e-3.
    solution : Solution, optional
        To be judged instead of solving.
    seed : int
        Of all random directions.
    libraries : bool, optional
        Whether methods of general libraries are asked too, where the problem fits them and they are installed. By
        default only for hard state bounds and for several terms with a control problem, where no first-order method
        decides about agreement. The commands ask.
    iterations : int, optional
        A budget of the built-in reference that repeats on every machine, in place of seconds.

    Returns
    -------
    Assessment
        Failing checks, not exceptions, where `known` or a method raises.

    Raises
    ------
    InputError
        For unusable input.
    """
    agreement_tolerance = checked_tolerance(agreement_tolerance)
    budget = scalar(budget, "budget", nonnegative=True)
    iterations = None if iterations is None else count(iterations, "iterations")
    own_methods = named(methods)
    if reference is not None:
        own_methods = {FILES_REFERENCE: reference, **own_methods}
    tell = progress if progress is not None else _silent
    tell("solving")
    began = time.perf_counter()
    if solution is None:
        solution = solve(problem, tolerance=tolerance)
        seconds = time.perf_counter() - began
    else:
        seconds = float("nan")
    stated = problem
    problem = judge.judged(problem, solution)
    own = ours(problem, solution, seconds)
    # at the last penalty of hard state bounds, and for several terms with a state equation, no first-order method gets
    # far: it may try, briefly
    slow_reference = getattr(stated, "state_bounded", False) or getattr(stated, "control", None) is not None
    patience = min(budget, 2.0) if slow_reference else budget
    if iterations is not None and slow_reference:
        iterations = min(iterations, BRIEF)
    if iterations is not None and isinstance(stated, NonlinearControlProblem):
        iterations = min(iterations, NONLINEAR)
    others, checks = _others(problem, solution, own_methods, patience, agreement_tolerance, tell, iterations)
    if slow_reference if libraries is None else libraries:
        others += library_results(stated, problem, solution, set(own_methods), budget, tell)
    verdict, note = decide(problem, solution, others, agreement_tolerance)
    tell("measuring the rate")
    speed = _rate(problem, solution, seed)
    tell("checking derivatives")
    values, known_checks = known_values(known, problem, solution)
    objective = objective_check(problem, solution, others, own)
    collected = [
        _solved(solution),
        _residual(solution, own),
        _run(solution),
        _guarded("certificate", lambda: certificate(problem, solution, seed=seed)),
        Check("agreement", verdict == "holds", f"{verdict}: {note}"),
        objective,
        Check("rate", speed.holds, speed.sentence()),
        *_derivatives(problem, solution, seed),
        *known_checks,
        *checks,
    ]
    return Assessment(
        name=type(problem).__name__ if name is None else name,
        parameters=dict(parameters or {}),
        unknowns=int(solution.x.size),
        solution=solution,
        methods=(own, *others),
        agreement=verdict,
        agreement_tolerance=agreement_tolerance,
        agreement_note=note,
        rate=speed,
        active={"sizes": solution.pieces.sizes(), "changes": [s.piece_changes for s in solution.steps]},
        known=values,
        checks=tuple(check for check in collected if check is not None),
    )


def _silent(text: str) -> None:
    """Say nothing."""


def _others(
    problem: Any,
    solution: Solution,
    own_methods: Mapping[str, Method],
    budget: float,
    agreement_tolerance: float,
    tell: Callable[..., Any],
    iterations: int | None,
) -> tuple[list[MethodResult], list[Check]]:
    """The built-in reference and the user's methods, and a failing check for each that raised."""
    results, checks = [], []
    tell(reference_name(problem))
    try:
        results.extend(
            references(
                problem,
                solution,
                budget=budget,
                agreement_tolerance=agreement_tolerance,
                iterations=iterations,
            )
        )
    except Exception as error:
        checks.append(Check(reference_name(problem), False, f"raised {describe(error)}"))
    for name, method in own_methods.items():
        tell(name)
        result = run_method(problem, solution, name, method, budget=budget)
        results.append(result)
        if result.x is None:
            checks.append(Check(f"method {name}", False, f"raised {result.note}"))
    return results, checks


def library_results(
    stated: Any, judged: Any, solution: Solution, taken: set[str], budget: float, tell: Callable[..., Any]
) -> list[MethodResult]:
    """Results of library methods on the problem as stated, judged like the others; one that raises is left out."""
    results = []
    for name, method in library_methods(stated).items():
        if name in taken:
            continue
        tell(name)
        result = run_method(judged, solution, name, partial(_on, stated, method), budget=budget)
        if result.x is not None:
            results.append(result)
    return results


def _on(stated: Any, method: Method, judged: Any, *, budget: float) -> Any:
    """Run a method on the problem as stated, whatever problem the result is judged by."""
    return method(stated, budget=budget)


def _solved(solution: Solution) -> Check:
    outcome = solution.outcome
    if solution.converged:
        return Check("solved", True, f"{outcome.value} in {len(solution.steps)} steps")
    return Check(
        "solved",
        False,
        f"{outcome.value}: {(solution.message or outcome.explanation).rstrip('.')}. {outcome.advice}",
    )


def _residual(solution: Solution, own: MethodResult) -> Check | None:
    """The problem's own accuracy figure, recomputed at the returned point."""
    if not solution.converged:
        return None
    holds = bool(own.accuracy <= 10.0 * solution.tolerance)
    detail = f"accuracy {own.accuracy:.1e} recomputed at the point, tolerance {solution.tolerance:.1e}"
    return Check("residual", holds, detail if holds else f"{detail}: converged was claimed and is not true")


def _run(solution: Solution) -> Check | None:
    """The end of the actual run: three last steps that all contract slowly are not those of a Newton method."""
    last = [step.contraction for step in solution.steps[-3:]]
    # the last points of a path of multipliers only sharpen the distance bound, at rounding level
    sharpened = isinstance(solution.problem, SumProblem)
    if not solution.converged or len(last) < 3 or sharpened:
        return None
    holds = min(last) <= SLOW
    detail = "last contractions " + ", ".join(f"{q:.1e}" for q in last)
    return Check("run", holds, detail if holds else f"{detail}: the run ends at a linear rate")


def _rate(problem: Any, solution: Solution, seed: int) -> RateVerdict:
    try:
        return rate(problem, solution, seed=seed, samples=3 if solution.x.size <= LARGE else 2)
    except Exception as error:
        return RateVerdict("undecided", None, (), None, float("inf"), f"raised {describe(error)}")


def _derivatives(problem: Any, solution: Solution, seed: int) -> list[Check]:
    at = solution.x if np.isfinite(solution.x).all() else None
    try:
        return list(derivative_checks(problem, at, solution.iterate, seed))
    except Exception as error:
        return [Check("derivative check", False, f"raised {describe(error)}")]


def _guarded(name: str, run: Callable[[], Check | None]) -> Check | None:
    try:
        return run()
    except Exception as error:
        return Check(name, False, f"raised {describe(error)}")
