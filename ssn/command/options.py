"""Options that several commands share, and how their texts are read."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import click


def assignments(_: click.Context, __: click.Parameter, texts: Sequence[str]) -> dict[str, str]:
    """Read NAME=VALUE, several times."""
    given: dict[str, str] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or not name.strip().isidentifier():
            raise click.BadParameter(f"{text!r} is not NAME=VALUE")
        if name.strip() in given:
            raise click.BadParameter(f"{name.strip()} is given twice")
        given[name.strip()] = value.strip()
    return given


def mesh_sizes(_: click.Context, __: click.Parameter, text: str | None) -> tuple[int, ...]:
    """Read positive whole numbers with commas between."""
    if text is None:
        return ()
    try:
        sizes = tuple(int(word) for word in text.split(","))
    except ValueError:
        sizes = (0,)
    if min(sizes) < 1:
        raise click.BadParameter(f"{text!r} is not a list of positive whole numbers such as 32,64,128")
    return tuple(dict.fromkeys(sizes))


def output_path(_: click.Context, parameter: click.Parameter, text: str | None) -> Path | None:
    """Read an output file that can be written: found out before, not after, the work."""
    if text is None:
        return None
    path = Path(text)
    if text == "-" and parameter.name == "json_path":
        return path
    if path.is_dir():
        raise click.BadParameter(f"{text} is a folder")
    if not path.absolute().parent.is_dir():
        raise click.BadParameter(f"{text}: there is no folder {path.parent}")
    if not os.access(path if path.exists() else path.absolute().parent, os.W_OK):
        raise click.BadParameter(f"{text} cannot be written")
    return path


parameter_option = click.option(
    "--parameter", "given", metavar="NAME=VALUE", multiple=True, callback=assignments,
    help="A parameter of the problem file's build; may be repeated.",
)  # fmt: skip
json_option = click.option(
    "--json", "json_path", metavar="OUT", callback=output_path,
    help="Write the result as JSON; - for standard output, where then nothing else goes.",
)  # fmt: skip
sizes_option = click.option(
    "--sizes", metavar="N,N,...", callback=mesh_sizes, help="Mesh sizes n, one run each."
)
