"""A command over several problem files: a bad file does not lose the results of the others."""

from __future__ import annotations

import contextlib
import os
import sys
import traceback
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import click

from .. import report as rep
from ..errors import InputError, ProblemFileError, SolveInterrupted
from ..problem_file import ProblemFile, discover, load, shown
from ..records import StepRecord
from ..solution import Solution
from ..solve import solve
from .program import DOES_NOT_HOLD, HOLDS, INTERRUPTED, UNUSABLE


@dataclass
class Job:
    """One problem to work on."""

    file: ProblemFile
    parameters: dict[str, Any]
    solution: Solution | None = None

    @property
    def name(self) -> str:
        """Name and mesh size."""
        n = self.parameters.get("n")
        return self.file.name if n is None else f"{self.file.name}, n = {n}"


@dataclass
class Run:
    """What a command over several files has met so far; a bad file does not lose the others' results."""

    terminal: rep.Terminal
    tracebacks: bool = False
    errors: list[tuple[str, str]] = field(default_factory=list)
    interrupted: bool = False
    written: list[Path] = field(default_factory=list)

    @contextlib.contextmanager
    def forgiving(self, name: str, file: ProblemFile | None = None) -> Iterator[None]:
        """Note whatever goes wrong inside, and go on."""
        try:
            with contextlib.nullcontext() if file is None else file.guard():
                yield
        except InputError as error:
            message = str(error)
            self.errors.append((name, message))
            self.terminal.complain(message)
            if self.tracebacks:
                traceback.print_exception(error, file=sys.stderr)

    def jobs(self, places: Sequence[str], given: dict[str, str], sizes: Sequence[int] = ()) -> list[Job]:
        """Load the files and settle their parameters."""
        files: list[ProblemFile] = []
        for path in discover(places):
            with self.forgiving(path.stem):
                files.append(load(path))
        if sizes and "n" in given:
            raise click.UsageError("give the mesh size by --sizes or by --parameter n=..., not both")
        if sizes and files and not any(file.has_mesh for file in files):
            raise click.UsageError("--sizes has no effect: no file has a mesh size n among its parameters")
        jobs: list[Job] = []
        for file in files:
            meshes = [{"n": n} for n in sizes] if file.has_mesh and sizes else [{}]
            with self.forgiving(file.name):
                jobs += [Job(file, file.arguments(**given, **mesh)) for mesh in meshes]
        return jobs

    def new_name(self, folder: Path, job: Job) -> Path:
        """Return the name of a picture that this run has not written yet."""
        n = job.parameters.get("n")
        stem = job.file.name if n is None else f"{job.file.name}-n{n}"
        candidates = [stem, *(f"{stem}-{number}" for number in range(2, len(self.written) + 2))]
        return next(path for name in candidates if (path := folder / f"{name}.png") not in self.written)

    def exit_code(self, holds: bool) -> int:
        """0, 1, 2 or 130."""
        if self.interrupted:
            return INTERRUPTED
        return UNUSABLE if self.errors else HOLDS if holds else DOES_NOT_HOLD


def write(terminal: rep.Terminal, document: dict[str, Any], path: Path | None) -> None:
    """Write JSON to a file or to standard output; nothing where no place is given."""
    if path is None:
        return
    text = rep.as_text(document)
    if str(path) == "-":
        terminal.write(text)
    else:
        path.write_text(text, "utf-8")


def summary_of(job: Job, problem: Any, solution: Solution) -> list[tuple[str, str]]:
    """Return what the problem file says about the solution in its own terms."""
    if job.file.summary is None:
        return []
    with job.file.guard("summary"):
        return [(str(what), str(value)) for what, value in job.file.summary(problem, solution)]


def figure_of(job: Job, problem: Any, solution: Solution) -> Any | None:
    """Return the problem file's own picture, None where it has none."""
    if job.file.picture is None:
        return None
    os.environ.setdefault("MPLBACKEND", "Agg")  # a problem file may use pyplot, where there may be no screen
    with job.file.guard("picture"):
        figure = job.file.picture(problem, solution)
    if not rep.is_figure(figure):
        raise ProblemFileError(
            f"{shown(job.file.path)}: picture must return a matplotlib Figure, got {figure!r}"
        )
    return figure


def show_interrupted(terminal: rep.Terminal, job: Job, error: KeyboardInterrupt) -> None:
    """Print the best iterate of an interrupted solve, or the solution whose evidence was interrupted."""
    if isinstance(error, SolveInterrupted):
        job.solution = error.solution
    if job.solution is None:
        terminal.complain(f"{job.name}: interrupted before the first step; there is no iterate to show")
        return
    what = "the solve was complete, its evidence is not" if job.solution.converged else "the best iterate"
    terminal.complain(f"{job.name}: interrupted; {what}:")
    setting = rep.setting(job.parameters, job.solution.x.size)
    terminal.show(rep.solution_summary(job.name, setting, job.solution))


def solve_job(job: Job, problem: Any, report: rep.Report, **options: Any) -> Solution:
    """Solve, and report each step; the solution is kept with the job."""

    def tell(record: StepRecord) -> None:
        report(f"step {record.index}, accuracy {record.accuracy:.1e}")

    job.solution = solve(problem, callback=tell, **options)
    return job.solution
