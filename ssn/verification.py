"""All evidence about a problem file: the assessment of one problem, and the study over its meshes."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from .evidence import Assessment, Check, MeshStudy, mesh_study
from .problem_file import ProblemFile

NO_MESH = "not applicable: the problem has no mesh"
NO_SIZES = "not applicable: the file names no SIZES"
NOT_DONE = "not run to the end"


@dataclass(frozen=True)
class Verification:
    """The evidence about one problem file.

    Attributes
    ----------
    assessment : Assessment
        Of the problem with the parameters asked for.
    study : MeshStudy or None
        None where there is none; the note says why.
    note : str
        The verdict on the meshes in words, or why there is none.
    complete : bool
        False where the study was begun and not finished.
    seconds : float
        Wall time of all of it: a profile, not evidence.
    """

    assessment: Assessment
    study: MeshStudy | None
    note: str
    complete: bool = True
    seconds: float = float("nan")

    @property
    def checks(self) -> tuple[Check, ...]:
        """Everything that can fail, the study included."""
        missing = () if self.complete else (Check("mesh study", False, self.note),)
        return (*self.assessment.checks, *(() if self.study is None else self.study.checks()), *missing)

    @property
    def holds(self) -> bool:
        """Whether all evidence holds."""
        return all(check.holds for check in self.checks)

    @property
    def mesh_independent(self) -> bool | None:
        """Whether the number of steps stays as the mesh is refined; None where that is not known."""
        return None if self.study is None else self.study.mesh_independent

    def weak_points(self) -> list[str]:
        """The names of the checks that do not hold."""
        return [check.name for check in self.checks if not check.holds]

    def failures(self) -> list[str]:
        """What does not hold, one sentence each, the name of the check first."""
        return [f"{check.name}: {check.detail}" for check in self.checks if not check.holds]

    def known(self) -> tuple[int, int]:
        """How many known values hold, and how many there are, on this problem and over the meshes."""
        values = list(self.assessment.known)
        values += [] if self.study is None else [value for row in self.study.rows for value in row.known]
        return sum(value.holds for value in values), len(values)

    def as_dict(self) -> dict[str, Any]:
        """Return the result object of ``verify --json``."""
        return {
            **self.assessment.as_dict(),
            "mesh_study": None if self.study is None else self.study.as_dict(),
            "mesh_study_note": self.note,
            "holds": self.holds,
            "failures": self.failures(),
            "seconds": self.seconds,
        }


def study_sizes(file: ProblemFile, sizes: Sequence[int] = ()) -> tuple[tuple[int, ...], str]:
    """Return the meshes of a study, coarsest first, and where there are none, why.

    Parameters
    ----------
    file : ProblemFile
    sizes : sequence of int
        Instead of the file's own SIZES.
    """
    if not file.has_mesh:
        return (), NO_MESH
    chosen = tuple(sorted(set(sizes or file.sizes)))
    return chosen, "" if chosen else NO_SIZES


def study(
    file: ProblemFile,
    sizes: Sequence[int],
    parameters: Mapping[str, Any],
    progress: Callable[..., Any] | None = None,
) -> MeshStudy:
    """Solve the problem of a file on several meshes, see `ssn.evidence.mesh_study`."""
    return mesh_study(
        file.build, sizes, parameters=parameters, known=file.known, transfer=file.transfer, progress=progress
    )
