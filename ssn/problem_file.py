"""Problem files: one Python module a problem, loaded by path."""

from __future__ import annotations

import ast
import contextlib
import hashlib
import importlib.util
import inspect
import os
import sys
import traceback
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from .complementarity import ComplementarityProblem
from .composite import CompositeProblem
from .control import ControlProblem
from .errors import InputError, MissingExtraError, ProblemFileError
from .nonlinear_control import NonlinearControlProblem
from .sum_problem import SumProblem

HOOKS = ("transfer", "known", "reference", "picture", "summary")
# Distributions whose absence is answered by an extra of ours.
EXTRA_OF = {
    "skfem": "problems",
    "matplotlib": "problems",
    "sksparse": "cholmod",
    "sklearn": "problems",
    "clarabel": "test",
}
TRUE, FALSE = {"true", "yes", "on", "1"}, {"false", "no", "off", "0"}


@dataclass(frozen=True)
class ProblemFile:
    """A loaded problem file.

    Attributes
    ----------
    path : Path
        Absolute.
    name : str
        The file's name without its ending.
    description : str
        The module's docstring; empty without one.
    builder : callable
        The file's `build`. Use the method `build`, which checks.
    sizes : tuple of int
        Meshes for studies (`SIZES`); empty where the file names none.
    transfer, known, reference, picture, summary : callable or None
        The optional functions of the file: ``transfer(coarse_problem, fine_problem)``, ``known(problem, solution)``,
        ``reference(problem, budget)`` -> the unknown by a method that is not ours (see `ssn.evidence.assess`),
        ``picture(problem, solution)`` -> matplotlib Figure, ``summary(problem, solution)`` -> list of (text, text).
    """

    path: Path
    name: str
    description: str
    builder: Callable[..., Any]
    sizes: tuple[int, ...] = ()
    transfer: Callable[..., Any] | None = None
    known: Callable[..., Any] | None = None
    reference: Callable[..., Any] | None = None
    picture: Callable[..., Any] | None = None
    summary: Callable[..., Any] | None = None

    @property
    def title(self) -> str:
        """First line of the description."""
        return self.description.strip().partition("\n")[0].strip()

    @property
    def defaults(self) -> dict[str, Any]:
        """Parameters of `build` with their defaults; `inspect.Parameter.empty` for those without one."""
        return {name: p.default for name, p in self._signature().items() if p.kind is not p.VAR_KEYWORD}

    @property
    def has_mesh(self) -> bool:
        """Whether `build` takes a mesh size n."""
        return "n" in self.defaults

    def arguments(self, **parameters: Any) -> dict[str, Any]:
        """Return all parameters of `build`, defaults included, with text brought to the type of the default.

        Raises
        ------
        ProblemFileError
            For a name that `build` does not take, a value that does not fit, or a parameter without a value.
        """
        signature = self._signature()
        open_ended = any(p.kind is p.VAR_KEYWORD for p in signature.values())
        accepted = self.defaults
        unknown = [name for name in parameters if name not in accepted]
        if unknown and not open_ended:
            names = ", ".join(accepted) or "none at all"
            raise self._error(f"build has no parameter {unknown[0]!r}; it takes: {names}")
        values = dict(accepted)
        for name, value in parameters.items():
            if isinstance(value, str):
                value = self._parsed(name, value, signature.get(name))
            values[name] = value
        missing = [name for name, value in values.items() if value is inspect.Parameter.empty]
        if missing:
            raise self._error(f"build needs a value for {', '.join(missing)}, which has no default")
        return values

    def build(self, **parameters: Any) -> Any:
        """Build the problem.

        Parameters
        ----------
        **parameters
            Parameters of the file's `build`. Text is brought to the type of the parameter's default.

        Returns
        -------
        ControlProblem, CompositeProblem, ComplementarityProblem, SumProblem, or object with residual and linearize

        Raises
        ------
        ProblemFileError
            For unknown names and unusable values, for whatever goes wrong inside the file (with file, line and the
            exception's text), and where what comes back is not a problem.
        """
        values = self.arguments(**parameters)
        with self.guard("build"):
            problem = self.builder(**values)
        if problem is None:
            raise self._error("build returned None; it must return the problem")
        statements = (
            ControlProblem,
            NonlinearControlProblem,
            CompositeProblem,
            ComplementarityProblem,
            SumProblem,
        )
        if isinstance(problem, statements):
            return problem
        if not isinstance(problem, type) and hasattr(problem, "residual") and hasattr(problem, "linearize"):
            return problem
        what = "a class, not an object" if isinstance(problem, type) else f"a {type(problem).__name__}"
        raise self._error(
            f"build returned {what}; it must return a ControlProblem, NonlinearControlProblem, CompositeProblem, "
            "ComplementarityProblem, SumProblem, or an object with residual(x) and linearize(x)"
        )

    @contextlib.contextmanager
    def guard(self, doing: str = "") -> Iterator[None]:
        """Turn any exception inside into a `ProblemFileError` with file, line and text."""
        try:
            yield
        except ProblemFileError:
            raise
        except (Exception, SystemExit) as error:
            line = _line_in(self.path, error)
            text = _explained(error, doing)
            if line is None and not isinstance(error, InputError):
                text += _outside(error)
            raise self._error(text, line) from error

    def _signature(self) -> Mapping[str, inspect.Parameter]:
        return inspect.signature(self.builder).parameters

    def _error(self, text: str, line: int | None = None) -> ProblemFileError:
        return ProblemFileError(_located(self.path, line, text))

    def _parsed(self, name: str, text: str, parameter: inspect.Parameter | None) -> Any:
        try:
            return _parse(text, *_wanted(parameter))
        except (ValueError, SyntaxError) as error:
            raise self._error(f"parameter {name}={text!r} does not fit: {error}") from None


def load(path: str | os.PathLike[str]) -> ProblemFile:
    """Load a problem file by its path.

    The module gets a name of its own in `sys.modules`, made from its path, and leaves no compiled file behind.

    Parameters
    ----------
    path : str or path

    Returns
    -------
    ProblemFile

    Raises
    ------
    ProblemFileError
        Where there is no such file, it cannot be imported (with the line), has no `build`, or its optional parts
        are not what they should be.
    """
    given = Path(path)
    if not given.exists():
        raise ProblemFileError(f"{given}: no such file")
    if given.is_dir():
        raise ProblemFileError(f"{given}: is a folder, expected a file")
    module = load_module(given)
    absolute = given.resolve()
    builder = getattr(module, "build", None)
    if builder is None:
        raise ProblemFileError(
            f"{shown(absolute)}: has no function build(n=..., ...), so it is not a problem file"
        )
    hooks = {name: getattr(module, name, None) for name in HOOKS}
    for name, function in {"build": builder, **hooks}.items():
        if function is not None and not callable(function):
            raise ProblemFileError(
                f"{shown(absolute)}: {name} must be a function, got {type(function).__name__}"
            )
    sizes = _sizes(absolute, getattr(module, "SIZES", ()))
    return ProblemFile(
        absolute, absolute.stem, inspect.cleandoc(module.__doc__ or ""), builder, sizes, **hooks
    )


def load_module(path: str | os.PathLike[str]) -> Any:
    """Execute a Python file as a module with a name of its own; failures become `ProblemFileError` with the line."""
    absolute = Path(path).resolve()
    digest = hashlib.blake2b(str(absolute).encode("utf-8", "surrogateescape"), digest_size=6).hexdigest()
    name = f"_ssn_file_{digest}_{absolute.stem}"
    try:
        source = absolute.read_bytes()
    except OSError as error:
        raise ProblemFileError(f"{shown(absolute)}: cannot be read: {error.strerror}") from error
    spec = importlib.util.spec_from_file_location(name, absolute)
    if spec is None or spec.loader is None:
        raise ProblemFileError(f"{shown(absolute)}: is not a Python file (its name must end in .py)")
    module = importlib.util.module_from_spec(spec)
    before = sys.modules.get(name)
    sys.modules[name] = module  # dataclasses and pickle look the module up by its name
    try:
        exec(compile(source, str(absolute), "exec", dont_inherit=True), module.__dict__)
    except (Exception, SystemExit) as error:
        if before is None:
            del sys.modules[name]
        else:
            sys.modules[name] = before
        text = _explained(error, "import")
        raise ProblemFileError(_located(absolute, _line_in(absolute, error), text)) from error
    return module


def discover(places: str | os.PathLike[str] | Iterable[str | os.PathLike[str]]) -> list[Path]:
    """Return the problem files behind files and folders, each once, in the order given; folders sorted by name.

    A folder stands for the Python files directly in it; names that begin with an underscore or a dot are left out.

    Raises
    ------
    ProblemFileError
        For a folder without a problem file. A file that does not exist is returned: loading it tells.
    """
    if isinstance(places, (str, os.PathLike)):
        places = [places]
    found: dict[Path, None] = {}
    for place in map(Path, places):
        if place.is_dir():
            inside = sorted(p for p in place.glob("*.py") if p.is_file() and p.name[0] not in "._")
            if not inside:
                raise ProblemFileError(f"{place}: no problem files in this folder (*.py)")
            found.update(dict.fromkeys(inside))
        else:
            found[place] = None
    return list(found)


def shown(path: Path) -> str:
    """Return the path as a user would write it: relative to the working directory where it lies below it."""
    try:
        return str(path.relative_to(Path.cwd()))
    except (ValueError, OSError):
        return str(path)


def _located(path: Path, line: int | None, text: str) -> str:
    return f"{shown(path)}{'' if line is None else f':{line}'}: {text}"


def _line_in(path: Path, error: BaseException) -> int | None:
    """The line of the file at which the error left it; that of a syntax error where it is in the file itself."""
    if isinstance(error, SyntaxError) and error.filename == str(path):
        return error.lineno
    lines = [
        frame.lineno for frame in traceback.extract_tb(error.__traceback__) if frame.filename == str(path)
    ]
    return lines[-1] if lines else None


def _outside(error: BaseException) -> str:
    """Where an exception comes from that did not pass through the problem file."""
    frames = traceback.extract_tb(error.__traceback__)
    return f" (at {shown(Path(frames[-1].filename))}:{frames[-1].lineno})" if frames else ""


def _explained(error: BaseException, doing: str) -> str:
    text = " ".join(str(error).split())
    where = f" in {doing}" if doing else ""
    if isinstance(error, MissingExtraError):
        return text
    if isinstance(error, ImportError):
        root = (error.name or "").partition(".")[0]
        if root in EXTRA_OF:
            return f"needs {root}, which is not installed: pip install 'ssn[{EXTRA_OF[root]}]'"
        return f"{text}; a problem file imports installed packages only"
    if isinstance(error, InputError):
        return text
    if isinstance(error, SyntaxError):
        return f"syntax error: {error.msg}"
    if isinstance(error, SystemExit):
        return f"the file ends the program{where}: sys.exit({error.code!r})"
    return f"{type(error).__name__}{where}: {text}" if text else f"{type(error).__name__}{where}"


def _sizes(path: Path, given: Any) -> tuple[int, ...]:
    try:
        sizes = tuple(given)
    except TypeError:
        sizes = (None,)
    if any(isinstance(n, bool) or not isinstance(n, int) or n < 1 for n in sizes):
        raise ProblemFileError(
            f"{shown(path)}: SIZES must be a tuple of positive whole numbers, got {given!r}"
        )
    return sizes


def _wanted(parameter: inspect.Parameter | None) -> tuple[type | None, bool]:
    """The type that a text must become (None: whatever it reads as), and whether "none" is a value, too."""
    if parameter is None:
        return None, True
    words = parameter.annotation
    if not isinstance(words, str):
        words = getattr(words, "__name__", str(words)) if isinstance(words, type) else str(words)
    parts = [part.strip() for part in words.split("|")]
    for kind in (int, float, bool, str):
        if kind.__name__ in parts:
            return kind, "None" in parts or parameter.default is None
    if parameter.default is None or parameter.default is inspect.Parameter.empty:
        return None, True
    return type(parameter.default), False


def _parse(text: str, kind: type | None, optional: bool) -> Any:
    text = text.strip()
    if optional and text.lower() == "none":
        return None
    if kind is str:
        return text
    if kind is bool:
        if text.lower() not in TRUE | FALSE:
            raise ValueError("expected true or false")
        return text.lower() in TRUE
    if kind is not None and issubclass(kind, int):
        return _whole(text)
    if kind is not None and issubclass(kind, float):
        return _number(text)
    try:
        value = ast.literal_eval(text)
    except (ValueError, SyntaxError):
        value = text
    if kind in (tuple, list):
        if not isinstance(value, (tuple, list)):
            value = (value,)
        return kind(value)
    if kind is not None and not isinstance(value, kind):
        raise ValueError(f"expected {kind.__name__}")
    return value


def _whole(text: str) -> int:
    try:
        return int(text)
    except ValueError:
        pass
    try:
        number = float(text)
    except ValueError:
        number = float("nan")
    if not number.is_integer():
        raise ValueError("expected a whole number")
    return int(number)


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise ValueError("expected a number") from None
