"""Membrane between a floor and a ceiling: three double obstacle problems with known answers.

minimise int |grad u|^2 / 2 - f u with floor <= u <= ceiling; equivalently F = -Lap u - f is zero where the membrane is
free, >= 0 where it lies on the floor and <= 0 where it is pressed against the ceiling. Dimensionless.

case="disc": lifted by a load q = 12 within the unit circle, pressed down by q beyond, between -1 and 1, on the square
    (-2, 2)^2 with boundary values -1. The solution is radial, with C the larger and c the smaller contact radius:
    u = 1 for r <= c, 1 - q (r^2 - c^2) / 4 + (q c^2 / 2) ln(r / c) up to r = 1, from there
    -1 + q (r^2 - C^2) / 4 - (q C^2 / 2) ln(r / C) up to r = C, and -1 beyond. Value and slope agree at r = 1 for
    c^2 + C^2 = 2 and c^2 ln c + C^2 ln C = 4 / q. Derived here.
case="symmetric": load 80 sin(2 pi x1) sin(pi x2) in the unit square, |u| <= 0.3, zero boundary values. The solution is
    odd about x1 = 1/2, so contact sets and forces of floor and ceiling agree.
case="bilateral": the floor s^3 and the ceiling s^2 + 0.02 with s = sin(9.2 x1) sin(9.3 x2) cross nowhere, load 1 in the
    unit square, zero boundary values. Sum over the interior points of a quarter of the squared differences to the four
    neighbours, so that edges to the boundary have half weight; n + 2 points a side.
    Source: R. Dembo, U. Tulowitzki, Yale report B-71 (1983), problem B (from memory); optimal values as printed in the
    collection of I. Bongartz, A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995) 123-160.

Linear finite elements on a uniform mesh of right triangles with n interior points a side (five-point matrix).

Caution: from one side plain active-set steps move the edge of a contact set by a layer of nodes a step; starting from
the solution on a coarser mesh (`transfer`) keeps their number small.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)
CASES = ("disc", "symmetric", "bilateral")

LOAD = 12.0  # q of case "disc"
INNER = 0.4826198097695052  # c
OUTER = 1.3293149059639882  # C
#: n + 2 -> optimal value of case "bilateral"
PRINTED = {4: -0.0081108, 10: 2.87503823, 23: 6.51932527, 32: 6.88708670}
_DERIVED = "exact solution of the module docstring"


@dataclass(frozen=True)
class MeshData:
    """Mesh of n x n interior points; arrays of shape (n * n,), x1 varies slowest; `line` has the boundary, too."""

    n: int
    h: float
    case: str
    line: FloatArray
    boundary: float
    x1: FloatArray
    x2: FloatArray


def exact_solution(r: FloatArray) -> FloatArray:
    """Return the solution of case "disc" at distance r from the centre."""
    s = np.clip(r, INNER, OUTER)
    lifted = 1.0 - LOAD * (s**2 - INNER**2) / 4 + LOAD * INNER**2 / 2 * np.log(s / INNER)
    pressed = -1.0 + LOAD * (s**2 - OUTER**2) / 4 - LOAD * OUTER**2 / 2 * np.log(s / OUTER)
    return np.where(s <= 1.0, lifted, pressed)


def build(n: int = 64, case: str = "disc") -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.
    case : {"disc", "symmetric", "bilateral"}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(map(repr, CASES))}, got {case!r}")
    start, end = (-2.0, 2.0) if case == "disc" else (0.0, 1.0)
    line = np.linspace(start, end, n + 2)
    h = (end - start) / (n + 1)
    x1, x2 = (x.ravel() for x in np.meshgrid(line[1:-1], line[1:-1], indexing="ij"))
    floor: Any
    ceiling: Any
    boundary = 0.0
    if case == "disc":
        # the load of a node is that of its cell: the part of the cell within the unit circle
        inside = _share_within_unit_circle(x1, x2, h)
        load = LOAD * (2.0 * inside - 1.0)
        floor, ceiling, boundary = -1.0, 1.0, -1.0
    elif case == "symmetric":
        load = 80.0 * np.sin(2 * np.pi * x1) * np.sin(np.pi * x2)
        floor, ceiling = -0.3, 0.3
    else:
        load = np.ones(n * n)
        s = np.sin(9.2 * x1) * np.sin(9.3 * x2)
        floor, ceiling = s**3, s**2 + 0.02
    edge = 0.5 if case == "bilateral" else 1.0
    neighbours_outside = np.zeros((n, n))
    for side in (np.s_[0], np.s_[-1], np.s_[:, 0], np.s_[:, -1]):
        neighbours_outside[side] += edge
    q = -(h**2) * load - boundary * neighbours_outside.ravel()
    problem = ssn.ComplementarityProblem(ssn.AffineMap(five_point(n, edge), q), floor, ceiling)
    problem.mesh_data = MeshData(int(n), h, case, line, boundary, x1, x2)
    return problem


def five_point(n: int, edge: float = 1.0) -> sp.csr_array:
    """Stiffness matrix of linear elements on right triangles, n x n interior points; `edge` weighs boundary edges."""
    ones, diagonal = np.ones(n - 1), 2.0 * np.ones(n)
    diagonal[[0, -1]] = 1.0 + edge
    second = sp.diags_array([-ones, diagonal, -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def _share_within_unit_circle(x1: FloatArray, x2: FloatArray, h: float, parts: int = 16) -> FloatArray:
    """Share of the cell of side h about each node that lies within the unit circle, from parts^2 points."""
    offsets = h * ((np.arange(parts) + 0.5) / parts - 0.5)
    share = np.zeros(x1.size)
    for a in offsets:
        for b in offsets:
            share += (x1 + a) ** 2 + (x2 + b) ** 2 <= 1.0
    return share / parts**2


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a displacement of `coarse` to `fine`: bilinear, exact on the boundary."""
    mesh = coarse.mesh_data
    points = np.column_stack([fine.mesh_data.x1, fine.mesh_data.x2])

    def carry(displacement: FloatArray) -> FloatArray:
        values = np.pad(np.reshape(displacement, (mesh.n, mesh.n)), 1, constant_values=mesh.boundary)
        return RegularGridInterpolator((mesh.line, mesh.line), values)(points)

    return carry


def in_contact(solution: ssn.Solution, side: str) -> npt.NDArray[np.bool_]:
    """Return which nodes touch the floor (side="lower") or the ceiling ("upper")."""
    return solution.pieces["control"] == solution.pieces.legend["control"].index(side)


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the exact solution, the symmetry, or the printed optimal value."""
    mesh = problem.mesh_data
    if mesh.case == "disc":
        return _disc_values(problem, solution)
    if mesh.case == "symmetric":
        return _symmetry_values(problem, solution)
    printed = PRINTED.get(mesh.n + 2)
    if printed is None:
        return []
    source = "Bongartz et al. (1995), obstacle problem B, value printed in the file"
    return [_check("optimal value, digits printed", printed, solution.objective, 6e-8, source)]


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": expected,
        "computed": float(computed),
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def _disc_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    h = mesh.h
    error = solution.x - exact_solution(np.hypot(mesh.x1, mesh.x2))
    ceiling, floor = in_contact(solution, "upper"), in_contact(solution, "lower")
    force = solution.multipliers["contact"]
    beyond = (4.0 - h) ** 2 - h**2 * np.count_nonzero(floor)  # the cells of the interior nodes fill (4 - h)^2
    return [
        _check("largest error of the solution, 2 h^2", 0.0, np.abs(error).max(), 2 * h**2, _DERIVED),
        _check("L2 error of the solution, 2 h^2", 0.0, h * np.linalg.norm(error), 2 * h**2, _DERIVED),
        _check(
            "radius of the contact with the ceiling, one mesh width",
            INNER, np.sqrt(h**2 * np.count_nonzero(ceiling) / np.pi), h, _DERIVED,
        ),
        _check(
            "radius from which the membrane lies on the floor, one mesh width",
            OUTER, np.sqrt(beyond / np.pi), h, _DERIVED,
        ),
        _check(
            "force of the ceiling, 0.1 or h^2",
            -np.pi * INNER**2 * LOAD, force[ceiling].sum(), max(0.1, h**2), _DERIVED,
        ),
    ]  # fmt: skip


def _symmetry_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    n = problem.mesh_data.n
    source = "the solution is unique, and minus its mirror image solves the same problem"
    u = solution.x.reshape(n, n)
    force = solution.multipliers["contact"]
    ceiling, floor = in_contact(solution, "upper"), in_contact(solution, "lower")
    total = force[ceiling].sum() + force[floor].sum()
    return [
        _check("largest |u + mirror image|", 0.0, np.abs(u + u[::-1]).max(), 1e-10, source),
        _check("nodes on the ceiling minus nodes on the floor", 0.0, float(ceiling.sum()) - floor.sum(), 0.0, source),
        _check("force of the ceiling plus force of the floor", 0.0, total, 1e-9, source),
    ]  # fmt: skip


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw a cut through the middle between floor and ceiling, and the contact sets."""
    mesh = problem.mesh_data
    n, line = mesh.n, mesh.line
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, width_ratios=[1.35, 1])
    row = (n - 1) // 2
    cut = np.arange(n) * n + row  # along x1
    inner = line[1:-1]
    left.fill_between(
        inner, problem.lower[cut].min() - 0.2, problem.lower[cut], color="0.85", label="floor, ceiling"
    )
    left.fill_between(inner, problem.upper[cut], problem.upper[cut].max() + 0.2, color="0.85")
    if mesh.case == "disc":
        r = np.hypot(line, line[row + 1])
        left.plot(line, exact_solution(r), color="C1", lw=3, alpha=0.5, label="exact")
    left.plot(inner, solution.x[cut], color="C0", lw=1.2, label="computed")
    left.set(xlabel="$x_1$", title=f"cut at $x_2$ = {line[row + 1]:.3f}", xlim=(line[0], line[-1]))
    left.legend(frameon=False, loc="upper right")
    side = in_contact(solution, "upper").astype(float) - in_contact(solution, "lower")
    ends = (line[0] + mesh.h / 2, line[-1] - mesh.h / 2) * 2
    right.imshow(
        np.where(side == 0, np.nan, side).reshape(n, n).T,
        origin="lower", extent=ends, cmap="coolwarm", vmin=-2, vmax=2, interpolation="nearest",
    )  # fmt: skip
    if mesh.case == "disc":
        angle = np.linspace(0.0, 2 * np.pi, 200)
        for radius in (INNER, OUTER):
            right.plot(radius * np.cos(angle), radius * np.sin(angle), color="k", lw=0.8)
    right.set(
        title="red: ceiling, blue: floor",
        xlabel="$x_1$",
        ylabel="$x_2$",
        xlim=(line[0], line[-1]),
        ylim=(line[0], line[-1]),
        aspect="equal",
    )
    figure.suptitle(
        f"Membrane between two obstacles, {mesh.case}, n = {n}, {len(solution.steps)} Newton steps"
    )
    return figure
