"""One coolant supply for two exothermic stirred reactors: switching control of a nonlinear differential system.

Two stirred tanks are fed in turn, each during every other half period. In tank i the reactant c_i is used up at the
rate k_i(T_i) c_i and heats the tank, whose temperature T_i (above that of the feed) the wall lets go slowly:

    c_i' = feed_i(t) - c_i - k_i(T_i) c_i,     T_i' = -LOSS T_i + HEAT k_i(T_i) c_i - u_i,
    k_i(T) = RATE_i exp(T / (1 + T / ACTIVATION)).

u_i >= 0 is the heat that coolant takes out of tank i by boiling off, so it does not depend on T_i. With the valves shut
tank 1 runs away: T_1 exceeds 8, where 0.25 is wanted. Both valves hang on one supply pipe; having both open
costs extra:

minimise 1/2 sum_i int (T_i - 1/4)^2 + alpha/2 sum_i int u_i^2 + int beta(t)/2 (|u_1| + |u_2|)^2

tariff="even": beta is constant. tariff="day and night": beta is PEAK times larger in every other period. Crank-Nicolson
with n equal steps, a coolant flow a step. Dimensionless (time in residence times, temperatures in the units of the
Arrhenius law).

`known` checks, beside the solution, that the pointwise condition that decides about the valves holds at each
instant: with s = |u_1| + |u_2| and v_i the gain of a unit of coolant in tank i, v_i = alpha u_i + beta s sign(u_i)
where the valve is open, |v_i| <= beta s where it is shut; so just one valve is open where the smaller |v| is at most
beta / (alpha + beta) times the larger.

Sources: A. Uppal, W. H. Ray and A. B. Poore, Chem. Eng. Sci. 29 (1974) 967-985 (the stirred tank, from memory);
C. Clason, K. Ito and K. Kunisch, Math. Model. Numer. Anal. 50 (2016) 581-609 (the switching cost, from memory).
The data are our own.

Caution: a design aid. A runaway is a hazard to life: coolant supplies, interlocks and relief systems of real reactors
are laid out by qualified process-safety engineers under the local codes, with kinetics that were measured, and never by
an optimal control that assumes that a valve does what it is told. Nothing keeps u >= 0 here; for the default data the
solution has it (`known` looks). The model may ignite within a time step; a control for which the discrete equation is
not solved ends the step there, and the solve says so.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.integrate import solve_ivp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (80, 120, 240)

RATE = np.array([0.12, 0.10])
HEAT, ACTIVATION, LOSS = 10.0, 20.0, 1.6
BASE, PULSE, PERIOD, PERIODS = 0.4, 1.5, 4.0, 3
WANTED = 0.25
PEAK = 8.0


@dataclass(frozen=True)
class MeshData:
    """What `known` and `picture` need; controls have shape (steps, 2)."""

    steps: int
    alpha: float
    beta: FloatArray
    tariff: str
    standard: bool


def feed(t: float) -> FloatArray:
    """Reactant fed to each tank per unit of time."""
    wave = np.sin(2 * np.pi * t / PERIOD)
    return BASE + PULSE * np.array([max(0.0, wave) ** 2, max(0.0, -wave) ** 2])


def rates(temperature: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """k and its first two derivatives, for both tanks."""
    s = 1.0 / (1.0 + temperature / ACTIVATION)
    k = RATE * np.exp(temperature * s)
    return k, k * s**2, k * s**4 - 2.0 * k * s**3 / ACTIVATION


def balance(t: float, y: FloatArray) -> FloatArray:
    """The right-hand side for y = (c_1, c_2, T_1, T_2), without coolant."""
    c, temperature = y[:2], y[2:]
    used = rates(temperature)[0] * c
    return np.concatenate([feed(t) - c - used, HEAT * used - LOSS * temperature])


def jacobian(t: float, y: FloatArray) -> FloatArray:
    """The derivative of `balance`."""
    c, temperature = y[:2], y[2:]
    k, dk, _ = rates(temperature)
    matrix, i = np.zeros((4, 4)), np.arange(2)
    matrix[i, i], matrix[i, i + 2] = -1.0 - k, -dk * c
    matrix[i + 2, i], matrix[i + 2, i + 2] = HEAT * k, HEAT * dk * c - LOSS
    return matrix


def hessian(t: float, y: FloatArray, q: FloatArray) -> FloatArray:
    """The second derivatives of `balance`, weighted by q."""
    c, temperature = y[:2], y[2:]
    _, dk, ddk = rates(temperature)
    weight = HEAT * q[2:] - q[:2]
    matrix, i = np.zeros((4, 4)), np.arange(2)
    matrix[i, i + 2] = matrix[i + 2, i] = weight * dk
    matrix[i + 2, i + 2] = weight * ddk * c
    return matrix


def build(
    n: int = 120, alpha: float = 0.02, beta: float = 0.4, tariff: str = "even"
) -> ssn.NonlinearControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Time steps, at least 20.
    alpha : float
        Weight of the square of the coolant flow, positive.
    beta : float
        Weight of the switching cost, not negative.
    tariff : {"even", "day and night"}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 20:
        raise ssn.InputError(f"n must be a whole number of at least 20, got {n!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    if not (beta >= 0 and np.isfinite(beta)):
        raise ssn.InputError(f"beta must not be negative, got {beta!r}")
    if tariff not in ("even", "day and night"):
        raise ssn.InputError(f"tariff must be 'even' or 'day and night', got {tariff!r}")
    state = ssn.OrdinaryDifferentialSystem(
        balance,
        jacobian,
        initial=[BASE / 1.2, BASE / 1.2, WANTED, WANTED],
        steps=int(n),
        duration=PERIODS * PERIOD,
        scheme="Crank-Nicolson",
        hessian=hessian,
    )
    dear = (state.load_times // PERIOD) % 2 == 1
    price = beta * np.where(dear & (tariff == "day and night"), PEAK, 1.0)
    observation = state.observation_operator(np.eye(4)[2:])
    problem = ssn.NonlinearControlProblem(
        state=state,
        target=np.full(observation.shape[0], WANTED),
        observation=observation,
        observation_mass=state.observation_mass([1.0, 1.0]),
        cost=ssn.SwitchingCost(price, shape=(state.steps, 2)),
        control_weight=alpha,
        control_operator=state.control_operator(-np.eye(4)[:, 2:]),
        control_mass=state.control_mass([1.0, 1.0]),
    )
    standard = alpha == 0.02 and beta == 0.4
    problem.mesh_data = MeshData(int(n), float(alpha), price, tariff, standard)
    return problem


def one_open(solution: ssn.Solution) -> float:
    """The share of instants at which exactly one valve is open."""
    return float(((solution.x.reshape(-1, 2) != 0).sum(axis=1) == 1).mean())


def integrated(problem: ssn.NonlinearControlProblem, control: FloatArray) -> FloatArray:
    """The states at the ends of the steps by SciPy's DOP853 method to nine digits, for a coolant flow a step."""
    times, flows = problem.state.times, control.reshape(-1, 2)
    y, found = problem.state.initial, []
    for begin, end, flow in zip(times[:-1], times[1:], flows, strict=True):
        cooling = np.concatenate([np.zeros(2), flow])
        result = solve_ivp(
            lambda t, x, cooling=cooling: balance(t, x) - cooling, (begin, end), y,
            method="DOP853", rtol=1e-9, atol=1e-11,
        )  # fmt: skip
        y = result.y[:, -1]
        found.append(y)
    return np.array(found)


def known(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """The condition that decides about the valves, the sign of the flows, the temperatures by another integrator."""
    mesh = problem.mesh_data
    u = solution.x.reshape(-1, 2)
    gain = problem.pull_back(solution.adjoint).reshape(-1, 2)
    price = mesh.beta * np.abs(u).sum(axis=1)
    wanted = mesh.alpha * u + price[:, None] * np.sign(u)
    wrong = np.where(u != 0, np.abs(gain - wanted), np.maximum(np.abs(gain) - price[:, None], 0.0))
    size = float(np.abs(gain).max())
    larger, smaller = np.abs(gain).max(axis=1), np.abs(gain).min(axis=1)
    # (alpha + beta) s = larger gain where one valve is open
    rule = smaller * (mesh.alpha + mesh.beta) <= mesh.beta * larger
    one = (u != 0).sum(axis=1) == 1
    contradicted = int((rule != one).sum())
    exact = integrated(problem, solution.x)[:, 2:]
    computed = solution.state.reshape(-1, 4)[:, 2:]
    gap = float(np.abs(computed - exact).max())
    allowed = 0.5 * float(problem.state.step_sizes[0]) ** 2
    checks = [
        _row("condition of the valves (relative to the largest gain)", 0.0, float(wrong.max()) / size, 1e-7,
             "optimality condition of the switching cost (module docstring)"),
        _row("instants that contradict the rule for just one open valve (absolute)", 0.0, contradicted, 0.0,
             "the same, written for the gains alone"),
        _row("largest error of a temperature, of order tau^2 (absolute)", 0.0, gap, allowed,
             "SciPy's DOP853 method to nine digits; the constant is measured"),
    ]  # fmt: skip
    if mesh.standard:
        checks.append(
            _row("smallest coolant flow, not negative (absolute)", 0.0, min(0.0, float(u.min())), 0.0,
                 "the model: coolant only cools")
        )  # fmt: skip
    return checks


def _row(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what,
        "kind": "relative" if "relative" in what else "absolute",
        "expected": expected,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def summary(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """How the valves are used, and how hot the tanks get."""
    u = solution.x.reshape(-1, 2)
    both = float(((u != 0).sum(axis=1) == 2).mean())
    hottest = solution.state.reshape(-1, 4)[:, 2:].max()
    return [
        ("instants with exactly one valve open", f"{one_open(solution):.0%}"),
        ("instants with both valves open", f"{both:.0%}"),
        ("highest temperature", f"{hottest:.3f}"),
    ]


def picture(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> Any:
    """Draw temperatures, coolant flows and feeds over time; grey: both valves open."""
    mesh, state = problem.mesh_data, problem.state
    figure = new_figure(9.0, 6.0)
    top, middle, bottom = figure.subplots(3, 1, sharex=True)
    u, y = solution.x.reshape(-1, 2), solution.state.reshape(-1, 4)
    colours = ("tab:red", "tab:blue")
    edges = state.times
    both = (u != 0).all(axis=1)
    for k in np.flatnonzero(both):
        middle.axvspan(edges[k], edges[k + 1], color="0.88", lw=0)
    for i, colour in enumerate(colours):
        top.plot(edges[1:], y[:, 2 + i], color=colour, label=f"tank {i + 1}")
        middle.step(edges, np.append(u[:, i], u[-1, i]), where="post", color=colour)
        bottom.plot(edges, [feed(t)[i] for t in edges], color=colour)
    top.axhline(WANTED, color="0.5", ls="--", lw=0.8)
    top.set(ylabel="temperature")
    top.legend(frameon=False, loc="upper right")
    middle.set(ylabel="heat to coolant")
    if mesh.tariff != "even":
        for k in range(1, PERIODS, 2):
            bottom.axvspan(k * PERIOD, (k + 1) * PERIOD, color="gold", alpha=0.25, lw=0)
        bottom.set_title("yellow: dear hours", fontsize=9)
    bottom.set(ylabel="feed", xlabel="time")
    figure.suptitle(
        f"Two reactors, one coolant supply, {mesh.tariff} tariff, n = {mesh.steps}: "
        f"one valve open {one_open(solution):.0%} of the time"
    )
    return figure
