"""Friction with a given bound (Tresca): which part of a contact sticks, and which slips.

A body rests on a foundation along x2 = 0. The friction l on it is at most g; where |l| < g it sticks (no slip u), where
l = g it slips forwards (u >= 0), where l = -g backwards. Minimising the elastic energy minus the work of the loads plus
int g |u| over the contact is a convex problem in the displacement; here its dual is solved, whose only unknown is l:
|l| <= g and F(l) = -u(l), the slip under loads and friction, with the sign of complementarity. One factorisation of the
stiffness matrix gives the (dense) map on the contact. Nodal friction is l times the lumped length of the contact.
Linear elements on an unstructured triangulation, n edges along the contact. Dimensionless.

case="antiplane": a half-disc of radius 1 under antiplane shear (one displacement, out of the plane, -Lap u = 0), its
    arc moved. With z = x1 + i x2 - EDGE the exact solution is u = g x2 + SLIP Re z^(3/2): it sticks for x1 < EDGE with
    l = g - 3/2 SLIP sqrt(EDGE - x1), and slips beyond. Derived here.
case="strip": a strip of length 1 and thickness 0.1 in plane strain, clamped at x1 = 0, pulled at x1 = 1 by a traction,
    held down without gap. Long strips follow the formula for a bar pulled over a rough base: force / g of it slip, and
    its end moves by traction x slip / (2 E / (1 - nu^2)), as in pull-out and shear-lag models (common practice).

Source: G. Duvaut, J.-L. Lions, Inequalities in Mechanics and Physics (1976), chapter III (from memory).

Caution: a design aid. A given bound replaces the product of friction coefficient and contact pressure; real joints
scatter widely, and the codes of the trade decide what may be relied on.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import skfem
from scipy.sparse.linalg import splu
from scipy.spatial import Delaunay
from skfem.helpers import ddot, dot, grad, sym_grad, trace

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)
CASES = ("antiplane", "strip")

EDGE = 0.1  # where slip begins, case "antiplane"
SLIP = 0.6
THICKNESS, MODULUS, POISSON, TRACTION = 0.1, 1.0, 0.3, 0.02  # case "strip"
DEFAULT_BOUND = {"antiplane": 1.0, "strip": 0.004}


@dataclass(frozen=True)
class MeshData:
    """Triangulation, contact and the map from friction to displacement.

    `contact` are the x1 of the nodes of the unknown, rising, `length` their lumped lengths. `displacement` takes a
    friction to the values at all nodes, shape (nodes,) or (2, nodes); `stiffness`, `load` and `slips` (indices of the
    slips) state the problem in the displacement.
    """

    n: int
    h: float
    case: str
    bound: float
    points: FloatArray
    triangles: npt.NDArray[np.int32]
    contact: FloatArray
    length: FloatArray
    stiffness: sp.csc_array
    load: FloatArray
    slips: npt.NDArray[np.intp]
    displacement: Callable[[FloatArray], FloatArray]


def build(n: int = 64, case: str = "antiplane", bound: float = 0.0) -> ssn.ComplementarityProblem:
    """Build the complementarity problem; the unknown is the friction at the nodes of the contact.

    Parameters
    ----------
    n : int
        Edges along the contact, at least 8.
    case : {"antiplane", "strip"}
    bound : float
        Largest friction g. 0: 1 for "antiplane", 0.004 for "strip".

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 8:
        raise ssn.InputError(f"n must be a whole number of at least 8, got {n!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(map(repr, CASES))}, got {case!r}")
    if not (bound >= 0.0 and np.isfinite(bound)):
        raise ssn.InputError(f"bound must be positive and finite, or 0 for the default, got {bound!r}")
    g = float(bound) or DEFAULT_BOUND[case]
    return _antiplane(int(n), g) if case == "antiplane" else _strip(int(n), g)


def exact_displacement(x1: FloatArray, x2: FloatArray, g: float) -> FloatArray:
    """Return u of case "antiplane"."""
    return np.asarray(g * x2 + SLIP * ((x1 - EDGE + 1j * np.maximum(x2, 0.0)) ** 1.5).real)


def exact_friction(x1: FloatArray, g: float) -> FloatArray:
    """Return l of case "antiplane"."""
    return g - 1.5 * SLIP * np.sqrt(np.maximum(EDGE - x1, 0.0))


def triangulation(
    boundary: FloatArray, inside: Callable[[FloatArray], FloatArray], h: float
) -> tuple[Any, Any]:
    """Triangulate a convex region: points on its boundary, a hexagonal lattice at least 0.6 h within.

    `inside` gives the distance to the boundary, positive within. The boundary points come first.
    """
    low, high = boundary.min(axis=0), boundary.max(axis=0)
    rows = np.arange(low[1], high[1], h * np.sqrt(0.75))
    lattice = []
    for k, y in enumerate(rows):
        x = np.arange(low[0] + 0.25 * h + 0.5 * h * (k % 2), high[0], h)
        lattice.append(np.column_stack([x, np.full_like(x, y)]))
    within = np.concatenate(lattice)
    points = np.concatenate([boundary, within[inside(within) > 0.6 * h]])
    triangles = Delaunay(points).simplices
    a, b, c = points[triangles].transpose(1, 0, 2)
    area = 0.5 * np.abs((b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0])
    return points, triangles[area > 1e-6 * h * h]  # points on a straight side make empty triangles


def _antiplane(n: int, g: float) -> ssn.ComplementarityProblem:
    h = 2.0 / n
    angle = np.linspace(0.0, np.pi, round(np.pi / h) + 1)
    arc = np.column_stack([np.cos(angle), np.sin(angle)])
    arc[[0, -1], 1] = 0.0
    base = np.column_stack([np.linspace(-1.0, 1.0, n + 1)[1:-1], np.zeros(n - 1)])
    points, triangles = triangulation(
        np.concatenate([arc, base]), lambda x: np.minimum(x[:, 1], 1.0 - np.hypot(*x.T)), h
    )
    basis = skfem.Basis(skfem.MeshTri(points.T.copy(), triangles.T.copy()), skfem.ElementTriP1())
    full = sp.csr_array(skfem.BilinearForm(lambda u, v, w: dot(grad(u), grad(v))).assemble(basis))
    moved = np.arange(arc.shape[0])
    free = np.arange(arc.shape[0], points.shape[0])
    values = np.zeros(points.shape[0])
    values[moved] = exact_displacement(*points[moved].T, g)
    load = -(full @ values)[free]
    contact = np.arange(n - 1)  # the first of the free nodes
    length = np.full(n - 1, h)
    return _dual(n, h, "antiplane", g, points, triangles, full, free, load, values, contact, length)


def _strip(n: int, g: float) -> ssn.ComplementarityProblem:
    h = 1.0 / n
    side = max(2, round(THICKNESS / h))
    along, up = np.linspace(0.0, 1.0, n + 1), np.linspace(0.0, THICKNESS, side + 1)[1:-1]
    base, top = np.column_stack([along, 0 * along]), np.column_stack([along, 0 * along + THICKNESS])
    ends = [np.column_stack([np.full_like(up, x), up]) for x in (0.0, 1.0)]
    points, triangles = triangulation(
        np.concatenate([base, top, *ends]),
        lambda x: np.minimum.reduce([x[:, 0], 1.0 - x[:, 0], x[:, 1], THICKNESS - x[:, 1]]),
        h,
    )
    mesh = skfem.MeshTri(points.T.copy(), triangles.T.copy())
    element = skfem.ElementVector(skfem.ElementTriP1())
    basis = skfem.Basis(mesh, element)
    shear = MODULUS / (2 * (1 + POISSON))
    lame = MODULUS * POISSON / ((1 + POISSON) * (1 - 2 * POISSON))

    def energy(u: Any, v: Any, w: Any) -> Any:
        strain, virtual = sym_grad(u), sym_grad(v)
        return 2 * shear * ddot(strain, virtual) + lame * trace(strain) * trace(virtual)

    full = sp.csr_array(skfem.BilinearForm(energy).assemble(basis))
    pulled = basis.boundary(mesh.facets_satisfying(lambda x: x[0] > 1 - 1e-9, boundaries_only=True))
    force = skfem.LinearForm(lambda v, w: TRACTION * v[0]).assemble(pulled)
    nodes = basis.nodal_dofs  # (2, nodes)
    clamped = np.flatnonzero(points[:, 0] < 1e-9)
    fixed = np.concatenate([nodes[:, clamped].ravel(), nodes[1, : n + 1]])
    free = np.setdiff1d(np.arange(full.shape[0]), fixed)
    contact = np.searchsorted(free, nodes[0, 1 : n + 1])
    length = np.full(n, h)
    length[-1] = h / 2
    values = np.zeros(full.shape[0])
    return _dual(n, h, "strip", g, points, triangles, full, free, force[free], values, contact, length, nodes)


def _dual(
    n: int,
    h: float,
    case: str,
    g: float,
    points: FloatArray,
    triangles: Any,
    full: Any,
    free: Any,
    load: FloatArray,
    values: FloatArray,
    contact: Any,
    length: FloatArray,
    nodes: Any = None,
) -> ssn.ComplementarityProblem:
    """The problem of the friction alone: F = length * -(slip under loads and friction)."""
    stiffness = sp.csc_array(full[free][:, free])
    factor = splu(stiffness)
    unit = np.zeros((free.size, contact.size))
    unit[contact, np.arange(contact.size)] = length
    compliance = length[:, None] * factor.solve(unit)[contact]
    F = ssn.AffineMap(0.5 * (compliance + compliance.T), -length * factor.solve(load)[contact])

    def displacement(friction: FloatArray) -> FloatArray:
        result = values.copy()
        nodal = load.copy()
        nodal[contact] -= length * friction
        result[free] = factor.solve(nodal)
        return result if nodes is None else result[nodes]

    problem = ssn.ComplementarityProblem(F, -g, g)
    x1 = points[:, 0][_contact_nodes(case, points, contact.size, n)]
    problem.mesh_data = MeshData(
        n, h, case, g, points, triangles, x1, length, stiffness, load, contact, displacement
    )
    return problem


def _contact_nodes(case: str, points: FloatArray, size: int, n: int) -> npt.NDArray[np.intp]:
    """Indices of the nodes of the contact, from left to right."""
    if case == "strip":
        return np.arange(1, n + 1)
    first = round(np.pi * n / 2.0) + 1
    return np.arange(first, first + size)


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a friction of `coarse` to `fine`: linear along the contact."""
    return lambda friction: np.interp(fine.mesh_data.contact, coarse.mesh_data.contact, friction)


def slip(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> FloatArray:
    """Return the slip at the nodes of the contact."""
    mesh = problem.mesh_data
    values = mesh.displacement(solution.x)
    values = values if values.ndim == 1 else values[0]
    return np.asarray(values[_contact_nodes(mesh.case, mesh.points, mesh.contact.size, mesh.n)])


def slip_length(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> float:
    """Return the length of the contact on which friction is at its bound."""
    return float(problem.mesh_data.length[np.abs(solution.x) >= problem.mesh_data.bound].sum())


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the exact solution, or with the formula for a bar."""
    mesh = problem.mesh_data
    h, g = mesh.h, mesh.bound
    if mesh.case == "antiplane":
        if (
            1.5 * SLIP * np.sqrt(1.0 + EDGE) > 2.0 * g
        ):  # friction at the other bound near x1 = -1: not this solution
            return []
        source = "exact solution of the module docstring"
        error = solution.x - exact_friction(mesh.contact, g)
        missed = mesh.displacement(solution.x) - exact_displacement(*mesh.points.T, g)
        return [
            _check("length of the slipping part, h", 1.0 - EDGE, slip_length(problem, solution), h, source),
            _check("L2 error of the friction, h / 10", 0.0, np.sqrt(mesh.length @ error**2), 0.1 * h, source),
            _check(
                "largest error of the displacement, h^2 / 4", 0.0, np.abs(missed).max(), h * h / 4, source
            ),
        ]
    source = "bar pulled over a rough base, pull-out and shear-lag models (common practice)"
    force = TRACTION * THICKNESS
    expected = force / g
    if expected > 1.0 - 2.0 * THICKNESS:  # the clamp takes part
        return []
    end = float(mesh.displacement(solution.x)[0, mesh.n])
    bar = TRACTION * expected / (2.0 * MODULUS / (1.0 - POISSON**2))
    return [
        _check(
            "friction on the whole contact, 1 % of the force",
            force,
            mesh.length @ solution.x,
            0.01 * force,
            source,
        ),
        _check(
            "length of the slipping part, thickness",
            expected,
            slip_length(problem, solution),
            THICKNESS,
            source,
        ),
        _check("displacement of the end, thickness / slip", bar, end, bar * THICKNESS / expected, source),
    ]


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
    """Draw the displacement on the mesh, and friction and slip along the contact."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2)
    values = mesh.displacement(solution.x)
    shown = values if values.ndim == 1 else values[0]
    colours = left.tripcolor(*mesh.points.T, mesh.triangles, shown, shading="gouraud", cmap="viridis")
    left.triplot(*mesh.points.T, mesh.triangles, color="k", lw=0.15)
    figure.colorbar(colours, ax=left, shrink=0.7)
    left.set(title="displacement", xlabel="$x_1$", ylabel="$x_2$", aspect="equal")
    right.axhline(mesh.bound, color="0.7", lw=0.8, ls="--", label="bound")
    right.axhline(-mesh.bound, color="0.7", lw=0.8, ls="--")
    if mesh.case == "antiplane":
        exact = exact_friction(mesh.contact, mesh.bound)
        right.plot(mesh.contact, exact, color="C1", lw=3, alpha=0.5, label="exact friction")
    right.plot(mesh.contact, solution.x, color="C0", lw=1.2, label="friction")
    right.set(title="along the contact", xlabel="$x_1$", ylabel="friction")
    other = right.twinx()
    other.plot(mesh.contact, slip(problem, solution), color="C2", lw=1.2, label="slip")
    other.set_ylabel("slip", color="C2")
    right.legend(frameon=False, loc="center left")
    figure.suptitle(
        f"Friction with a given bound, {mesh.case}, n = {mesh.n}: {slip_length(problem, solution):.3f} of the "
        f"contact slips, {len(solution.steps)} Newton steps"
    )
    return figure
