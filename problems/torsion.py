"""Elastic-plastic torsion of a bar: where a twisted bar yields.

minimise int |grad v|^2 / 2 - c v over the cross-section with |v| <= distance to its edge, v = 0 there. v is the stress
function divided by the yield stress k in shear (times a length), |grad v| the shear stress divided by k, and
c = 2 (shear modulus) (twist per length) (length) / k. For a simply connected section the bound is the same as
|grad v| <= 1: the bar has yielded where v lies on it. Twice the integral of v is the torque. Dimensionless.

case="square": the unit square, linear finite elements on right triangles, n x n interior points (`across` x n, if
    given). Source: B. Averick, R. Carter, J. More, G. Xue, MINPACK-2 test problem collection, Argonne preprint
    MCS-P153-0692 (1992); J. More, G. Toraldo, SIAM J. Optim. 1 (1991) 93-113; E. Dolan, J. More, T. Munson, COPS 3.0,
    Argonne report ANL/MCS-TM-273 (2004).
case="half weight": the same with edges to the boundary at half weight, as in the collection of I. Bongartz, A. Conn,
    N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995) 123-160; n = 2 Q - 2.
case="round": the unit disc on a triangulation with n rings of points. For c >= 2 the bar is elastic within the radius
    2 / c, with v = 1 - 1/c - c r^2 / 4, and has yielded beyond, with v = 1 - r; its torque is
    (2 pi / 3) (1 - (2/c)^3 / 4). Source: W. Prager, P. Hodge, Theory of Perfectly Plastic Solids (1951), chapter on
    torsion, and handbooks (from memory).

Caution: a design aid for ideal plasticity and free warping; strength, fatigue and safety factors of a real shaft are
matters of the applicable codes and a licensed engineer. From one side plain active-set steps move the edge of the
yielded set by a layer of nodes a step; `transfer` from a coarser mesh keeps their number small.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import skfem
from scipy.interpolate import LinearNDInterpolator, RegularGridInterpolator
from scipy.spatial import Delaunay
from skfem.helpers import dot, grad

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (25, 50, 100)
CASES = ("square", "half weight", "round")

_PROGRAM = "independent programs (sparse active sets, L-BFGS-B), same discretisation"
#: interior points (x1, x2) -> optimal value of case "square" for c = 5, digits, source
MINPACK2 = {
    (25, 25): (-0.41693575347, 1e-11, _PROGRAM),
    (50, 50): (-0.418087632020, 1e-11, _PROGRAM),
    (100, 100): (-0.418391026664, 1e-11, _PROGRAM),
    (50, 25): (-0.417510, 1e-6, "COPS 3.0 (2004), torsion problem (from memory)"),
    (50, 75): (-0.418199, 1e-6, "COPS 3.0 (2004), torsion problem (from memory)"),
}
#: n -> optimal value of case "half weight" for c = 5
HALF_WEIGHT = {2: -0.51851852, 8: -0.49234185, 20: -0.45608771}
ELASTIC_SQUARE = 0.1406  # torque / (shear modulus x twist x side^4)
YIELD_SQUARE = 2.96  # c at which the middle of the sides of the square begins to yield


@dataclass(frozen=True)
class MeshData:
    """Interior points; arrays of shape (unknowns,), x1 varies slowest on the square.

    `area` is the integral of the hat function of each point.
    """

    n: int
    across: int
    c: float
    case: str
    x1: FloatArray
    x2: FloatArray
    area: FloatArray
    points: FloatArray | None
    triangles: npt.NDArray[np.int32] | None


def build(n: int = 50, c: float = 5.0, case: str = "square", across: int = 0) -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    n : int
        Interior points a side, or rings of points of the disc, at least 2.
    c : float
        Twist, positive.
    case : {"square", "half weight", "round"}
    across : int
        Interior points in the direction x1 where they differ from n; case "square" only. 0: n.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    if not (c > 0 and np.isfinite(c)):
        raise ssn.InputError(f"c must be positive and finite, got {c!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(map(repr, CASES))}, got {case!r}")
    if isinstance(across, bool) or not isinstance(across, int | np.integer) or across < 0 or across == 1:
        raise ssn.InputError(f"across must be 0 or a whole number of at least 2, got {across!r}")
    if across and case != "square":
        raise ssn.InputError(f"across={across} has no effect with case={case!r}; leave it out")
    if case == "round":
        return _round(int(n), float(c))
    m = int(across or n)
    h1, h2 = 1.0 / (m + 1), 1.0 / (n + 1)
    edge = 0.5 if case == "half weight" else 1.0
    stiffness = sp.csr_array(
        h2 / h1 * sp.kron(second_difference(m, edge), sp.eye_array(n))
        + h1 / h2 * sp.kron(sp.eye_array(m), second_difference(n, edge))
    )
    x1, x2 = (
        x.ravel() for x in np.meshgrid(np.arange(1, m + 1) * h1, np.arange(1, n + 1) * h2, indexing="ij")
    )
    distance = np.minimum.reduce([x1, 1.0 - x1, x2, 1.0 - x2])
    area = np.full(m * n, h1 * h2)
    problem = ssn.ComplementarityProblem(ssn.AffineMap(stiffness, -c * area), -distance, distance)
    problem.mesh_data = MeshData(int(n), m, float(c), case, x1, x2, area, None, None)
    return problem


def second_difference(n: int, edge: float = 1.0) -> sp.dia_array:
    """Matrix of the squared differences along a line of n points; `edge` weighs those to the boundary."""
    ones, diagonal = np.ones(n - 1), 2.0 * np.ones(n)
    diagonal[[0, -1]] = 1.0 + edge
    return sp.diags_array([-ones, diagonal, -ones], offsets=[-1, 0, 1])


def _round(n: int, c: float) -> ssn.ComplementarityProblem:
    """Linear elements on the unit disc; ring k of n has 6 k points, each ring turned against the one within."""
    rings = [np.zeros((1, 2))]
    for k in range(1, n + 1):
        angle = 2 * np.pi * (np.arange(6 * k) / (6 * k)) + 0.7 * k
        rings.append(k / n * np.column_stack([np.cos(angle), np.sin(angle)]))
    points = np.concatenate(rings)
    triangles = Delaunay(points).simplices
    basis = skfem.Basis(skfem.MeshTri(points.T.copy(), triangles.T.copy()), skfem.ElementTriP1())
    stiffness = sp.csr_array(skfem.BilinearForm(lambda u, v, w: dot(grad(u), grad(v))).assemble(basis))
    area = skfem.LinearForm(lambda v, w: v).assemble(basis)
    inner = np.arange(points.shape[0] - 6 * n)
    x1, x2 = points[inner].T
    distance = 1.0 - np.hypot(x1, x2)
    F = ssn.AffineMap(stiffness[inner][:, inner], -c * area[inner])
    problem = ssn.ComplementarityProblem(F, -distance, distance)
    problem.mesh_data = MeshData(n, n, c, "round", x1, x2, area[inner], points, triangles)
    return problem


def exact_round(r: FloatArray, c: float) -> FloatArray:
    """Return v of the round bar at distance r from the centre; elastic throughout for c < 2."""
    if c < 2.0:
        return c / 4.0 * (1.0 - r**2)
    return np.where(r < 2.0 / c, 1.0 - 1.0 / c - c * r**2 / 4.0, 1.0 - r)


def round_torque(c: float) -> float:
    """Torque of the round bar divided by k."""
    return np.pi * c / 4.0 if c < 2.0 else 2.0 * np.pi / 3.0 * (1.0 - (2.0 / c) ** 3 / 4.0)


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a stress function of `coarse` to `fine`: linear on triangles or squares."""
    mesh = coarse.mesh_data
    points = np.column_stack([fine.mesh_data.x1, fine.mesh_data.x2])

    def carry(values: FloatArray) -> FloatArray:
        if mesh.points is not None:
            padded = np.concatenate([values, np.zeros(6 * mesh.n)])
            return LinearNDInterpolator(mesh.points, padded, fill_value=0.0)(points)
        lines = (np.linspace(0.0, 1.0, mesh.across + 2), np.linspace(0.0, 1.0, mesh.n + 2))
        return RegularGridInterpolator(lines, np.pad(values.reshape(mesh.across, mesh.n), 1))(points)

    return carry


def yielded(solution: ssn.Solution) -> npt.NDArray[np.bool_]:
    """Return the points at which the bar has yielded."""
    return solution.pieces["control"] != solution.pieces.legend["control"].index("free")


def torque(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> float:
    """Return twice the integral of v, the torque divided by k."""
    return 2.0 * float(problem.mesh_data.area @ solution.x)


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with printed optimal values, the exact stress function and torque, or the handbook."""
    mesh = problem.mesh_data
    if mesh.case == "round":
        return _round_values(problem, solution)
    checks = []
    if mesh.c == 5.0 and mesh.case == "half weight" and mesh.n in HALF_WEIGHT:
        source = "Bongartz et al. (1995), TORSION1, value printed in the file"
        checks.append(
            _check("optimal value, digits printed", HALF_WEIGHT[mesh.n], solution.objective, 6e-9, source)
        )
    if mesh.c == 5.0 and mesh.case == "square" and (mesh.across, mesh.n) in MINPACK2:
        value, digits, source = MINPACK2[mesh.across, mesh.n]
        checks.append(_check("optimal value, digits given", value, solution.objective, digits, source))
    if mesh.case == "square":
        h = 1.0 / (min(mesh.n, mesh.across) + 1)
        if mesh.c < YIELD_SQUARE:
            source = "S. Timoshenko, J. Goodier, Theory of Elasticity, table for torsion (from memory)"
            expected = ELASTIC_SQUARE * mesh.c / 2.0
            checks.append(
                _check("elastic torque, 2 h^2", expected, torque(problem, solution), 2 * h * h, source)
            )
        source = "volume of the roof over the square (Nadai's sand heap; from memory)"
        least = min(0.0, 1.0 / 3.0 - torque(problem, solution))
        checks.append(_check("torque beyond the plastic limit 1/3", 0.0, least, 0.0, source))
    return checks


def _round_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    h, c = 1.0 / mesh.n, mesh.c
    source = "closed form of the module docstring; Prager and Hodge (1951), handbooks (from memory)"
    error = solution.x - exact_round(np.hypot(mesh.x1, mesh.x2), c)
    checks = [
        _check("largest error of v, 2 c h^2", 0.0, np.abs(error).max(), 2 * c * h * h, source),
        _check("torque, 4 h^2", round_torque(c), torque(problem, solution), 4 * h * h, source),
    ]
    if c >= 2.0:
        core = mesh.area[~yielded(solution)].sum()
        checks.append(
            _check("radius of the elastic core, 2 h", 2.0 / c, np.sqrt(core / np.pi), 2 * h, source)
        )
    return checks


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


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw the lines of equal stress function, along which the shear stress runs, and the yielded part."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2)
    plastic = yielded(solution).astype(float)
    if mesh.points is not None:
        ring = 6 * mesh.n
        corners = (*mesh.points.T, mesh.triangles)
        left.tricontour(*corners, np.concatenate([solution.x, np.zeros(ring)]), levels=12, cmap="viridis")
        right.tripcolor(*corners, np.concatenate([plastic, np.ones(ring)]), cmap="Reds", vmin=0, vmax=2)
        if mesh.c >= 2.0:
            angle = np.linspace(0.0, 2 * np.pi, 200)
            right.plot(
                2 / mesh.c * np.cos(angle), 2 / mesh.c * np.sin(angle), color="k", lw=0.8, label="exact edge"
            )
            right.legend(frameon=False, loc="upper right")
        limits = (-1.0, 1.0)
    else:
        shape = (mesh.across, mesh.n)
        lines = (np.linspace(0.0, 1.0, mesh.across + 2), np.linspace(0.0, 1.0, mesh.n + 2))
        left.contour(*lines, np.pad(solution.x.reshape(shape), 1).T, levels=12, cmap="viridis")
        right.pcolormesh(
            *lines, np.pad(plastic.reshape(shape), 1, constant_values=1.0).T, cmap="Reds", vmin=0, vmax=2
        )
        limits = (0.0, 1.0)
    left.set(title="stress function")
    right.set(title="yielded (red)")
    for axes in (left, right):
        axes.set(xlabel="$x_1$", ylabel="$x_2$", xlim=limits, ylim=limits, aspect="equal")
    figure.suptitle(
        f"Twisted bar, {mesh.case}, c = {mesh.c:g}, n = {mesh.n}: torque {torque(problem, solution):.4f} k, "
        f"{len(solution.steps)} Newton steps"
    )
    return figure
