"""Methods of the user's own, given as MODULE:FUNCTION."""

from __future__ import annotations

import importlib
import inspect
import os
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import click
import numpy as np

from ..problem_file import load_module
from ..sum_problem import SumProblem

Method = Callable[..., Any]


def load_methods(specifications: Sequence[str]) -> dict[str, Method]:
    """Return the functions behind MODULE:FUNCTION by the names that tables show."""
    methods: dict[str, Method] = {}
    for text in specifications:
        place, _, function_name = text.rpartition(":")
        if not place or not function_name:
            raise click.UsageError(f"--method {text}: expected MODULE:FUNCTION")
        is_file = place.endswith(".py") or "/" in place or os.sep in place
        module = load_module(place) if is_file else _import(place, text)
        function = getattr(module, function_name, None)
        if not callable(function):
            raise click.UsageError(f"--method {text}: {place} has no function {function_name!r}")
        name = f"{Path(place).stem}:{function_name}" if is_file else text
        if name in methods:
            raise click.UsageError(f"--method {text}: there is a method of this name already")
        methods[name] = _with_start(function)
    return methods


def _import(name: str, specification: str) -> Any:
    if os.getcwd() not in sys.path and "" not in sys.path:
        sys.path.append(os.getcwd())  # where python -m looks, too; last, so that it hides nothing
    try:
        return importlib.import_module(name)
    except Exception as error:
        raise click.UsageError(f"--method {specification}: {type(error).__name__}: {error}") from error


def _with_start(function: Method) -> Method:
    """A function of problem and budget that passes on what the user's function has parameters for."""
    try:
        accepted: Mapping[str, inspect.Parameter] = inspect.signature(function).parameters
    except (TypeError, ValueError):
        accepted = {}
    open_ended = any(p.kind is p.VAR_KEYWORD for p in accepted.values())

    def method(problem: Any, budget: float) -> Any:
        offered = {"start": start_of(problem), "budget": budget}
        return function(problem, **{name: v for name, v in offered.items() if open_ended or name in accepted})

    return method


def start_of(problem: Any) -> Any:
    """Where our own methods start: zero, within the bounds; for an equation its own start."""
    if isinstance(problem, SumProblem):
        return problem.inside(np.zeros(problem.unknowns))
    if hasattr(problem, "cost"):
        return problem.cost.prox(np.zeros(problem.unknowns), 1e-300)
    start = getattr(problem, "start", None)
    return None if start is None else np.array(start, dtype=np.float64)
