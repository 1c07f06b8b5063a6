"""A canal pump with a few fixed speeds that keeps the level at an offtake: controls that take listed settings.

A pound of an irrigation canal is filled at its upper end by a pump that knows three (off, half, full) or five speeds,
and drained by a weir at its lower end. The level y above the sill follows the linearised diffusive wave:

    y_t - D y_xx = 0 in the pound,   -D y_x = u(t) at the upper end,   D y_x = -K y at the weir,   y = 0 at time 0.

The offtake on the way wants the level z(t). The speed u is chosen by

    minimise 1/2 int (y(offtake) - z)^2 dt + int g(u) dt,

g the convex envelope of alpha/2 u^2 on the settings, without any other cost: control_weight is 0. With p the adjoint
state at the pump the speed at each instant is the setting nearest to p / alpha, and it may lie between two settings
u_i, u_{i+1} only where p = alpha (u_i + u_{i+1})/2 exactly. Where the set point cannot be met that is at single
instants; where it can be met ("reachable") on a share of the day that does not vanish: the pump then has to be switched
to and fro there. Adding gamma/2 u^2 smooths the staircase to ramps (the Moreau-Yosida form of g*); `shares` follows the
share of instants on a setting along gamma -> 0.

Linear elements with lumped mass in space, implicit Euler in time. Units: u and levels relative to those of steady full
flow (y = 1 at the weir for u = 1), x in lengths of the pound, t in days.

Source: C. Clason and K. Kunisch, ESAIM COCV 20 (2014) 1-40, and C. Clason, C. Tameling and B. Wirth, SIAM J. Control
Optim. 56 (2018) 3188-3217, for the cost and the staircase (from memory); the scenario is our own. D = 4, K = 4 are
orders of magnitude of a pound of a few kilometres (common practice), not measurements.

Caution: a design aid. It knows no limits on switching, no backwater and no storm: levels are guarded by independent
weirs and alarms, and operation follows the rules of the water authority.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (48, 96, 192)

DIFFUSION, WEIR, OFFTAKE = 4.0, 4.0, 0.6
SETTINGS = {3: (0.0, 0.5, 1.0), 5: (0.0, 0.25, 0.5, 0.75, 1.0)}
#: gammas of the path in `known` and `picture`
GAMMAS = (0.1, 0.03, 0.01, 3e-3, 1e-3, 3e-4, 1e-4)
#: (speeds, set_point) -> objective for n = 48 and all other parameters as by default, by a general interior-point
#: solver on an assembly without ssn (tests/problems/test_pump_settings.py).
REFERENCE_OBJECTIVE = {
    (3, "schedule"): 0.0195985577321,
    (3, "reachable"): 0.0016662162839,
    (5, "schedule"): 0.0195749238982,
    (5, "reachable"): 0.0014671865222,
}


@dataclass(frozen=True)
class MeshData:
    """Times at which the pump is set, and what else `known` and `picture` need."""

    n: int
    times: FloatArray
    settings: FloatArray
    parameters: dict[str, Any]
    hidden: FloatArray | None


def build(
    n: int = 96, speeds: int = 3, set_point: str = "schedule", alpha: float = 1e-2, points: int = 24
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Time steps a day, at least 8; a speed for each.
    speeds : {3, 5}
        Settings of the pump, evenly spread over [0, 1].
    set_point : {"schedule", "reachable"}
        "schedule": a level that jumps four times a day, which no speed can follow. "reachable": the level that a pump
        of any speed would make with u = 1/2 + 0.45 sin(4 pi t) cos(2 pi t).
    alpha : float
        Weight of the cost of pumping, level^2 a speed^2, positive.
    points : int
        Mesh points in the pound, at least 3.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    for name, value, least in (("n", n, 8), ("points", points, 3)):
        if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
            raise ssn.InputError(f"{name} must be a whole number of at least {least}, got {value!r}")
    if speeds not in SETTINGS:
        raise ssn.InputError(f"speeds must be 3 or 5, got {speeds!r}")
    if set_point not in ("schedule", "reachable"):
        raise ssn.InputError(f"set_point must be 'schedule' or 'reachable', got {set_point!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    n, points = int(n), int(points)
    h = 1.0 / (points - 1)
    mass = np.full(points, h)
    mass[[0, -1]] = 0.5 * h
    second = sp.diags_array(
        [-np.ones(points - 1), np.full(points, 2.0), -np.ones(points - 1)], offsets=[-1, 0, 1]
    )
    stiffness = sp.lil_array(DIFFUSION / h * second)
    stiffness[0, 0] = DIFFUSION / h
    stiffness[-1, -1] = DIFFUSION / h + WEIR
    state = ssn.TimeDependentState(mass, sp.csr_array(stiffness), steps=n, duration=1.0)
    inflow = np.zeros((points, 1))
    inflow[0] = WEIR  # u = 1 is the steady flow over the weir at level 1
    place = OFFTAKE * (points - 1)
    left = min(int(place), points - 2)
    look = np.zeros((1, points))
    look[0, left : left + 2] = left + 1 - place, place - left
    operator, observation = state.control_operator(inflow), state.observation_operator(look)
    times = state.times[1:]
    hidden = None
    if set_point == "schedule":
        target = np.select(
            [times <= 0.25, times <= 0.5, times <= 0.7, times <= 0.9], [0.4, 0.9, 0.2, 0.7], 0.4
        )
    else:
        hidden = 0.5 + 0.45 * np.sin(4 * np.pi * times) * np.cos(2 * np.pi * times)
        target = observation @ state.solve(operator @ hidden)
    problem = ssn.ControlProblem(
        state=state,
        target=target,
        cost=ssn.MultiBangCost(SETTINGS[speeds], alpha),
        control_weight=0.0,
        control_operator=operator,
        observation=observation,
        control_mass=state.control_mass([1.0]),
        observation_mass=state.observation_mass([1.0]),
    )
    parameters = {"n": n, "speeds": speeds, "set_point": set_point, "alpha": alpha, "points": points}
    problem.mesh_data = MeshData(n, times, np.array(SETTINGS[speeds]), parameters, hidden)
    return problem


def shares(
    problem: ssn.ControlProblem, gammas: Sequence[float] = GAMMAS
) -> list[tuple[float, float, ssn.Solution]]:
    """Follow the Moreau-Yosida path: gamma, share of the instants on a setting, and solution, for each gamma."""

    def smoothed(gamma: float) -> ssn.ControlProblem:
        return problem.with_cost(ssn.SumWithQuadratic(problem.cost, gamma))

    path = ssn.follow(smoothed, list(gammas), predictor="none")
    on = [
        (point.value, 1.0 - problem.cost.share_between(point.solution.x), point.solution)
        for point in path.points
    ]
    return [found for found in on if found[0] in gammas]


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries speeds of `coarse` to `fine`: the speed of the step that an instant is in."""
    old, new = coarse.mesh_data, fine.mesh_data
    index = np.minimum(np.searchsorted(old.times, new.times - 0.5 / new.n), old.n - 1)

    def carry(speed: FloatArray) -> FloatArray:
        return np.asarray(speed)[index]

    return carry


# What is known


def ramps(p: FloatArray, settings: FloatArray, alpha: float, gamma: float) -> FloatArray:
    """The published Moreau-Yosida form of the staircase; for gamma = 0 the staircase, at a jump the lower setting.

    Slope 1/gamma between alpha (u_i + u_{i+1})/2 + gamma u_i and alpha (u_i + u_{i+1})/2 + gamma u_{i+1}.
    """
    jumps = 0.5 * alpha * (settings[:-1] + settings[1:])
    if gamma == 0.0:
        return settings[(p[:, None] > jumps).sum(axis=1)]
    return settings[0] + sum(
        np.clip((p - jump) / gamma - low, 0.0, high - low)
        for jump, low, high in zip(jumps, settings[:-1], settings[1:], strict=True)
    )


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the published staircase, at the solution and along the Moreau-Yosida path."""
    mesh = problem.mesh_data
    alpha, settings = mesh.parameters["alpha"], mesh.settings
    source = "staircase: Clason and Kunisch (2014), Clason, Tameling and Wirth (2018) (from memory)"
    p = problem.pull_back(solution.adjoint)
    jumps = 0.5 * alpha * (settings[:-1] + settings[1:])
    at_jump = (np.abs(p[:, None] - jumps) <= 1e-9 * alpha).any(axis=1)
    # off the jumps the speed is a setting; between settings the adjoint state is at a jump
    off = np.abs(solution.x - ramps(p, settings, alpha, 0.0))[~at_jump].max(initial=0.0)
    between = np.abs(solution.x[:, None] - settings).min(axis=1) > 0.0
    path = shares(problem)
    gamma, share, _ = path[-1]
    worst = max(
        float(np.abs(s.x - ramps(problem.pull_back(s.adjoint), settings, alpha, g)).max()) for g, _, s in path
    )
    final = 1.0 - float(between.mean())
    checks = [
        _check(
            "largest distance of a speed from the setting nearest to p / alpha, off the jumps (absolute)", 0.0,
            float(off), 0.0, source,
        ),
        _check(
            "instants between settings where p is not at a jump (absolute)", 0,
            int((between & ~at_jump).sum()), 0, source,
        ),
        _check(
            f"largest distance from the published ramps for gamma = {path[0][0]:g} .. {gamma:g} (absolute)", 0.0,
            worst, 1e-6, source,
        ),
        _check(
            f"share of the day on a setting for gamma = {gamma:g} less that for gamma = 0 (absolute)", 0.0,
            share - final, 2.0 / mesh.n, "limit of the path",
        ),
    ]  # fmt: skip
    key = (mesh.parameters["speeds"], mesh.parameters["set_point"])
    defaults = dict(zip(build.__code__.co_varnames, build.__defaults__ or (), strict=False))
    standard = defaults | {"n": 48, "speeds": key[0], "set_point": key[1]} == mesh.parameters
    if standard and key in REFERENCE_OBJECTIVE:
        expected = REFERENCE_OBJECTIVE[key]
        gap = solution.objective / expected - 1.0
        what, where = (
            "objective over that of an independent assembly, less 1 (absolute)",
            "general interior-point solver",
        )
        checks.append(_check(what, 0.0, gap, 1e-8, where))
    return checks


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what, "kind": "absolute", "expected": expected, "computed": computed, "tolerance": tolerance,
        "source": source, "holds": bool(abs(computed - expected) <= tolerance),
    }  # fmt: skip


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Say how much of the day each speed is on, how often it changes, and the share along the Moreau-Yosida path."""
    mesh, speed = problem.mesh_data, solution.x
    told = [(f"speed {s:g}", f"{np.mean(speed == s):.1%} of the day") for s in mesh.settings]
    told.append(("between settings", f"{problem.cost.share_between(speed):.1%} of the day"))
    told.append(("changes of speed", str(int((np.diff(speed) != 0).sum()))))
    told.append(("on a setting along the path", ", ".join(f"{g:g}: {s:.0%}" for g, s, _ in shares(problem))))
    return told


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw levels, speeds with the staircase's levels of p / alpha, and the share on a setting along the path."""
    mesh = problem.mesh_data
    hours = 24.0 * mesh.times
    figure = new_figure(10.0, 5.6)
    grid = figure.add_gridspec(2, 3)
    top, middle = figure.add_subplot(grid[0, :2]), figure.add_subplot(grid[1, :2])
    side = figure.add_subplot(grid[:, 2])
    top.plot(hours, problem.target, "0.5", ls="--", label="set point")
    top.plot(hours, problem.observe(solution.state), "C0", label="level at the offtake")
    top.set(ylabel="level", xlim=(0, 24))
    top.legend(frameon=False, fontsize=8)
    middle.step(hours, solution.x, "C3", where="pre", label="speed")
    middle.plot(
        hours,
        problem.pull_back(solution.adjoint) / mesh.parameters["alpha"],
        "C2",
        lw=0.8,
        label=r"$p/\alpha$",
    )
    for jump in 0.5 * (mesh.settings[:-1] + mesh.settings[1:]):
        middle.axhline(jump, color="0.8", lw=0.7)
    middle.set(xlabel="hour", ylabel="speed", xlim=(0, 24), ylim=(-0.2, 1.2), yticks=mesh.settings)
    middle.legend(frameon=False, fontsize=8)
    path = shares(problem)
    side.semilogx([g for g, _, _ in path], [100 * s for _, s, _ in path], "o-")
    side.axhline(
        100 * (1.0 - problem.cost.share_between(solution.x)), color="C3", lw=0.9, label=r"$\gamma = 0$"
    )
    side.set(xlabel=r"$\gamma$", ylabel="% of the day on a setting", ylim=(0, 104))
    side.invert_xaxis()
    side.legend(frameon=False, fontsize=8)
    p = mesh.parameters
    figure.suptitle(
        f"Pump with {p['speeds']} speeds, {p['set_point']} set point, " rf"$\alpha$ = {p['alpha']:g}"
    )
    return figure
