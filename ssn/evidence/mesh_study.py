"""Mesh study: steps, work, accuracy and values over a sequence of meshes."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

from ..errors import InputError
from ..solution import Solution
from ..solve import solve
from ..sum_problem import SumProblem
from . import judge
from .check import Check, plain
from .known import KnownValue, known_values

GROWTH = 2


@dataclass(frozen=True)
class MeshRow:
    """One mesh of a study.

    Attributes
    ----------
    n : int
    unknowns, steps, state_solves : int
    accuracy : float
        Recomputed at the returned point.
    outcome : str
    converged : bool
    objective : float
        nan where there is none.
    known : tuple of KnownValue
    failures : tuple of str
        What the known values have to complain about.
    """

    n: int
    unknowns: int
    steps: int
    state_solves: int
    accuracy: float
    outcome: str
    converged: bool
    objective: float
    known: tuple[KnownValue, ...] = ()
    failures: tuple[str, ...] = ()

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        data = {key: plain(value) for key, value in vars(self).items() if key != "known"}
        data["known"] = [value.as_dict() for value in self.known]
        return data


@dataclass(frozen=True)
class MeshStudy:
    """The rows of a study and its verdict.

    Attributes
    ----------
    rows : tuple of MeshRow
        In the order of the sizes.
    mesh_independent : bool or None
        See `mesh_independent`; None for fewer than two meshes.
    note : str
    nested_steps : tuple of int
        Steps on each mesh when every one starts from the solution on the mesh before; asked for where the steps from
        the problem's own start grow and the file has a transfer. The verdict is then about these, and the note says so.
    """

    rows: tuple[MeshRow, ...]
    mesh_independent: bool | None
    note: str
    nested_steps: tuple[int, ...] = ()

    @property
    def holds(self) -> bool:
        """Whether nothing speaks against the study: all solved, no growth of steps, known values agree."""
        return all(check.holds for check in self.checks())

    def checks(self) -> tuple[Check, ...]:
        """The study as named checks: "mesh study" and, where there are any, "mesh values"."""
        made = [Check("mesh study", self.mesh_independent is not False, self.note)]
        failures = [f"n = {row.n}: {text}" for row in self.rows for text in row.failures]
        if failures or any(row.known for row in self.rows):
            made.append(
                Check("mesh values", not failures, "; ".join(failures) or "known values agree on all meshes")
            )
        return tuple(made)

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {
            "rows": [row.as_dict() for row in self.rows],
            "mesh_independent": self.mesh_independent,
            "note": self.note,
            "nested_steps": list(self.nested_steps),
        }


def mesh_study(
    build: Callable[..., Any],
    sizes: Sequence[int],
    *,
    parameters: Mapping[str, Any] | None = None,
    known: Callable[[Any, Solution], Any] | None = None,
    transfer: Callable[[Any, Any], Callable[..., Any]] | None = None,
    progress: Callable[..., Any] | None = None,
    tolerance: float = 1e-9,
) -> MeshStudy:
    """Solve a problem on several meshes, each from its own start; where steps grow, again from mesh to mesh.

    Parameters
    ----------
    build : callable
        ``build(n=..., **parameters)`` of a problem file.
    sizes : sequence of int
        Values of n, rising.
    parameters : mapping, optional
        The other parameters.
    known : callable, optional
        ``known(problem, solution)`` of the problem file.
    transfer : callable, optional
        ``transfer(coarse_problem, fine_problem)`` of the problem file: a function that carries the unknown over.
    progress : callable, optional
        Gets a text about what is being done.
    tolerance : float

    Returns
    -------
    MeshStudy

    Raises
    ------
    InputError
        For sizes that do not rise.
    """
    if not sizes or any(b <= a for a, b in pairwise(sizes)):
        raise InputError(f"sizes must rise, got {list(sizes)}")
    others = {key: value for key, value in (parameters or {}).items() if key != "n"}
    rows: list[MeshRow] = []
    points: list[int] = []
    for n in sizes:
        if progress is not None:
            progress(f"n = {n}")
        problem = build(n=n, **others)
        solution = solve(problem, tolerance=tolerance)
        values, checks = known_values(known, problem, solution)
        if getattr(problem, "state_bounded", False) or isinstance(problem, SumProblem):
            points.append(len({record.stage for record in solution.steps}))
        rows.append(
            MeshRow(
                n=int(n),
                unknowns=int(solution.x.size),
                steps=len(solution.steps),
                state_solves=solution.work.state_solves,
                accuracy=judge.accuracy(judge.judged(problem, solution), solution.x),
                outcome=solution.outcome.value,
                converged=solution.converged,
                objective=solution.objective,
                known=values,
                failures=tuple(check.detail for check in checks if not check.holds),
            )
        )
    counts = [row.steps for row in rows]
    solved = [row.converged for row in rows]
    independent, note = mesh_independent(counts, solved)
    if independent is False and points and all(solved):
        # hard state bounds: a finer mesh needs a larger last penalty, and so more points of the path; several terms:
        # a finer mesh needs a smaller gamma
        each = [-(-steps // max(1, p)) for steps, p in zip(counts, points, strict=True)]
        independent, own = mesh_independent(each, solved)
        note = f"{note}; over {', '.join(map(str, points))} points of the path, at each of them: {own}"
    if independent is not False or transfer is None or not all(row.converged for row in rows):
        return MeshStudy(tuple(rows), independent, note)
    nested = _nested_steps(build, sizes, others, transfer, progress, tolerance)
    if nested is None:
        return MeshStudy(tuple(rows), False, f"{note}; not solved from mesh to mesh")
    independent, own = mesh_independent(nested[1:], [True] * (len(nested) - 1))
    return MeshStudy(
        tuple(rows), independent, f"{note}; each started from the mesh before: {own}", tuple(nested)
    )


def _nested_steps(
    build: Callable[..., Any],
    sizes: Sequence[int],
    parameters: Mapping[str, Any],
    transfer: Callable[[Any, Any], Callable[..., Any]],
    progress: Callable[..., Any] | None,
    tolerance: float,
) -> list[int] | None:
    """Steps on each mesh, the first from its own start and the others from the mesh before; None after a failure."""
    steps: list[int] = []
    coarse: Any = None
    start: Any = None
    for n in sizes:
        if progress is not None:
            progress(f"n = {n}, from the mesh before")
        problem = build(n=n, **parameters)
        if coarse is not None:
            start = transfer(coarse, problem)(start)
        solution = solve(problem, start, tolerance=tolerance)
        if not solution.converged:
            return None
        steps.append(len(solution.steps))
        coarse, start = problem, solution.x
    return steps


def mesh_independent(steps: Sequence[int], converged: Sequence[bool]) -> tuple[bool | None, str]:
    """Judge step counts from the coarsest mesh to the finest.

    The finest mesh may take at most two steps more than the coarsest, and a growth from mesh to mesh that lasts to
    the finest one may not add up to more than two. False where a mesh was not solved, None for a single mesh.
    """
    counts = ", ".join(map(str, steps))
    if not all(converged):
        return False, f"not solved on every mesh; steps {counts}"
    if len(steps) < 2:
        return None, "one mesh only: not applicable"
    if steps[-1] > steps[0] + GROWTH:
        return False, f"steps grow from the first mesh to the last: {counts}"
    first = len(steps) - 1
    while first > 0 and steps[first - 1] < steps[first]:
        first -= 1
    if steps[-1] - steps[first] > GROWTH:
        return False, f"steps grow over the last {len(steps) - first} meshes: {counts}"
    return True, f"steps do not grow with the mesh: {counts}"
