"""``ssn gate``."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from .. import __version__, gate
from .. import report as rep
from ..environment import fingerprint
from ..errors import InputError
from .options import json_option, output_path
from .program import DOES_NOT_HOLD, HOLDS, INTERRUPTED, UNUSABLE
from .run import Job, Run, write
from .verify_command import assessed, budget_option


def _baseline_path(context: click.Context, parameter: click.Parameter, text: str) -> Path | None:
    """Read the place of the baseline; one to be written must be writable, which is found out before the work."""
    return output_path(context, parameter, text) if context.params.get("update") else Path(text)


# several times what the slowest reference of the problems here needs
ITERATIONS = 100_000


@click.command("gate")
@click.argument("folder", metavar="FOLDER")
@click.option(
    "--baseline", "baseline_path", metavar="FILE", required=True, callback=_baseline_path, help="The stored figures."
)  # fmt: skip
@click.option("--update", is_flag=True, is_eager=True, help="Write the baseline: declares every change.")
@budget_option
@click.option(
    "--iterations", metavar="NUMBER", type=click.IntRange(min=1), default=ITERATIONS, show_default=True,
    help="For the built-in reference: unlike seconds they repeat on every machine.",
)  # fmt: skip
@json_option
@click.pass_context
def gate_problems(
    context: click.Context,
    folder: str,
    baseline_path: Path,
    update: bool,
    budget: float,
    iterations: int,
    json_path: Path | None,
) -> int:
    """Compare the figures that repeat with a stored baseline, for the problem files of FOLDER.

    Each problem is solved with its default parameters, on the two smallest of its SIZES. Seconds are never judged.

    Exit code 1: a figure is worse, or evidence fails; 2: nothing was compared, a case is on one side only, a problem
    is another one than the baseline's, or a file is unusable.
    """
    terminal = rep.Terminal(quiet=str(json_path) == "-")
    run = Run(terminal, context.obj)
    environment = fingerprint(__version__) | {"arithmetic": gate.arithmetic()}
    stored = _read(baseline_path, optional=update)
    cases: list[gate.Measured] = []
    with terminal.reserved():
        for job in _jobs(run, folder):
            try:
                with run.forgiving(job.name, job.file), terminal.progress(job.name) as report:
                    assessment = assessed(job, report, budget, iterations)
                    cases.append(gate.measured(job.name, assessment, job.file.build(**job.parameters)))
            except KeyboardInterrupt:
                terminal.complain(f"{job.name}: interrupted; the cases before it:")
                run.interrupted = True
                run.errors.append((job.name, "interrupted"))
                break
    verdict = None
    if stored is not None:
        exact = gate.equal_environments(stored.environment, environment)
        verdict = gate.decide(stored.cases, cases, exact=exact)
    _show(terminal, cases, verdict, run, update)
    where = None if stored is None else stored.environment
    write(terminal, rep.gate_document(environment, where, cases, verdict, run.errors), json_path)
    if update and cases and not run.errors:
        baseline_path.write_text(gate.as_text(gate.baseline_document(environment, cases)), "utf-8")
        terminal.show(f"Written: {baseline_path}")
    return _exit_code(run, cases, verdict, update)


def _jobs(run: Run, folder: str) -> list[Job]:
    jobs = []
    for job in run.jobs([folder], {}):
        with run.forgiving(job.name, job.file):
            jobs += [Job(job.file, parameters) for parameters in gate.gate_parameters(job.file)]
    return jobs


def _read(path: Path, *, optional: bool) -> gate.Baseline | None:
    """Read the baseline; None where there need not be one."""
    if not path.exists():
        if optional:
            return None
        raise InputError(f"{path}: no such file; --update writes it")
    try:
        return gate.read_baseline(path.read_text("utf-8"), str(path))
    except InputError:
        if optional:
            return None
        raise
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read: {error}") from error


def _show(
    terminal: rep.Terminal, cases: list[gate.Measured], verdict: gate.Verdict | None, run: Run, update: bool
) -> None:
    terminal.show(rep.GateTable(cases, verdict), "")
    lines: list[Any] = []
    if verdict is not None:
        lines = rep.gate_lines(verdict)
        terminal.show(*lines, *([""] if lines else []), rep.gate_conclusion(verdict, run.errors))
    else:
        failing = [f"Evidence fails: {case.case}: {text}" for case in cases for text in case.failures]
        terminal.show(*failing)
    if terminal.quiet and verdict is not None and not update:
        for line in lines:
            if not line.plain.startswith(("Better", "Tolerated")):
                terminal.complain(line.plain)


def _exit_code(run: Run, cases: list[gate.Measured], verdict: gate.Verdict | None, update: bool) -> int:
    if run.interrupted:
        return INTERRUPTED
    if run.errors or not cases or (not update and (verdict is None or not verdict.usable)):
        return UNUSABLE
    fails = any(case.failures for case in cases)
    if update:
        return DOES_NOT_HOLD if fails else HOLDS
    return HOLDS if verdict is not None and verdict.holds else DOES_NOT_HOLD
