"""The command ``ssn``: list, solve, compare. One function a command; exit 0, 1, 2 (130 on Ctrl-C)."""

from __future__ import annotations

import contextlib
import importlib
import inspect
import io
import os
import shlex
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NoReturn

import click

from . import __version__
from . import report as rep
from .environment import fingerprint
from .errors import InputError, ProblemFileError, SolveInterrupted
from .evidence import assess
from .problem_file import ProblemFile, discover, load, load_module, shown
from .solution import Solution
from .solve import solve as solve_problem

HOLDS, DOES_NOT_HOLD, UNUSABLE, INTERRUPTED = 0, 1, 2, 130
DEFAULT_FOLDER = Path("problems")


class Program(click.Group):
    """A group whose errors are one line on standard error and exit 2."""

    def make_context(self, info_name: str | None, args: list[str], *rest: Any, **extra: Any) -> click.Context:
        """Keep the arguments as they were given: a page shows the command that made it."""
        given = list(args)
        context = super().make_context(info_name, args, *rest, **extra)
        context.meta["ssn.arguments"] = given
        return context

    def main(self, *args: Any, standalone_mode: bool = True, **options: Any) -> Any:
        """Run the command line; see `click.Command.main`."""
        if not standalone_mode:
            return super().main(*args, standalone_mode=False, **options)
        try:
            code = super().main(*args, standalone_mode=False, **options)
        except click.UsageError as error:
            where = error.ctx.command_path if error.ctx is not None else self.name
            _refuse(f"{' '.join(error.format_message().split())} (see {where} --help)")
        except click.ClickException as error:
            _refuse(error.format_message())
        except (click.Abort, KeyboardInterrupt):
            rep.Terminal().complain("interrupted")
            sys.exit(INTERRUPTED)
        except InputError as error:
            _refuse(str(error))
        sys.exit(code if isinstance(code, int) else HOLDS)


def _refuse(message: str) -> NoReturn:
    rep.Terminal().complain(message)
    sys.exit(UNUSABLE)


@click.group(
    cls=Program, invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]}
)
@click.version_option(__version__, prog_name="ssn", message="%(prog)s %(version)s")
@click.option("--traceback", "tracebacks", is_flag=True, help="Show where in the code an error comes from.")
@click.pass_context
def cli(context: click.Context, tracebacks: bool) -> None:
    """Solve nonsmooth problems by semismooth Newton steps, and check the result against other evidence.

    A problem file is a Python module with a function build(n=..., ...) that returns an ssn problem.

    Exit code 0: all evidence holds; 1: some does not, and is named; 2: unusable arguments or problem file.
    """
    context.obj = tracebacks
    if context.invoked_subcommand is None:
        click.echo(context.get_help(), err=True)
        context.exit(UNUSABLE)


# what the commands share


def _assignments(_: click.Context, __: click.Parameter, texts: Sequence[str]) -> dict[str, str]:
    given: dict[str, str] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or not name.strip().isidentifier():
            raise click.BadParameter(f"{text!r} is not NAME=VALUE")
        if name.strip() in given:
            raise click.BadParameter(f"{name.strip()} is given twice")
        given[name.strip()] = value.strip()
    return given


def _mesh_sizes(_: click.Context, __: click.Parameter, text: str | None) -> tuple[int, ...]:
    if text is None:
        return ()
    try:
        sizes = tuple(int(word) for word in text.split(","))
    except ValueError:
        sizes = (0,)
    if min(sizes) < 1:
        raise click.BadParameter(f"{text!r} is not a list of positive whole numbers such as 32,64,128")
    return tuple(dict.fromkeys(sizes))


def _output(_: click.Context, parameter: click.Parameter, text: str | None) -> Path | None:
    """An output file that can be written: found out before, not after, the work."""
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
    "--parameter", "given", metavar="NAME=VALUE", multiple=True, callback=_assignments,
    help="A parameter of the problem file's build; may be repeated.",
)  # fmt: skip
json_option = click.option(
    "--json", "json_path", metavar="OUT", callback=_output,
    help="Write the result as JSON; - for standard output, where then nothing else goes.",
)  # fmt: skip


@dataclass
class Job:
    """One problem to work on."""

    file: ProblemFile
    parameters: dict[str, Any]

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
    names: set[str] = field(default_factory=set)

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
        name, number = stem, 1
        while name in self.names:
            number += 1
            name = f"{stem}-{number}"
        self.names.add(name)
        return folder / f"{name}.png"

    def exit_code(self, holds: bool) -> int:
        """0, 1, 2 or 130."""
        if self.interrupted:
            return INTERRUPTED
        return UNUSABLE if self.errors else HOLDS if holds else DOES_NOT_HOLD


def _write(terminal: rep.Terminal, document: dict[str, Any], path: Path | None) -> None:
    if path is None:
        return
    text = rep.as_text(document)
    if str(path) == "-":
        terminal.write(text)
    else:
        path.write_text(text, "utf-8")


def _summary(job: Job, problem: Any, solution: Solution) -> list[tuple[str, str]]:
    if job.file.summary is None:
        return []
    with job.file.guard("summary"):
        return [(str(what), str(value)) for what, value in job.file.summary(problem, solution)]


def _figure(job: Job, problem: Any, solution: Solution) -> Any | None:
    """The problem file's own picture, None where it has none."""
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


def _show_interrupted(terminal: rep.Terminal, job: Job, error: KeyboardInterrupt) -> None:
    solution = error.solution if isinstance(error, SolveInterrupted) else None
    if solution is None:
        terminal.complain(f"{job.name}: interrupted; there is no iterate to show")
        return
    terminal.complain(f"{job.name}: interrupted; the best iterate:")
    terminal.show(rep.solution_summary(job.name, f"{solution.x.size} unknowns", solution))


# the commands


@cli.command("list")
@click.argument("folder", required=False, metavar="[FOLDER]")
@click.pass_context
def list_problems(context: click.Context, folder: str | None) -> int:
    """List the problem files of FOLDER (default: problems)."""
    if folder is None and not DEFAULT_FOLDER.is_dir():
        raise click.UsageError("there is no folder 'problems' here: name one")
    run = Run(rep.Terminal(), context.obj)
    rows = []
    for path in discover(folder or str(DEFAULT_FOLDER)):
        with run.forgiving(path.stem):
            file = load(path)
            parameters = ", ".join(_parameter_text(name, value) for name, value in file.defaults.items())
            meshes = ", ".join(map(str, file.sizes)) or ("any n" if file.has_mesh else "-")
            rows.append((shown(path.absolute()), file.title, parameters, meshes))
    run.terminal.show(rep.catalogue_table(rows))
    return run.exit_code(holds=True)


def _parameter_text(name: str, default: Any) -> str:
    return name if default is inspect.Parameter.empty else f"{name}={default}"


@cli.command()
@click.argument("file", metavar="FILE")
@parameter_option
@click.option(
    "--tolerance", type=float, default=1e-9, show_default=True, help="Relative accuracy of the unknown."
)
@click.option(
    "--globalization", type=click.Choice(["auto", "full", "dual", "residual", "envelope"]), default="auto"
)
@click.option("--max-steps", type=int, default=100, show_default=True, help="Newton steps at most.")
@click.option(
    "--picture", metavar="OUT", callback=_output, help="Draw the solution (or the steps) to a file."
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
    solution: Solution | None = None
    with terminal.reserved(), run.forgiving(job.name, job.file):
        problem = job.file.build(**job.parameters)
        try:
            with terminal.progress(job.name) as report:
                solution = solve_problem(
                    problem, tolerance=tolerance, globalization=globalization, max_steps=max_steps,
                    callback=lambda s: report(f"step {s.index}, accuracy {s.accuracy:.1e}", None),
                )  # fmt: skip
        except KeyboardInterrupt as error:
            _show_interrupted(terminal, job, error)
            return INTERRUPTED
        terminal.show(rep.solution_summary(job.name, rep.setting(job.parameters, solution.x.size), solution))
        pairs = _summary(job, problem, solution)
        if pairs:
            terminal.show("", rep.pairs_table(pairs))
        if picture is not None:
            figure = _figure(job, problem, solution)
            rep.save(rep.history_figure(solution) if figure is None else figure, picture)
            terminal.show("", f"Picture: {picture}")
    if solution is not None:
        document = rep.solution_document(fingerprint(__version__), job.file.name, job.parameters, solution)
        _write(terminal, document, json_path)
    return run.exit_code(holds=solution is not None and solution.converged)


@cli.command()
@click.argument("files", metavar="FILE...", nargs=-1, required=True)
@parameter_option
@click.option("--sizes", metavar="N,N,...", callback=_mesh_sizes, help="Mesh sizes n, one run each.")
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
    "--html", "html_path", metavar="OUT", callback=_output, help="Write a page that needs no other file."
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
        own_methods = _load_methods(methods)
        folder = _picture_folder(pictures)
        for job in run.jobs(files, given, sizes):
            try:
                with run.forgiving(job.name, job.file):
                    entry, problem = _assessed(job, terminal, own_methods, budget)
                    entries.append(entry)
                    _illustrate(run, job, entry, problem, html_path is not None, folder)
                    terminal.show(rep.comparison(entry), "")
            except KeyboardInterrupt as error:
                _show_interrupted(terminal, job, error)
                run.interrupted = True
                run.errors.append((job.name, "interrupted"))
                break
    if len(entries) + len(run.errors) > 1:
        terminal.show(rep.overview_table(entries, run.errors))
    if entries or run.errors:
        terminal.show(rep.conclusion(entries, run.errors))
    _write(
        terminal, rep.comparison_document(environment, [e.assessment for e in entries], run.errors), json_path
    )
    if html_path is not None:
        command = shlex.join(["ssn", *context.meta["ssn.arguments"]])
        html_path.write_text(rep.page(entries, environment, run.errors, command=command), "utf-8")
        terminal.show(f"Page: {html_path}")
    return run.exit_code(all(entry.assessment.holds for entry in entries))


def _assessed(
    job: Job, terminal: rep.Terminal, methods: list[tuple[str, Callable[..., Any]]], budget: float
) -> tuple[rep.Entry, Any]:
    problem = job.file.build(**job.parameters)
    with terminal.progress(job.name) as report:
        assessment = assess(
            problem, parameters=job.parameters, name=job.file.name, known=job.file.known, methods=methods or None,
            budget=budget, progress=report,
        )  # fmt: skip
    return rep.Entry(assessment, job.file.description), problem


def _illustrate(
    run: Run, job: Job, entry: rep.Entry, problem: Any, for_page: bool, folder: Path | None
) -> None:
    """Add what the problem file has to say and to show; its errors do not lose the evidence."""
    solution = entry.assessment.solution
    with run.forgiving(job.name, job.file):
        entry.summary = _summary(job, problem, solution)
    if for_page and not rep.pictures_available():
        entry.remarks.append("The page has no pictures: they need matplotlib, pip install 'ssn[problems]'")
        for_page = False
    with run.forgiving(job.name, job.file):
        figure = _figure(job, problem, solution) if for_page or folder is not None else None
        if folder is not None:
            path = run.new_name(folder, job)
            rep.save(rep.history_figure(solution) if figure is None else figure, path)
            entry.remarks.append(f"Picture: {path}")
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


def _load_methods(specifications: Sequence[str]) -> list[tuple[str, Callable[..., Any]]]:
    """Return (name, function) for each MODULE:FUNCTION."""
    methods: dict[str, Callable[..., Any]] = {}
    for text in specifications:
        place, _, function_name = text.rpartition(":")
        if not place or not function_name:
            raise click.UsageError(f"--method {text}: expected MODULE:FUNCTION")
        is_file = place.endswith(".py") or "/" in place or os.sep in place
        module = load_module(place) if is_file else _import(place, text)
        function = getattr(module, function_name, None)
        if not callable(function):
            raise click.UsageError(f"--method {text}: {place} has no function {function_name!r}")
        name = f"{Path(place).stem}:{function_name}" if is_file else text
        if name in methods:
            raise click.UsageError(f"--method {text}: there is a method of this name already")
        methods[name] = function
    return list(methods.items())


def _import(name: str, specification: str) -> Any:
    if os.getcwd() not in sys.path and "" not in sys.path:
        sys.path.append(os.getcwd())  # where python -m looks, too; last, so that it hides nothing
    try:
        return importlib.import_module(name)
    except Exception as error:
        raise click.UsageError(f"--method {specification}: {type(error).__name__}: {error}") from error


def main(program: str = "ssn") -> None:
    """Run the command line and exit."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(
                errors="replace"
            )  # a terminal without Unicode shows a question mark, no traceback
    cli(prog_name=program)
