"""Boundary control of the Poisson equation with a bound on the state: a benchmark from the literature.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 with -Lap y = 20 in the unit square, y = u on its boundary, y <= 3.5 and
0 <= u <= 10, z = 3 + 5 x1 (x1 - 1) x2 (x2 - 1), alpha = 0.01. Five-point scheme with h = 1/n, the n - 1 interior points
a side unknown, and a control value at each of the 4 (n - 1) boundary points that are not corners:
F = h^2/2 sum (y - z)^2 over the interior + alpha h/2 sum u^2 over the boundary. Dimensionless.

Source: H. Maurer and H. D. Mittelmann, Comput. Optim. Appl. 16 (2000) 29-55, Example 5.1; F, multiplier and adjoint
values for n = 100 as printed there, F for n = 50 by an independent program.

Caution: the multiplier of the state bound tends to a point measure at the centre, so that its nodal force converges and
its density grows like 1/h^2, and with it the penalty that brings the violation below a tolerance. The printed
multiplier is the nodal force h^2 l; adjoint and signs are ours. First-order methods do not converge at a penalty that
large, so agreement stays undecided; they agree at a moderate one (parameter penalty, for instance 100).
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

SOURCE = "Maurer and Mittelmann (2000), Example 5.1, N = 100"
COMPUTED = "independent program, same discretisation"

#: n -> what -> (value, digits printed after the point, source)
PRINTED = {
    50: {"functional F": (0.188170, 6, COMPUTED)},
    100: {
        "functional F": (0.196525, 6, SOURCE),
        "nodal force of the state bound at the centre": (0.24602, 5, SOURCE),
        "adjoint at the centre": (-0.21312, 5, SOURCE),
        "adjoint beside the centre": (-0.15161, 5, SOURCE),
    },
}


@dataclass(frozen=True)
class MeshData:
    """What `known` and `picture` need; states of shape ((n - 1)^2,), x1 varies slowest."""

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
    n: int = 50, alpha: float = 0.01, ceiling: float = 3.5, violation: float = 1e-6, penalty: float = 0.0
) -> ssn.ControlProblem:
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
        Largest violation of the bound in a solution.
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
    index = np.arange(m * m).reshape(m, m)
    # the boundary points in the order left, right, bottom, top, by the interior point beside each
    beside = np.concatenate([index[0], index[-1], index[:, 0], index[:, -1]])
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(five_point(m)),
        control_operator=sp.csr_array((np.ones(4 * m), (beside, np.arange(4 * m))), shape=(m * m, 4 * m)),
        source=np.full(m * m, 20.0 * h * h),
        target=3.0 + 5.0 * x1 * (x1 - 1.0) * x2 * (x2 - 1.0),
        cost=ssn.Bounds(0.0, 10.0),
        control_weight=alpha,
        state_mass=np.full(m * m, h * h),
        control_mass=np.full(4 * m, h),
        state_upper=ceiling,
        state_tolerance=violation,
    )
    standard = alpha == 0.01 and ceiling == 3.5 and penalty == 0.0
    problem.mesh_data = MeshData(int(n), h, float(alpha), float(ceiling), standard)
    return problem.penalised(penalty) if penalty > 0 else problem


def five_point(m: int) -> sp.csr_array:
    """h^2 times the five-point matrix on m x m interior points."""
    ones = np.ones(m - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(m), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(m)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with printed and computed values; the functional without the penalty."""
    mesh = problem.mesh_data
    if not mesh.standard:
        return []
    centre = mesh.centre
    computed = {
        "functional F": functional(problem, solution),
        "nodal force of the state bound at the centre": mesh.h**2 * solution.multipliers["state"][centre],
        "adjoint at the centre": solution.adjoint[centre],
        "adjoint beside the centre": solution.adjoint[centre + 1],
    }
    checks = [
        {
            "what": "violation of y <= 3.5 (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": solution.violation,
            "tolerance": problem.state_tolerance,
            "source": "the constraint itself",
            "holds": bool(solution.violation <= problem.state_tolerance),
        }
    ]
    for what, (expected, digits, source) in PRINTED.get(mesh.n, {}).items():
        tolerance = 0.51 * 10.0**-digits
        checks.append(
            {
                "what": f"{what} (absolute, the digits printed)",
                "kind": "absolute",
                "expected": expected,
                "computed": float(computed[what]),
                "tolerance": tolerance,
                "source": source,
                "holds": bool(abs(computed[what] - expected) <= tolerance),
            }
        )
    return checks


def functional(problem: ssn.ControlProblem, solution: ssn.Solution) -> float:
    """F of the source at the returned state and control."""
    misfit = solution.state - problem.target
    return 0.5 * (
        problem.observations.dot(misfit, misfit)
        + problem.alpha * problem.controls.dot(solution.x, solution.x)
    )


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the state with its contact set, and the control along the boundary."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2)
    m, h = mesh.n - 1, mesh.h
    image = left.imshow(
        solution.state.reshape(m, m).T, origin="lower", extent=(h / 2, 1 - h / 2) * 2, cmap="viridis"
    )
    figure.colorbar(image, ax=left, shrink=0.85)
    contact = np.flatnonzero(solution.multipliers["state"] > 0)
    line = np.arange(1, m + 1) * h
    left.plot(line[contact // m], line[contact % m], "r.", label="bound acts")
    left.set(title="state", xlabel="$x_1$", ylabel="$x_2$", xlim=(0, 1), ylim=(0, 1), aspect="equal")
    left.legend(frameon=False, loc="lower right")
    for name, part in zip(("left", "right", "bottom", "top"), np.split(solution.x, 4), strict=True):
        right.plot(line, part, label=name, lw=3 if name == "left" else 1)
    right.set(title="control along the four sides", xlabel="arc length")
    right.legend(frameon=False)
    figure.suptitle(
        rf"Boundary control, $y \leq {mesh.ceiling:g}$: n = {mesh.n}, F = {functional(problem, solution):.6f}, "
        f"violation {solution.violation:.1e}"
    )
    return figure
