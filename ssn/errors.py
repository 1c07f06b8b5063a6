"""Exceptions raised on purpose, told apart by type."""

from __future__ import annotations

from typing import Any


class InputError(ValueError):
    """An argument is unusable; the message names it, its shape or index, and what to do."""


class ProblemFileError(InputError):
    """A problem file cannot be loaded or does not build a problem; the message names file and reason."""


class MissingExtraError(InputError):
    """An optional dependency was asked for by name and is not installed; the message has the install line."""


class NotConverged(RuntimeError):
    """Raised by `Solution.require` where the solve did not converge.

    Attributes
    ----------
    solution : Solution
        The best iterate with its outcome and history: nothing is lost.
    """

    def __init__(self, message: str, solution: Any) -> None:
        super().__init__(message)
        self.solution = solution


class SolveInterrupted(KeyboardInterrupt):
    """Ctrl-C during a solve; `solution` holds the best iterate and the history up to then."""

    def __init__(self, message: str, solution: Any) -> None:
        super().__init__(message)
        self.solution = solution


class StateSolveError(RuntimeError):
    """A nonlinear state equation was not solved; the message says where and why."""


class StopSolve(Exception):
    """Raise it in a callback to stop a solve; the solve then returns its best iterate."""
