"""From a folder of problem files to benchmark classes."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from ..errors import InputError
from ..evidence.agreement import checked_tolerance
from ..problem_file import discover
from ..validate import scalar
from .figures import FigureBenchmarks
from .solves import SolveBenchmarks


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


def _class_name(stem: str) -> str:
    words = "".join(c if c.isalnum() else " " for c in stem).split()
    name = "".join(word[0].upper() + word[1:] for word in words)
    return name if name.isidentifier() else f"Problem{name}"
