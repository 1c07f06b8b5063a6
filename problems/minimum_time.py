"""Minimum time: leave a corridor against noise, and bring a cart to rest at its stop.

Two problems of least time with exact solutions, by policy iteration as a semismooth Newton method on monotone upwind
differences. n cells a side. Dimensionless.

case="corridor": the least expected time u(x) to leave (-1, 1) at a speed of at most 1 while the position diffuses,
    -eps u'' + |u'| = 1, u = 0 at the ends, the viscous eikonal equation. Exact: u = 1 - |x| + eps (exp(-1/eps) -
    exp(-|x|/eps)), for eps = 0 the distance 1 - |x|, which the scheme gives exactly.
case="cart": position x1, velocity x2 and acceleration |u| <= 1, least time T to rest at 0. T = x2 + 2 sqrt(x1 + x2^2/2)
    where x1 >= -x2 |x2|/2, mirrored elsewhere; given on the edge of the square (-1, 1)^2 and within `STOP` of the
    stop. The unknown is v = 1 - exp(-T), which solves v - x2 dv/dx1 + |dv/dx2| = 1: all policies have M-matrices, and
    v stays bounded.

A policy is a choice of direction at every point. Without noise (eps = 0) the matrix of a policy that leads in circles,
say inwards from both sides, is singular: a start must suggest a way out, as the default 1 - x^2 does. Ties between
directions are broken in favour of the first argument of the maximum, every time.

Sources: M. Athans, P. Falb, Optimal Control, 1966, ch. 7 (cart); M. Bardi, I. Capuzzo-Dolcetta, Optimal Control and
Viscosity Solutions, 1997 (equations, v); O. Bokanowski, S. Maroso, H. Zidani, SIAM J. Numer. Anal. 47 (2009) 3001-3026
(policy iteration) (all from memory).

Caution: the slope of T is unbounded at the curve where the cart switches from thrust to brake. A first-order scheme
smears it: at n = 128 v is still off by 0.13 there, and the error falls like n^(-1/4). Policy iteration from afar moves
the curve a cell a step: start fine meshes from coarse ones. A design aid; real carts have limits of jerk.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)
STOP = 0.2

_CORRIDOR = "exact solution of -eps u'' + |u'| = 1, by hand and by differencing"
_CART = "Athans and Falb (1966), time-optimal double integrator (from memory)"


@dataclass(frozen=True)
class Setting:
    """Points along a side, shape (n + 1,); exact values on the grid, shape (n + 1,) or (n + 1, n + 1); parameters."""

    n: int
    h: float
    line: FloatArray
    exact: FloatArray
    given: npt.NDArray[np.bool_]
    eps: float
    case: str


def build(n: int = 64, case: str = "corridor", eps: float = 0.05) -> ssn.TracedEquation:
    """Build the equation for the values at the grid points, those on the boundary included.

    Parameters
    ----------
    n : int
        Cells a side, even, at least 4.
    case : {"corridor", "cart"}
    eps : float
        Strength of the noise in the corridor, not negative.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 4 or n % 2:
        raise ssn.InputError(f"n must be an even whole number of at least 4, got {n!r}")
    if not (eps >= 0 and np.isfinite(eps)):
        raise ssn.InputError(f"eps must be finite and not negative, got {eps!r}")
    if case not in ("corridor", "cart"):
        raise ssn.InputError(f"case must be 'corridor' or 'cart', got {case!r}")
    line = np.linspace(-1.0, 1.0, n + 1)
    h = 2.0 / n
    if case == "corridor":
        exact = exit_time(line, eps)
        given = np.abs(line) >= 1.0
        problem = ssn.TracedEquation(_corridor(h, eps), 1.0 - line**2)
    else:
        x1, x2 = np.meshgrid(line, line, indexing="ij")
        exact = 1.0 - np.exp(-time_to_rest(x1, x2))
        given = (np.maximum(np.abs(x1), np.abs(x2)) >= 1.0) | (np.hypot(x1, x2) <= STOP)
        problem = ssn.TracedEquation(_cart(h, x2, exact, given), np.ones(exact.size))
    problem.setting = Setting(int(n), h, line, exact, given, float(eps), case)
    return problem


def _corridor(h: float, eps: float) -> Callable[[FloatArray], FloatArray]:
    def error(u: FloatArray) -> FloatArray:
        left, here, right = u[:-2], u[1:-1], u[2:]
        diffusion = eps * (2.0 * here - left - right) / h**2
        drift = np.maximum(here - left, here - right) / h
        return np.concatenate([u[:1], diffusion + drift - 1.0, u[-1:]])

    return error


def _cart(
    h: float, x2: FloatArray, exact: FloatArray, given: npt.NDArray[np.bool_]
) -> Callable[[FloatArray], FloatArray]:
    speed = x2[1:-1, 1:-1]
    n = exact.shape[0] - 1
    side, ends = np.zeros((n - 1, 1)), np.zeros((1, n + 1))

    def error(v: FloatArray) -> FloatArray:
        value = np.reshape(v, exact.shape)
        here = value[1:-1, 1:-1]
        ahead = np.where(speed > 0, value[2:, 1:-1], value[:-2, 1:-1])
        drift = np.abs(speed) * (here - ahead) / h
        thrust = np.maximum(here - value[1:-1, 2:], here - value[1:-1, :-2]) / h
        inside = np.concatenate([side, here + drift + thrust - 1.0, side], axis=1)
        whole = np.concatenate([ends, inside, ends], axis=0)
        return np.reshape(np.where(given, value - exact, whole), (-1,))

    return error


def exit_time(x: FloatArray, eps: float) -> FloatArray:
    """The exact least expected time to leave the corridor from x."""
    r = np.abs(x)
    return 1.0 - r if eps == 0 else 1.0 - r + eps * (np.exp(-1.0 / eps) - np.exp(-r / eps))


def time_to_rest(x1: FloatArray, x2: FloatArray) -> FloatArray:
    """The exact least time of the cart."""
    sign = np.where(x1 >= -x2 * np.abs(x2) / 2, 1.0, -1.0)
    return sign * x2 + 2.0 * np.sqrt(np.maximum(sign * x1 + x2**2 / 2, 0.0))


def transfer(coarse: ssn.TracedEquation, fine: ssn.TracedEquation) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries values of `coarse` to `fine`: linear, or bilinear."""
    line, wanted = coarse.setting.line, fine.setting.line
    if coarse.setting.case == "corridor":
        return lambda u: np.interp(wanted, line, u)
    points = np.stack(np.meshgrid(wanted, wanted, indexing="ij"), axis=-1).reshape(-1, 2)
    return lambda v: RegularGridInterpolator((line, line), np.reshape(v, (line.size, line.size)))(points)


def known(problem: ssn.TracedEquation, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the exact solution, and the corridor also without noise."""
    s = problem.setting
    error = np.abs(solution.x - s.exact.ravel())
    if s.case == "cart":
        rate = s.h**0.25
        return [
            _check("largest error of v, 0.4 h^(1/4)", float(error.max()), 0.4 * rate, _CART),
            _check("mean error of v, 0.1 h^(1/4)", float(error.mean()), 0.1 * rate, _CART),
        ]
    quiet = build(s.n, "corridor", 0.0)
    distance = float(np.abs(ssn.solve(quiet).require().x - quiet.setting.exact).max())
    return [
        _check("largest error of the expected time, h", float(error.max()), s.h, _CORRIDOR),
        _check("without noise: largest error, exact at the points", distance, 1e-12, _CORRIDOR),
    ]


def _check(what: str, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": 0.0,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(computed <= tolerance),
    }


def reference(problem: ssn.TracedEquation, budget: float) -> Any:
    """Value iteration on the controlled Markov chain of the scheme, from above: no derivative, no linear system.

    The chain jumps at the rates of the scheme to its neighbours and pays one per unit of time; v is replaced by the
    least expected cost of one jump and v after it. Source: H. Kushner, P. Dupuis, Numerical Methods for Stochastic
    Control Problems, 1992 (from memory).
    """
    s = problem.setting
    noise = s.eps / s.h**2 if s.case == "corridor" else 0.0
    v = np.where(s.given, s.exact, 2.0 if s.case == "corridor" else 1.0)
    speed = np.broadcast_to(s.line, v.shape)[1:-1, 1:-1] if s.case == "cart" else None
    change, iteration, end = np.inf, 0, time.monotonic() + budget
    while change > 1e-14 and time.monotonic() < end:
        iteration += 1
        new = v.copy()
        if speed is None:
            least = np.minimum(v[:-2], v[2:])
            new[1:-1] = (1.0 + noise * (v[:-2] + v[2:]) + least / s.h) / (2.0 * noise + 1.0 / s.h)
        else:
            along = np.where(speed > 0, v[2:, 1:-1], v[:-2, 1:-1]) * np.abs(speed) / s.h
            least = np.minimum(v[1:-1, 2:], v[1:-1, :-2]) / s.h
            new[1:-1, 1:-1] = (1.0 + along + least) / (1.0 + (np.abs(speed) + 1.0) / s.h)
        new = np.where(s.given, s.exact, new)
        change = float(np.abs(new - v).max())
        v = new
    done = change <= 1e-14
    outcome = "converged" if done else "budget used up"
    return SimpleNamespace(x=v.ravel(), converged=done, outcome=outcome, iterations=iteration)


def picture(problem: ssn.TracedEquation, solution: ssn.Solution) -> Any:
    """Draw the expected time with the exact one, or the cart's time with the exact curve where it switches."""
    s = problem.setting
    figure = new_figure(8.0, 4.4)
    if s.case == "corridor":
        axes = figure.subplots()
        fine = np.linspace(-1.0, 1.0, 1001)
        axes.plot(fine, exit_time(fine, s.eps), color="C1", lw=3, alpha=0.5, label="exact")
        axes.plot(s.line, solution.x, ".-", color="C0", lw=0.8, ms=3, label="computed")
        axes.plot(fine, 1.0 - np.abs(fine), color="0.6", lw=0.8, ls="--", label="without noise")
        axes.set(xlabel="place", ylabel="expected time to leave", ylim=(0, None))
        axes.legend(frameon=False)
    else:
        left, right = figure.subplots(1, 2, sharey=True)
        shown = -np.log(np.maximum(1.0 - solution.x.reshape(s.exact.shape), 1e-12))
        levels = np.linspace(0.25, 3.5, 14)
        curve = -s.line * np.abs(s.line) / 2
        for axes, values, title in ((left, shown, "computed"), (right, -np.log(1.0 - s.exact), "exact")):
            drawn = axes.contour(s.line, s.line, values.T, levels, cmap="viridis", linewidths=1.0)
            axes.plot(curve, s.line, color="C3", lw=1.0, ls="--")
            axes.set(xlabel="position", title=f"time to rest, {title}", aspect="equal")
        left.set_ylabel("velocity; dashed: where to switch")
        figure.colorbar(drawn, ax=right, shrink=0.85)
    figure.suptitle(f"n = {s.n}, {len(solution.steps)} policy iterations")
    return figure
