"""American put: the value of a right to sell at any time, on one asset or on two, and when to use it.

With t the time to expiry, A V = -(s^2 / 2) S^2 V_SS - (r - d) S V_S + r V and the payoff P, find V >= P with
V_t + A V >= 0, and = 0 where V > P (where holding pays). All time levels are one complementarity problem: F = the
residual of the scheme, block lower bidiagonal. Crank-Nicolson steps, the first two implicit Euler steps, graded as
t_k = T (k / m)^2 with m = n / 2 steps, since the exercise price moves like the square root of t. Values in units of
money, times in years, rates a year.

case="put": P = max(K - S, 0), central differences on n prices, dense near the strike.
    Sources: F. Longstaff, E. Schwartz, Rev. Financial Studies 14 (2001) 113-147, Table 1, for K = 40, r = 0.06 (their
    finite differences allow exercise on 50 days a year, which parameter dates=50 does, too; at any time the values are
    higher by 0.003 to 0.009); Discrete Dynamics in Nature and Society 2014, 369795, Table 3.
case="minimum": P = max(K - min(S1, S2), 0), two correlated assets.
    Source: P. Boyle, J. Financial Quant. Anal. 23 (1988) 1-12, table of American puts on the minimum (from memory).
case="geometric": P = max(K - sqrt(S1 S2), 0). The geometric mean is itself lognormal, with volatility
    sqrt(s1^2 + 2 rho s1 s2 + s2^2) / 2 and a dividend yield (s1^2 + s2^2) / 4 minus half its volatility squared: an
    exact check by one asset. Two assets: central differences and a seven-point stencil (rho >= 0) in ln S, n^2 / 4
    points, m = n / 4 steps; S1 = S2 = 40, s1 = 0.2, s2 = 0.3, rho = 0.5, r = ln 1.05, T = 7 / 12.

Caution: a design aid of the Black-Scholes model, not financial advice. Markets jump, volatilities and rates change, and
money can be lost; valuation standards and licensed practice apply.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.interpolate import CubicSpline, RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)
STEPS_A_DATE = 4  # time steps between two dates of exercise
CASES = ("put", "minimum", "geometric")

#: (strike, rate, volatility, expiry) -> price of the asset -> value, digits, source
_OURS = "independent program, continuous exercise, 2e-5"
_PRINTED = "Discrete Dynamics in Nature and Society 2014, 369795, Table 3, Crank-Nicolson"
TABLE = {
    (40.0, 0.06, 0.2, 1.0): (
        {36.0: 4.48667, 38.0: 3.25719, 40.0: 2.31957, 42.0: 1.62115, 44.0: 1.11296}, 2e-5, _OURS,
    ),
    (40.0, 0.06, 0.4, 1.0): (
        {36.0: 7.109, 38.0: 6.154, 40.0: 5.318, 42.0: 4.588, 44.0: 3.953}, 1e-3, _PRINTED,
    ),
}  # fmt: skip
#: the same -> values with 50 days of exercise a year
FIFTY_DAYS = {
    (40.0, 0.06, 0.2, 1.0): {36.0: 4.478, 38.0: 3.250, 40.0: 2.314, 42.0: 1.617, 44.0: 1.110},
    (40.0, 0.06, 0.4, 1.0): {36.0: 7.101, 38.0: 6.148, 40.0: 5.312, 42.0: 4.582, 44.0: 3.948},
}
EXERCISE_PRICE = 0.8625  # of K = 1, r = 0.1, s = 0.2, T = 1: 0.862 to 0.863 in four papers
#: two assets: price of both, volatilities, correlation, rate, expiry
PAIR = (40.0, 0.2, 0.3, 0.5, float(np.log(1.05)), 7.0 / 12.0)
#: strike -> value of the American put on the minimum
MINIMUM = {35.0: 1.423, 40.0: 3.892, 45.0: 7.689}


@dataclass(frozen=True)
class MeshData:
    """Time levels (to expiry, without 0) and points of the unknown, which has shape (levels * points,), time slowest.

    `line` are the interior prices of one asset, or the interior values of ln(S / K) of each of two.
    """

    n: int
    case: str
    strike: float
    rate: float
    volatility: float
    expiry: float
    dates: int
    times: FloatArray
    line: FloatArray
    payoff: FloatArray


def build(
    n: int = 64,
    case: str = "put",
    strike: float = 40.0,
    rate: float = 0.06,
    volatility: float = 0.2,
    expiry: float = 1.0,
    dates: int = 0,
) -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    n : int
        Interior prices of one asset, twice those of each of two; at least 16.
    case : {"put", "minimum", "geometric"}
    strike : float
        K in money, positive.
    rate, volatility, expiry : float
        r and s a year, T in years, positive; case "put" only, two assets have the data of the module docstring.
    dates : int
        Number of dates, equally far apart, at which the right may be used, the last at expiry; 0: at any time. Case
        "put" only.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 16:
        raise ssn.InputError(f"n must be a whole number of at least 16, got {n!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(map(repr, CASES))}, got {case!r}")
    for name, value in {"strike": strike, "rate": rate, "volatility": volatility, "expiry": expiry}.items():
        if not (value > 0.0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must be positive and finite, got {value!r}")
    if isinstance(dates, bool) or not isinstance(dates, int | np.integer) or dates < 0:
        raise ssn.InputError(f"dates must be 0 or a positive whole number, got {dates!r}")
    if case != "put":
        if (rate, volatility, expiry, dates) != (0.06, 0.2, 1.0, 0):
            raise ssn.InputError(
                f"rate, volatility, expiry and dates have no effect with case={case!r}; leave them out"
            )
        return _pair(int(n), case, float(strike))
    line, operator, inflow, payoff = one_asset(int(n), strike, rate, volatility, expiry)
    if dates:
        times = np.linspace(0.0, expiry, STEPS_A_DATE * dates + 1)[1:]
        allowed = np.arange(1, times.size + 1) % STEPS_A_DATE == 0
    else:
        times = expiry * (np.arange(1, n // 2 + 1) / (n // 2)) ** 2
        allowed = np.ones(times.size, dtype=bool)
    problem = _all_times(operator, inflow, payoff, times, allowed)
    data = (float(strike), float(rate), float(volatility), float(expiry), int(dates))
    problem.mesh_data = MeshData(int(n), case, *data, times, line, payoff)
    return problem


def one_asset(
    n: int, strike: float, rate: float, volatility: float, expiry: float, dividend: float = 0.0
) -> tuple[FloatArray, sp.csr_array, FloatArray, FloatArray]:
    """Return prices, A on interior prices, its part from the boundary prices 0 and far away, and the payoff."""
    far = strike * np.exp(max(1.0, 5.0 * volatility * np.sqrt(expiry)))
    width = 0.15 * strike  # of the dense part
    ends = np.arcsinh(np.array([-strike, far - strike]) / width)
    below = round((n + 1) * ends[0] / (ends[0] - ends[1]))  # the strike is a point
    left, right = np.linspace(ends[0], 0.0, below + 1), np.linspace(0.0, ends[1], n + 2 - below)
    price = strike + width * np.sinh(np.concatenate([left, right[1:]]))
    price[0] = 0.0
    down, up = np.diff(price)[:-1], np.diff(price)[1:]
    s = price[1:-1]
    diffusion, drift = (volatility * s) ** 2, (rate - dividend) * s
    lower = -(diffusion - drift * up) / (down * (down + up))
    upper = -(diffusion + drift * down) / (up * (down + up))
    middle = -lower - upper + rate
    operator = sp.csr_array(sp.diags_array([lower[1:], middle, upper[:-1]], offsets=[-1, 0, 1]))
    inflow = np.zeros(n)
    inflow[0] = lower[0] * strike  # V = K at price 0, V = 0 far away
    return s, operator, inflow, np.maximum(strike - s, 0.0)


def _pair(n: int, case: str, strike: float) -> ssn.ComplementarityProblem:
    """Two assets in x_i = ln(S_i / K), |x_i| <= 0.8; the payoff on the boundary."""
    _, s1, s2, rho, rate, expiry = PAIR
    k = n // 2 if (n // 2) % 2 else n // 2 + 1  # odd: the strike is a point
    line = np.linspace(-0.8, 0.8, k + 2)
    h = line[1] - line[0]
    x1, x2 = np.meshgrid(line, line, indexing="ij")
    kept = np.minimum(np.exp(x1), np.exp(x2)) if case == "minimum" else np.exp(0.5 * (x1 + x2))
    payoff = strike * np.maximum(1.0 - kept, 0.0)
    cross = rho * s1 * s2 / h**2  # split between both diagonal neighbours and the four others
    stencil = {(0, 0): rate}
    for (a, b), weight in {
        (1, 0): 0.5 * s1**2 / h**2 - 0.5 * cross + 0.5 * (rate - 0.5 * s1**2) / h,
        (-1, 0): 0.5 * s1**2 / h**2 - 0.5 * cross - 0.5 * (rate - 0.5 * s1**2) / h,
        (0, 1): 0.5 * s2**2 / h**2 - 0.5 * cross + 0.5 * (rate - 0.5 * s2**2) / h,
        (0, -1): 0.5 * s2**2 / h**2 - 0.5 * cross - 0.5 * (rate - 0.5 * s2**2) / h,
        (1, 1): 0.5 * cross,
        (-1, -1): 0.5 * cross,
    }.items():
        stencil[a, b] = -weight
        stencil[0, 0] += weight
    size = k + 2
    full = sp.csr_array((size * size, size * size))
    for (a, b), weight in stencil.items():
        full = full + weight * sp.kron(sp.eye_array(size, k=a), sp.eye_array(size, k=b))
    full = sp.csr_array(full)
    index = np.arange(size * size).reshape(size, size)
    inner = index[1:-1, 1:-1].ravel()
    outside = payoff.copy()
    outside[1:-1, 1:-1] = 0.0
    inflow = (full @ outside.ravel())[inner]
    times = expiry * (np.arange(1, max(4, n // 4) + 1) / max(4, n // 4)) ** 2
    value = payoff.ravel()[inner]
    problem = _all_times(sp.csr_array(full[inner][:, inner]), inflow, value, times)
    problem.mesh_data = MeshData(n, case, strike, rate, np.nan, expiry, 0, times, line[1:-1], value)
    return problem


def _all_times(
    operator: sp.csr_array,
    inflow: FloatArray,
    payoff: FloatArray,
    times: FloatArray,
    allowed: npt.NDArray[np.bool_] | None = None,
) -> ssn.ComplementarityProblem:
    """F_k = (1 + w dt A) V_k - (1 - (1 - w) dt A) V_(k-1) + dt inflow; w = 1 in the first two steps, 1/2 beyond."""
    steps = np.diff(times, prepend=0.0)
    weight = np.where(np.arange(steps.size) < 2, 1.0, 0.5)
    identity, m = sp.eye_array(payoff.size), steps.size
    now = sp.kron(sp.eye_array(m), identity) + sp.kron(sp.diags_array(weight * steps), operator)
    later = ((1.0 - weight) * steps)[1:]
    before = sp.kron(sp.eye_array(m, k=-1), identity)
    if m > 1:
        before = before - sp.kron(sp.diags_array([later], offsets=[-1]), operator)
    q = np.repeat(steps, payoff.size) * np.tile(inflow, m)
    q[: payoff.size] -= payoff
    # where the payoff is zero the right is never used: the value is positive without being told, by less than rounding
    # far away, where a bound would be met and missed at the same time
    lower = np.where(payoff > 0.0, payoff, -np.inf)
    bound = np.tile(lower, (m, 1))
    if allowed is not None:
        bound[~allowed] = -np.inf
    return ssn.ComplementarityProblem(ssn.AffineMap(sp.csr_array(now - before), q), bound.ravel())


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries the time value V - P of `coarse` to `fine`: linear in time and price."""
    old, new = coarse.mesh_data, fine.mesh_data
    axes = (old.line,) if old.case == "put" else (old.line, old.line)
    wanted = (new.line,) if old.case == "put" else (new.line, new.line)
    shape = (old.times.size, *[axis.size for axis in axes])
    padded = [np.concatenate([[2 * a[0] - a[1]], a, [2 * a[-1] - a[-2]]]) for a in axes]
    grid = np.stack(np.meshgrid(new.times, *wanted, indexing="ij"), axis=-1)

    def carry(value: FloatArray) -> FloatArray:
        time_value = np.maximum(value - np.tile(old.payoff, old.times.size), 0.0).reshape(shape)
        time_value = np.pad(time_value, [(1, 0), *[(1, 1)] * len(axes)])  # none at expiry and on the boundary
        lines = (np.concatenate([[0.0], old.times]), *padded)
        moved = RegularGridInterpolator(lines, time_value, bounds_error=False, fill_value=0.0)(grid)
        return np.tile(new.payoff, new.times.size) + moved.ravel()

    return carry


def price(problem: ssn.ComplementarityProblem, solution: ssn.Solution, *at: float) -> float:
    """Return the value today at the price of the asset, or at the two prices."""
    mesh = problem.mesh_data
    last = solution.x[-mesh.payoff.size :]
    if mesh.case == "put":
        return float(CubicSpline(mesh.line, last)(at[0]))
    x = np.log(np.array(at) / mesh.strike)
    values = last.reshape(mesh.line.size, mesh.line.size)
    return float(RegularGridInterpolator((mesh.line, mesh.line), values, method="cubic")(x)[0])


def exercised(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> npt.NDArray[np.bool_]:
    """Return where the right is best used, shape (times, points): the payoff is the value, and is positive."""
    mesh = problem.mesh_data
    return (solution.x == problem.lower).reshape(mesh.times.size, -1)


def exercise_prices(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> FloatArray:
    """Return the price below which a put is used, at each time level.

    Value and slope pass smoothly into the payoff: the root of V - P, taken at the first two points where the put is
    held, is extrapolated to zero, but not beyond the neighbouring points.
    """
    mesh = problem.mesh_data
    line = np.concatenate([[0.0], mesh.line])
    first = exercised(problem, solution).sum(axis=1)  # index of the first point where it is held
    times = np.arange(mesh.times.size)
    root = np.sqrt(np.maximum(solution.x.reshape(times.size, -1) - mesh.payoff, 0.0))
    one, two = root[times, first], root[times, first + 1]
    gap = mesh.line[first + 1] - mesh.line[first]
    found = mesh.line[first] - gap * one / np.maximum(two - one, 1e-300)
    return np.clip(found, line[first], line[first + 1])


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with published values, or with the exact reduction to one asset."""
    mesh = problem.mesh_data
    if mesh.case == "minimum":
        return _minimum_values(problem, solution)
    if mesh.case == "geometric":
        return _geometric_values(problem, solution)
    checks = []
    data = (mesh.strike, mesh.rate, mesh.volatility, mesh.expiry)
    error = 2.5 * mesh.volatility * mesh.strike / mesh.n**2  # of the scheme: second order, measured
    if mesh.dates:
        if mesh.dates == round(50 * mesh.expiry) and data in FIFTY_DAYS:
            source = "Longstaff and Schwartz (2001), Table 1, finite differences, 50 days of exercise a year"
            for s, expected in FIFTY_DAYS[data].items():
                computed = price(problem, solution, s)
                checks.append(
                    _check(f"value at price {s:g}, 0.001 and mesh", expected, computed, 1e-3 + error, source)
                )
        return checks
    if data in TABLE:
        values, digits, source = TABLE[data]
        for s, expected in values.items():
            computed = price(problem, solution, s)
            checks.append(_check(f"value at price {s:g}, mesh", expected, computed, digits + error, source))
        source = "Longstaff and Schwartz (2001), Table 1, finite differences, 50 days of exercise a year"
        for s, expected in FIFTY_DAYS[data].items():
            computed = price(problem, solution, s)
            checks.append(
                _check(f"value at {s:g} above that of 50 days by 0.003 to 0.009, mesh",
                       expected + 0.006, computed, 0.0035 + error, source)
            )  # fmt: skip
    if (mesh.rate, mesh.volatility, mesh.expiry) == (0.1, 0.2, 1.0):
        found = float(exercise_prices(problem, solution)[-1])
        gap = float(np.diff(mesh.line)[np.searchsorted(mesh.line, found)])
        expected = EXERCISE_PRICE * mesh.strike
        source = "four papers, printed between 0.862 and 0.863 of the strike"
        checks.append(_check("exercise price today, half a mesh width", expected, found, 0.5 * gap, source))
    return checks


def _minimum_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    if mesh.strike not in MINIMUM:
        return []
    source = "Boyle (1988), table of American puts on the minimum, lattice of 50 steps (from memory)"
    computed = price(problem, solution, PAIR[0], PAIR[0])
    tolerance = 0.005 + 3.5 * mesh.strike / mesh.n**2
    return [_check("value, 0.005 and mesh", MINIMUM[mesh.strike], computed, tolerance, source)]


def _geometric_values(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    spot, s1, s2, rho, rate, expiry = PAIR
    volatility = 0.5 * np.sqrt(s1**2 + 2 * rho * s1 * s2 + s2**2)
    dividend = 0.25 * (s1**2 + s2**2) - 0.5 * volatility**2
    n = 200
    line, operator, inflow, payoff = one_asset(n, mesh.strike, rate, volatility, expiry, dividend)
    times = expiry * (np.arange(1, n // 2 + 1) / (n // 2)) ** 2
    single = ssn.solve(_all_times(operator, inflow, payoff, times))
    expected = float(CubicSpline(line, single.x[-n:])(spot))
    computed = price(problem, solution, spot, spot)
    source = "exact reduction to one asset, solved on 200 prices and 100 times"
    return [_check("value, mesh", expected, computed, 2.0 * mesh.strike / mesh.n**2, source)]


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": float(expected),
        "computed": float(computed),
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw the value today with the payoff and the exercise price over time, or both on the plane of two prices."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2)
    size = mesh.payoff.size
    if mesh.case == "put":
        shown = mesh.line < 2.0 * mesh.strike
        left.plot(mesh.line[shown], mesh.payoff[shown], color="0.6", label="payoff")
        left.plot(mesh.line[shown], solution.x[-size:][shown], color="C0", label="value today")
        left.set(xlabel="price of the asset", title="value")
        left.legend(frameon=False)
        used = exercised(problem, solution).any(axis=1)
        right.plot(
            (mesh.expiry - mesh.times)[used],
            exercise_prices(problem, solution)[used],
            color="C1",
            marker="." if mesh.dates else "",
        )
        right.axhline(mesh.strike, color="0.6", lw=0.8, ls="--")
        right.set(
            xlabel="time (years)", title="sell below this price; dashed: strike", ylabel="price of the asset"
        )
        name = f"r = {mesh.rate:g}, s = {mesh.volatility:g}" + (f", {mesh.dates} dates" if mesh.dates else "")
    else:
        k = mesh.line.size
        prices = mesh.strike * np.exp(mesh.line)
        lines = left.contour(prices, prices, solution.x[-size:].reshape(k, k).T, levels=12, cmap="viridis")
        left.clabel(lines, fontsize=7)
        left.set(title="value today")
        use = exercised(problem, solution)[-1].reshape(k, k).astype(float)
        right.pcolormesh(prices, prices, use.T, cmap="Oranges", vmin=0, vmax=2, shading="nearest")
        right.set(title="use the right (orange)")
        for axes in (left, right):
            axes.set(
                xlabel="$S_1$",
                ylabel="$S_2$",
                xlim=(0, 2 * mesh.strike),
                ylim=(0, 2 * mesh.strike),
                aspect="equal",
            )
        name = "two assets, rho = 0.5"
    figure.suptitle(
        f"American put, {mesh.case}, K = {mesh.strike:g}, {name}: {size} points, {mesh.times.size} times, "
        f"{len(solution.steps)} Newton steps"
    )
    return figure
