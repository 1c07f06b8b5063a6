"""Closed loop: where to steer a point from anywhere in a square, for ever, at the least discounted cost.

The point moves at the velocity u that we choose, |u_1|, |u_2| <= bound, and pays l(x) + weight (|u_1|^p + |u_2|^p) per
unit of time, discounted at the rate d. Its least cost from x, the value v(x), solves on (-1, 1)^2

    d v = l + sum over i of min over |u_i| <= bound of (weight |u_i|^p + u_i dv/dx_i),

no velocity leads out of the square. Monotone upwind differences on n x n cells: a velocity u_i > 0 sees the forward,
u_i < 0 the backward difference. The minimum over the policies makes the equation piecewise smooth, and semismooth
Newton steps are policy iteration: each solves for the cost of the policy that the last value suggests. With d > 0 the
matrix of every policy is an M-matrix, the values fall from step to step, and full steps converge from any start.

p = 2: a velocity proportional to the slope, up to the bound. p = 1 and p = 1/2: all or nothing, and nothing (a sparse
feedback) where the slope is below weight * bound^(p - 1). The minimum is the same for both where bound = 1: for p < 1
a small velocity never pays (in continuous time one would switch fast between none and full, at the price of p = 1).
Where bound differs from 1, p = 1/2 acts like p = 1 with weight / sqrt(bound).

case="hill": l = |x|^2/2 and a hill in the way, behind which the value has a kink: left or right of it costs the same.
case="basin": l = |x|^2/2 alone, exact solution known.

Sources: R. Howard, Dynamic Programming and Markov Processes, 1960; M. Puterman, S. Brumelle, Math. Oper. Res. 4 (1979)
60-69; O. Bokanowski, S. Maroso, H. Zidani, SIAM J. Numer. Anal. 47 (2009) 3001-3026; M. Bardi, I. Capuzzo-Dolcetta,
Optimal Control and Viscosity Solutions, 1997 (all from memory). Dimensionless.

Caution: first order, so feedback laws are blurred over a few cells; a design aid. A vehicle near people needs more.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)
HILL, HILL_AT, HILL_WIDTH = 1.0, (0.45, 0.3), 0.03


@dataclass(frozen=True)
class Setting:
    """Grid of (n + 1)^2 points, arrays of shape (n + 1, n + 1), x1 varies slowest; parameters."""

    n: int
    h: float
    x1: FloatArray
    x2: FloatArray
    running: FloatArray
    power: float
    weight: float
    bound: float
    discount: float
    case: str


def build(
    n: int = 64,
    power: float = 1.0,
    weight: float = 0.2,
    bound: float = 1.0,
    discount: float = 1.0,
    case: str = "hill",
) -> ssn.TracedEquation:
    """Build the equation for the values at the grid points.

    Parameters
    ----------
    n : int
        Cells a side, even, at least 4.
    power : float
        p: 2, or positive and at most 1.
    weight : float
        Price of the velocity, positive.
    bound : float
        On each component of the velocity, positive.
    discount : float
        d, positive.
    case : {"hill", "basin"}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 4 or n % 2:
        raise ssn.InputError(f"n must be an even whole number of at least 4, got {n!r}")
    if not (0 < power <= 1 or power == 2):
        raise ssn.InputError(f"power must be 2, or positive and at most 1, got {power!r}")
    for name, value in (("weight", weight), ("bound", bound), ("discount", discount)):
        if not (value > 0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must be positive and finite, got {value!r}")
    if case not in ("hill", "basin"):
        raise ssn.InputError(f"case must be 'hill' or 'basin', got {case!r}")
    line = np.linspace(-1.0, 1.0, n + 1)
    x1, x2 = np.meshgrid(line, line, indexing="ij")
    running = 0.5 * (x1**2 + x2**2)
    if case == "hill":
        running = running + HILL * np.exp(-((x1 - HILL_AT[0]) ** 2 + (x2 - HILL_AT[1]) ** 2) / HILL_WIDTH)
    setting = Setting(int(n), 2.0 / n, x1, x2, running, power, weight, bound, discount, case)

    def error(v: FloatArray) -> FloatArray:
        value = np.reshape(v, x1.shape)
        saved = savings(setting, value)
        return np.reshape(discount * value - running - saved[0] - saved[1], (-1,))

    problem = ssn.TracedEquation(error, running.ravel() / discount)  # start: the cost of never moving
    problem.setting = setting
    return problem


def saving(setting: Setting, slope: FloatArray) -> FloatArray:
    """min over 0 <= u <= bound of weight u^p + u slope: not positive."""
    if setting.power == 2:
        u = np.clip(-slope / (2.0 * setting.weight), 0.0, setting.bound)
        return setting.weight * u**2 + u * slope
    # concave in u: none or full
    return np.minimum(0.0, setting.weight * setting.bound**setting.power + setting.bound * slope)


def savings(setting: Setting, value: FloatArray) -> list[FloatArray]:
    """The minimum over each component of the velocity, both directions; ties go to the positive one."""
    found = []
    for axis in (0, 1):
        up = value[1:] - value[:-1] if axis == 0 else value[:, 1:] - value[:, :-1]
        slope = up / setting.h
        still = np.zeros((1, setting.n + 1) if axis == 0 else (setting.n + 1, 1))
        forward = np.concatenate([saving(setting, slope), still], axis=axis)
        backward = np.concatenate([still, saving(setting, -slope)], axis=axis)
        found.append(np.minimum(forward, backward))
    return found


def feedback(problem: ssn.TracedEquation, v: FloatArray) -> FloatArray:
    """Return the velocity at the grid points that the values suggest, shape (2, n + 1, n + 1)."""
    s = problem.setting
    value = v.reshape(s.x1.shape)
    result = []
    for axis in (0, 1):
        slope = np.diff(value, axis=axis) / s.h
        ends = [(0, 1) if axis == 0 else (0, 0), (0, 0) if axis == 0 else (0, 1)]
        flipped = [end[::-1] for end in ends]
        gains = np.pad(saving(s, slope), ends), np.pad(saving(s, -slope), flipped)
        speeds = np.pad(_speed(s, slope), ends), np.pad(_speed(s, -slope), flipped)
        result.append(np.where(gains[0] <= gains[1], speeds[0], -speeds[1]))
    return np.array(result)


def _speed(setting: Setting, slope: FloatArray) -> FloatArray:
    if setting.power == 2:
        return np.clip(-slope / (2.0 * setting.weight), 0.0, setting.bound)
    price = setting.weight * setting.bound**setting.power
    return np.where(price + setting.bound * slope < 0.0, setting.bound, 0.0)


def transfer(coarse: ssn.TracedEquation, fine: ssn.TracedEquation) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries values of `coarse` to `fine`: bilinear."""
    line = np.linspace(-1.0, 1.0, coarse.setting.n + 1)
    points = np.column_stack([fine.setting.x1.ravel(), fine.setting.x2.ravel()])

    def carry(v: FloatArray) -> FloatArray:
        return RegularGridInterpolator((line, line), np.reshape(v, (line.size, line.size)))(points)

    return carry


def exact_basin(setting: Setting) -> FloatArray:
    """The exact values of case "basin": a sum over the axes, shape (n + 1, n + 1).

    p = 2, the bound not reached: v = k x^2 with k^2/weight + d k = 1/2, velocity -k x/weight. p <= 1: with the price
    c = weight bound^(p - 1) of a slope, at rest in |x| <= d c, full speed to there from outside.
    """
    d, b = setting.discount, setting.bound

    def one(x: FloatArray) -> FloatArray:
        if setting.power == 2:
            return _gain(setting) * x**2
        edge = d * setting.weight * b ** (setting.power - 1.0)
        r = np.maximum(np.abs(x) - edge, 0.0)
        return x**2 / (2 * d) - b / d**2 * r + b**2 / d**3 * (1.0 - np.exp(-d * r / b))

    return one(setting.x1) + one(setting.x2)


def _gain(setting: Setting) -> float:
    return 0.5 * setting.weight * (np.sqrt(setting.discount**2 + 2.0 / setting.weight) - setting.discount)


def known(problem: ssn.TracedEquation, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare the basin with its exact solution, and p = 1/2 with p = 1; up to five further solves on this grid."""
    s = problem.setting
    checks = []
    for power in (2.0, 1.0, 0.5):
        bound = max(s.bound, _gain(s) / s.weight) if power == 2 else s.bound
        basin = build(s.n, power, s.weight, bound, s.discount, "basin")
        found = ssn.solve(basin).require().x.reshape(s.x1.shape)
        error = float(np.abs(found - exact_basin(basin.setting)).max())
        source = (
            "quadratic regulator, scalar Riccati equation (R. Kalman 1960)"
            if power == 2
            else "method of characteristics, by hand: at rest where |x_i| <= d weight bound^(p - 1)"
        )
        checks.append(
            _check(
                f"basin, p = {power:g}: largest error of the value, h bound/d",
                0.0,
                error,
                s.h * bound / s.discount,
                source,
            )
        )
        if power < 2:
            edge = s.discount * s.weight * s.bound ** (power - 1.0)
            if edge < 1.0 - s.h:
                resting = feedback(basin, found)[0][:, s.n // 2] == 0
                width = 0.5 * s.h * float(np.count_nonzero(resting))
                checks.append(
                    _check(f"basin, p = {power:g}: half width of rest", edge, width, 1.5 * s.h, source)
                )
    checks.append(
        _check(
            "minimum over u for p = 2, 1, 1/2: largest difference to that over 2001 velocities", 0.0,
            max(_against_all(s, power) for power in (2.0, 1.0, 0.5)), s.weight * (s.bound / 2000) ** 2,
            "the definition",
        )
    )  # fmt: skip
    other = build(s.n, 0.5, s.weight * np.sqrt(s.bound), s.bound, s.discount, s.case)
    linear = build(s.n, 1.0, s.weight, s.bound, s.discount, s.case)
    apart = float(np.abs(ssn.solve(other).require().x - ssn.solve(linear).require().x).max())
    checks.append(
        _check(
            "p = 1/2 with weight sqrt(bound) against p = 1: largest difference of the values", 0.0, apart, 1e-10,
            "min over u of weight u^p + u s is that at u = 0 or u = bound for p <= 1",
        )
    )  # fmt: skip
    return checks


def _against_all(setting: Setting, power: float) -> float:
    one = replace(setting, power=power)
    slopes = np.linspace(-4.0, 1.0, 101) * one.weight / min(one.bound, 1.0)
    u = np.linspace(0.0, one.bound, 2001)
    tried = (one.weight * u**power + slopes[:, None] * u).min(axis=1)
    return float(np.abs(saving(one, slopes) - tried).max())


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": expected,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def reference(problem: ssn.TracedEquation, budget: float) -> Any:
    """Value iteration on the controlled Markov chain of the scheme: a contraction, no derivative, no linear system.

    From x the chain jumps to the neighbour in the direction of u_i at the rate |u_i|/h; at most M = 2 bound/h in all.
    v <- min over u of (l + price + sum of rates * neighbour + (M - rates) v) / (d + M) contracts by M/(d + M).
    Source: H. Kushner and P. Dupuis, Numerical Methods for Stochastic Control Problems, 1992 (from memory).
    """
    s = problem.setting
    rate = 2.0 * s.bound / s.h
    factor = rate / (s.discount + rate)
    speeds = np.array([s.bound])
    v = s.running / s.discount
    change, iteration, end = np.inf, 0, time.monotonic() + budget
    while change * factor / (1.0 - factor) > 1e-10 and time.monotonic() < end:
        iteration += 1
        total = s.running + rate * v
        for axis in (0, 1):
            best = np.zeros(v.shape)
            for shift in (1, -1):
                beyond = np.roll(v, -shift, axis=axis)
                edge = (slice(-1, None) if shift == 1 else slice(0, 1),)
                beyond[edge if axis == 0 else (slice(None), *edge)] = np.inf
                fall = np.maximum((v - beyond) / s.h, 0.0)  # saved per unit of velocity
                u = np.minimum(fall / (2.0 * s.weight), s.bound) if s.power == 2 else speeds
                best = np.maximum(best, u * fall - s.weight * u**s.power)
            total = total - best
        new = total / (s.discount + rate)
        change = float(np.abs(new - v).max())
        v = new
    bound = change * factor / (1.0 - factor) * np.sqrt(v.size)
    done = bool(change * factor / (1.0 - factor) <= 1e-10)
    outcome = "converged" if done else "budget used up"
    return SimpleNamespace(x=v.ravel(), converged=done, outcome=outcome, iterations=iteration, bound=bound)


def summary(problem: ssn.TracedEquation, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return where the point rests, and how the velocities are distributed."""
    u = np.abs(feedback(problem, solution.x))
    bound = problem.setting.bound
    return [
        ("at rest", f"{np.mean((u == 0).all(axis=0)):.1%} of the square"),
        ("one component used", f"{np.mean((u > 0).sum(axis=0) == 1):.1%}"),
        ("components at the bound", f"{np.mean(u >= bound * (1 - 1e-9)):.1%}"),
    ]


def picture(problem: ssn.TracedEquation, solution: ssn.Solution) -> Any:
    """Draw the value with the feedback, grey at rest, and how the value runs across the hill for three powers."""
    s = problem.setting
    value, u = solution.x.reshape(s.x1.shape), feedback(problem, solution.x)
    figure = new_figure(10.0, 4.4)
    left, right = figure.subplots(1, 2, width_ratios=[1, 1.1])
    rest = np.where((u == 0).all(axis=0), 1.0, np.nan)
    edge = 1 + s.h / 2
    left.imshow(rest.T, origin="lower", extent=(-edge, edge, -edge, edge), cmap="Greys", vmin=0, vmax=3)
    drawn = left.contour(s.x1, s.x2, value, 14, cmap="viridis", linewidths=0.9)
    figure.colorbar(drawn, ax=left, shrink=0.85)
    few = (slice(None, None, max(1, s.n // 16)),) * 2
    left.quiver(s.x1[few], s.x2[few], u[0][few], u[1][few], color="C3", width=0.004, scale=20 * s.bound)
    left.set(xlabel="$x_1$", ylabel="$x_2$", aspect="equal", title="value, feedback; grey: at rest")
    for power, style in ((2.0, "-"), (1.0, "--"), (0.5, ":")):
        other = build(s.n, power, s.weight, s.bound, s.discount, s.case)
        found = ssn.solve(other).x.reshape(s.x1.shape)
        across = feedback(other, found)[1][3 * s.n // 4]
        right.plot(s.x2[0], across, style, label=f"p = {power:g}")
    right.set(xlabel="$x_2$", ylabel="velocity $u_2$", title="feedback at $x_1$ = 1/2")
    right.legend(frameon=False)
    figure.suptitle(
        f"p = {s.power:g}, weight {s.weight:g}, bound {s.bound:g}: {len(solution.steps)} policy iterations, n = {s.n}"
    )
    return figure
