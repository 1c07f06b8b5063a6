"""``ssn compare``."""

from __future__ import annotations

import shlex
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from .. import __version__
from .. import report as rep
from ..environment import fingerprint
from ..evidence import assess
from .methods import Method, load_methods
from .options import json_option, output_path, parameter_option, sizes_option
from .run import Job, Run, figure_of, show_interrupted, solve_job, summary_of, write


@click.command()
@click.argument("files", metavar="FILE...", nargs=-1, required=True)
@parameter_option
@sizes_option
@click.option(
    "--method", "methods", metavar="MODULE:FUNCTION", multiple=True, help="A method of your own, too."
)
@click.option(
    "--budget",
    metavar="SECONDS",
    type=click.FloatRange(min=0, min_open=True),
    default=20.0,
    show_default=True,
    help="For each reference method.",
)
@json_option
@click.option(
    "--html", "html_path", metavar="OUT", callback=output_path, help="Write a page that needs no other file."
)
@click.option("--picture", "pictures", metavar="FOLDER", help="Draw each solution to a file in FOLDER.")
@click.pass_context
def compare(
    context: click.Context,
    files: tuple[str, ...],
    given: dict[str, str],
    sizes: tuple[int, ...],
    methods: tuple[str, ...],
    budget: float,
    json_path: Path | None,
    html_path: Path | None,
    pictures: str | None,
) -> int:
    """Solve the problems of each FILE, compare with reference methods and known values, and say how sure it is.

    A folder stands for all problem files in it. MODULE is an importable module or a Python file, FUNCTION a function
    of problem, start and budget (seconds) that returns the unknown as an array, or an object with a member x.
    """  # fmt: skip
    terminal = rep.Terminal(quiet=str(json_path) == "-")
    run = Run(terminal, context.obj)
    environment = fingerprint(__version__)
    entries: list[rep.Entry] = []
    with terminal.reserved():
        own_methods = load_methods(methods)
        folder = _picture_folder(pictures)
        for job in run.jobs(files, given, sizes):
            try:
                entry = _assessed(run, job, own_methods, budget, html_path is not None, folder)
            except KeyboardInterrupt as error:
                show_interrupted(terminal, job, error)
                run.interrupted = True
                run.errors.append((job.name, "interrupted"))
                break
            if entry is not None:
                entries.append(entry)
                terminal.show(rep.comparison(entry), "")
    if len(entries) + len(run.errors) > 1:
        terminal.show(rep.Overview(entries, run.errors), "")
    terminal.show(rep.conclusion(entries, run.errors))
    for entry in entries:
        if terminal.quiet and not entry.assessment.holds:
            terminal.complain(f"{entry.heading}: does not hold: {'; '.join(entry.assessment.failures())}")
    write(
        terminal, rep.comparison_document(environment, [e.assessment for e in entries], run.errors), json_path
    )
    if html_path is not None:
        command = shlex.join(["ssn", *context.meta["ssn.arguments"]])
        html_path.write_text(rep.page(entries, environment, run.errors, command=command), "utf-8")
        run.written.append(html_path)
    for path in run.written:
        terminal.show(f"Written: {path}")
    return run.exit_code(all(entry.assessment.holds for entry in entries))


def _assessed(
    run: Run, job: Job, methods: dict[str, Method], budget: float, for_page: bool, folder: Path | None
) -> rep.Entry | None:
    """Solve and collect the evidence; None where that fails, which is noted."""
    entry = None
    with run.forgiving(job.name, job.file), run.terminal.progress(job.name) as report:
        problem = job.file.build(**job.parameters)
        began = time.perf_counter()
        solution = solve_job(job, problem, report)
        seconds = time.perf_counter() - began
        assessment = assess(
            problem, parameters=job.parameters, name=job.file.name, known=job.file.known,
            reference=job.file.reference, methods=methods, budget=budget, progress=report, solution=solution,
            libraries=True,
        )  # fmt: skip
        # solved here, so that an interruption of the evidence does not lose the solution
        ours = replace(assessment.methods[0], seconds=seconds)
        assessment = replace(assessment, methods=(ours, *assessment.methods[1:]))
        entry = rep.Entry(assessment, job.file.description)
        report("drawing")
        _illustrate(run, job, entry, problem, for_page, folder)
    return entry


def _illustrate(
    run: Run, job: Job, entry: rep.Entry, problem: Any, for_page: bool, folder: Path | None
) -> None:
    """Add what the problem file has to say and to show; its errors do not lose the evidence."""
    solution = entry.assessment.solution
    with run.forgiving(job.name, job.file):
        entry.summary = summary_of(job, problem, solution)
    if for_page and not rep.pictures_available():
        entry.remarks.append("The page has no pictures: they need matplotlib, pip install 'ssn[problems]'")
        for_page = False
    with run.forgiving(job.name, job.file):
        figure = figure_of(job, problem, solution) if for_page or folder is not None else None
        if folder is not None:
            path = run.new_name(folder, job)
            rep.save(rep.history_figure(solution) if figure is None else figure, path)
            run.written.append(path)
        if for_page and figure is not None:
            entry.pictures.append(("The solution", rep.embedded(figure)))
        if for_page:
            entry.pictures.append(
                ("The steps of the solve", rep.embedded(rep.history_figure(solution), "svg"))
            )
            measured = rep.rate_figure(entry.assessment)
            if measured is not None:
                entry.pictures.append(("Measured rate", rep.embedded(measured, "svg")))


def _picture_folder(text: str | None) -> Path | None:
    if text is None:
        return None
    rep.require_pictures()
    folder = Path(text)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise click.UsageError(f"--picture {text}: {error.strerror}") from error
    return folder
