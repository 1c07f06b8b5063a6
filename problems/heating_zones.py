"""One supply, several heating zones, one at a time: switching control of a heat equation after a moving set point.

A plate, insulated at its edges, loses heat to the air. Its zones are heated one at a time, since the supply can feed
only one; the set point, a warm spot, moves over the plate. y is the temperature above the air; dimensionless:

    y' - kappa Lap y + loss y = sum_i u_i(t) chi_i in the unit square, 0 < t < 1, no flux through the edges, y(0) = 0,

chi_i the indicator of zone i: halves (2), quarters (4), or a grid of 4 by 2 (8), each of area a. The powers per area
u_i, cooling where negative, are chosen by

    minimise 1/2 ||y - z||^2 + alpha/2 a sum_i int u_i^2 dt + beta/2 int (a sum_i |u_i|)^2 dt.

The last term does not forbid two zones at a time: beside the squares of the powers it costs their products, which are
zero where one zone is on. How often exactly one is on is `share_of_one`.

What decides it: let q_i be the mean of the adjoint state over zone i, the worth of a unit of power there, and q_1 the
largest in size. At an instant zone 1 is on alone exactly where, for all others,

    |q_i| <= a beta / (alpha + a beta) |q_1|                                                    (`on_by_adjoints`).

The ratio is near 1 as soon as a beta is large compared with alpha, and yet one zone alone may be rare: where power is
cheap, the misfit is used up until the worths of several zones are nearly equal. So a beta must be compared with the
size of S*S, S the map from powers to temperatures, about 0.2 here: measured shares (`SHARES`, n = 16) are 0 to 0.3 for
a beta = 0.001, 0.45 to 0.8 for 0.01 and above 0.95 for 0.1, nearly the same for alpha = 1e-4 and 1e-6. The price is
distance from the set point: with 4 zones 51 %, 60 %, 80 % of it.

Source of the term: C. Clason, K. Ito and K. Kunisch, ESAIM Math. Model. Numer. Anal. 50 (2016) 581-609 (from memory),
for two actuators; the scenario is our own.

Finite volumes: n by n square cells with the five-point matrix, whose outer sides let nothing through; implicit Euler
steps.

Caution: a design aid. Heaters that overheat or switch fast burn people and wear contactors: limits, thermostats and
protection follow local codes and are the work of qualified people. How often the supply switches is not limited here.
For alpha <= 1e-6 the worths of the zones agree to many digits, and steps may run out: follow alpha down from 1e-3 at
the same beta.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

SIZES = (8, 16, 32)

KAPPA, LOSS = 0.05, 1.0
#: zones -> a beta -> share of the instants with one zone on, n = 16, alpha = 1e-4
SHARES = {
    2: {0.001: 0.3125, 0.01: 0.65625, 0.1: 1.0},
    4: {0.001: 0.03125, 0.01: 0.78125, 0.1: 0.96875},
    8: {0.001: 0.0, 0.01: 0.453125, 0.1: 0.96875},
}
#: zones -> columns and rows of their grid
GRIDS = {2: (2, 1), 4: (2, 2), 8: (4, 2)}
SPOT_HEIGHT, SPOT_WIDTH, RADIUS = 1.0, 0.2, 0.27


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need.

    Attributes
    ----------
    line : array, shape (n,)
        Middles of the cells along a side.
    mass : array, shape (n * n,)
        Area of each cell.
    zone : int array, shape (n * n,)
        The zone of each cell.
    times : array, shape (steps,)
        Ends of the time steps.
    """

    n: int
    steps: int
    line: FloatArray
    mass: FloatArray
    zone: IntArray
    times: FloatArray
    parameters: dict[str, Any]

    @property
    def shape(self) -> tuple[int, int]:
        """(instants, zones)."""
        return self.steps, self.parameters["zones"]


def build(
    n: int = 16, steps: int = 0, zones: int = 4, alpha: float = 2e-4, beta: float = 0.04
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Cells a side, a multiple of 4; 64 with 256 steps make 1.0e6 unknowns of the state.
    steps : int
        Time steps; 0 means 4 n.
    zones : {2, 4, 8}
    alpha : float
        Weight of the square of the powers, positive.
    beta : float
        Weight of the square of the sum of powers, not negative; a beta is what counts, a = 1 / zones.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 4 or n % 4:
        raise ssn.InputError(f"n must be a multiple of 4, got {n!r}")
    if isinstance(steps, bool) or not isinstance(steps, int | np.integer) or steps < 0:
        raise ssn.InputError(f"steps must be a whole number of at least 0, got {steps!r}")
    if zones not in GRIDS:
        raise ssn.InputError(f"zones must be 2, 4 or 8, got {zones!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    n, steps, zones = int(n), int(steps or 4 * n), int(zones)
    parameters = {"n": n, "steps": steps, "zones": zones, "alpha": alpha, "beta": beta}
    h = 1.0 / n
    line = (np.arange(n) + 0.5) * h
    mass = np.full(n * n, h * h)
    A = sp.csr_array(KAPPA * five_point(n) + sp.diags_array(LOSS * mass))
    state = ssn.TimeDependentState(mass, A, steps=steps, duration=1.0)
    columns, rows = GRIDS[zones]
    zone = (np.repeat(np.arange(n) * columns // n, n) * rows + np.tile(np.arange(n) * rows // n, n)).astype(
        np.intp
    )
    shapes = sp.csr_array((mass, (np.arange(n * n), zone)), shape=(n * n, zones))
    area = np.bincount(zone, weights=mass)
    problem = ssn.ControlProblem(
        state=state,
        target=set_point(state.times[1:], line).ravel(),
        cost=ssn.SwitchingCost(beta, (steps, zones), area),
        control_weight=alpha,
        control_operator=state.control_operator(shapes),
        control_mass=state.control_mass(area),
        observation_mass=state.observation_mass(),
    )
    problem.mesh_data = MeshData(n, steps, line, mass, zone, state.times[1:], parameters)
    return problem


def five_point(n: int) -> sp.csr_array:
    """Stiffness matrix for n by n cells with values at their middles and no flux through the edges."""
    diagonal = np.full(n, 2.0)
    diagonal[[0, -1]] = 1.0
    second = sp.diags_array([-np.ones(n - 1), diagonal, -np.ones(n - 1)], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def spot(times: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Centre of the warm spot: once around the plate."""
    angle = 2 * np.pi * times - 0.75 * np.pi
    return 0.5 + RADIUS * np.cos(angle), 0.5 + RADIUS * np.sin(angle)


def set_point(times: FloatArray, line: FloatArray) -> FloatArray:
    """z, shape (times, n * n): it rises within the first tenth of the time."""
    c1, c2 = (c[:, None, None] for c in spot(times))
    square = (line[:, None] - c1) ** 2 + (line - c2) ** 2
    rise = np.minimum(10.0 * times, 1.0)[:, None]
    return rise * SPOT_HEIGHT * np.exp(-square / (2 * SPOT_WIDTH**2)).reshape(times.size, -1)


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries powers of `coarse` to `fine`: the value of the step that holds the instant."""
    old, new = coarse.mesh_data, fine.mesh_data
    step = np.clip(np.ceil(new.times * old.steps - 1e-9).astype(int) - 1, 0, old.steps - 1)

    def carry(power: FloatArray) -> FloatArray:
        return np.reshape(power, old.shape)[step].ravel()

    return carry


# What decides how many zones are on


def zones_on(problem: ssn.ControlProblem, power: FloatArray) -> IntArray:
    """How many zones are on at each instant, shape (steps,)."""
    return np.count_nonzero(np.reshape(power, problem.mesh_data.shape), axis=1)


def share_of_one(problem: ssn.ControlProblem, power: FloatArray) -> float:
    """The part of the instants with exactly one zone on."""
    return float((zones_on(problem, power) == 1).mean())


def on_by_adjoints(problem: ssn.ControlProblem, adjoint: FloatArray) -> IntArray:
    """How many zones the adjoint state wants on at each instant, shape (steps,), without the proximal map.

    With worths |q_1| >= |q_2| >= ... and equal areas a, zone k + 1 is off where k are on exactly if
    |q_k+1| <= a beta / (alpha + k a beta) (|q_1| + ... + |q_k|).
    """
    mesh = problem.mesh_data
    area, beta = 1.0 / mesh.shape[1], float(mesh.parameters["beta"])
    worth = -np.sort(-np.abs(worths(problem, adjoint)), axis=1)
    k = np.arange(1, mesh.shape[1] + 1)
    threshold = area * beta / (problem.alpha + k * area * beta) * np.cumsum(worth, axis=1)
    off = np.pad(worth, ((0, 0), (0, 1)))[:, 1:] <= threshold
    return np.where((worth > 0).any(axis=1), off.argmax(axis=1) + 1, 0)


def worths(problem: ssn.ControlProblem, adjoint: FloatArray) -> FloatArray:
    """q_i, the mean of the adjoint state over each zone, shape (steps, zones)."""
    mesh = problem.mesh_data
    sums = np.reshape(adjoint, (mesh.steps, -1)) @ sp.csr_array(
        (mesh.mass, (np.arange(mesh.mass.size), mesh.zone)), shape=(mesh.mass.size, mesh.shape[1])
    )
    return np.asarray(sums) * mesh.shape[1]


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Check the pointwise condition, the balance of heat, and even heating against its closed form; one state solve."""
    mesh = problem.mesh_data
    area, tau = 1.0 / mesh.shape[1], 1.0 / mesh.steps
    heat = np.reshape(solution.state, (mesh.steps, -1)) @ mesh.mass
    entered = tau * area * float(solution.x.sum())
    kept = float(heat[-1] + LOSS * tau * heat.sum())
    differ = zones_on(problem, solution.x) != on_by_adjoints(problem, solution.adjoint)
    even = problem.response(np.ones(problem.unknowns))[-1]
    exact = (1.0 - np.exp(-LOSS)) / LOSS
    size = tau * area * float(np.abs(solution.x).sum())
    return [
        _check(
            "part of the instants whose number of zones on is not what the adjoints say", "absolute", 0.0,
            float(differ.mean()), 0.0, "pointwise optimality condition; for two zones Clason, Ito and Kunisch (2016)",
        ),
        _check(
            "heat kept and lost equals heat put in", "absolute", entered, kept, 1e-10 * size, "conservation of energy",
        ),
        _check(
            "temperature at the end under even heating, loss / steps", "relative", exact, float(even), LOSS * tau,
            "(1 - exp(-loss t)) / loss; implicit Euler is of first order",
        ),
    ]  # fmt: skip


def _check(
    what: str, kind: str, expected: float, computed: float, tolerance: float, source: str
) -> dict[str, Any]:
    off = abs(computed - expected) / (abs(expected) if kind == "relative" else 1.0)
    return {
        "what": f"{what} ({kind})",
        "kind": kind,
        "expected": expected,
        "computed": computed,
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(off <= tolerance),
    }


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return how often one zone is on, and the three sizes that decide it."""
    mesh = problem.mesh_data
    power = np.reshape(solution.x, mesh.shape)
    counts = np.bincount(zones_on(problem, solution.x), minlength=2)
    largest = np.abs(power).argmax(axis=1)
    switches = int(np.count_nonzero(np.diff(largest)))
    error = problem.observe(solution.state) - problem.target
    relative = problem.observations.norm(error) / problem.observations.norm(problem.target)
    weight = float(mesh.parameters["beta"]) / mesh.shape[1]
    size = 1.0 / problem.natural_step()
    return [
        (
            "zones on at a time",
            ", ".join(f"{k}: {c / mesh.steps:.0%} of the instants" for k, c in enumerate(counts) if c),
        ),
        ("switchings", f"{switches} changes of the strongest zone"),
        ("distance to the set point", f"{relative:.1%} of it"),
        ("a beta : alpha : ||S*S||", f"{weight:.2g} : {problem.alpha:.2g} : {size:.2g}"),
    ]


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the powers over time, the worths that decide, and temperature and set point at three instants."""
    mesh = problem.mesh_data
    count = mesh.shape[1]
    power = np.reshape(solution.x, mesh.shape)
    worth = np.abs(worths(problem, solution.adjoint))
    figure = new_figure(10.5, 6.6)
    grid = figure.add_gridspec(3, 3, height_ratios=[1.1, 0.9, 1.3])
    powers, ratio = figure.add_subplot(grid[0, :]), figure.add_subplot(grid[1, :])
    limit = float(np.abs(power).max()) or 1.0
    shown = np.where(power == 0, np.nan, power)
    powers.set_facecolor("0.9")
    image = powers.imshow(
        shown.T, origin="lower", extent=(0.0, 1.0, 0.5, count + 0.5), cmap="RdBu_r", vmin=-limit, vmax=limit,
        aspect="auto", interpolation="nearest",
    )  # fmt: skip
    figure.colorbar(image, ax=powers, label="power per area")
    powers.set(ylabel="zone", yticks=range(1, count + 1), title="powers; grey: exactly zero")
    ordered = -np.sort(-worth, axis=1)
    ratio.plot(mesh.times, ordered[:, 1] / np.maximum(ordered[:, 0], 1e-300), color="#1f6fb0")
    weight = float(mesh.parameters["beta"]) / count
    ratio.axhline(weight / (problem.alpha + weight), color="black", lw=0.8, ls="--")
    ratio.set(
        xlabel="time", xlim=(0, 1), title="second largest worth over the largest; one zone on below the line"
    )
    field = np.reshape(solution.state, (mesh.steps, mesh.n, mesh.n))
    target = np.reshape(problem.target, field.shape)
    line = np.linspace(mesh.line[0], mesh.line[-1], mesh.n)
    for k, instant in enumerate((0.3, 0.6, 0.9)):
        axes = figure.add_subplot(grid[2, k])
        step = min(int(instant * mesh.steps), mesh.steps - 1)
        drawn = axes.imshow(
            field[step].T, origin="lower", extent=(0, 1, 0, 1), cmap="inferno", vmin=0.0, vmax=SPOT_HEIGHT
        )
        axes.contour(line, line, target[step].T, levels=[0.5 * SPOT_HEIGHT], colors="#7fdc7f")
        columns, rows = GRIDS[count]
        for c in range(1, columns):
            axes.axvline(c / columns, color="white", lw=0.5, ls=":")
        for r in range(1, rows):
            axes.axhline(r / rows, color="white", lw=0.5, ls=":")
        axes.set(title=f"temperature, t = {mesh.times[step]:.2f}", xticks=[], yticks=[])
        figure.colorbar(drawn, ax=axes, shrink=0.8)
    figure.suptitle(
        f"{count} heating zones, one supply: one zone on at {share_of_one(problem, solution.x):.0%} of the instants; "
        rf"$\alpha$ = {problem.alpha:g}, $\beta$ = {mesh.parameters['beta']:g}; green: half the set point's height"
    )
    return figure
