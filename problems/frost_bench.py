"""Heaters under the bench of a greenhouse on a frost night: few places, enough heat where the plants stand.

A thin aluminium bench top spreads the heat of electric heating mats glued to its underside. Steady heat balance of
the temperature T (degC), averaged over the thickness:

    -div(k d grad T) + h (T - T_air) = u in the bench,  k d dT/dn + c (T - T_edge) = 0 on its edges.

The heater power per area u (W/m^2) is chosen by

    minimise 1/2 int_plants (T - T_set)^2 + alpha/2 int u^2 + beta int u,  0 <= u <= u_max, u = 0 outside the bays.

The price beta on the installed power keeps most of the bench without heaters: u is exactly zero wherever a watt would
lower the plants' misfit by less than its price, and mats lie where u > 0.

Source: own scenario. Values marked (c) are common practice or textbook orders of magnitude, not measurements.

    bench           4.8 m x 1.8 m, with a notch of 0.8 m x 0.6 m for a roof post; the window is the side y = 0
    k d             160 W/(m K) x 3 mm = 0.48 W/K, aluminium alloy (c); heat spreads over sqrt(k d / h) = 0.28 m
    h               6 W/(m^2 K): free convection and radiation above, insulation below (c)
    T_air           2 degC in the house, 5 K less at the window (half the difference to outside), draught decaying
                    over 0.3 m
    T_edge, c       air temperature and 0.5 W/(m K) for a 50 mm rim; on the window side, fixed to the sill,
                    outside temperature -8 degC and 1.5 W/(m K)
    T_set           10 degC, bench temperature wanted under hardy seedlings and cuttings in winter (c)
    u_max           150 W/m^2, usual for horticultural heating mats (c)
    beta            0.05 K^2/(W/m^2): a watt costs as much as 0.05 K^2 m^2 of misfit; in the middle of wide heater
                    places the plants stay h (beta + alpha u) below the set point, 0.3 K and more
    alpha           2e-4 K^2/(W/m^2)^2: 0.03 K^2/(W/m^2) at u_max, of the order of the price; smooths the power

Linear elements for T, one power value a triangle for u, on an unstructured Delaunay mesh that resolves bench, bays and
plants; lumped mass, so that the discrete temperatures obey the maximum principle.

Caution: a design aid, not a design. Electrical work follows local codes and is done by a licensed electrician; frost
protection of living plants needs its own independent thermostat and alarm. Convection and draught vary by a factor of
two between houses: measure before buying.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import skfem
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay
from skfem.helpers import dot, grad

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]
BoolArray = npt.NDArray[np.bool_]

SIZES = (32, 64, 128)

# Lengths in m; (left, bottom, right, top). All coordinates are multiples of PITCH, so that points on different outlines
# meet.
LENGTH, DEPTH, PITCH = 4.8, 1.8, 0.2
NOTCH = (2.0, 1.2, 2.8, 1.8)
BAYS = ((0.2, 0.2, 1.4, 1.6), (1.6, 0.2, 3.2, 1.0), (3.4, 0.2, 4.6, 1.6))
PLANTS = ((0.4, 0.2, 2.2, 0.6), (0.4, 1.2, 0.8, 1.6), (2.6, 0.6, 3.0, 0.8), (3.6, 0.8, 4.8, 1.4))

SHEET_CONDUCTANCE = 0.48  # k d, W/K
LOSS = 6.0  # h, W/(m^2 K)
RIM_LOSS, SILL_LOSS = 0.5, 1.5  # c, W/(m K)
DRAUGHT, DRAUGHT_WIDTH = 0.5, 0.3  # part of the difference to outside, m


@dataclass(frozen=True)
class MeshData:
    """Mesh, what lies where, and the parameters.

    Attributes
    ----------
    mesh : skfem.MeshTri
    heated : int array, shape (number of controls,)
        Triangles that may carry a heater, in the order of the control.
    planted : int array
        Nodes under plants, in the order of the observation.
    in_bay, in_plants : bool array, shape (triangles,)
    area : array, shape (triangles,)
        m^2.
    losses : array, shape (nodes,)
        W/K, to the surroundings of each node.
    surroundings : array, shape (nodes,)
        degC, weighted mean of air and edge temperature at each node.
    """

    mesh: Any
    heated: IntArray
    planted: IntArray
    in_bay: BoolArray
    in_plants: BoolArray
    area: FloatArray
    losses: FloatArray
    surroundings: FloatArray
    parameters: dict[str, Any]


def build(
    n: int = 128,
    price: float = 0.05,
    control_weight: float = 2e-4,
    max_power: float = 150.0,
    set_point: float = 10.0,
    air: float = 2.0,
    outside: float = -8.0,
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Triangles along the bench, at least 8; 128 makes about 7000 nodes and 7500 controls.
    price : float
        beta, K^2/(W/m^2), not negative.
    control_weight : float
        alpha, K^2/(W/m^2)^2, positive.
    max_power : float
        Largest heater power per area, W/m^2, positive.
    set_point : float
        Temperature wanted under the plants, degC.
    air, outside : float
        Temperatures in the house and before the window, degC.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 8:
        raise ssn.InputError(f"n must be a whole number of at least 8, got {n!r}")
    if not (control_weight > 0 and np.isfinite(control_weight)):
        raise ssn.InputError(f"control_weight must be positive and finite, got {control_weight!r}")
    if not max_power > 0:
        raise ssn.InputError(f"max_power must be positive, got {max_power!r}")
    for name, value in {"set_point": set_point, "air": air, "outside": outside}.items():
        if not np.isfinite(value):
            raise ssn.InputError(f"{name} must be a finite temperature in degC, got {value!r}")
    if outside > air:
        raise ssn.InputError(f"outside ({outside!r} degC) must not be warmer than air ({air!r} degC)")
    parameters = dict(
        n=int(n),
        price=price,
        control_weight=control_weight,
        max_power=max_power,
        set_point=set_point,
        air=air,
        outside=outside,
    )
    mesh = bench_mesh(n)
    middle = mesh.p[:, mesh.t].mean(axis=1)
    in_bay, in_plants = _inside(middle, BAYS), _inside(middle, PLANTS)

    nodal = skfem.Basis(mesh, skfem.ElementTriP1(), quadrature=_CORNERS)
    piecewise = nodal.with_element(skfem.ElementTriP0())
    conduction = skfem.BilinearForm(lambda T, v, _: SHEET_CONDUCTANCE * dot(grad(T), grad(v)))
    one = skfem.LinearForm(lambda v, _: v)
    heating = skfem.BilinearForm(lambda u, v, _: u * v)

    # draught: the colder the window, the colder the air before it
    chill = DRAUGHT * (air - outside) * np.exp(-mesh.p[1] / DRAUGHT_WIDTH)
    edges = mesh.boundary_facets()
    at_window = mesh.p[1, mesh.facets[:, edges]].max(axis=0) < 1e-9
    to_air = LOSS * one.assemble(nodal) + RIM_LOSS * _edge_length(mesh, edges[~at_window])
    to_window = SILL_LOSS * _edge_length(mesh, edges[at_window])
    losses = to_air + to_window
    source = to_air * (air - chill) + to_window * outside

    heated = np.flatnonzero(in_bay)
    area = one.assemble(piecewise)
    under_plants = skfem.Basis(
        mesh, skfem.ElementTriP1(), elements=np.flatnonzero(in_plants), quadrature=_CORNERS
    )
    plant_mass = one.assemble(under_plants)
    planted = np.flatnonzero(plant_mass > 0)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(sp.csr_array(conduction.assemble(nodal)) + sp.diags_array(losses)),
        target=np.full(planted.size, float(set_point)),
        cost=ssn.SparseCost(price, 0.0, max_power),
        control_weight=control_weight,
        control_operator=sp.csr_array(heating.assemble(piecewise, nodal))[:, heated],
        observation=sp.eye_array(mesh.nvertices, format="csr")[planted],
        source=source,
        control_mass=area[heated],
        observation_mass=plant_mass[planted],
    )
    problem.mesh_data = MeshData(
        mesh, heated, planted, in_bay, in_plants, area, losses, source / losses, parameters
    )
    return problem


# Quadrature at the corners lumps the mass.
_CORNERS = (np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0]]), np.full(3, 1 / 6))
_ENDS = (np.array([[0.0, 1.0]]), np.full(2, 1 / 2))


def _edge_length(mesh: Any, facets: IntArray) -> FloatArray:
    """Length of edge that belongs to each node, m."""
    basis = skfem.FacetBasis(mesh, skfem.ElementTriP1(), facets=facets, quadrature=_ENDS)
    return skfem.LinearForm(lambda v, _: v).assemble(basis)


# The mesh


def bench_mesh(n: int) -> Any:
    """Return a Delaunay mesh of triangles of about LENGTH / n that resolves the outlines of bench, bays and plants.

    Points lie evenly on the outlines, and no other point is nearer to an outline than 0.6 of their distance; hence
    each piece of outline is an edge of the Delaunay triangulation and no angle opposite to the boundary is obtuse.
    """
    size = LENGTH / n
    pieces = max(1, int(np.ceil(PITCH / size - 1e-9)))
    spacing = PITCH / pieces
    segments = _outlines()
    on_lines = set()
    for start, end in segments:
        steps = np.rint(np.abs(end - start).max() / spacing).astype(int)
        for point in start + np.linspace(0.0, 1.0, steps + 1)[:, None] * (end - start):
            on_lines.add(tuple(np.rint(point / spacing).astype(int)))
    fixed = np.array(sorted(on_lines)) * spacing
    rows = np.arange(0.0, DEPTH, size * np.sqrt(3) / 2)
    columns = np.arange(0.0, LENGTH, size)
    free = np.array([(x + (i % 2) * size / 2, y) for i, y in enumerate(rows) for x in columns])
    # deterministic jitter, evenly spread (Kronecker sequence of the plastic number 1.3247...)
    steps = np.arange(1, len(free) + 1)[:, None] * np.array([0.7548776662466927, 0.5698402909980532])
    free += 0.3 * size * (steps % 1.0 - 0.5)
    free = free[(_distance(free, segments) > 0.6 * spacing) & _in_bench(free.T)]
    points = np.vstack([fixed, free])
    triangles = Delaunay(points).simplices
    corner = points[triangles]
    one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    area = np.abs(one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]) / 2
    keep = (area > 1e-6 * size**2) & _in_bench(corner.mean(axis=1).T)
    return skfem.MeshTri(points.T.copy(), triangles[keep].T.astype(np.int64).copy())


def smallest_angle(mesh: Any) -> float:
    """Return the smallest angle of all triangles, degrees."""
    corner = mesh.p[:, mesh.t]
    smallest = 180.0
    for i in range(3):
        one, two = corner[:, (i + 1) % 3] - corner[:, i], corner[:, (i + 2) % 3] - corner[:, i]
        cosine = (one * two).sum(axis=0) / np.sqrt((one**2).sum(axis=0) * (two**2).sum(axis=0))
        smallest = min(smallest, float(np.degrees(np.arccos(cosine.max()))))
    return smallest


def _outlines() -> FloatArray:
    """All straight pieces of outline, shape (segments, 2 ends, 2)."""
    left, bottom, right, top = NOTCH
    x = [0.0, LENGTH, LENGTH, right, right, left, left, 0.0]
    y = [0.0, 0.0, DEPTH, DEPTH, bottom, bottom, top, top]
    loops = [np.column_stack([x, y])]
    loops += [np.array([(a, b), (c, b), (c, d), (a, d)]) for a, b, c, d in (*BAYS, *PLANTS)]
    return np.concatenate([np.stack([p, np.roll(p, -1, axis=0)], axis=1) for p in loops])


def _distance(points: FloatArray, segments: FloatArray) -> FloatArray:
    """Distance of each point to the nearest segment."""
    nearest = np.full(len(points), np.inf)
    for start, end in segments:
        along = np.clip((points - start) @ (end - start) / ((end - start) @ (end - start)), 0.0, 1.0)
        nearest = np.minimum(nearest, np.linalg.norm(points - start - along[:, None] * (end - start), axis=1))
    return nearest


def _inside(points: FloatArray, rectangles: Any) -> BoolArray:
    """Whether points (2, k) lie in one of the rectangles."""
    found = np.zeros(points.shape[1], dtype=bool)
    for left, bottom, right, top in rectangles:
        found |= (points[0] > left) & (points[0] < right) & (points[1] > bottom) & (points[1] < top)
    return found


def _in_bench(points: FloatArray) -> BoolArray:
    return _inside(points, [(0.0, 0.0, LENGTH, DEPTH)]) & ~_inside(points, [NOTCH])


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries heater powers of `coarse` to `fine`: the value at each triangle's centre."""
    old, new = coarse.mesh_data, fine.mesh_data
    centres = new.mesh.p[:, new.mesh.t[:, new.heated]].mean(axis=1)
    found = old.mesh.element_finder()(*centres)
    number = np.full(old.mesh.nelements, -1)
    number[old.heated] = np.arange(old.heated.size)

    def carry(power: FloatArray) -> FloatArray:
        # bays end at edges of both meshes: a centre in a bay is found in one
        return np.where(number[found] >= 0, np.asarray(power)[number[found]], 0.0)

    return carry


# What is known, and what people want to know


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Check identities of physics and of optimality; one further solve."""
    mesh, power, temperature = problem.mesh_data, solution.x, solution.state
    heat_in = float(mesh.area[mesh.heated] @ power)
    terms = mesh.losses * (temperature - mesh.surroundings)
    heat_out, size = float(terms.sum()), float(np.abs(terms).sum())
    coldest = float(mesh.surroundings.min())
    below = float(max(coldest - temperature.min(), 0.0))
    worth = problem.pull_back(solution.adjoint)
    price = mesh.parameters["price"]
    # 1e-6: the adjoint is as accurate as control_weight times the power
    needless = float(power[worth < price * (1 - 1e-6)].max(initial=0.0))
    vanishing = float(problem.adjoint(problem.reduced_target()).max())
    dear = build(**mesh.parameters | {"price": max(vanishing, 0.0) * (1 + 1e-9) + 1e-12})
    left_over = float(ssn.solve(dear).x.max())

    def check(what: str, kind: str, expected: float, computed: float, tolerance: float, source: str) -> dict:
        off = abs(computed - expected) / ((abs(expected) or 1.0) if kind == "relative" else 1.0)
        return {
            "what": f"{what} ({kind})",
            "kind": kind,
            "expected": expected,
            "computed": computed,
            "tolerance": tolerance,
            "source": source,
            "holds": bool(off <= tolerance),
        }

    rounding = 1e-10 * size / (abs(heat_in) or 1.0)
    return [
        check(
            "heat lost, W, equals heat put in",
            "relative",
            heat_in,
            heat_out,
            rounding,
            "conservation of energy",
        ),
        check(
            "bench colder than its coldest surroundings by, K",
            "absolute",
            0.0,
            below,
            1e-9,
            "maximum principle; discrete for lumped mass on a Delaunay mesh",
        ),
        check(
            "largest power, W/m^2, where a watt is worth less than its price",
            "absolute",
            0.0,
            needless,
            0.0,
            "optimality condition",
        ),
        check(
            f"largest power, W/m^2, at a price just above {vanishing:.6g} K^2/(W/m^2)",
            "absolute",
            0.0,
            left_over,
            0.0,
            "optimality condition of no heaters: price >= largest worth of the first watt",
        ),
    ]


def heater_places(problem: ssn.ControlProblem, solution: ssn.Solution) -> tuple[int, IntArray]:
    """Return the number of connected heater places and each triangle's place, -1 where there is no heater."""
    mesh = problem.mesh_data
    on = np.zeros(mesh.mesh.nelements, dtype=bool)
    on[mesh.heated[solution.x > 0]] = True
    sides = mesh.mesh.f2t
    sides = sides[:, (sides[1] >= 0)]
    sides = sides[:, on[sides].all(axis=0)]
    graph = sp.coo_array((np.ones(sides.shape[1]), (sides[0], sides[1])), shape=(on.size, on.size))
    _, label = connected_components(graph, directed=False)
    places, numbered = np.unique(label[on], return_inverse=True)
    result = np.full(on.size, -1)
    result[on] = numbered
    return places.size, result


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return what a grower wants to know, in words."""
    mesh, power = problem.mesh_data, solution.x
    area = mesh.area[mesh.heated]
    limit = mesh.parameters["max_power"]
    places, place = heater_places(problem, solution)
    covered = float(area[power > 0].sum())
    weights = problem.observations.vector
    plants = solution.state[mesh.planted]
    without = problem.offset()[mesh.planted]
    watts = np.bincount(place[place >= 0], weights=(_on_triangles(problem, power) * mesh.area)[place >= 0])
    listed = ", ".join(f"{w:.0f} W" for w in np.sort(watts)[::-1])
    bays = f"{covered / area.sum():.0%} of the bays"

    def mean(values: FloatArray) -> float:
        return float(weights @ values / weights.sum())

    return [
        ("installed power", f"{area @ power:.0f} W" + (f" ({listed})" if 1 < places <= 8 else "")),
        ("heater places", f"{places}, together {covered:.2f} m2 ({bays})"),
        ("at the largest power", f"{area[power >= limit].sum():.2f} m2 at {limit:g} W/m2"),
        (
            "under the plants",
            f"{plants.min():.1f} degC at the coldest point, {mean(plants):.1f} degC on average, "
            f"wanted {mesh.parameters['set_point']:g} degC",
        ),
        (
            "without heaters",
            f"{without.min():.1f} degC at the coldest point, {mean(without):.1f} degC on average",
        ),
    ]


def _on_triangles(problem: ssn.ControlProblem, power: FloatArray) -> FloatArray:
    values = np.zeros(problem.mesh_data.mesh.nelements)
    values[problem.mesh_data.heated] = power
    return values


# The picture


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the temperature of the bench and the heater power, with plants, bays and window side."""
    from matplotlib.patches import Patch

    data, mesh = problem.mesh_data, problem.mesh_data.mesh
    limit = data.parameters["max_power"]
    figure = new_figure(8.6, 7.8)
    top, bottom = figure.subplots(2, 1, sharex=True, sharey=True)
    power = _on_triangles(problem, solution.x)
    on = power > 0

    heat = top.tripcolor(*mesh.p, mesh.t.T, solution.state, shading="gouraud", cmap="inferno")
    figure.colorbar(heat, ax=top, label="bench temperature (°C)", shrink=0.95)
    if solution.state.min() < 0.0 < solution.state.max():
        frost = top.tricontour(
            *mesh.p,
            mesh.t.T,
            solution.state,
            levels=[0.0],
            colors="white",
            linewidths=1.0,
            linestyles="dotted",
        )
        top.clabel(frost, fmt="%g °C", fontsize=9)
    if on.any():
        largest = limit if np.isfinite(limit) else float(power.max())
        watts = bottom.tripcolor(*mesh.p, mesh.t.T[on], power[on], cmap="YlOrRd", vmin=0.0, vmax=largest)
        figure.colorbar(watts, ax=bottom, label="heater power (W/m²)", shrink=0.95)
    outside = f"{data.parameters['outside']:g}".replace("-", "\N{MINUS SIGN}")
    for axes in (top, bottom):
        _outline(axes, mesh, np.ones_like(on), colors="black", linewidths=1.2)
        axes.plot([0.0, LENGTH], [-0.04, -0.04], color="#3a8fd8", lw=5, solid_capstyle="butt")
        words = f"window side, outside {outside} °C"
        axes.text(LENGTH / 2, -0.09, words, color="#1f6fb0", ha="center", va="top")
        axes.set(aspect="equal", xlim=(-0.04, LENGTH + 0.04), ylim=(-0.26, DEPTH + 0.04), ylabel="y (m)")
        axes.set_yticks([0.0, 0.5, 1.0, 1.5])
        axes.spines[:].set_visible(False)
    _boxes(top, PLANTS, edgecolor="#7fdc7f", linewidth=2.0)
    _outline(top, mesh, on, colors="white", linewidths=0.9)
    _boxes(bottom, BAYS, edgecolor="0.45", linewidth=1.2, linestyle="dashed")
    _boxes(bottom, PLANTS, edgecolor="#2a8c2a", linewidth=2.0)
    _outline(bottom, mesh, power >= limit, colors="black", linewidths=1.6)
    _name_places(bottom, problem, solution)
    bottom.set_xlabel("x (m)")
    top.set_title("Temperature; white: heater places")
    bottom.set_title("Heater power; exactly zero where white")
    figure.legend(
        handles=[
            Patch(fill=False, edgecolor="#2a8c2a", lw=2.0, label="plants"),
            Patch(fill=False, edgecolor="0.45", lw=1.2, ls="dashed", label="bays, where heaters may lie"),
            Patch(fill=False, edgecolor="black", lw=1.6, label=f"power at its limit of {limit:g} W/m²"),
        ],
        loc="outside lower center",
        ncols=3,
        frameon=False,
    )
    plants = solution.state[data.planted]
    count, _ = heater_places(problem, solution)
    installed = float(data.area[data.heated] @ solution.x)
    figure.suptitle(
        f"Greenhouse bench on a frost night: {installed:.0f} W in {count} heater places\n"
        f"under the plants {plants.min():.1f} to {plants.max():.1f} °C, wanted {data.parameters['set_point']:g} °C"
    )
    return figure


def _outline(axes: Any, mesh: Any, flags: BoolArray, **style: Any) -> None:
    """Draw the edges between triangles with the flag and those without, the bench's edge included."""
    from matplotlib.collections import LineCollection

    first, second = mesh.f2t
    differs = flags[first] != np.where(second >= 0, flags[second], False)
    ends = mesh.p[:, mesh.facets[:, differs]]
    axes.add_collection(LineCollection(ends.transpose(2, 1, 0), capstyle="round", **style))


def _boxes(axes: Any, rectangles: Any, **style: Any) -> None:
    from matplotlib.patches import Rectangle

    for left, bottom, right, top in rectangles:
        axes.add_patch(Rectangle((left, bottom), right - left, top - bottom, fill=False, **style))


def _name_places(axes: Any, problem: ssn.ControlProblem, solution: ssn.Solution) -> None:
    """Write the power of each heater place beside it."""
    data = problem.mesh_data
    count, place = heater_places(problem, solution)
    if count > 12:
        return
    watts = _on_triangles(problem, solution.x) * data.area
    for k in range(count):
        corners = data.mesh.p[:, data.mesh.t[:, place == k]].reshape(2, -1)
        x, y = (corners[0].min() + corners[0].max()) / 2, corners[1].max() + 0.05
        words = f"{watts[place == k].sum():.0f} W"
        box = {"facecolor": "white", "edgecolor": "none", "pad": 1.0}
        axes.text(x, y, words, ha="center", va="bottom", fontweight="bold", fontsize=9, bbox=box)
