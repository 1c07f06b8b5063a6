"""Support vector machines: sort parts by their measurements, or predict a figure and forgive small errors.

minimise 1/2 ||w||^2 + penalty * sum over samples of loss(x_i . w), x_i with a last entry 1 so that w ends with the
intercept, which is kept small like the rest. Solved by its dual, in one unknown u_i a sample:

    minimise 1/2 ||X' u||^2 + loss*(-u),      w = X' u,

u_i is zero except for samples that matter: the support vectors, at the edge of the margin (between the bounds) or on
its wrong side (u_i at its bound). The loss may be any cost with a conjugate: this file is the pattern for them.

case="parts": two kinds of parts told apart by nine measurements that overlap; hinge loss max(0, 1 - label x . w).
case="wear": predict the wear of a part; errors up to `width` cost nothing, larger ones linearly.
case="tumours": the Wisconsin diagnostic data, 569 samples, 30 measurements, hinge loss.

Sources: C. Cortes and V. Vapnik, Machine Learning 20 (1995) 273-297; V. Vapnik, The Nature of Statistical Learning
Theory, 1995; W. Street, W. Wolberg, O. Mangasarian, SPIE 1905 (1993) 861-870 (data) (all from memory). Dimensionless.

Caution: a demonstration. Nothing here is fit to sort parts that people rely on, or to diagnose anybody: that takes
validation on data not used for the fit, and the judgement of those licensed to give it.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from sklearn.datasets import load_breast_cancer
from sklearn.svm import LinearSVC, LinearSVR

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

#: Share of the bound below which a u_i is zero: v - prox(v) leaves rounding.
ROUNDING = 1e-9


@dataclass(frozen=True)
class Samples:
    """X with a last column of ones, shape (samples, k + 1); labels or figures to predict; parameters."""

    table: FloatArray
    target: FloatArray
    penalty: float
    width: float
    case: str
    loss: Any


def build(
    samples: int = 1000, case: str = "parts", strength: float = 100.0, width: float = 0.3, seed: int = 0
) -> ssn.CompositeProblem:
    """Build the dual problem.

    Parameters
    ----------
    samples : int
        At least 10; the tumours are 569, whatever it says.
    case : {"parts", "wear", "tumours"}
    strength : float
        Weight of all losses together against 1/2 ||w||^2, positive: penalty = strength / samples.
    width : float
        Of the dead zone, case "wear"; positive.
    seed : int
        Of the random samples.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(samples, bool) or not isinstance(samples, int | np.integer) or samples < 10:
        raise ssn.InputError(f"samples must be a whole number of at least 10, got {samples!r}")
    for name, value in (("strength", strength), ("width", width)):
        if not (value > 0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must be positive and finite, got {value!r}")
    if case not in ("parts", "wear", "tumours"):
        raise ssn.InputError(f"case must be 'parts', 'wear' or 'tumours', got {case!r}")
    table, target = _tumours() if case == "tumours" else _made_up(int(samples), case, seed)
    penalty = strength / target.size
    loss: Any = (
        ssn.InsensitiveLoss(width, target, penalty) if case == "wear" else ssn.HingeLoss(target, penalty)
    )
    problem = ssn.CompositeProblem(
        smooth=ssn.LeastSquares(np.ascontiguousarray(table.T), np.zeros(table.shape[1])),
        cost=ssn.ScaledCost(ssn.ConjugateCost(loss), stretch=-1.0),  # loss*(-u)
    )
    problem.samples = Samples(table, target, penalty, float(width), case, loss)
    return problem


def _made_up(samples: int, case: str, seed: int) -> tuple[FloatArray, FloatArray]:
    rng = np.random.default_rng(seed)
    table = np.column_stack([rng.standard_normal((samples, 9)), np.ones(samples)])
    truth = rng.standard_normal(10)
    exact = table @ truth
    if case == "wear":
        return table, exact + 0.5 * rng.standard_normal(samples)
    return table, np.sign(exact + 0.7 * np.linalg.norm(truth) * rng.standard_normal(samples))


def _tumours() -> tuple[FloatArray, FloatArray]:
    measured, benign = load_breast_cancer(return_X_y=True)
    measured = (measured - measured.mean(axis=0)) / measured.std(axis=0)
    return np.column_stack([measured, np.ones(benign.size)]), 2.0 * benign - 1.0


def coefficients(problem: ssn.CompositeProblem, u: FloatArray) -> FloatArray:
    """Return w = X' u, the intercept last."""
    return problem.samples.table.T @ u


def in_use(problem: ssn.CompositeProblem, u: FloatArray) -> npt.NDArray[np.bool_]:
    """Return which samples are support vectors."""
    return np.abs(u) > ROUNDING * problem.samples.penalty


def known(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with scikit-learn's coefficients, with the primal objective, and with a case done by hand."""
    data = problem.samples
    w = coefficients(problem, solution.x)
    other = library(problem)
    apart = float(np.linalg.norm(w - other) / np.linalg.norm(other))
    value = 0.5 * float(w @ w) + data.loss.value(data.table @ w)
    gap = (value + solution.objective) / value
    by_hand = 4.0 * np.subtract(*ssn.solve(two_points()).require().x)
    return [
        _check(
            "distance of w to that of scikit-learn (relative)",
            "relative",
            apart,
            1e-5,
            f"scikit-learn, {'LinearSVR' if data.case == 'wear' else 'LinearSVC'}, dual coordinate descent",
        ),
        _check(
            "duality gap: primal objective at w = X' u (relative)",
            "relative",
            gap,
            1e-9,
            "weak duality (W. Fenchel, R. T. Rockafellar)",
        ),
        _check(
            "w for the points 4 and -4, less 1/4 (absolute)",
            "absolute",
            float(by_hand) - 0.25,
            1e-12,
            "by hand: the margin is 1 / ||w||, here 4",
        ),
    ]


def _check(what: str, kind: str, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what,
        "kind": kind,
        "expected": 0.0,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed) <= tolerance),
    }


def library(problem: ssn.CompositeProblem) -> FloatArray:
    """Return scikit-learn's coefficients for the same samples, loss and penalty."""
    data = problem.samples
    options = {"C": data.penalty, "fit_intercept": False, "tol": 1e-10, "max_iter": 10**6, "random_state": 0}
    if data.case == "wear":
        return LinearSVR(epsilon=data.width, **options).fit(data.table, data.target).coef_
    return LinearSVC(loss="hinge", **options).fit(data.table, data.target).coef_[0]


def two_points() -> ssn.CompositeProblem:
    """Two samples of opposite label at 4 and -4, on one line through zero."""
    loss = ssn.HingeLoss(np.array([1.0, -1.0]), 10.0)
    return ssn.CompositeProblem(
        smooth=ssn.LeastSquares(np.array([[4.0, -4.0]]), np.zeros(1)),
        cost=ssn.ScaledCost(ssn.ConjugateCost(loss), stretch=-1.0),
    )


def summary(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return the support vectors and how well the samples are met."""
    data = problem.samples
    predicted = data.table @ coefficients(problem, solution.x)
    support = in_use(problem, solution.x)
    inside = support & (np.abs(solution.x) < data.penalty * (1.0 - ROUNDING))
    rows = [("support vectors", f"{support.sum()} of {support.size}, {inside.sum()} of them on the margin")]
    if data.case == "wear":
        wrong = float(np.mean(np.abs(predicted - data.target) > data.width))
        return [*rows, ("outside the dead zone", f"{wrong:.1%}")]
    return [*rows, ("on the wrong side", f"{np.mean(np.sign(predicted) != data.target):.1%}")]


def picture(problem: ssn.CompositeProblem, solution: ssn.Solution) -> Any:
    """Draw how far the samples are from the decision, or predictions over figures, with the support vectors."""
    data = problem.samples
    predicted = data.table @ coefficients(problem, solution.x)
    figure = new_figure(8.0, 4.2)
    axes = figure.subplots()
    support = in_use(problem, solution.x)
    if data.case == "wear":
        axes.plot(
            data.target[~support], predicted[~support], ".", color="0.7", ms=4, label="in the dead zone"
        )
        axes.plot(data.target[support], predicted[support], ".", color="C0", ms=4, label="support vector")
        line = np.array([data.target.min(), data.target.max()])
        for shift in (-data.width, data.width):
            axes.plot(line, line + shift, color="black", lw=0.8)
        axes.set(xlabel="figure", ylabel="predicted")
    else:
        edges = np.linspace(predicted.min(), predicted.max(), 60)
        for label, colour in ((1.0, "C0"), (-1.0, "C1")):
            chosen = predicted[data.target == label]
            axes.hist(chosen, edges, color=colour, alpha=0.6, label=f"label {label:+.0f}")
        for place, style in ((-1.0, "--"), (0.0, "-"), (1.0, "--")):
            axes.axvline(place, color="black", lw=0.9, ls=style)
        axes.set(xlabel="x . w; solid: decision, dashed: margin", ylabel="samples")
    axes.legend(frameon=False)
    figure.suptitle(f"{data.target.size} samples, {support.sum()} support vectors")
    return figure
