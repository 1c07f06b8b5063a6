"""The user's own methods: called by what they take, run by their own stopping rule, judged by our yardstick."""

from __future__ import annotations

import inspect
import time
from collections.abc import Callable, Iterable, Mapping
from typing import Any

import numpy as np

from ..errors import InputError
from ..solution import Solution
from . import judge
from .check import describe
from .method_result import MethodResult, own_bound

Method = Callable[..., Any]
Methods = Mapping[str, Method] | Iterable[Method | tuple[str, Method]]


# the independent method that a problem file brings itself
FILES_REFERENCE = "problem's own reference"


def named(methods: Methods | None) -> dict[str, Method]:
    """The user's methods by name.

    Raises
    ------
    InputError
        For something that cannot be called, or two methods of one name.
    """
    if methods is None:
        return {}
    pairs = methods.items() if isinstance(methods, Mapping) else [_pair(method) for method in methods]
    result: dict[str, Method] = {}
    for name, method in pairs:
        if not callable(method):
            raise InputError(f"method {name!r} is a {type(method).__name__}, not a function of the problem")
        if name in result or name == FILES_REFERENCE:
            raise InputError(f"there are two methods named {name!r}")
        result[name] = method
    return result


def run_method(problem: Any, solution: Solution, name: str, method: Method, *, budget: float) -> MethodResult:
    """Run a user's method and judge the point it returns; an exception becomes a result that is not converged.

    The method gets the problem, and by keyword those of ``start`` (zero within the domain, or an equation's own) and
    ``budget`` (seconds) that it has. It returns the point, or an object with a member ``x`` and any of converged,
    outcome, iterations, bound (on the distance to the exact solution) and work.
    """
    began = time.perf_counter()
    before = problem.work.copy() if hasattr(problem, "work") else None
    try:
        result = method(problem, **_arguments(problem, solution, method, budget))
        seconds = time.perf_counter() - began
        work = getattr(result, "work", None) or (problem.work.since(before) if before is not None else None)
        x = np.asarray(getattr(result, "x", result), dtype=np.float64)
        if x.shape != solution.x.shape:
            raise InputError(f"it returned an array of shape {x.shape}, expected {solution.x.shape}")
        if not np.isfinite(x).all():
            raise InputError("it returned NaN or infinite values")
        iterations = getattr(result, "iterations", getattr(result, "nit", None))
        bound = getattr(result, "bound", None)
        return MethodResult(
            name, bool(getattr(result, "converged", getattr(result, "success", True))),
            str(getattr(result, "outcome", "returned")), judge.objective(problem, x), judge.accuracy(problem, x),
            None if iterations is None else int(iterations), getattr(work, "state_solves", None),
            getattr(work, "operator_products", None), seconds, judge.distance(problem, x, solution.x),
            own_bound(problem, x, None if bound is None else float(bound)), "", x,
        )  # fmt: skip
    except Exception as error:
        seconds = time.perf_counter() - began
        nan = float("nan")
        return MethodResult(
            name, False, "raised", nan, nan, None, None, None, seconds, nan, None, describe(error)
        )


def _pair(method: Any) -> tuple[str, Method]:
    if isinstance(method, tuple) and len(method) == 2:
        return str(method[0]), method[1]
    return getattr(method, "__name__", repr(method)), method


def _arguments(problem: Any, solution: Solution, method: Method, budget: float) -> dict[str, Any]:
    """Those of start and budget that the method takes."""
    try:
        names = set(list(inspect.signature(method).parameters)[1:])
    except (TypeError, ValueError):
        return {}
    given: dict[str, Any] = {"budget": budget} if "budget" in names else {}
    if "start" in names:
        given["start"] = judge.start(problem, solution.x.size)
    return given
