"""``ssn verify``."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from .. import __version__
from .. import report as rep
from ..environment import fingerprint
from ..errors import InputError
from ..evidence import Assessment, assess
from ..problem_file import discover
from ..verification import NOT_DONE, Verification, study, study_sizes
from .options import json_option, parameter_option, sizes_option
from .run import Job, Run, show_interrupted, solve_job, write

budget_option = click.option(
    "--budget", metavar="SECONDS", type=click.FloatRange(min=0, min_open=True), default=20.0, show_default=True,
    help="For each reference method.",
)  # fmt: skip


@click.command()
@click.argument("files", metavar="FILE...", nargs=-1, required=True)
@parameter_option
@sizes_option
@budget_option
@json_option
@click.option(
    "--picture", "folder", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
    help="Draw rate and mesh study of each problem to a file in FOLDER.",
)  # fmt: skip
@click.option(
    "--markdown", "document", metavar="FILE", type=click.Path(dir_okay=False, path_type=Path),
    help="Write the overview as a Markdown table to FILE, between its marks where it exists.",
)  # fmt: skip
@click.pass_context
def verify(
    context: click.Context,
    files: tuple[str, ...],
    given: dict[str, str],
    sizes: tuple[int, ...],
    budget: float,
    json_path: Path | None,
    folder: Path | None,
    document: Path | None,
) -> int:
    """Collect all evidence about the problems of each FILE: derivatives, rate, meshes, known values, agreement.

    A folder stands for all problem files in it. The mesh study solves on the SIZES of the file, or on --sizes.
    """
    terminal = rep.Terminal(quiet=str(json_path) == "-")
    run = Run(terminal, context.obj)
    environment = fingerprint(__version__)
    if folder is not None:
        _make(folder)
    jobs = run.jobs(files, given)
    if sizes and jobs and not any(job.file.has_mesh for job in jobs):
        raise click.UsageError("--sizes has no effect: no file has a mesh size n among its parameters")
    verified: list[rep.Verified] = []
    with terminal.reserved():
        for job in jobs:
            found: list[Verification] = []
            try:
                _verified(run, job, sizes, budget, found)
            except KeyboardInterrupt as error:
                run.interrupted = True
                run.errors.append((job.name, "interrupted"))
                if not found:
                    show_interrupted(terminal, job, error)
                else:
                    terminal.complain(f"{job.name}: interrupted in the mesh study; the evidence before it:")
            if found:
                one = rep.Verified(found[-1], job.file.description, _place(files, job))
                verified.append(one)
                terminal.show(rep.verification_table(one), "")
                if folder is not None:
                    path = run.new_name(folder, job)
                    rep.save(rep.verify_figure(one), path)
                    run.written.append(path)
            if run.interrupted:
                break
    _conclude(run, files, verified)
    write(terminal, rep.verification_document(environment, verified, run.errors), json_path)
    if document is not None:
        rep.write_markdown(document, rep.markdown_table(verified, run.errors))
        run.written.append(document)
    for path in run.written:
        terminal.show(f"Written: {path}")
    return run.exit_code(all(one.verification.holds for one in verified))


def _verified(run: Run, job: Job, sizes: Sequence[int], budget: float, found: list[Verification]) -> None:
    """Append the verification without the mesh study, then with it: an interruption leaves what is there."""
    began = time.perf_counter()
    meshes, why = study_sizes(job.file, sizes)
    with run.terminal.progress(job.name) as report:
        with run.forgiving(job.name, job.file):
            assessment = assessed(job, report, budget)
            seconds = time.perf_counter() - began
            found.append(Verification(assessment, None, why or NOT_DONE, not meshes, seconds))
        if not found or not meshes:
            return
        with run.forgiving(job.name, job.file):
            studied = study(
                job.file, meshes, job.parameters, progress=lambda text: report(f"mesh study, {text}")
            )
            found.append(Verification(assessment, studied, studied.note, True, time.perf_counter() - began))


def assessed(job: Job, report: rep.Report, budget: float, iterations: int | None = None) -> Assessment:
    """Solve the problem of a job and assess the solution; the solution is kept with the job.

    With `iterations` the built-in reference has a budget that repeats on every machine.
    """
    problem = job.file.build(**job.parameters)
    began = time.perf_counter()
    solution = solve_job(job, problem, report)
    seconds = time.perf_counter() - began
    assessment = assess(
        problem, parameters=job.parameters, name=job.file.name, known=job.file.known,
        reference=job.file.reference, budget=budget, progress=report, solution=solution, libraries=True,
        iterations=iterations,
    )  # fmt: skip
    ours = replace(assessment.methods[0], seconds=seconds)
    return replace(assessment, methods=(ours, *assessment.methods[1:]))


def _conclude(run: Run, files: Sequence[str], verified: list[rep.Verified]) -> None:
    terminal = run.terminal
    if len(verified) + len(run.errors) > 1:
        terminal.show(rep.VerifiedOverview(verified, run.errors), "")
    left: list[Any] = list(run.errors)
    for place in dict.fromkeys(files):
        stems = {path.stem for path in discover(place)}
        mine = [one for one in verified if one.place == place]
        wrong = [error for error in left if error[0].partition(",")[0] in stems]
        terminal.show(rep.folder_line(place, mine, wrong))
        left = [error for error in left if error not in wrong]
    for one in verified:
        if terminal.quiet and not one.verification.holds:
            terminal.complain(f"{one.heading}: does not hold: {'; '.join(one.verification.failures())}")


def _place(files: Sequence[str], job: Job) -> str:
    """The argument that a job comes from."""
    return next(
        (place for place in files if job.file.path in {path.resolve() for path in discover(place)}), files[0]
    )


def _make(folder: Path) -> None:
    rep.require_pictures()
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"--picture {folder}: {error.strerror}") from error
