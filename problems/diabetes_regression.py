"""Which measurements predict how diabetes progresses: L1 and group regression on a classical data set.

minimise 1/2 ||y - X b||^2 + weight * penalty(b). y: progression of the disease within a year (a score, its mean
subtracted); X: ten measurements of 442 patients, one a column, centred and of length one, so that b is in the unit of
the score. No mesh: ten unknowns.

case="lasso": penalty ||b||_1. As the weight falls the coefficients are piecewise linear in it, and bend where one
    enters or leaves: `KNOTS`.
    Source: R. Tibshirani, J. R. Statist. Soc. B 58 (1996) 267-288 (from memory); data and path: B. Efron, T. Hastie,
    I. Johnstone, R. Tibshirani, Ann. Statist. 32 (2004) 407-499.
case="groups": penalty sum over `GROUPS` of sqrt(size) ||b_g||: whole groups are in or out.
    Source: M. Yuan and Y. Lin, J. R. Statist. Soc. B 68 (2006) 49-67 (from memory). The groups are ours.

Caution: a demonstration on old data, not a medical statement. A measurement that is not selected is not without
influence: of several that move together one may stand for the others.
"""

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from sklearn.datasets import load_diabetes
from sklearn.linear_model import lars_path_gram

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

NAMES = ("age", "sex", "bmi", "bp", "s1", "s2", "s3", "s4", "s5", "s6")

#: Person, body mass, blood pressure, five blood lipids, blood sugar.
GROUPS = {"person": (0, 1), "bmi": (2,), "bp": (3,), "lipids": (4, 5, 6, 7, 8), "sugar": (9,)}

#: Weight at which a coefficient enters the L1 regression, or leaves it, as the weight falls. Data and order: Efron et
#: al. (2004); numbers by scikit-learn's least angle regression on its copy of the data, to the digits shown.
KNOTS = (
    (949.43526, "bmi"),
    (889.31379, "s5"),
    (452.89570, "bp"),
    (316.07338, "s3"),
    (130.12954, "sex"),
    (88.78430, "s6"),
    (68.96479, "s1"),
    (19.98117, "s4"),
    (5.47754, "s2"),
    (5.08824, "age"),
    (2.18227, "s3"),
    (1.31044, "s3"),
)
SUM_AT_THE_END = 3459.978

_SOURCE = "Efron, Hastie, Johnstone, Tibshirani, Ann. Statist. 32 (2004); number by least angle regression"


@dataclass(frozen=True)
class Setting:
    """What `known`, `reference` and `picture` need."""

    weight: float
    case: str


def data() -> tuple[FloatArray, FloatArray]:
    """Return X with centred columns of length one, shape (442, 10), and the centred y, shape (442,)."""
    table, score = load_diabetes(return_X_y=True)
    table = table - table.mean(axis=0)
    return table / np.linalg.norm(table, axis=0), score - score.mean()


def build(weight: float = 100.0, case: str = "lasso") -> ssn.CompositeProblem:
    """Build the regression problem.

    Parameters
    ----------
    weight : float
        Of the penalty, in the unit of the score; not negative.
    case : {"lasso", "groups"}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if not (weight >= 0 and np.isfinite(weight)):
        raise ssn.InputError(f"weight must be finite and not negative, got {weight!r}")
    if case not in ("lasso", "groups"):
        raise ssn.InputError(f"case must be 'lasso' or 'groups', got {case!r}")
    table, score = data()
    if case == "lasso":
        cost: Any = ssn.SparseCost(weight)
    else:
        sizes = np.array([len(members) for members in GROUPS.values()])
        cost = ssn.GroupSparseCost(weight * np.sqrt(sizes), [np.array(g) for g in GROUPS.values()])
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(table, score), cost=cost)
    problem.setting = Setting(float(weight), case)
    return problem


def knot_below(solution: ssn.Solution) -> tuple[float, str]:
    """The next weight below that of an L1 solution at which a coefficient enters or leaves, and which.

    With the selected columns S and their signs s, b_S = (X_S' X_S)^-1 (X_S' y - weight s) holds until a coefficient
    of S is zero or a column outside S has a product of the size of the weight with the misfit.
    """
    table, score = data()
    inside = solution.x != 0
    chosen = table[:, inside]
    gram = chosen.T @ chosen
    fitted, slope = np.linalg.solve(gram, np.column_stack([chosen.T @ score, np.sign(solution.x[inside])])).T
    here = float(np.mean(np.abs(chosen.T @ (score - table @ solution.x))))
    events = [(float(b / d), k) for b, d, k in zip(fitted, slope, np.flatnonzero(inside), strict=True)]
    rest, tilt = score - chosen @ fitted, chosen @ slope
    for k in np.flatnonzero(~inside):
        # X_k'(y - X b) = p + weight q is +-weight
        p, q = float(table[:, k] @ rest), float(table[:, k] @ tilt)
        events += [(p / (1.0 - q), k), (-p / (1.0 + q), k)]
    weight, k = max(event for event in events if event[0] < here * (1.0 - 1e-9))
    return max(weight, 0.0), NAMES[k]


def known(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the published path (case "lasso"), or with the optimality conditions of groups."""
    if problem.setting.case == "groups":
        return _group_conditions(problem, solution)
    checks = [_first_knot()]
    weights = [weight for weight, _ in KNOTS] + [0.0]
    for (above, _), (below, name) in pairwise(KNOTS):
        middle = ssn.solve(build(0.5 * (above + below))).require()
        weight, changed = knot_below(middle)
        verb = "enters" if changed != "s3" or below > 10 or below < 2 else "leaves"
        checks.append(
            {
                "what": f"weight at which {name} {verb} (absolute)",
                "kind": "absolute",
                "expected": below,
                "computed": weight,
                "tolerance": 1e-5,
                "source": _SOURCE,
                "holds": bool(abs(weight - below) <= 1e-5 and changed == name),
            }
        )
    half, quarter = (float(np.abs(ssn.solve(build(f * weights[-2])).require().x).sum()) for f in (0.5, 0.25))
    total = 2.0 * quarter - half  # linear in the weight below the last knot
    checks.append(
        {
            "what": "sum of |b| as the weight vanishes (absolute)",
            "kind": "absolute",
            "expected": SUM_AT_THE_END,
            "computed": total,
            "tolerance": 1e-3,
            "source": _SOURCE,
            "holds": bool(abs(total - SUM_AT_THE_END) <= 1e-3),
        }
    )
    return checks


def _first_knot() -> dict[str, Any]:
    first, name = KNOTS[0]
    above, below = (ssn.solve(build(first * (1.0 + t))).require().x for t in (1e-8, -1e-8))
    entered = [NAMES[k] for k in np.flatnonzero(below)]
    return {
        "what": f"{name} alone is in just below {first:.2f}, none just above (1: true)",
        "kind": "absolute",
        "expected": 1.0,
        "computed": float(not above.any() and entered == [name]),
        "tolerance": 0.0,
        "source": _SOURCE,
        "holds": bool(not above.any() and entered == [name]),
    }


def _group_conditions(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """X_g'(y - X b) = weight sqrt(size) b_g/||b_g|| in groups that are in, no longer than that in the others."""
    table, score = data()
    pull = table.T @ (score - table @ solution.x)
    worst = 0.0
    for members in (list(g) for g in GROUPS.values()):
        price = problem.setting.weight * np.sqrt(len(members))
        length = np.linalg.norm(solution.x[members])
        if length > 0:
            excess = float(np.linalg.norm(pull[members] - price * solution.x[members] / length))
        else:
            excess = max(0.0, float(np.linalg.norm(pull[members])) - price)
        worst = max(worst, excess / float(np.linalg.norm(score)))
    first = max(float(np.linalg.norm(table[:, list(g)].T @ score)) / np.sqrt(len(g)) for g in GROUPS.values())
    above, below = (ssn.solve(build(first * (1.0 + t), "groups")).require().x for t in (1e-8, -1e-4))
    source = "optimality conditions of Yuan and Lin (2006), from memory, evaluated from the data"
    return [
        {
            "what": "largest violation of a group's condition, relative to ||y||",
            "kind": "absolute",
            "expected": 0.0,
            "computed": worst,
            "tolerance": 1e-8,
            "source": source,
            "holds": bool(worst <= 1e-8),
        },
        {
            "what": "groups just below the weight max ||X_g' y|| / sqrt(size), and just above",
            "kind": "absolute",
            "expected": 1.0,
            "computed": float(_groups_in(below) + _groups_in(above)),
            "tolerance": 0.0,
            "source": source,
            "holds": bool(_groups_in(below) == 1 and _groups_in(above) == 0),
        },
    ]


def _groups_in(b: FloatArray) -> int:
    return sum(bool(b[list(members)].any()) for members in GROUPS.values())


def reference(problem: ssn.CompositeProblem, budget: float) -> FloatArray:
    """Solve by least angle regression (scikit-learn), or group by group with one scalar equation each."""
    weight = problem.setting.weight
    table, score = data()
    if problem.setting.case == "lasso":
        weights, _, path = lars_path_gram(table.T @ score, table.T @ table, n_samples=1, method="lasso")
        return np.array([np.interp(weight, weights[::-1], coefficient[::-1]) for coefficient in path])
    b = np.zeros(len(NAMES))
    for _ in range(10_000):
        before = b.copy()
        for members in (list(g) for g in GROUPS.values()):
            part = table[:, members]
            values, vectors = np.linalg.eigh(part.T @ part)
            pull = vectors.T @ (part.T @ (score - table @ b + part @ b[members]))
            b[members] = vectors @ _shrunk(pull, values, weight * np.sqrt(len(members)))
        if np.linalg.norm(b - before) <= 1e-13 * np.linalg.norm(b):
            break
    return b


def _shrunk(pull: FloatArray, values: FloatArray, price: float) -> FloatArray:
    """The minimiser of 1/2 b' diag(values) b - pull'b + price ||b||, by the scalar equation for its length."""
    if np.linalg.norm(pull) <= price:
        return np.zeros(pull.size)

    def excess(length: float) -> float:
        return float(np.sum((pull / (values * length + price)) ** 2)) - 1.0

    longest = float(np.linalg.norm(pull)) / float(values.min())
    length = brentq(excess, 0.0, longest, xtol=1e-300, rtol=1e-15)
    return pull / (values + price / length)


def summary(problem: ssn.CompositeProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return what is selected, and how much of the variance it explains."""
    table, score = data()
    misfit = score - table @ solution.x
    chosen = [name for name, b in zip(NAMES, solution.x, strict=True) if b != 0]
    return [
        ("selected", ", ".join(chosen) or "none"),
        ("explained variance", f"{1.0 - float(misfit @ misfit) / float(score @ score):.1%}"),
    ]


def picture(problem: ssn.CompositeProblem, solution: ssn.Solution) -> Any:
    """Draw the coefficients over the weight: where each enters."""
    case = problem.setting.case
    weights = np.geomspace(1000.0, 1.0, 50)
    paths, start = [], None
    for weight in weights:
        start = ssn.solve(build(float(weight), case), start).require().x
        paths.append(start)
    figure = new_figure(9.0, 4.6)
    axes = figure.subplots()
    for k, line in enumerate(np.array(paths).T):
        axes.plot(weights, line, color=f"C{k}", label=NAMES[k])
    if case == "lasso":
        for weight, _ in KNOTS:
            axes.axvline(weight, color="0.85", lw=0.8, zorder=0)
    if 1.0 <= problem.setting.weight <= 1000.0:
        axes.axvline(problem.setting.weight, color="black", lw=1.0, ls="--")
    axes.set(xscale="log", xlim=(1000.0, 1.0), xlabel="weight", ylabel="coefficient (unit of the score)")
    axes.legend(frameon=False, ncols=2, loc="upper left")
    chosen = int(np.count_nonzero(solution.x))
    kind = "L1 regression, grey: published knots" if case == "lasso" else "group regression"
    figure.suptitle(f"Diabetes data, {kind}; {chosen} of 10 selected at weight {problem.setting.weight:g}")
    return figure
