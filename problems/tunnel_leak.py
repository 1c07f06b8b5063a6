"""Where does the tunnel leak, how much, and when? Leaks along the floor from noisy gas readings at the outlet.

Gas enters a ventilated tunnel through cracks of its floor, some of the time. Sensors at the outlet read its
concentration c (g/m^3), which drifts with the air and spreads by turbulence, in the tunnel's length and height:

    dc/dt + v(z) dc/dx - d/dx(K_x dc/dx) - d/dz(K_z dc/dz) = 0,  c = 0 at the inlet and at t = 0,
    K_z dc/dz = -u on the floor, no flux through the ceiling, none by spreading at the outlet.

The leak rate u(x, t) (g/(m^2 s)) of the floor is found by

    minimise misfit + alpha/2 int int u^2 + beta int s (int u^2 dt)^(1/2) dx,  u >= 0,

misfit = 1/2 the mean square of (computed - read) / noise level: 1/2 where only noise is left. The last term is sparse
in place, not in time: most of the floor never leaks. s is the root mean square reading of a steady leak at x, as a part
of the largest one: without it places near the outlet, whose gas is read undiluted, would be preferred. beta is chosen
by the discrepancy principle: the largest one with misfit <= 1/2 (`weight_by_discrepancy`). It widens and shifts leaks,
and moves gas from one to the other; the second stage (`refit_leaks`) drops it, keeps one place for each leak, moves it
where the objective falls, and fits the rates anew.

Source of the functional: R. Herzog, G. Stadler and G. Wachsmuth, SIAM J. Control Optim. 50 (2012) 943-963 (from
memory); discrepancy principle: V. A. Morozov, Soviet Math. Dokl. 7 (1966) 414-417 (from memory). The scenario is our
own; values marked (c) are orders of magnitude, not measurements.

    tunnel      200 m long, 5 m high; v: power law with exponent 1/7 from floor and ceiling, mean 1 m/s (c)
    K_x, K_z    3.5 m^2/s and 0.02 m^2/s, turbulent (c)
    readings    8 heights at the outlet, every 8 s for 400 s, with independent normal errors of 3 % of the largest one
    leaks       `LEAKS`: place, rate per width of tunnel, opening and closing time
    u           a value a place and 8 s

The readings are simulated on another mesh, finer in both directions and in time, with leaks at points between nodes.

Bilinear elements, n along the tunnel and n / 4 in its height, narrower towards the floor; K_x is raised to v h / 2
where that is more (cells longer than 2 K_x / v = 7 m, n < 29). Consistent mass, Crank-Nicolson steps.

Caution: a design aid, not a safety system. Gas that burns, poisons or displaces air is monitored and ventilated by
local codes and qualified people, with independent alarms; a place reported clean is not proven clean, and a leak whose
gas is still on its way leaves no trace in the readings. Distance from the outlet is read from the spread of the gas:
leaks whose readings overlap in time are shifted by tens of metres. For alpha < 0.01 steps may run out.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
import skfem
from scipy.integrate import trapezoid
from skfem.helpers import grad

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (30, 42, 60)

LENGTH, HEIGHT, DURATION = 200.0, 5.0, 400.0  # m, m, s
SPEED, SPREAD_X, SPREAD_Z = 1.0, 3.5, 0.02  # m/s, m^2/s
SAMPLES, BLOCKS = 50, 50
BLOCK = DURATION / BLOCKS
SENSORS = (0.3, 0.8, 1.4, 2.0, 2.6, 3.3, 4.0, 4.7)  # m
#: (x in m, g/(m s), opens at, closes at in s)
LEAKS = ((61.0, 0.6, 10.0, 60.0), (141.0, 0.4, 260.0, 320.0))
GRADING = 1.5


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need.

    Attributes
    ----------
    x : array, shape (n,)
        Places of the control along the floor, m.
    width : array, shape (n,)
        Length of floor of each, m.
    readings, clean : array, shape (samples, sensors)
        With and without noise, g/m^3.
    noise : float
        Standard deviation of the readings, g/m^3.
    """

    x: FloatArray
    width: FloatArray
    readings: FloatArray
    clean: FloatArray
    noise: float
    parameters: dict[str, Any]

    @property
    def shape(self) -> tuple[int, int]:
        """(blocks of time, places) of the control."""
        return BLOCKS, self.x.size


def build(
    n: int = 30, steps: int = 0, alpha: float = 0.15, beta: float = 0.4, noise: float = 0.03, seed: int = 1
) -> ssn.ControlProblem:
    """Build the problem.

    Parameters
    ----------
    n : int
        Elements along the tunnel, at least 12. n = 160 makes 1.3e6 unknowns of the state.
    steps : int
        Time steps, a multiple of the 50 readings; 0 means 50 where n < 48, 100 where n < 96, and 200 beyond.
    alpha : float
        Weight of the square of the rate, 1 / (unit of rate^2 m s), positive.
    beta : float
        Weight of the sparsity term, 1 / (unit of rate m s^(1/2)), not negative.
    noise : float
        Standard deviation of a reading as a part of the largest one, positive.
    seed : int
        Of the random errors.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    for name, value, least in (("n", n, 12), ("steps", steps, 0), ("seed", seed, 0)):
        if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
            raise ssn.InputError(f"{name} must be a whole number of at least {least}, got {value!r}")
    if steps % SAMPLES:
        raise ssn.InputError(f"steps must be a multiple of the {SAMPLES} readings, got {steps!r}")
    for name, value in (("alpha", alpha), ("noise", noise)):
        if not (value > 0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must be positive and finite, got {value!r}")
    n, steps = int(n), int(steps or default_steps(n))
    parameters = {"n": n, "steps": steps, "alpha": alpha, "beta": beta, "noise": noise, "seed": seed}
    clean = simulate(n, steps)
    deviation = noise * float(clean.max())
    readings = clean + deviation * np.random.default_rng(seed).standard_normal(clean.shape)
    x, z, state, length = tunnel(n, n // 4, steps)
    floor = np.arange(1, n + 1)  # nodes of the floor but that at the inlet
    shapes = sp.csr_array((length[floor], (floor * z.size, np.arange(n))), shape=(state.points, n))
    amplitudes = np.kron(np.eye(BLOCKS), np.ones((steps // BLOCKS, 1)))
    problem = ssn.ControlProblem(
        state=state,
        target=readings.ravel(),
        cost=cost_of(beta * sensitivity(state, x, z)),
        control_weight=alpha,
        control_operator=state.control_operator(shapes, amplitudes),
        observation=state.observation_operator(at_sensors(x, z), sample_levels(steps)),
        control_mass=state.control_mass(length[floor], amplitudes),
        observation_mass=np.full(readings.size, 1.0 / (readings.size * deviation**2)),
    )
    problem.mesh_data = MeshData(x[floor], length[floor], readings, clean, deviation, parameters)
    return problem


_DEFAULTS = {"alpha": 0.15, "beta": 0.4, "noise": 0.03, "seed": 1}


def default_steps(n: int) -> int:
    """Time steps for a mesh."""
    return next((steps for least, steps in ((96, 200), (48, 100)) if n >= least), 50)


def speed(z: FloatArray) -> FloatArray:
    """v, m/s."""
    return SPEED * 8.0 / 7.0 * np.maximum(1.0 - np.abs(2.0 * z / HEIGHT - 1.0), 0.0) ** (1.0 / 7.0)


def tunnel(
    columns: int, rows: int, steps: int, air: Callable[[FloatArray], FloatArray] | None = None
) -> tuple[FloatArray, FloatArray, Any, FloatArray]:
    """Return the nodes along and up the tunnel, the state model, and the length of floor of each column of nodes.

    `air` is v, by default `speed`. Node (i, j) at (x_i, z_j) has number i * len(z) + j; those at the inlet stay zero.
    """
    x = np.linspace(0.0, LENGTH, columns + 1)
    z = HEIGHT * np.linspace(0.0, 1.0, rows + 1) ** GRADING
    mesh = skfem.MeshQuad.init_tensor(x, z)
    basis = skfem.Basis(mesh, skfem.ElementQuad1(), intorder=3)
    h = LENGTH / columns

    @skfem.BilinearForm
    def transport(c: Any, w: Any, at: Any) -> Any:
        v = (air or speed)(at.x[1])
        along = np.maximum(SPREAD_X, 0.5 * h * v)  # cell Peclet numbers of at most 1
        return v * grad(c)[0] * w + along * grad(c)[0] * grad(w)[0] + SPREAD_Z * grad(c)[1] * grad(w)[1]

    # number the nodes by their place
    order = np.lexsort((mesh.p[1], mesh.p[0]))
    A = sp.csr_array(transport.assemble(basis))[order][:, order]
    M = sp.csr_array(skfem.BilinearForm(lambda c, w, _: c * w).assemble(basis))[order][:, order]
    # at the inlet: c stays zero, whatever the load
    at_inlet = np.arange(M.shape[0]) < z.size
    keep = sp.diags_array(np.where(at_inlet, 0.0, 1.0))
    M, A = (
        sp.csr_array(keep @ X @ keep + sp.diags_array(np.where(at_inlet, X.diagonal(), 0.0))) for X in (M, A)
    )
    state = ssn.TimeDependentState(M, A, steps=steps, duration=DURATION, scheme="Crank-Nicolson")
    length = np.full(columns + 1, h)
    length[[0, -1]] *= 0.5
    return x, z, state, length


def sensitivity(state: Any, x: FloatArray, z: FloatArray) -> FloatArray:
    """Root mean square reading of a steady leak at each place of the floor, as a part of the largest: (places,)."""
    steady, sensors = ssn.SteadyState(state.A), at_sensors(x, z).toarray()
    readings = np.stack([steady.adjoint_solve(row)[z.size :: z.size] for row in sensors])
    size = np.sqrt((readings**2).mean(axis=0))
    return size / size.max()


def at_sensors(x: FloatArray, z: FloatArray) -> sp.csr_array:
    """What the sensors read: linear between the nodes of the outlet."""
    heights = np.array(SENSORS)
    above = np.clip(np.searchsorted(z, heights), 1, z.size - 1)
    share = (heights - z[above - 1]) / (z[above] - z[above - 1])
    outlet = (x.size - 1) * z.size
    rows = np.arange(heights.size)
    return sp.csr_array(
        (
            np.concatenate([1.0 - share, share]),
            (np.concatenate([rows, rows]), outlet + np.concatenate([above - 1, above])),
        ),
        shape=(heights.size, x.size * z.size),
    )


def sample_levels(steps: int) -> npt.NDArray[np.intp]:
    """Time levels of the readings."""
    return np.arange(1, SAMPLES + 1) * (steps // SAMPLES)


@lru_cache(maxsize=4)
def simulate(n: int, steps: int) -> FloatArray:
    """Readings without noise, of leaks at points, on a mesh of 3/2 n elements along, and twice the steps."""
    columns, steps = 3 * n // 2 + 1, 2 * steps
    x, z, state, _ = tunnel(columns, 3 * n // 8 + 1, steps)
    load = np.zeros((steps, state.points))
    for place, rate, opens, closes in LEAKS:
        i = int(np.searchsorted(x, place)) - 1
        share = (place - x[i]) / (x[i + 1] - x[i])
        ends = np.clip(state.times, opens, closes)
        amount = rate * np.diff(ends) / state.step_sizes
        load[:, i * z.size] += (1.0 - share) * amount
        load[:, (i + 1) * z.size] += share * amount
    levels = state.solve(state.source(load)).reshape(steps, -1)[sample_levels(steps) - 1]
    readings = levels @ at_sensors(x, z).T
    readings.setflags(write=False)
    return readings


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries rates of `coarse` to `fine`: linear along the floor."""
    old, new = coarse.mesh_data, fine.mesh_data

    def carry(rate: FloatArray) -> FloatArray:
        return np.stack([np.interp(new.x, old.x, row) for row in np.reshape(rate, old.shape)]).ravel()

    return carry


# What is known


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Check the noise level, optimality, and the transport of the model against a closed form; one further solve."""
    data = problem.mesh_data
    checks = []
    if data.parameters == {"n": data.parameters["n"], "steps": data.parameters["steps"], **_DEFAULTS}:
        checks.append(
            _check(
                "misfit, whose mean for noise alone is 1/2", "relative", 0.5, misfit(problem, solution), 0.2,
                "discrepancy principle, Morozov (1966); 400 readings vary by 7 %, the mesh adds its error",
            )
        )  # fmt: skip
    # the worth of a place: the norm over time of the positive part of the adjoint on the floor
    worth = problem.cost.norms(np.maximum(problem.pull_back(solution.adjoint), 0.0))
    # 1e-6: the adjoint is as accurate as alpha times the rate
    below = worth < problem.cost.beta * (1.0 - 1e-6)
    needless = float(np.abs(np.reshape(solution.x, data.shape)[:, below]).max(initial=0.0))
    vanishing = ssn.vanishing_weight(problem)
    profile = problem.cost.beta / problem.cost.beta.max()
    left_over = float(np.abs(ssn.solve(problem.with_cost(cost_of(vanishing * (1 + 1e-9) * profile))).x).max())
    computed, exact = plug_flow(data.parameters["n"])
    checks += [
        _check(
            "largest rate, g/(m^2 s), of places whose worth is below beta s", "absolute", 0.0, needless, 0.0,
            "optimality condition; Herzog, Stadler and Wachsmuth (2012) (from memory)",
        ),
        _check(
            f"largest rate, g/(m^2 s), for beta just above {vanishing:.6g}", "absolute", 0.0, left_over, 0.0,
            "optimality condition of no leak",
        ),
        _check(
            "mean concentration at the outlet of an evenly leaking tunnel with plug flow",
            "relative", exact, computed, 1e-6,
            "solution of v c' - K c'' = u / H in closed form; the same assembly with another v",
        ),
    ]  # fmt: skip
    return checks


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


def misfit(problem: ssn.ControlProblem, solution: ssn.Solution) -> float:
    """1/2 the mean square of (computed - read) / noise level."""
    off = problem.observe(solution.state) - problem.target
    return 0.5 * problem.observations.dot(off, off)


def plug_flow(n: int) -> tuple[float, float]:
    """Computed and exact mean concentration at the outlet for v = 1 m/s everywhere and a steady rate of 1 g/(m^2 s).

    The mean over the height is c with v c' - K_x c'' = u / H, c(0) = 0, c'(L) = 0.
    """
    x, z, state, length = tunnel(n, n // 4, SAMPLES, lambda heights: np.full_like(heights, SPEED))
    load = np.zeros(state.points)
    load[z.size :: z.size] = length[1:]
    outlet = ssn.SteadyState(state.A).solve(load).reshape(x.size, z.size)[-1]
    computed = float(trapezoid(outlet, z)) / HEIGHT
    reach = max(SPREAD_X, 0.5 * LENGTH / n * SPEED) / SPEED
    exact = (LENGTH - reach * (1.0 - np.exp(-LENGTH / reach))) / (HEIGHT * SPEED)
    return computed, float(exact)


# The weight, and the second stage


def weight_by_discrepancy(problem: ssn.ControlProblem, shares: Any = None) -> tuple[Any, Any]:
    """Return the path of solutions over beta and its point with the largest beta whose misfit is at most 1/2.

    `shares` are parts of the largest useful weight, `ssn.vanishing_weight`; by default 0.2 down to 0.003 by factors of
    0.6.
    """
    profile = problem.cost.beta / problem.cost.beta.max()
    largest = ssn.vanishing_weight(problem)
    path = ssn.weight_path(
        lambda beta: problem.with_cost(cost_of(beta * profile)),
        largest * (0.2 * 0.6 ** np.arange(9) if shares is None else np.asarray(shares)),
    )
    return path, path.discrepancy(0.5)


def cost_of(weights: FloatArray) -> ssn.GroupSparseCost:
    """The cost with a weight for each place."""
    return ssn.GroupSparseCost(weights, shape=(BLOCKS, weights.size), axis=0, inner_weights=BLOCK, lower=0.0)


@dataclass(frozen=True)
class Leak:
    """A leak found: place (m) and amount (g per m of width) before and after the second stage, when it was open (s)."""

    place: float
    amount: float
    refitted_place: float
    refitted_amount: float
    opens: float
    closes: float


def refit_leaks(
    problem: ssn.ControlProblem, solution: ssn.Solution, least: float = 0.05
) -> tuple[list[Leak], Any]:
    """Return the leaks from inlet to outlet, and the solution with one place for each and without the sparsity term.

    Connected places whose amounts exceed a fifth of the largest, and that make a twentieth of all gas, are one leak;
    what enters elsewhere is counted with the nearest one, and a leak lies at the mean of all it is counted with.
    In the second stage places move along the floor, one node at a time, as long as the objective falls.
    """
    data = problem.mesh_data
    amounts = amount(problem, solution.x)
    beside = sp.diags_array([np.ones(data.x.size - 1)] * 2, offsets=[-1, 1], shape=(data.x.size,) * 2)
    strong = ssn.placements(amounts > 0.2 * amounts.max(), beside)
    strong = [part for part in strong if amounts[part].sum() > 0.05 * amounts.sum()]
    middles = np.sort([float(data.x[part] @ amounts[part] / amounts[part].sum()) for part in strong])
    owner = np.abs(data.x[:, None] - middles).argmin(axis=1) if strong else np.empty(0, dtype=int)
    parts = [np.flatnonzero((owner == k) & (amounts > 0)) for k in range(len(strong))]
    places = [float(data.x[part] @ amounts[part] / amounts[part].sum()) for part in parts]

    @cache
    def at(nodes: tuple[int, ...]) -> Any:
        mask = np.zeros(data.shape, dtype=bool)
        mask[:, list(nodes)] = True
        return ssn.solve(ssn.refit(problem, mask.ravel()))

    nodes = tuple(int(np.abs(data.x - place).argmin()) for place in places)
    moving = True
    while moving:
        moving = False
        for k, step in [(k, step) for k in range(len(nodes)) for step in (-1, 1)]:
            moved = (*nodes[:k], nodes[k] + step, *nodes[k + 1 :])
            inside = 0 <= moved[k] < data.x.size and len(set(moved)) == len(moved)
            if inside and at(moved).objective < at(nodes).objective:
                nodes, moving = moved, True
    again = at(nodes)
    rates, leaks = np.reshape(again.x, data.shape), []
    for part, place, node in zip(parts, places, nodes, strict=True):
        open_at = np.flatnonzero(rates[:, node] > 0.5 * rates[:, node].max())
        opens, closes = (BLOCK * open_at[0], BLOCK * (open_at[-1] + 1)) if open_at.size else (0.0, 0.0)
        after = float(amount(problem, again.x)[node])
        leaks.append(
            Leak(place, float(amounts[part].sum()), float(data.x[node]), after, float(opens), float(closes))
        )
    return leaks, again


def amount(problem: ssn.ControlProblem, rates: FloatArray) -> FloatArray:
    """What each place lets in over all time, g per m of width."""
    data = problem.mesh_data
    return BLOCK * np.reshape(rates, data.shape).sum(axis=0) * data.width


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return the leaks found beside the true ones."""
    leaks, again = refit_leaks(problem, solution)
    rows = [
        (
            "misfit",
            f"{misfit(problem, solution):.3f} with the sparsity term, {misfit(problem, again):.3f} refitted; "
            "0.5 for noise alone",
        ),
        (
            "leaks found",
            f"{len(leaks)}; place, amount per m of width with the sparsity term -> refitted, when",
        ),
    ]
    for k, leak in enumerate(leaks, 1):
        place, rate, opens, closes = min(LEAKS, key=lambda true, leak=leak: abs(true[0] - leak.place))
        total = rate * (closes - opens)

        def text(at: float, grams: float, place: float = place, total: float = total) -> str:
            return f"{at:.0f} m ({at - place:+.0f} m), {grams:.1f} g ({grams / total - 1:+.0%})"

        before, after = text(leak.place, leak.amount), text(leak.refitted_place, leak.refitted_amount)
        when = f"{leak.opens:.0f} to {leak.closes:.0f} s"
        rows.append((f"leak {k}", f"{before} -> {after}, {when}"))
        rows.append((f"true leak {k}", f"{place:g} m, {total:g} g, {opens:g} to {closes:g} s"))
    return rows


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw where and when gas enters, how much at each place, and the readings with what the answer would give."""
    data = problem.mesh_data
    leaks, _ = refit_leaks(problem, solution)
    rates = np.reshape(solution.x, data.shape)
    figure = new_figure(11.0, 6.4)
    field, total, readings = figure.subplots(3, 1, height_ratios=[1.5, 1.0, 1.2])
    h = LENGTH / data.parameters["n"]
    shown = np.where(rates > 0, rates, np.nan)
    field.set_facecolor("0.9")
    image = field.imshow(
        shown, origin="lower", extent=(data.x[0] - h / 2, data.x[-1] + h / 2, 0.0, DURATION), cmap="YlOrRd", vmin=0.0,
        aspect="auto",
    )  # fmt: skip
    figure.colorbar(image, ax=field, label="g/(m² s)")
    for place, _, opens, closes in LEAKS:
        field.plot([place, place], [opens, closes], color="black", lw=2.0)
    field.set(ylabel="time (s)", xlim=(0, LENGTH), title="leak rate; grey: zero, black: the true leaks")
    total.bar(
        data.x, amount(problem, solution.x), width=0.8 * h, color="#d06010", label="with the sparsity term"
    )
    for name, values, style in (
        ("true", [(place, rate * (closes - opens)) for place, rate, opens, closes in LEAKS], "k^"),
        ("refitted", [(leak.refitted_place, leak.refitted_amount) for leak in leaks], "bo"),
        ("sum of the places of a leak", [(leak.place, leak.amount) for leak in leaks], "s"),
    ):
        if values:
            total.plot(*np.transpose(values), style, label=name, mfc="none")
    total.set(xlabel="place along the tunnel (m)", ylabel="amount (g/m)", xlim=(0, LENGTH), ylim=(0, None))
    total.legend(frameon=False, ncols=4, fontsize=8)
    times = BLOCK * np.arange(1, SAMPLES + 1)
    computed = problem.observe(solution.state).reshape(data.readings.shape)
    for k in range(0, len(SENSORS), 2):
        line = readings.plot(times, computed[:, k], lw=1.2, label=f"{SENSORS[k]:g} m high")[0]
        readings.plot(times, data.readings[:, k], ".", ms=3, color=line.get_color())
    readings.set(
        xlabel="time (s)", ylabel="outlet (g/m³)", title="readings (points) and the answer's (lines)"
    )
    readings.legend(frameon=False, ncols=4, fontsize=8)
    found = ", ".join(f"{leak.refitted_place:.0f} m" for leak in leaks) or "none"
    figure.suptitle(
        f"Leaks of a tunnel: found at {found}; true: {', '.join(f'{leak[0]:g} m' for leak in LEAKS)}"
    )
    return figure
