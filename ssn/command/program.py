"""The program and its exit codes; `ssn.command` adds the commands."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from typing import Any, NoReturn

import click

from .. import __version__
from ..errors import InputError
from ..report import Terminal

HOLDS, DOES_NOT_HOLD, UNUSABLE, INTERRUPTED = 0, 1, 2, 130


class Program(click.Group):
    """A group whose errors are one line on standard error and exit 2."""

    def make_context(self, info_name: str | None, args: list[str], *rest: Any, **extra: Any) -> click.Context:
        """Keep the arguments as they were given: a page shows the command that made it."""
        given = list(args)
        context = super().make_context(info_name, args, *rest, **extra)
        context.meta["ssn.arguments"] = given
        return context

    def main(
        self,
        args: Sequence[str] | None = None,
        prog_name: str | None = None,
        complete_var: str | None = None,
        standalone_mode: bool = True,
        **extra: Any,
    ) -> Any:
        """Run the command line; see `click.Command.main`."""
        if not standalone_mode:
            return super().main(args, prog_name, complete_var, standalone_mode=False, **extra)
        try:
            code = super().main(args, prog_name, complete_var, standalone_mode=False, **extra)
        except click.UsageError as error:
            where = error.ctx.command_path if error.ctx is not None else self.name
            _refuse(f"{' '.join(error.format_message().split())} (see {where} --help)")
        except click.ClickException as error:
            _refuse(error.format_message())
        except (click.Abort, KeyboardInterrupt):
            Terminal().complain("interrupted")
            sys.exit(INTERRUPTED)
        except InputError as error:
            _refuse(str(error))
        sys.exit(code if isinstance(code, int) else HOLDS)


def _refuse(message: str) -> NoReturn:
    Terminal().complain(message)
    sys.exit(UNUSABLE)


@click.group(
    cls=Program, invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]}
)
@click.version_option(__version__, prog_name="ssn", message="%(prog)s %(version)s")
@click.option("--traceback", "tracebacks", is_flag=True, help="Show where in the code an error comes from.")
@click.pass_context
def program(context: click.Context, tracebacks: bool) -> None:
    """Solve nonsmooth problems by semismooth Newton steps, and check the result against other evidence.

    A problem file is a Python module with a function build(n=..., ...) that returns an ssn problem.

    Exit code 0: all evidence holds; 1: some does not, and is named; 2: unusable arguments or problem file.
    """
    context.obj = tracebacks
    if context.invoked_subcommand is None:
        click.echo(context.get_help(), err=True)
        context.exit(UNUSABLE)
