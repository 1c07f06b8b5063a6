"""``ssn list``."""

from __future__ import annotations

import inspect
from pathlib import Path
from typing import Any

import click
from rich.text import Text

from ..problem_file import discover, load, shown
from ..report import Terminal, catalogue_table
from .run import Run

DEFAULT_FOLDER = Path("problems")


@click.command("list")
@click.argument("folder", required=False, metavar="[FOLDER]")
@click.pass_context
def list_problems(context: click.Context, folder: str | None) -> int:
    """List the problem files of FOLDER (default: problems)."""
    if folder is None and not DEFAULT_FOLDER.is_dir():
        raise click.UsageError("there is no folder 'problems' here: name one")
    run = Run(Terminal(), context.obj)
    rows = []
    where = folder or str(DEFAULT_FOLDER)
    for path in discover(where):
        with run.forgiving(path.stem):
            file = load(path)
            parameters = ", ".join(_parameter_text(name, value) for name, value in file.defaults.items())
            meshes = ", ".join(map(str, file.sizes)) or ("any n" if file.has_mesh else "-")
            rows.append((path.name, file.title, parameters, meshes))
    run.terminal.show(Text(f"Problem files in {shown(Path(where).absolute())}"))
    run.terminal.show(catalogue_table(rows))
    return run.exit_code(holds=True)


def _parameter_text(name: str, default: Any) -> str:
    return name if default is inspect.Parameter.empty else f"{name}={default}"
