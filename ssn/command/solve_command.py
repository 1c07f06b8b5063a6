"""``ssn solve``."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from .. import __version__
from .. import report as rep
from ..environment import fingerprint
from ..problem_file import load
from .options import json_option, output_path, parameter_option
from .program import INTERRUPTED
from .run import Job, Run, figure_of, show_interrupted, solve_job, summary_of, write


@click.command()
@click.argument("file", metavar="FILE")
@parameter_option
@click.option(
    "--tolerance",
    type=click.FloatRange(min=0, min_open=True),
    default=1e-9,
    show_default=True,
    help="Relative accuracy of the unknown.",
)
@click.option(
    "--globalization",
    type=click.Choice(["auto", "full", "dual", "residual", "envelope"]),
    default="auto",
    show_default=True,
    help="How a step is made safe.",
)
@click.option(
    "--max-steps", type=click.IntRange(min=0), default=100, show_default=True, help="Newton steps at most."
)
@click.option(
    "--picture", metavar="OUT", callback=output_path, help="Draw the solution (or the steps) to a file."
)
@json_option
@click.pass_context
def solve(
    context: click.Context,
    file: str,
    given: dict[str, str],
    tolerance: float,
    globalization: str,
    max_steps: int,
    picture: Path | None,
    json_path: Path | None,
) -> int:
    """Solve the problem of FILE and show the steps. Exit 1 where it does not converge."""
    if picture is not None:
        rep.check_picture_path(picture)
    terminal = rep.Terminal(quiet=str(json_path) == "-")
    run = Run(terminal, context.obj)
    loaded = load(file)
    job = Job(loaded, loaded.arguments(**given))
    things: list[Any] = []
    with terminal.reserved():
        try:
            with run.forgiving(job.name, job.file), terminal.progress(job.name) as report:
                problem = job.file.build(**job.parameters)
                options = {"tolerance": tolerance, "globalization": globalization, "max_steps": max_steps}
                solution = solve_job(job, problem, report, **options)
                setting = rep.setting(job.parameters, solution.x.size)
                caution = rep.caution(job.file.description)
                things.append(rep.solution_summary(job.name, setting, solution, caution))
                pairs = summary_of(job, problem, solution)
                things += ["", rep.pairs_table(pairs)] if pairs else []
                if picture is not None:
                    figure = figure_of(job, problem, solution)
                    rep.save(rep.history_figure(solution) if figure is None else figure, picture)
                    things += ["", f"Written: {picture}"]
        except KeyboardInterrupt as error:
            show_interrupted(terminal, job, error)
            return INTERRUPTED
        terminal.show(*things)
    if job.solution is not None:
        document = rep.solution_document(
            fingerprint(__version__), job.file.name, job.parameters, job.solution
        )
        write(terminal, document, json_path)
    return run.exit_code(holds=job.solution is not None and job.solution.converged)
