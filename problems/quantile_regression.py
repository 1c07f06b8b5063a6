"""Quantile regression: the level that a figure stays below in a given share of cases, as a function of what drives it.

minimise ridge/2 ||w||^2 + sum over samples of rho(y_i - x_i . w), rho(r) = level r for r >= 0, (level - 1) r below: the
plane has the share `level` of the samples below it. Solved by its dual, in one unknown u_i a sample, w = X' u / ridge:

    minimise 1/(2 ridge) ||X' u||^2 - y . u  over  level - 1 <= u_i <= level,

u_i at a bound for samples off the plane, between for those on it.

*The ridge.* Without one this is a linear program. A small one does not change its solution: below some positive
ridge the plane is exactly the (shortest) solution of the linear program, not an approximation.
    Source: O. Mangasarian and R. Meyer, SIAM J. Control Optim. 17 (1979) 745-752 (from memory); quantile regression:
    R. Koenker and G. Bassett, Econometrica 46 (1978) 33-50 (from memory). X is centred and scaled inside.

case="stack loss": 21 days of a plant that oxidises ammonia: share of it lost against air flow, temperature of the
    cooling water and concentration of the acid. K. Brownlee, Statistical Theory and Methodology, 1965 (from memory).
case="load": made-up peak loads whose spread grows with one of nine influences. Dimensionless.

The smaller the ridge, the more steps: 100 000 samples take 29 with ridge 1e-4 and 123 with 1e-5, more than the limit.

Caution: extremes are beyond the data. A level that was kept in 99 of 100 past cases is not a safe design load.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from sklearn.linear_model import QuantileRegressor

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

#: Air flow, water temperature, acid concentration, ten times the percentage of ammonia lost.
STACK_LOSS = (
    (80, 27, 89, 42), (80, 27, 88, 37), (75, 25, 90, 37), (62, 24, 87, 28), (62, 22, 87, 18), (62, 23, 87, 18),
    (62, 24, 93, 19), (62, 24, 93, 20), (58, 23, 87, 15), (58, 18, 80, 14), (58, 18, 89, 14), (58, 17, 88, 13),
    (58, 18, 82, 11), (58, 19, 93, 12), (50, 18, 89, 8), (50, 18, 86, 7), (50, 19, 72, 8), (50, 19, 79, 8),
    (50, 20, 80, 9), (56, 20, 82, 15), (70, 20, 91, 15),
)  # fmt: skip
#: Intercept and slopes of its median regression, as printed for least absolute deviations.
STACK_LOSS_MEDIAN = (-39.68986, 0.83188, 0.57391, -0.06087)


@dataclass(frozen=True)
class Samples:
    """Measured X, shape (samples, k), scaled X with a first column of ones, y, and parameters."""

    measured: FloatArray
    table: FloatArray
    target: FloatArray
    level: float
    ridge: float
    case: str
    loss: ssn.QuantileLoss


def build(
    samples: int = 500, case: str = "load", level: float = 0.9, ridge: float = 1e-5, seed: int = 0
) -> ssn.CompositeProblem:
    """Build the dual problem.

    Parameters
    ----------
    samples : int
        At least 20; the days of the plant are 21, whatever it says.
    case : {"load", "stack loss"}
    level : float
        Share of the samples below the plane, between 0 and 1.
    ridge : float
        Weight of 1/2 ||w||^2 for each sample, positive: ridge * samples in the formulas above.
    seed : int
        Of the made-up samples.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(samples, bool) or not isinstance(samples, int | np.integer) or samples < 20:
        raise ssn.InputError(f"samples must be a whole number of at least 20, got {samples!r}")
    if not 0 < level < 1:
        raise ssn.InputError(f"level must lie between 0 and 1, got {level!r}")
    if not (ridge > 0 and np.isfinite(ridge)):
        raise ssn.InputError(f"ridge must be positive and finite, got {ridge!r}")
    if case not in ("load", "stack loss"):
        raise ssn.InputError(f"case must be 'load' or 'stack loss', got {case!r}")
    measured, target = _plant() if case == "stack loss" else _loads(int(samples), seed)
    scaled = (measured - measured.mean(axis=0)) / measured.std(axis=0)
    table = np.column_stack([np.ones(target.size), scaled])
    weight = ridge * target.size
    loss = ssn.QuantileLoss(level, target)
    problem = ssn.CompositeProblem(
        smooth=ssn.LeastSquares(np.ascontiguousarray(table.T) / np.sqrt(weight), np.zeros(table.shape[1])),
        cost=ssn.ScaledCost(ssn.ConjugateCost(loss), stretch=-1.0),  # loss*(-u)
    )
    problem.samples = Samples(measured, table, target, float(level), float(weight), case, loss)
    return problem


def _plant() -> tuple[FloatArray, FloatArray]:
    rows = np.array(STACK_LOSS, dtype=np.float64)
    return rows[:, :3], rows[:, 3]


def _loads(samples: int, seed: int) -> tuple[FloatArray, FloatArray]:
    rng = np.random.default_rng(seed)
    measured = rng.standard_normal((samples, 9))
    spread = 0.3 + np.abs(measured[:, 0])
    return measured, 5.0 + measured @ rng.standard_normal(9) + spread * rng.standard_normal(samples)


def plane(problem: ssn.CompositeProblem, u: FloatArray) -> FloatArray:
    """Return intercept and slopes in the measured units, shape (k + 1,)."""
    data = problem.samples
    w = data.table.T @ u / data.ridge
    slopes = w[1:] / data.measured.std(axis=0)
    return np.concatenate([[w[0] - data.measured.mean(axis=0) @ slopes], slopes])


def linear_program(problem: ssn.CompositeProblem) -> FloatArray:
    """Return intercept and slopes of scikit-learn's linear program without a ridge, by a simplex method."""
    data = problem.samples
    model = QuantileRegressor(quantile=data.level, alpha=0.0, solver="highs-ds")
    model.fit(data.measured, data.target)
    return np.concatenate([[model.intercept_], model.coef_])


def known(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the linear program (up to 5000 samples), weak duality, the share below, and the printed median."""
    data = problem.samples
    w = data.table.T @ solution.x / data.ridge
    value = 0.5 * data.ridge * float(w @ w) + data.loss.value(data.table @ w)
    misfit = data.target - data.table @ w
    on_plane = 1e-7 * float(np.abs(misfit).max())
    below, not_above = (int(np.count_nonzero(misfit < limit)) for limit in (-on_plane, on_plane))
    median = build(case="stack loss", level=0.5, ridge=1e-4)
    fitted = plane(median, ssn.solve(median).require().x)
    printed = float(np.abs(fitted - STACK_LOSS_MEDIAN).max())
    share = data.level * data.target.size
    checks = [
        _check(
            "duality gap: primal objective at w = X' u / ridge (relative)",
            (value + solution.objective) / value,
            1e-9,
            "weak duality (W. Fenchel, R. T. Rockafellar)",
        ),
        _check(
            "samples that the share below the plane is off by",
            max(below - share, share - not_above, 0.0),
            0.0 if data.ridge <= 1e-5 * data.target.size else 0.01 * data.target.size,
            "Koenker and Bassett (1978), theorem 3.4 (number from memory): below <= level * samples <= not above",
        ),
        _check(
            "median of the stack loss data, intercept and slopes (absolute)",
            printed,
            1e-5,
            "least absolute deviations, printed in many texts on regression (from memory)",
        ),
    ]
    if data.target.size <= 5000:
        other = linear_program(problem)
        apart = float(np.linalg.norm(plane(problem, solution.x) - other) / np.linalg.norm(other))
        checks.append(
            _check(
                "distance to the linear program without a ridge (relative)",
                apart,
                1e-7,
                "scikit-learn, QuantileRegressor (HiGHS dual simplex); Mangasarian and Meyer (1979)",
            )
        )
    return checks


def _check(what: str, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what,
        "kind": "absolute",
        "expected": 0.0,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed) <= tolerance),
    }


def summary(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return the plane and the share of the samples below it."""
    data = problem.samples
    fitted = plane(problem, solution.x)
    below = np.mean(data.target <= fitted[0] + data.measured @ fitted[1:])
    return [
        ("intercept", f"{fitted[0]:.5f}"),
        ("slopes", ", ".join(f"{value:.5f}" for value in fitted[1:])),
        ("samples not above", f"{below:.1%}, asked for {data.level:.0%}"),
    ]


def picture(problem: ssn.CompositeProblem, solution: ssn.Solution) -> Any:
    """Draw the samples over the first influence, with what the planes of three levels leave of the others."""
    data = problem.samples
    figure = new_figure(8.0, 4.2)
    axes = figure.subplots()
    middle = plane(problem, solution.x)
    rest = data.target - data.measured[:, 1:] @ middle[2:]
    axes.plot(data.measured[:, 0], rest, ".", color="0.6", ms=4, label="samples, other influences taken off")
    ends = np.array([data.measured[:, 0].min(), data.measured[:, 0].max()])
    others = data.measured[:, 1:].mean(axis=0)
    ridge = data.ridge / data.target.size
    for level, colour in ((0.25, "C0"), (0.5, "C1"), (data.level, "C3")):
        other = build(data.target.size if data.case == "load" else 20, data.case, level, ridge)
        fitted = middle if level == data.level else plane(other, ssn.solve(other).x)
        line = fitted[0] + ends * fitted[1] + others @ (fitted[2:] - middle[2:])
        axes.plot(ends, line, color=colour, lw=1.6, label=f"level {level:g}")
    axes.set(xlabel="air flow" if data.case == "stack loss" else "first influence", ylabel="figure")
    axes.legend(frameon=False)
    figure.suptitle(f"{data.target.size} samples, {len(solution.steps)} Newton steps")
    return figure
