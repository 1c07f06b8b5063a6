"""Where to put curing lamps: an even light dose around an insert in a scattering resin, from few lamps on its surface.

A white-filled resin casting with an elliptic cross-section cures where the light of lamps on its surface reaches. The
bond line, a ring around a metal insert, is to get the same dose everywhere. Diffusion approximation of the fluence rate
phi (mW/cm^2) over a cross-section of a long casting:

    -div(D grad phi) + mu_a phi = 0,  D = 1 / (3 (mu_a + mu_s')),
    D d phi/dn + phi / (2 A) = 2 T u / (1 + R) on the surface,  A = (1 + R) / (1 - R),
    D d phi/dn + k phi = 0 on the insert.

The irradiance u (mW/cm^2) of the surface is chosen by

    minimise 1/2 int_ring (phi - phi_wanted)^2 + alpha/2 int u^2 + beta int u,  0 <= u <= u_max, u = 0 at the holder.

The price beta leaves most of the surface dark; lamps go where u > 0. It also makes them dimmer than the dose wants:
the second stage (`refit_lamps`) drops the price, and gives each place one lamp of even irradiance.

Source of the mathematics: A. Ishimaru, Wave Propagation and Scattering in Random Media (1978), diffusion approximation
and its boundary condition (from memory). The scenario is our own; values marked (c) are orders of magnitude from
textbooks, not measurements.

    cross-section   ellipse of half axes 30 mm and 20 mm; insert of radius 6 mm, centre (4, 1) mm; ring to radius 11 mm
    mu_a            0.002 / mm (c), four times that in a tinted band on the left
    mu_s'           0.6 / mm at the top to 1.4 / mm at the bottom: filler settles (c)
    R, T            0.5 inside and 0.96 from outside, refractive index 1.5 (c)
    k               0.05, a dull metal that absorbs part of the light (c)
    phi_wanted      10 mW/cm^2, for 60 s: 600 mJ/cm^2 (c)
    u_max           15 mW/cm^2
    beta, alpha     4 mW/cm^2 mm and 0.02 mm: no lamp is worth its price from beta = 107 on
    holder          the surface left of x = -22 mm

Linear elements on an unstructured Delaunay mesh that resolves ellipse, insert and ring; lumped masses.

Caution: a design aid, not a design. Light of this strength, ultraviolet light above all, injures eyes and skin:
enclosure, interlocks and exposure limits follow local codes and are the work of qualified people. The diffusion
approximation fails within a few transport lengths (1 mm each) of a lamp; measure the dose before relying on it.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import skfem
from scipy.spatial import Delaunay
from scipy.special import i0, i1, k0, k1
from skfem.helpers import dot, grad

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

SIZES = (32, 64, 128)

# lengths in mm
HALF_AXES, INSERT, INSERT_RADIUS, RING_RADIUS = (30.0, 20.0), (4.0, 1.0), 6.0, 11.0
HOLDER = -22.0
ABSORPTION, TINT, TINTED_FROM, TINTED_TO = 0.002, 4.0, -20.0, -10.0
SCATTERING_TOP, SCATTERING_BOTTOM = 0.6, 1.4
REFLECTION, TRANSMISSION, INSERT_LOSS = 0.5, 0.96, 0.05
SURFACE_LOSS = 0.5 * (1.0 - REFLECTION) / (1.0 + REFLECTION)  # 1 / (2 A)
ENTRY = 2.0 * TRANSMISSION / (1.0 + REFLECTION)
EXPOSURE = 60.0  # s


@dataclass(frozen=True)
class MeshData:
    """Mesh, what lies where, and the parameters.

    Attributes
    ----------
    mesh : skfem.MeshTri
    lit : int array, shape (number of controls,)
        Nodes of the surface that may carry a lamp, in the order of the control.
    surface : int array
        All nodes of the surface, anticlockwise.
    ring : int array
        Nodes of the ring, in the order of the observation.
    losses : array, shape (nodes,)
        Absorbed and escaping power of each node for phi = 1.
    """

    mesh: Any
    lit: IntArray
    surface: IntArray
    ring: IntArray
    losses: FloatArray
    parameters: dict[str, Any]


def build(
    n: int = 64,
    price: float = 4.0,
    control_weight: float = 0.02,
    max_irradiance: float = 15.0,
    wanted: float = 10.0,
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Triangles along the cross-section, at least 12; 64 makes about 2500 nodes and 130 controls.
    price : float
        beta, mW/cm^2 mm, not negative.
    control_weight : float
        alpha, mm, positive.
    max_irradiance : float
        mW/cm^2, positive.
    wanted : float
        Fluence rate wanted in the ring, mW/cm^2, positive.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 12:
        raise ssn.InputError(f"n must be a whole number of at least 12, got {n!r}")
    if not (control_weight > 0 and np.isfinite(control_weight)):
        raise ssn.InputError(f"control_weight must be positive and finite, got {control_weight!r}")
    if not max_irradiance > 0:
        raise ssn.InputError(f"max_irradiance must be positive, got {max_irradiance!r}")
    if not (wanted > 0 and np.isfinite(wanted)):
        raise ssn.InputError(f"wanted must be positive and finite, got {wanted!r}")
    parameters = {
        "n": int(n),
        "price": price,
        "control_weight": control_weight,
        "max_irradiance": max_irradiance,
        "wanted": wanted,
    }
    mesh, surface = casting_mesh(n)
    operator, losses, length = diffusion(mesh, surface, absorption, scattering)
    lit = surface[mesh.p[0, surface] > HOLDER]
    middle = mesh.p[:, mesh.t].mean(axis=1)
    in_ring = np.flatnonzero(np.hypot(*(middle - np.array(INSERT)[:, None])) < RING_RADIUS)
    mass = skfem.LinearForm(lambda v, _: v).assemble(
        skfem.Basis(mesh, skfem.ElementTriP1(), elements=in_ring, quadrature=_CORNERS)
    )
    ring = np.flatnonzero(mass > 0)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(operator),
        target=np.full(ring.size, float(wanted)),
        cost=ssn.SparseCost(price, 0.0, max_irradiance),
        control_weight=control_weight,
        control_operator=sp.csr_array(
            (ENTRY * length[lit], (lit, np.arange(lit.size))), shape=(mesh.nvertices, lit.size)
        ),
        observation=sp.eye_array(mesh.nvertices, format="csr")[ring],
        control_mass=length[lit],
        observation_mass=mass[ring],
    )
    problem.mesh_data = MeshData(mesh, lit, surface, ring, losses, parameters)
    return problem


def absorption(x: FloatArray) -> FloatArray:
    """mu_a, 1/mm, at points of shape (2, ...)."""
    return ABSORPTION * np.where((x[0] > TINTED_FROM) & (x[0] < TINTED_TO), TINT, 1.0)


def scattering(x: FloatArray) -> FloatArray:
    """mu_s', 1/mm, at points of shape (2, ...)."""
    share = 0.5 - 0.5 * x[1] / HALF_AXES[1]
    return SCATTERING_TOP + (SCATTERING_BOTTOM - SCATTERING_TOP) * share


# Quadrature at the corners lumps the mass.
_CORNERS = (np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0]]), np.full(3, 1 / 6))
_ENDS = (np.array([[0.0, 1.0]]), np.full(2, 1 / 2))


def diffusion(
    mesh: Any, surface: IntArray, mu_a: Callable[..., Any], mu_s: Callable[..., Any]
) -> tuple[sp.csr_array, FloatArray, FloatArray]:
    """Return the operator, the losses of each node (its row sums), and the length of surface of each node."""
    basis = skfem.Basis(mesh, skfem.ElementTriP1(), intorder=2)
    spread = skfem.BilinearForm(lambda u, v, w: dot(grad(u), grad(v)) / (3.0 * (mu_a(w.x) + mu_s(w.x))))
    # coefficients at the middle of each triangle: they may jump along lines that the mesh does not resolve
    middle = mu_a(mesh.p[:, mesh.t].mean(axis=1))
    corner = mesh.p[:, mesh.t]
    one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    area = 0.5 * np.abs(one[0] * two[1] - one[1] * two[0])
    absorbed = np.bincount(mesh.t.ravel(), weights=np.tile(middle * area / 3.0, 3), minlength=mesh.nvertices)
    on_surface = np.zeros(mesh.nvertices, dtype=bool)
    on_surface[surface] = True
    edges = mesh.boundary_facets()
    outside = on_surface[mesh.facets[:, edges]].all(axis=0)
    length, insert = (_edge_length(mesh, part) for part in (edges[outside], edges[~outside]))
    losses = absorbed + SURFACE_LOSS * length + INSERT_LOSS * insert
    return sp.csr_array(spread.assemble(basis)) + sp.diags_array(losses), losses, length


def _edge_length(mesh: Any, facets: IntArray) -> FloatArray:
    """Length of edge that belongs to each node, mm."""
    basis = skfem.FacetBasis(mesh, skfem.ElementTriP1(), facets=facets, quadrature=_ENDS)
    return skfem.LinearForm(lambda v, _: v).assemble(basis)


# The mesh


def casting_mesh(
    n: int,
    half_axes: tuple[float, float] = HALF_AXES,
    centre: tuple[float, float] = INSERT,
    hole: float = INSERT_RADIUS,
    ring: float = RING_RADIUS,
) -> tuple[Any, IntArray]:
    """Return a Delaunay mesh with triangles of about 1 / n of the longer axis, and the surface's nodes anticlockwise.

    Points lie evenly on ellipse, insert and ring, and no other point is nearer to one of them than 0.6 of their
    distance, so that the polygons through them are edges of the triangulation.
    """
    size = 2.0 * max(half_axes) / n
    surface = _ellipse(size, half_axes, (0.0, 0.0))
    lines = [surface, _ellipse(size, (hole, hole), centre), _ellipse(size, (ring, ring), centre)]
    fixed = np.vstack(lines)
    rows = np.arange(-half_axes[1], half_axes[1], size * np.sqrt(3) / 2)
    columns = np.arange(-half_axes[0], half_axes[0], size)
    free = np.array([(x + (i % 2) * size / 2, y) for i, y in enumerate(rows) for x in columns])
    # deterministic jitter, evenly spread (Kronecker sequence of the plastic number 1.3247...)
    steps = np.arange(1, len(free) + 1)[:, None] * np.array([0.7548776662466927, 0.5698402909980532])
    free += 0.3 * size * (steps % 1.0 - 0.5)
    radius = np.hypot(*(free - centre).T)
    # distance to the ellipse to first order: (1 - rho) / |grad rho|
    rho = np.hypot(*(free / half_axes).T)
    slope = np.hypot(*(free / np.square(half_axes)).T) / np.maximum(rho, 1e-9)
    clear = 0.6 * size
    free = free[((1.0 - rho) > clear * slope) & (radius - hole > clear) & (np.abs(radius - ring) > clear)]
    points = np.vstack([fixed, free])
    triangles = Delaunay(points).simplices
    corner = points[triangles]
    one, two = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    area = np.abs(one[:, 0] * two[:, 1] - one[:, 1] * two[:, 0]) / 2
    chord = hole * np.cos(np.pi / len(lines[1]))
    keep = (area > 1e-6 * size**2) & (np.hypot(*(corner.mean(axis=1) - centre).T) > chord)
    mesh = skfem.MeshTri(points.T.copy(), triangles[keep].T.astype(np.int64).copy())
    return mesh, np.arange(len(surface))


def _ellipse(size: float, half_axes: tuple[float, float], centre: tuple[float, float]) -> FloatArray:
    """Points at equal distances of about `size` along an ellipse."""
    angle = np.linspace(0.0, 2 * np.pi, 20001)
    x, y = half_axes[0] * np.cos(angle), half_axes[1] * np.sin(angle)
    arc = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))])
    number = max(12, int(np.ceil(arc[-1] / size)))
    at = np.interp(np.arange(number) * arc[-1] / number, arc, angle)
    return np.column_stack([centre[0] + half_axes[0] * np.cos(at), centre[1] + half_axes[1] * np.sin(at)])


def _angle(mesh: Any, nodes: IntArray) -> FloatArray:
    """Parameter of the ellipse, from 0 to 2 pi."""
    x, y = mesh.p[:, nodes]
    return np.mod(np.arctan2(y / HALF_AXES[1], x / HALF_AXES[0]), 2 * np.pi)


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries irradiances of `coarse` to `fine`: linear along the surface."""
    old, new = coarse.mesh_data, fine.mesh_data
    before, after = _angle(old.mesh, old.surface), _angle(new.mesh, new.lit)
    order = np.argsort(before)
    place = np.searchsorted(old.surface, old.lit)

    def carry(control: FloatArray) -> FloatArray:
        values = np.zeros(old.surface.size)
        values[place] = control
        return np.interp(after, before[order], values[order], period=2 * np.pi)

    return carry


# What is known


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Check identities of physics and of optimality, and the operator against a closed form; one further solve."""
    data, light = problem.mesh_data, solution.state
    entered = ENTRY * float(problem.weights @ solution.x)
    terms = data.losses * light
    worth = problem.pull_back(solution.adjoint)
    price = data.parameters["price"]
    # 1e-6: the adjoint is as accurate as control_weight times the irradiance
    needless = float(solution.x[worth < price * (1 - 1e-6)].max(initial=0.0))
    vanishing = ssn.vanishing_weight(problem)
    dear = problem.with_cost(ssn.SparseCost(vanishing * (1 + 1e-9), 0.0, data.parameters["max_irradiance"]))
    left_over = float(np.abs(ssn.solve(dear).x).max())
    computed, exact, mesh_width = annulus_light(data.parameters["n"])
    rounding = 1e-10 * float(np.abs(terms).sum()) / (entered or 1.0)
    return [
        _check(
            "light absorbed and escaping equals light entering, mW/cm^2 mm", "relative", entered, float(terms.sum()),
            rounding, "conservation of energy",
        ),
        _check(
            "fluence rate below zero by, mW/cm^2", "absolute", 0.0, float(max(-light.min(), 0.0)), 1e-9,
            "maximum principle",
        ),
        _check(
            "largest irradiance, mW/cm^2, where light is worth less than its price", "absolute", 0.0, needless, 0.0,
            "optimality condition",
        ),
        _check(
            f"largest irradiance, mW/cm^2, at a price just above {vanishing:.6g}, max S* z", "absolute", 0.0, left_over,
            0.0, "optimality condition of no lamps",
        ),
        _check(
            "light at the middle radius of an evenly lit ring, per irradiance, (h / mm)^2 / 1000", "relative", exact,
            computed, 1e-3 * mesh_width**2,
            "modified Bessel functions; the same mesh generator and assembly with constant coefficients",
        ),
    ]  # fmt: skip


def _check(
    what: str, kind: str, expected: float, computed: float, tolerance: float, source: str
) -> dict[str, Any]:
    off = abs(computed - expected) / ((abs(expected) or 1.0) if kind == "relative" else 1.0)
    return {
        "what": f"{what} ({kind})",
        "kind": kind,
        "expected": expected,
        "computed": computed,
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(off <= tolerance),
    }


def annulus_light(n: int) -> tuple[float, float, float]:
    """Computed and exact light on the middle circle of an annulus with u = 1 outside, and the mesh width, mm.

    Radii of 6 and 20 mm, mu_a = 0.002 / mm, mu_s' = 1 / mm: phi = a I0(m r) + b K0(m r) with m^2 = mu_a / D.
    """
    inner, middle, outer = INSERT_RADIUS, RING_RADIUS, HALF_AXES[1]
    mesh, surface = casting_mesh(n, (outer, outer), (0.0, 0.0), inner, middle)
    operator, _, length = diffusion(
        mesh, surface, lambda x: np.full(x.shape[1:], ABSORPTION), lambda x: np.ones(x.shape[1:])
    )
    light = ssn.SteadyState(operator).solve(ENTRY * length)
    on_circle = np.abs(np.hypot(*mesh.p) - middle) < 1e-9
    D = 1.0 / (3.0 * (ABSORPTION + 1.0))
    m = np.sqrt(ABSORPTION / D)
    outside = [
        D * m * i1(m * outer) + SURFACE_LOSS * i0(m * outer),
        -D * m * k1(m * outer) + SURFACE_LOSS * k0(m * outer),
    ]
    inside = [
        -D * m * i1(m * inner) + INSERT_LOSS * i0(m * inner),
        D * m * k1(m * inner) + INSERT_LOSS * k0(m * inner),
    ]
    a, b = np.linalg.solve(np.array([outside, inside]), [ENTRY, 0.0])
    exact = a * i0(m * middle) + b * k0(m * middle)
    return float(light[on_circle].mean()), float(exact), 2.0 * outer / n


# The second stage: lamps


@dataclass(frozen=True)
class Lamp:
    """A place with one lamp; irradiances are means over the place, mW/cm^2, widths and positions mm.

    `sparse` is the answer with the price, `refitted` the one without it on the same nodes, `even` that of one lamp.
    """

    nodes: IntArray
    position: tuple[float, float]
    width: float
    sparse: float
    refitted: float
    even: float


@dataclass(frozen=True)
class SecondStage:
    """Lamps, largest place first, and the root mean square relative dose error in the ring of each of three answers."""

    lamps: tuple[Lamp, ...]
    errors: dict[str, float]


def refit_lamps(problem: ssn.ControlProblem, solution: ssn.Solution) -> SecondStage:
    """Turn the support into lamps, and fit their irradiances anew without the price: node by node, and evenly."""
    data = problem.mesh_data
    graph = sp.csr_array(problem.state.matrix)[data.lit][:, data.lit]
    places = ssn.placements(solution.x > 0, graph)
    if not places:
        return SecondStage((), {"with the price": dose_error(problem, solution.state)})
    refitted = ssn.solve(ssn.refit(problem, solution)).require()
    member = sp.csr_array(
        (
            np.ones(sum(map(len, places))),
            (np.concatenate(places), np.repeat(np.arange(len(places)), [len(p) for p in places])),
        ),
        shape=(problem.unknowns, len(places)),
    )
    even = ssn.solve(
        ssn.ControlProblem(
            state=problem.state,
            target=problem.target,
            cost=ssn.Bounds(0.0, data.parameters["max_irradiance"]),
            control_weight=problem.alpha,
            control_operator=problem.control_operator @ member,
            observation=problem.observation,
            control_mass=member.T @ problem.weights,
            observation_mass=problem.observations.vector,
        )
    ).require()
    lamps = []
    for place, amplitude in zip(places, even.x, strict=True):
        width = problem.weights[place]
        x, y = (float(width @ data.mesh.p[i, data.lit[place]] / width.sum()) for i in (0, 1))
        means = (float(width @ field[place] / width.sum()) for field in (solution.x, refitted.x))
        lamps.append(Lamp(place, (x, y), float(width.sum()), *means, float(amplitude)))
    answers = {"with the price": solution, "refitted": refitted, "one lamp a place": even}
    return SecondStage(tuple(lamps), {name: dose_error(problem, s.state) for name, s in answers.items()})


def dose_error(problem: ssn.ControlProblem, light: FloatArray) -> float:
    """Root mean square relative error of the dose in the ring."""
    ring = problem.observe(light) - problem.target
    mass = problem.observations.vector
    return float(np.sqrt(mass @ ring**2 / mass.sum()) / problem.mesh_data.parameters["wanted"])


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return the lamps before and after the second stage, and the evenness of the dose."""
    stage = refit_lamps(problem, solution)
    ring = problem.observe(solution.state) * EXPOSURE
    rows = [
        ("dose in the ring", f"{ring.min():.0f} to {ring.max():.0f} mJ/cm2 in {EXPOSURE:g} s with the price"),
        ("rms dose error", ", ".join(f"{error:.1%} {name}" for name, error in stage.errors.items())),
        (
            "lamps",
            f"{len(stage.lamps)}; mean irradiance with the price -> refitted -> as one even lamp, mW/cm2",
        ),
    ]
    for k, lamp in enumerate(stage.lamps, 1):
        x, y = lamp.position
        where = f"({x:.1f}, {y:.1f}) mm, {lamp.width:.1f} mm wide"
        rows.append((f"lamp {k}", f"{where}: {lamp.sparse:.2f} -> {lamp.refitted:.2f} -> {lamp.even:.2f}"))
    return rows


# The picture


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the dose in the casting with the lamps on its surface, and the irradiance along the surface."""
    data, mesh = problem.mesh_data, problem.mesh_data.mesh
    stage = refit_lamps(problem, solution)
    figure = new_figure(11.0, 4.4)
    left, right = figure.subplots(1, 2, width_ratios=[1.35, 1.0])
    wanted = data.parameters["wanted"] * EXPOSURE
    dose = left.tripcolor(
        *mesh.p,
        mesh.t.T,
        solution.state * EXPOSURE,
        shading="gouraud",
        cmap="inferno",
        vmin=0.0,
        vmax=2.0 * wanted,
    )
    figure.colorbar(dose, ax=left, label="dose (mJ/cm²)", shrink=0.9, extend="max")
    ring = _ellipse(0.5, (RING_RADIUS, RING_RADIUS), INSERT)
    left.plot(*np.vstack([ring, ring[:1]]).T, color="#7fdc7f", lw=1.6)
    outline = np.append(data.surface, data.surface[0])
    left.plot(*mesh.p[:, outline], color="black", lw=1.0)
    insert = _ellipse(0.3, (INSERT_RADIUS, INSERT_RADIUS), INSERT)
    left.fill(*insert.T, color="0.6")
    held = data.surface[mesh.p[0, data.surface] <= HOLDER]
    left.plot(*mesh.p[:, held], color="0.45", lw=5)
    for k, lamp in enumerate(stage.lamps, 1):
        x, y = mesh.p[:, data.lit[lamp.nodes]]
        left.plot(1.05 * x, 1.05 * y, "s", color="#1f6fb0", ms=4)
        left.text(
            1.14 * lamp.position[0],
            1.16 * lamp.position[1],
            str(k),
            ha="center",
            va="center",
            color="#1f6fb0",
        )
    left.set(aspect="equal", xlabel="x (mm)", ylabel="y (mm)", xlim=(-36, 36), ylim=(-25, 25))
    left.set_title("dose; green: bond line, grey: insert and holder")
    angle = np.degrees(_angle(mesh, data.lit))
    order = np.argsort(angle)
    right.plot(
        angle[order], solution.x[order], color="#1f6fb0", drawstyle="steps-mid", label="with the price"
    )
    even = np.zeros(problem.unknowns)
    for lamp in stage.lamps:
        even[lamp.nodes] = lamp.even
    right.plot(
        angle[order], even[order], color="#d08010", drawstyle="steps-mid", label="one lamp a place, refitted"
    )
    right.set(
        xlabel="angle along the surface (degrees)",
        ylabel="irradiance (mW/cm²)",
        xlim=(0, 360),
        ylim=(0, 1.3 * max(float(solution.x.max()), float(even.max()), 1e-9)),  # room for the legend
    )
    right.legend(frameon=False, loc="upper center")
    errors = list(stage.errors.values())
    figure.suptitle(
        f"Curing lamps: {len(stage.lamps)} places; rms dose error {errors[0]:.1%} with the price, "
        f"{errors[-1]:.1%} after the second stage"
    )
    return figure
