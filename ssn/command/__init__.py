"""The command ``ssn``: one module a command, listed here."""

from __future__ import annotations

import io
import sys

from .compare_command import compare
from .gate_command import gate_problems
from .list_command import list_problems
from .program import program
from .solve_command import solve
from .verify_command import verify

COMMANDS = (list_problems, solve, compare, verify, gate_problems)

for _command in COMMANDS:
    program.add_command(_command)


def main(name: str = "ssn") -> None:
    """Run the command line and exit."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(
                errors="replace"
            )  # a terminal without Unicode shows a question mark, no traceback
    program(prog_name=name)
