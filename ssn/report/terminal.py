"""The two streams of the command: results on standard output, progress and complaints on standard error."""

from __future__ import annotations

import contextlib
import os
import sys
from collections.abc import Iterator
from typing import Any, Protocol

from rich.console import Console
from rich.progress import BarColumn, Progress, SpinnerColumn, TextColumn, TimeElapsedColumn
from rich.text import Text

# Wide enough for the table of methods where nobody's window sets the width.
WIDTH_WITHOUT_WINDOW = 132


class Report(Protocol):
    """Takes a word about what is being done, and how much of it is."""

    def __call__(self, text: str, fraction: float | None = None) -> None:
        """Show it."""
        ...


class Terminal:
    """Where a command writes.

    Parameters
    ----------
    quiet : bool
        Standard output is for JSON only: `show` does nothing.
    """

    def __init__(self, *, quiet: bool = False) -> None:
        self.quiet = quiet
        self._stdout = sys.stdout
        self.out = _console(sys.stdout)
        self.err = _console(sys.stderr)

    def show(self, *things: Any) -> None:
        """Print to standard output, plain text as it is."""
        if not self.quiet:
            for thing in things:
                self.out.print(Text(thing) if isinstance(thing, str) else thing)

    def complain(self, message: str) -> None:
        """Print one line to standard error."""
        self.err.print(Text(f"ssn: {message}"), soft_wrap=True)

    def write(self, text: str) -> None:
        """Write to standard output as it is."""
        self._stdout.write(text)
        self._stdout.flush()

    @contextlib.contextmanager
    def progress(self, what: str) -> Iterator[Report]:
        """Show what is going on, on standard error and only if that is a terminal."""
        if not self.err.is_terminal:
            yield _silent
            return
        columns = (
            SpinnerColumn(),
            TextColumn("{task.description}", markup=False),
            BarColumn(20),
            TimeElapsedColumn(),
        )
        with Progress(*columns, console=self.err, transient=True) as bar:
            task = bar.add_task(what, total=None)

            def report(text: str, fraction: float | None = None) -> None:
                known = fraction is not None
                bar.update(
                    task,
                    description=f"{what}: {text}",
                    total=1.0 if known else None,
                    completed=fraction or 0.0,
                )

            yield report

    @contextlib.contextmanager
    def reserved(self) -> Iterator[None]:
        """While quiet, send to standard error what problem files, methods and their libraries print."""
        if not self.quiet:
            yield
            return
        with contextlib.ExitStack() as stack:
            stack.enter_context(contextlib.redirect_stdout(sys.stderr))
            if self._stdout is sys.__stdout__:
                stack.enter_context(_descriptor_redirected())
            yield


def _silent(text: str, fraction: float | None = None) -> None:
    """Take a progress report and say nothing."""


@contextlib.contextmanager
def _descriptor_redirected() -> Iterator[None]:
    """Compiled libraries write to descriptor 1 without asking Python."""
    saved = os.dup(1)
    try:
        os.dup2(2, 1)
        yield
    finally:
        os.dup2(saved, 1)
        os.close(saved)


def _console(stream: Any) -> Console:
    window = bool(getattr(stream, "isatty", lambda: False)()) or "COLUMNS" in os.environ
    width = None if window else WIDTH_WITHOUT_WINDOW
    return Console(file=stream, width=width, highlight=False, markup=False, emoji=False)
