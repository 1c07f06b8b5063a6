"""Radial obstacle problem: a membrane over a spherical cap, with a known solution.

Find u >= psi in the square (-2, 2)^2 with -Lap u >= 0, and = 0 where u > psi; psi = sqrt(1 - r^2) for r <= 0.9,
continued by its tangent line beyond; boundary values of the exact solution

    u = sqrt(1 - r^2) for r <= a,  u = A ln(2 / r) beyond,  a^2 (ln 2 - ln a) = 1 - a^2,  A = a^2 / sqrt(1 - a^2).

Linear finite elements on a uniform mesh of right triangles with n interior points a side (five-point matrix), mesh
width h = 4 / (n + 1). F(x) is the force at each node, positive where the obstacle pushes up. Dimensionless.

Source: E. Bueler, book on the solution of partial differential equations (SIAM, 2020), chapter on the obstacle problem.

Caution: plain active-set steps from below move the edge of the contact set by a layer of nodes a step, so their number
doubles with n; starting from the solution on a coarser mesh (`transfer`) keeps it small.
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

CONTACT_RADIUS = 0.6979651482233735  # a
SLOPE = 0.680259411891719  # A
CONTACT_AREA = 1.5304436629  # pi a^2
CONTACT_FORCE = 4.274195941869  # 2 pi A
CORNER_VALUE = -0.235759946701  # u(2, 2)
_TANGENT_FROM = 0.9
_SOURCE = "exact solution; Bueler, SIAM 2020, obstacle chapter, constants recomputed"


@dataclass(frozen=True)
class MeshData:
    """Mesh of n x n interior points; arrays of shape (n * n,), x1 varies slowest."""

    n: int
    h: float
    x1: FloatArray
    x2: FloatArray
    obstacle: FloatArray
    exact: FloatArray


def exact_solution(r: FloatArray) -> FloatArray:
    """Return the solution at distance r from the centre."""
    cap = np.sqrt(np.maximum(1.0 - r**2, 0.0))
    return np.where(r <= CONTACT_RADIUS, cap, SLOPE * np.log(2.0 / np.maximum(r, CONTACT_RADIUS)))


def obstacle(r: FloatArray) -> FloatArray:
    """Return psi at distance r from the centre."""
    height = np.sqrt(1.0 - _TANGENT_FROM**2)
    tangent = height - _TANGENT_FROM / height * (r - _TANGENT_FROM)
    return np.where(r <= _TANGENT_FROM, np.sqrt(np.maximum(1.0 - r**2, 0.0)), tangent)


def build(n: int = 64) -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.

    Raises
    ------
    ssn.InputError
        For another n.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    h = 4.0 / (n + 1)
    line = np.linspace(-2.0, 2.0, n + 2)
    r = np.hypot(*np.meshgrid(line, line, indexing="ij"))
    x1, x2 = (x.ravel() for x in np.meshgrid(line[1:-1], line[1:-1], indexing="ij"))
    boundary = exact_solution(r)
    inside = boundary[1:-1, 1:-1].copy()
    boundary[1:-1, 1:-1] = 0.0
    load = boundary[:-2, 1:-1] + boundary[2:, 1:-1] + boundary[1:-1, :-2] + boundary[1:-1, 2:]
    psi = obstacle(r[1:-1, 1:-1]).ravel()
    problem = ssn.ComplementarityProblem(ssn.AffineMap(five_point(n), -load.ravel()), lower=psi)
    problem.mesh_data = MeshData(int(n), h, x1, x2, psi, inside.ravel())
    return problem


def five_point(n: int) -> sp.csr_array:
    """Stiffness matrix of linear elements on right triangles, n x n interior points."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a displacement of `coarse` to `fine`: bilinear, exact on the boundary."""
    n = coarse.mesh_data.n
    line = np.linspace(-2.0, 2.0, n + 2)
    points = np.column_stack([fine.mesh_data.x1, fine.mesh_data.x2])
    surrounded = exact_solution(np.hypot(*np.meshgrid(line, line, indexing="ij")))

    def carry(displacement: FloatArray) -> FloatArray:
        values = surrounded.copy()
        values[1:-1, 1:-1] = np.reshape(displacement, (n, n))
        return RegularGridInterpolator((line, line), values)(points)

    return carry


def in_contact(solution: ssn.Solution) -> npt.NDArray[np.bool_]:
    """Return which nodes lie on the obstacle."""
    return solution.pieces["control"] == solution.pieces.legend["control"].index("lower")


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare solution, contact radius and contact force with the exact values."""
    mesh = problem.mesh_data
    h = mesh.h
    error = solution.x - mesh.exact
    radius = float(np.sqrt(h**2 * np.count_nonzero(in_contact(solution)) / np.pi))
    force = float(solution.multipliers["contact"].sum())

    def check(what: str, kind: str, expected: float, computed: float, tolerance: float) -> dict[str, Any]:
        off = abs(computed - expected) / (abs(expected) if kind == "relative" else 1.0)
        return {
            "what": f"{what} ({kind})",
            "kind": kind,
            "expected": expected,
            "computed": computed,
            "tolerance": tolerance,
            "source": _SOURCE,
            "holds": bool(off <= tolerance),
        }

    return [
        check("largest error of the solution, h^2", "absolute", 0.0, float(np.abs(error).max()), h**2),
        check("L2 error of the solution, h^2", "absolute", 0.0, float(h * np.linalg.norm(error)), h**2),
        check("contact radius, one mesh width", "absolute", CONTACT_RADIUS, radius, h),
        check("total contact force, 1 % or h^2", "relative", CONTACT_FORCE, force, max(0.01, h**2)),
    ]


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw a cut through the centre, and the contact set with the exact circle."""
    mesh = problem.mesh_data
    n = mesh.n
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, width_ratios=[1.35, 1])
    line = np.linspace(-2.0, 2.0, n + 2)
    middle = slice((n // 2) * n, (n // 2 + 1) * n)
    r = np.hypot(line[n // 2 + 1], line)
    left.fill_between(line, -0.6, np.maximum(obstacle(r), -0.6), color="0.85", label="obstacle")
    left.plot(line, exact_solution(r), color="C1", lw=3, alpha=0.5, label="exact")
    left.plot(line[1:-1], solution.x[middle], color="C0", lw=1.2, label="computed")
    left.set(xlabel="$x_2$", title=f"cut at $x_1$ = {line[n // 2 + 1]:.3f}", xlim=(-2, 2), ylim=(-0.3, 1.1))
    left.legend(frameon=False, loc="upper right")
    grid = in_contact(solution).reshape(n, n)
    ends = (mesh.h / 2 - 2, 2 - mesh.h / 2) * 2
    right.imshow(np.where(grid.T, 1.0, np.nan), origin="lower", extent=ends, cmap="Blues", vmin=0, vmax=2)
    angle = np.linspace(0.0, 2 * np.pi, 200)
    right.plot(CONTACT_RADIUS * np.cos(angle), CONTACT_RADIUS * np.sin(angle), color="C1", label="exact edge")
    right.set(title="contact set", xlabel="$x_1$", xlim=(-1, 1), ylim=(-1, 1), aspect="equal")
    right.legend(frameon=False, loc="upper right")
    figure.suptitle(f"Membrane over a spherical cap, n = {n}, {len(solution.steps)} Newton steps")
    return figure
