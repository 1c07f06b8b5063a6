"""The cases of a problem file: what its benchmarks have in common."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from functools import cached_property
from pathlib import Path
from typing import Any, ClassVar

from ..errors import ProblemFileError
from ..problem_file import ProblemFile, load

# Of what is measured and how; a change makes old results incomparable.
VERSION = "1"


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
