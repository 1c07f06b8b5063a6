"""Journal bearing with cavitation: the pressure of the oil film between a shaft and its bearing.

The film pressure p >= 0 solves Reynolds' equation where it is positive; the oil cavitates elsewhere:
minimise int h^3 (p_1^2 + s p_2^2) / 2 - e sin(x1) p with p >= 0, p = 0 on the boundary, h = 1 + e cos x1 the film
thickness, x1 in (0, 2 pi) the angle from the widest gap, e the eccentricity in units of the clearance. Dimensionless.

case="plane": x2 in (0, 20), s = 1. Source: B. Averick, R. Carter, J. More, G. Xue, MINPACK-2 test problem collection,
    Argonne preprint MCS-P153-0692 (1992); with n + 2 points a side it is JNLBRNG1 in the collection of I. Bongartz,
    A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995) 123-160.
case="handbook": a bearing of length L and diameter D at rest: x2 in (-1, 1) in units of L / 2, s = (D / L)^2. With
    W = int p exp(i x1), averaged over x2, the bearing (Sommerfeld) number (R/c)^2 mu N / P is S = 1 / (6 pi |W|): p is
    in units of 6 mu omega (R/c)^2, and P the load by L D. The attitude angle is that between the load and the line of
    centres. Source: A. Raimondi, J. Boyd, ASLE Trans. 1 (1958) 159-209, tables
    (from memory), also in handbooks of machine elements.

Linear finite elements on right triangles, n x n interior points, h^3 averaged over each triangle's nodes.

Caution: a design aid for a rigid, aligned, isothermal bearing in steady state with ample supply of oil. Temperature,
minimum film thickness, whirl and standards of the trade decide about a real machine, and a competent engineer.
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

SIZES = (25, 50, 100)
CASES = ("plane", "handbook")

#: n -> optimal value of case "plane" for e = 0.1
MINPACK2 = {25: -0.18017327151, 50: -0.180487995008, 100: -0.180574369663}
#: n + 2 -> the same, as printed in the file
PRINTED = {4: -0.22474, 10: -0.17896, 23: -0.18005, 32: -0.18030, 75: -0.18055, 100: -0.18057, 125: -0.18058}
#: L / D -> e -> S and attitude angle in degrees, as tabulated
TABLE = {
    np.inf: {0.2: (0.123, 67.26), 0.4: (0.0626, 61.94), 0.6: (0.0389, 54.31), 0.8: (0.0210, 42.22)},
    1.0: {0.2: (0.631, 74.02), 0.4: (0.264, 63.10), 0.6: (0.121, 50.58), 0.8: (0.0446, 36.24)},
    0.5: {0.2: (2.03, 74.94), 0.4: (0.779, 61.45), 0.6: (0.319, 48.14), 0.8: (0.0923, 33.31)},
    0.25: {0.2: (7.57, 75.18), 0.4: (2.83, 60.86), 0.6: (1.07, 46.72), 0.8: (0.261, 31.04)},
}
#: the same in the limit of the mesh, to the digits shown
COMPUTED = {
    np.inf: {0.2: (0.1237, 66.90), 0.4: (0.0629, 61.64), 0.6: (0.03895, 54.23), 0.8: (0.02110, 42.18)},
    1.0: {0.2: (0.6318, 73.86), 0.4: (0.2604, 62.57), 0.6: (0.1209, 50.53), 0.8: (0.04456, 36.23)},
}
_TABULATED = "Raimondi and Boyd (1958), tables (from memory)"
_PROGRAM = "independent program, limit of the mesh"


@dataclass(frozen=True)
class MeshData:
    """n x n interior points; `angle` and `across` of shape (n,); the unknown has shape (n * n,), the angle slowest."""

    n: int
    case: str
    eccentricity: float
    ratio: float
    angle: FloatArray
    across: FloatArray


def build(
    n: int = 50, case: str = "plane", eccentricity: float = 0.1, ratio: float = 1.0
) -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.
    case : {"plane", "handbook"}
    eccentricity : float
        Between 0 and 1.
    ratio : float
        Length by diameter L / D, positive, may be infinite; case "handbook" only.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(map(repr, CASES))}, got {case!r}")
    if not 0.0 < eccentricity < 1.0:
        raise ssn.InputError(f"eccentricity must lie between 0 and 1, got {eccentricity!r}")
    if not ratio > 0.0:
        raise ssn.InputError(f"ratio must be positive, got {ratio!r}")
    if case == "plane" and ratio != 1.0:
        raise ssn.InputError(f"ratio={ratio} has no effect with case='plane'; leave it out")
    start, end = (0.0, 20.0) if case == "plane" else (-1.0, 1.0)
    slope = 1.0 if case == "plane" else 1.0 / ratio**2
    h1, h2 = 2 * np.pi / (n + 1), (end - start) / (n + 1)
    nodes = h1 * np.arange(n + 2)
    cubed = (1.0 + eccentricity * np.cos(nodes)) ** 3
    edges = 0.5 * (cubed[:-1] + cubed[1:])  # both triangles at an edge along x1
    middle = (cubed[:-2] + 4.0 * cubed[1:-1] + cubed[2:]) / 6.0  # both triangles at an edge along x2
    along = sp.diags_array([-edges[1:-1], edges[:-1] + edges[1:], -edges[1:-1]], offsets=[-1, 0, 1])
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    stiffness = sp.csr_array(h2 / h1 * sp.kron(along, sp.eye_array(n)))
    if slope > 0.0:  # an infinitely long bearing has no flow along the axis
        stiffness = sp.csr_array(stiffness + slope * h1 / h2 * sp.kron(sp.diags_array(middle), second))
    load = eccentricity * h1 * h2 * np.repeat(np.sin(nodes[1:-1]), n)
    problem = ssn.ComplementarityProblem(ssn.AffineMap(stiffness, -load))
    across = start + h2 * np.arange(1, n + 1)
    problem.mesh_data = MeshData(int(n), case, float(eccentricity), float(ratio), nodes[1:-1], across)
    return problem


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a pressure of `coarse` to `fine`: bilinear, zero on the boundary."""
    lines, points = _lines(coarse), np.meshgrid(fine.mesh_data.angle, fine.mesh_data.across, indexing="ij")

    def carry(pressure: FloatArray) -> FloatArray:
        n = coarse.mesh_data.n
        values = np.pad(np.reshape(pressure, (n, n)), 1)
        if np.isinf(coarse.mesh_data.ratio):  # every line is the same problem
            values[:, [0, -1]] = values[:, [1, -2]]
        return RegularGridInterpolator(lines, values)(np.stack(points, axis=-1)).ravel()

    return carry


def _lines(problem: ssn.ComplementarityProblem) -> tuple[FloatArray, FloatArray]:
    """The coordinates of all points of the mesh, the boundary included."""
    mesh = problem.mesh_data
    step = mesh.across[1] - mesh.across[0]
    return (
        np.linspace(0.0, 2 * np.pi, mesh.n + 2),
        np.concatenate([[mesh.across[0] - step], mesh.across, [mesh.across[-1] + step]]),
    )


def bearing_number(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> tuple[float, float]:
    """Return S and the attitude angle in degrees of case "handbook"."""
    mesh = problem.mesh_data
    pressure = solution.x.reshape(mesh.n, mesh.n)
    # trapezoidal rule; where the bearing is infinitely long all lines are alike and there are no ends
    mean = pressure.mean(axis=1) if np.isinf(mesh.ratio) else pressure.sum(axis=1) / (mesh.n + 1)
    h1 = 2 * np.pi / (mesh.n + 1)
    sine, cosine = h1 * float(mean @ np.sin(mesh.angle)), h1 * float(mean @ np.cos(mesh.angle))
    return 1.0 / (6 * np.pi * float(np.hypot(sine, cosine))), float(np.degrees(np.arctan2(sine, -cosine)))


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with printed optimal values, or with the handbook's chart point."""
    mesh = problem.mesh_data
    if mesh.case == "handbook":
        return _handbook_values(problem, solution)
    if mesh.eccentricity != 0.1:
        return []
    checks = []
    if mesh.n in MINPACK2:
        source = "independent programs (sparse active sets, L-BFGS-B), same discretisation"
        checks.append(
            _check("optimal value, digits given", MINPACK2[mesh.n], solution.objective, 1e-11, source)
        )
    if mesh.n + 2 in PRINTED:
        source = "Bongartz et al. (1995), JNLBRNG1, value printed in the file"
        value = PRINTED[mesh.n + 2]
        checks.append(_check("optimal value, digits printed", value, solution.objective, 6e-6, source))
    return checks


def _handbook_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    number, attitude = bearing_number(problem, solution)
    # the pressure peak narrows like 1 - e, so that the error is of the order (h / (1 - e))^2
    mesh_error = (2 * np.pi / (mesh.n + 1) / (1.0 - mesh.eccentricity)) ** 2
    checks = []
    for table, source, part, degrees in (
        (TABLE, _TABULATED, 0.02, 0.6),
        (COMPUTED, _PROGRAM, 0.001, 0.02),
    ):
        values = table.get(mesh.ratio, {}).get(mesh.eccentricity)
        if values is None:
            continue
        tolerance = (part + 0.2 * mesh_error) * values[0]
        what = "S, 2 % and mesh" if table is TABLE else "S, mesh"
        checks.append(_check(what, values[0], number, tolerance, source))
        what = (
            "attitude angle in degrees, 0.6 and mesh" if table is TABLE else "attitude angle in degrees, mesh"
        )
        checks.append(_check(what, values[1], attitude, degrees + 5.0 * mesh_error, source))
    return checks


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": expected,
        "computed": float(computed),
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw the unrolled film with its cavitated part, and the pressure over the angle halfway along the bearing."""
    mesh = problem.mesh_data
    pressure = solution.x.reshape(mesh.n, mesh.n)
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, width_ratios=[1.2, 1])
    degrees = np.degrees(mesh.angle)
    left.set_facecolor("0.85")
    shown = np.where(pressure > 0, pressure, np.nan)
    mesh_of_colours = left.pcolormesh(degrees, mesh.across, shown.T, cmap="viridis", shading="nearest")
    figure.colorbar(mesh_of_colours, ax=left, shrink=0.85)
    left.set(title="pressure; grey: cavitated", xlabel="angle from the widest gap", ylabel="along the axis")
    middle = pressure[:, (mesh.n - 1) // 2]
    right.plot(degrees, middle, color="C0", label="pressure")
    right.fill_between(degrees, 0.0, middle.max(), where=middle <= 0, color="0.85", label="cavitated")
    right.plot([180, 180], [0, middle.max()], color="k", ls=":", lw=0.8, label="narrowest gap")
    right.set(title="halfway along the bearing", xlabel="angle from the widest gap", xlim=(0, 360))
    right.legend(frameon=False, loc="upper right")
    for axes in (left, right):
        axes.set_xticks([0, 90, 180, 270, 360])
    title = f"Journal bearing, e = {mesh.eccentricity:g}, n = {mesh.n}, {len(solution.steps)} Newton steps"
    if mesh.case == "handbook":
        number, attitude = bearing_number(problem, solution)
        title += f"; L/D = {mesh.ratio:g}: S = {number:.4g}, attitude angle {attitude:.2f} degrees"
    figure.suptitle(title)
    return figure
