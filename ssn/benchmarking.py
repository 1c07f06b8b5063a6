"""A folder of problem files as a suite of asv benchmarks.

A benchmark module of five lines, in the folder that asv.conf.json calls `benchmark_dir`:

    from ssn.benchmarking import suite

    globals().update(suite("../my_problems", parameters={"plate": {"alpha": [1e-4, 1e-6]}}))

Each problem file becomes two classes, named after the file. For ``plate.py``:

- ``Plate``: ``time_solve`` (a fresh problem each time: factorisation included, assembly excluded), ``peakmem_solve``
  and ``peakmem_setup``, the same process without the solve, which is to be subtracted;
- ``PlateFigures``: figures that repeat exactly, lower being better throughout: `FIGURES` lists them.

The cases are the file's `SIZES` times the lists in `parameters`. The figures of a case are computed once a run, in
whichever process needs them first, and kept in the directory that `setup_cache` makes; a case that raises does so in
each of its figures and in no other case. `version` holds the version of what is measured here and the file's own
``VERSION`` ("1" where it has none): raise it when the problem changes, so that old results are not compared.
"""

from __future__ import annotations

import hashlib
import json
import os
import sys
import tempfile
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import Any, ClassVar

from .errors import InputError, ProblemFileError
from .evidence import judge, rate
from .evidence.agreement import checked_tolerance, decide
from .evidence.check import describe
from .evidence.references import references
from .problem_file import ProblemFile, discover, load
from .solution import Solution
from .solve import solve
from .validate import scalar

__all__ = ["FIGURES", "CaseFailedError", "remembered", "suite"]

# Of what is measured and how; a change makes old results incomparable.
VERSION = "1"

#: Figure -> (unit, what it is).
FIGURES = {
    "unsolved": ("0 or 1", "1 where the solve has not converged; all other figures then fail."),
    "newton_steps": ("steps", "Newton steps of the solve."),
    "state_solves": ("solves", "Solves with the state operator or its adjoint, final checks included."),
    "operator_products": ("products", "Products with matrices of the problem, final checks included."),
    "order_shortfall": (
        "2 - order",
        "What the observed order lacks to 2: 0 for exact or at least quadratic convergence, 1 for linear, 2 for none "
        "and where rounding leaves the order undecided.",
    ),
    "distance": ("relative", "Distance of the nearest independent method's point to ours."),
    "disagreement": ("0 or 1", "0 where the agreement with an independent method holds, else 1."),
    "accuracy": (
        "relative",
        "Accuracy recomputed at the returned point; the tolerance where it is better, since that is left to chance.",
    ),
}

# Of the order's digits: more differ from one platform to the next.
ORDER_DIGITS = 2


class CaseFailedError(RuntimeError):
    """A case of a suite did not yield the figure; the message says why."""


def suite(
    places: str | os.PathLike[str] | Iterable[str | os.PathLike[str]],
    *,
    parameters: Mapping[str, Mapping[str, Sequence[Any]]] | None = None,
    sizes: Mapping[str, Sequence[int]] | None = None,
    tolerance: float = 1e-9,
    agreement_tolerance: float = 1e-6,
    budget: float = 120.0,
) -> dict[str, type]:
    """Make asv benchmark classes from problem files.

    Parameters
    ----------
    places : path, or iterable of paths
        Problem files, and folders of them; relative to the folder of the calling module.
    parameters : mapping, optional
        Problem name -> parameter of its `build` -> values. All combinations become cases: keep them few, each figure
        of each case is a process.
    sizes : mapping, optional
        Problem name -> meshes, instead of the file's `SIZES`.
    tolerance : float
        For the solves.
    agreement_tolerance : float
        Relative distance within which methods agree; at most 1e-3.
    budget : float
        Seconds for the reference of a case. A reference that needs more makes ``track_distance`` fail rather than
        depend on the speed of the machine.

    Returns
    -------
    dict of str to type
        To be put into a module: ``globals().update(suite(...))``.

    Raises
    ------
    InputError
        For a name in `parameters` or `sizes` that no file has, a parameter without values, or two files of one name.

    Notes
    -----
    Files are loaded when a benchmark of theirs is looked at. One that cannot be loaded does not disturb the others:
    its benchmarks fail with the reason.
    """
    caller = sys._getframe(1).f_globals.get("__file__")
    base = Path.cwd() if caller is None else Path(caller).resolve().parent
    given = [places] if isinstance(places, str | os.PathLike) else list(places)
    paths = discover([base / place for place in given])
    parameters, sizes = dict(parameters or {}), dict(sizes or {})
    for name in {**parameters, **sizes}:
        if name not in {path.stem for path in paths}:
            raise InputError(f"there is no problem {name!r} in {', '.join(map(str, given))}")
    for name, grid in parameters.items():
        if "n" in grid:
            raise InputError(f"{name}: give meshes by sizes={{{name!r}: [...]}}, not as a parameter")
    for name, values in [
        *sizes.items(),
        *((f"{p}, {k}", v) for p, g in parameters.items() for k, v in g.items()),
    ]:
        if isinstance(values, str) or not list(values):
            raise InputError(f"{name}: expected a list of values, got {values!r}")
    common = {
        "tolerance": scalar(tolerance, "tolerance", positive=True),
        "agreement_tolerance": checked_tolerance(agreement_tolerance),
        "budget": scalar(budget, "budget", positive=True),
    }
    made: dict[str, type] = {}
    for path in paths:
        name = _class_name(path.stem)
        if name in made:
            raise InputError(f"two problem files would make the class {name}; rename {path}")
        own = {
            "path": path,
            "grid": {key: list(values) for key, values in parameters.get(path.stem, {}).items()},
            "meshes": list(sizes[path.stem]) if path.stem in sizes else None,
            **common,
        }
        for title, kind in ((name, SolveBenchmarks), (f"{name}Figures", FigureBenchmarks)):
            made[title] = type(title, (kind,), {**own, "__doc__": f"{path.stem}: {kind.__doc__}"})
    return made


class ProblemBenchmarks:
    """What the two kinds of benchmarks of a problem file share: the cases."""

    path: ClassVar[Path]
    grid: ClassVar[dict[str, list[Any]]]
    meshes: ClassVar[list[int] | None]
    tolerance: ClassVar[float]
    agreement_tolerance: ClassVar[float]
    budget: ClassVar[float]
    timeout = 600

    # Properties, so that a process loads the one file it is about.

    @property
    def params(self) -> list[list[Any]]:
        """The values of each parameter, as asv wants them."""
        return list(self._axes.values())

    @property
    def param_names(self) -> list[str]:
        """The names of the parameters."""
        return list(self._axes)

    @property
    def version(self) -> str:
        """Versions of what is measured and of the problem."""
        return f"{VERSION}, problem {self._problem_version}"

    def _build(self, values: Sequence[Any]) -> Any:
        """A fresh problem; raises whatever is wrong with the file."""
        file = load(self.path)
        return file.build(**dict(zip(self._axes, values, strict=True)))

    @cached_property
    def _file(self) -> ProblemFile | None:
        try:
            return load(self.path)
        except ProblemFileError:
            return None

    @cached_property
    def _axes(self) -> dict[str, list[Any]]:
        file, meshes = self._file, self.meshes
        if meshes is None and file is not None:
            meshes = list(file.sizes)
            if not meshes and isinstance(file.defaults.get("n"), int):
                meshes = [file.defaults["n"]]
        return {**({"n": meshes} if meshes else {}), **self.grid}

    @cached_property
    def _problem_version(self) -> str:
        if self._file is None:
            return "unknown"
        module = sys.modules.get(self._file.builder.__module__)
        return str(getattr(module, "VERSION", "1"))


class SolveBenchmarks(ProblemBenchmarks):
    """Seconds and memory of one solve."""

    number = 1
    rounds = 1
    repeat = (5, 11, 20.0)
    warmup_time = 0.0

    def setup(self, *values: Any) -> None:
        """Assemble."""
        self._fresh = self._build(values)

    def _solve(self) -> Solution:
        # a problem keeps its factorisation: solving it a second time would measure something else
        problem = self.__dict__.pop("_fresh")
        return solve(problem, tolerance=self.tolerance).require()

    def time_solve(self, *values: Any) -> None:
        """One solve, factorisation included, assembly excluded."""
        self._solve()

    def peakmem_solve(self, *values: Any) -> None:
        """Assembly and one solve."""
        self._solve()

    def peakmem_setup(self, *values: Any) -> None:
        """Assembly only: the baseline of `peakmem_solve`."""


class FigureBenchmarks(ProblemBenchmarks):
    """Figures that repeat exactly; lower is better."""

    def setup_cache(self) -> str:
        """Make the directory that keeps the figures of this run; asv removes it."""
        return tempfile.mkdtemp(prefix="figures-", dir=os.getcwd())

    setup_cache.timeout = 600  # type: ignore[attr-defined]

    def _figure(self, name: str, directory: str, values: Sequence[Any]) -> Any:
        key = json.dumps([str(self.path), self.version, self.tolerance, repr(values)])
        found = remembered(directory, key, lambda: self._measure(values))
        if name not in found["figures"]:
            raise CaseFailedError(found["reasons"].get(name) or found["reasons"]["unsolved"])
        return found["figures"][name]

    def _measure(self, values: Sequence[Any]) -> dict[str, Any]:
        """All figures of a case, and the reasons why some are missing."""
        problem = self._build(values)
        solution = solve(problem, tolerance=self.tolerance)
        if not solution.converged:
            why = f"{solution.outcome.value}: {solution.message}\n{solution.history()}"
            return {"figures": {"unsolved": 1}, "reasons": {"unsolved": why}}
        figures: dict[str, Any] = {
            "unsolved": 0,
            "newton_steps": len(solution.steps),
            "state_solves": solution.work.state_solves,
            "operator_products": solution.work.operator_products,
        }
        reasons: dict[str, str] = {}

        def attempt(names: Sequence[str], compute: Callable[[], Mapping[str, Any]]) -> None:
            try:
                figures.update(compute())
            except Exception as error:
                reasons.update(dict.fromkeys(names, describe(error)))

        attempt(["accuracy"], lambda: {"accuracy": self._accuracy(problem, solution)})
        attempt(["order_shortfall"], lambda: {"order_shortfall": _order_shortfall(problem, solution)})
        attempt(["distance", "disagreement"], lambda: self._agreement(problem, solution, reasons))
        return {"figures": figures, "reasons": reasons}

    def _accuracy(self, problem: Any, solution: Solution) -> float:
        accuracy = judge.accuracy(problem, solution.x)
        if not accuracy < float("inf"):
            raise ArithmeticError(f"the accuracy is {accuracy}")
        return max(accuracy, self.tolerance)

    def _agreement(self, problem: Any, solution: Solution, reasons: dict[str, str]) -> dict[str, Any]:
        found = references(
            problem, solution, budget=self.budget, agreement_tolerance=self.agreement_tolerance
        )
        verdict, note = decide(problem, solution, found, self.agreement_tolerance)
        figures: dict[str, Any] = {"disagreement": int(verdict != "holds")}
        late = [m.name for m in found if m.outcome == "budget used up"]
        distance = min(m.distance for m in found)
        if late:
            reasons["distance"] = (
                f"{late[0]} used up its {self.budget:g} s: the distance would not repeat ({note})"
            )
        elif not distance < float("inf"):
            reasons["distance"] = f"the distance is {distance} ({note})"
        else:
            figures["distance"] = distance
        return figures


def _order_shortfall(problem: Any, solution: Solution) -> float:
    speed = rate(problem, solution, samples=2)
    if speed.verdict == "exact":
        return 0.0
    if speed.holds and speed.order is not None:
        return round(max(0.0, 2.0 - speed.order), ORDER_DIGITS)
    return 1.0 if speed.verdict == "linear" else 2.0


def _tracker(name: str) -> Callable[..., Any]:
    def track(self: FigureBenchmarks, directory: str, *values: Any) -> Any:
        return self._figure(name, directory, values)

    track.__name__ = f"track_{name}"
    track.__qualname__ = f"FigureBenchmarks.track_{name}"
    track.unit, track.__doc__ = FIGURES[name]  # type: ignore[attr-defined]
    return track


for _name in FIGURES:
    setattr(FigureBenchmarks, f"track_{_name}", _tracker(_name))


def remembered(directory: str | os.PathLike[str], key: str, compute: Callable[[], Any]) -> Any:
    """Compute once a run: what a process has computed for `key` is read by those after it.

    Parameters
    ----------
    directory : path
        Kept for the run, such as one that `setup_cache` has made.
    key : str
    compute : callable
        Returns plain data for JSON.

    Returns
    -------
    The data.

    Raises
    ------
    CaseFailedError
        Where `compute` raised, here or in an earlier process, or was killed there; not computed again.
    """
    digest = hashlib.blake2b(key.encode(), digest_size=12).hexdigest()
    path = Path(directory) / f"{digest}.json"
    if not path.exists():
        # what stays behind if this process is killed
        _write(path, {"error": "an earlier process was killed, or out of time, while it computed this case"})
        try:
            stored = {"value": compute()}
        except Exception as error:
            stored = {"error": describe(error)}
        _write(path, stored)
    stored = json.loads(path.read_text("utf-8"))
    if "error" in stored:
        raise CaseFailedError(stored["error"])
    return stored["value"]


def _write(path: Path, data: Mapping[str, Any]) -> None:
    beside = path.with_suffix(".new")
    beside.write_text(json.dumps(data), "utf-8")
    os.replace(beside, path)


def _class_name(stem: str) -> str:
    words = "".join(c if c.isalnum() else " " for c in stem).split()
    name = "".join(word[0].upper() + word[1:] for word in words)
    return name if name.isidentifier() else f"Problem{name}"
