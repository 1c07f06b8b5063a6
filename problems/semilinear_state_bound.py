"""Control of an exothermic reaction with a bound on the state: a benchmark from the literature.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 with -Lap y - exp(y) = u in the unit square, d_n y + y = 0 on its boundary,
y <= 0.371 and -8 <= u <= 9, z = sin(2 pi x1) sin(2 pi x2), alpha = 0.001. Five-point scheme with h = 1/n, the n - 1
interior points a side unknown, one-sided differences on the boundary: y_b = y_i / (1 + h) beside the interior point i;
F = h^2/2 sum (y - z)^2 + alpha h^2/2 sum u^2 over the interior. Dimensionless.

Source: H. Maurer and H. D. Mittelmann, Comput. Optim. Appl. 18 (2001) 141-160, Example 4, Table 4; F, y and u at the
centre for n = 50 and 100 as printed there; for n = 25 and 50 also by a program for sequential quadratic programming
with an interior-point solver, on an assembly of its own (tests/problems/test_semilinear_state_bound.py).

All digits of F and y printed are met. The control at the centre printed for n = 50, -1.688123, is not: it is -1.688074
here and by the program, to all digits. An error of 5e-8 in F, its last digit, leaves the control uncertain by up to
sqrt(2 5e-8 / alpha) = 0.01; the figure printed is checked to four digits.

Caution: -exp(y) falls with y, so a control may have no state (u = 9 everywhere has none) or two; the smaller one is
meant, which the state solve finds from zero. The problem is not convex: what is returned is a stationary point. The
multiplier of the state bound is a measure, so its density grows as the mesh is refined, and with it the penalty that
brings the violation below a tolerance; first-order methods do not converge at a penalty that large. They agree at a
moderate one (parameter penalty, for instance 100).
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (25, 50, 100)

SOURCE = "Maurer and Mittelmann (2001), Example 4, Table 4"

COMPUTED = "sequential quadratic programming, own assembly"

#: n -> rows of (what, value, tolerance, source): half a unit of the last digit printed, but for the control
KNOWN_VALUES = {
    25: (
        ("functional F", 0.07627430738, 2e-9, COMPUTED),
        ("control at the centre", -1.61232800, 2e-5, COMPUTED),
    ),
    50: (
        ("functional F", 0.0773888, 0.51e-7, SOURCE),
        ("state at the centre", -0.011311, 0.51e-6, SOURCE),
        ("control at the centre", -1.688123, 1e-4, SOURCE),
        ("functional F", 0.07738879408, 2e-9, COMPUTED),
        ("control at the centre", -1.68807448, 2e-5, COMPUTED),
    ),
    100: (
        ("functional F", 0.0780638, 0.51e-7, SOURCE),
        ("state at the centre", -0.009160, 0.51e-6, SOURCE),
        ("control at the centre", -1.620123, 1e-4, SOURCE),
    ),
}


@dataclass(frozen=True)
class MeshData:
    """What `known` and `picture` need; fields of shape ((n - 1)^2,), x1 varies slowest."""

    n: int
    h: float
    alpha: float
    ceiling: float
    standard: bool

    @property
    def centre(self) -> int:
        """Index of the point at the centre (the last one before it where n is odd)."""
        middle = self.n // 2 - 1
        return middle * (self.n - 1) + middle


def build(
    n: int = 50, alpha: float = 0.001, ceiling: float = 0.371, violation: float = 1e-7, penalty: float = 0.0
) -> ssn.NonlinearControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Mesh widths a side, at least 3.
    alpha : float
        Weight of the square of the control, positive.
    ceiling : float
        Upper bound of the state.
    violation : float
        Largest violation of the bound in a solution; the figures printed want one that small.
    penalty : float
        If positive, the bound is replaced by its penalty with this parameter.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 3:
        raise ssn.InputError(f"n must be a whole number of at least 3, got {n!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    if not (penalty >= 0 and np.isfinite(penalty)):
        raise ssn.InputError(f"penalty must not be negative, got {penalty!r}")
    h, m = 1.0 / n, int(n) - 1
    line = np.arange(1, m + 1) * h
    x1, x2 = (x.ravel() for x in np.meshgrid(line, line, indexing="ij"))
    mass = np.full(m * m, h * h)
    problem = ssn.NonlinearControlProblem(
        state=ssn.SemilinearState(
            five_point(m, h), lambda y: -np.exp(y), lambda y: -np.exp(y), lambda y: -np.exp(y), mass
        ),
        target=np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2),
        cost=ssn.Bounds(-8.0, 9.0),
        control_weight=alpha,
        state_mass=mass,
        control_mass=mass,
        state_upper=ceiling,
        state_tolerance=violation,
    )
    standard = alpha == 0.001 and ceiling == 0.371 and penalty == 0.0
    problem.mesh_data = MeshData(int(n), h, float(alpha), float(ceiling), standard)
    return problem.penalised(penalty) if penalty > 0 else problem


def five_point(m: int, h: float) -> sp.csr_array:
    """h^2 times the five-point matrix on m x m interior points, the boundary values eliminated."""
    ones, diagonal = np.ones(m - 1), 2.0 * np.ones(m)
    diagonal[[0, -1]] -= 1.0 / (1.0 + h)
    second = sp.diags_array([-ones, diagonal, -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(m)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def known(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with printed values; the functional without the penalty."""
    mesh = problem.mesh_data
    if not mesh.standard:
        return []
    computed = {
        "functional F": functional(problem, solution),
        "state at the centre": solution.state[mesh.centre],
        "control at the centre": solution.x[mesh.centre],
    }
    checks = [
        {
            "what": f"violation of y <= {mesh.ceiling:g} (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": solution.violation,
            "tolerance": problem.state_tolerance,
            "source": "the constraint itself",
            "holds": bool(solution.violation <= problem.state_tolerance),
        }
    ]
    for what, expected, tolerance, source in KNOWN_VALUES.get(mesh.n, ()):
        checks.append(
            {
                "what": f"{what} (absolute)",
                "kind": "absolute",
                "expected": expected,
                "computed": float(computed[what]),
                "tolerance": tolerance,
                "source": source,
                "holds": bool(abs(computed[what] - expected) <= tolerance),
            }
        )
    return checks


def functional(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> float:
    """F of the source at the returned state and control."""
    misfit = solution.state - problem.target
    return 0.5 * (
        problem.observations.dot(misfit, misfit)
        + problem.alpha * problem.controls.dot(solution.x, solution.x)
    )


def picture(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> Any:
    """Draw the state with its contact set, and the control with the lines where its bounds begin."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    m, h = mesh.n - 1, mesh.h
    line = np.arange(1, m + 1) * h
    for axes, values, title in ((left, solution.state, "state"), (right, solution.x, "control")):
        image = axes.imshow(
            values.reshape(m, m).T, origin="lower", extent=(h / 2, 1 - h / 2) * 2, cmap="viridis"
        )
        figure.colorbar(image, ax=axes, shrink=0.85)
        axes.set(title=title, xlabel="$x_1$", xlim=(0, 1), ylim=(0, 1), aspect="equal")
    contact = np.flatnonzero(solution.multipliers["state"] > 0)
    left.plot(line[contact // m], line[contact % m], "r.", ms=3, label="bound acts")
    left.legend(frameon=False, loc="lower right", labelcolor="white")
    left.set_ylabel("$x_2$")
    at_bound = np.isin(solution.pieces["control"], (0, 4)).reshape(m, m).T.astype(float)
    if at_bound.any() and not at_bound.all():
        right.contour(line, line, at_bound, levels=[0.5], colors="black", linewidths=0.8)
        right.set_title("control; line: at a bound")
    figure.suptitle(
        rf"Exothermic reaction, $y \leq {mesh.ceiling:g}$: n = {mesh.n}, F = {functional(problem, solution):.7f}, "
        f"violation {solution.violation:.1e}"
    )
    return figure
