"""Sparse optimal control of the Poisson equation with bounds on the control: a benchmark from the literature.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 + beta ||u||_1 with |u| <= bound, -Lap y = u + f in the unit square, y = 0 on
its boundary; all norms over the square. Linear finite elements on a uniform mesh of right triangles with n interior
points a side, whose stiffness matrix is the five-point matrix; lumped mass h^2, h = 1 / (n + 1). Dimensionless.

case="tracking": z = sin(2 pi x1) sin(2 pi x2) exp(2 x1) / 6, f = 0.
    Source: G. Stadler, Comput. Optim. Appl. 44 (2009) 159-181, doi:10.1007/s10589-007-9150-9; target, alpha = 1e-5,
    beta = 1e-3 and |u| <= 30 from memory.
case="manufactured": the solution is known for all alpha, beta and bound: p = sin(2 pi x1) sin(2 pi x2),
    y = sin(pi x1) sin(pi x2), u = clip(soft(p, beta) / alpha, -bound, bound), f = 2 pi^2 y - u, z = y + 8 pi^2 p.
    alpha = 0.01, beta = 0.3, bound = 50 have regions at zero, at both bounds and between.
dimension=3: both cases in the unit cube, with one more sine in each product, f = 3 pi^2 y - u, z = y + 12 pi^2 p, the
    seven-point matrix and multigrid; our own extension.

Caution: for alpha <= 1e-5 plain full steps cycle on many of these problems (`PLAIN_STEPS_FAIL`), and small alpha
magnifies the discretisation error of the control: errors of p are divided by alpha.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)

#: max |S* z| of case "tracking" in the limit of the mesh: above it the control vanishes. Computed by an independent
#: program to the digits shown.
VANISHING_BETA = 0.0100348289
#: The same in three dimensions, from the solution in closed form (tests/problems/test_sparse_elliptic.py).
VANISHING_BETA_3D = 0.0065463841

#: (n, alpha), other parameters as by default: globalization="full" fails from zero, the default does not.
PLAIN_STEPS_FAIL = (
    (32, 1e-5),
    (50, 1e-5),
    (64, 1e-5),
    (31, 1e-6),
    (63, 1e-6),
    (127, 1e-6),
    (31, 1e-7),
    (50, 1e-7),
    (64, 1e-7),
)


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need; arrays of shape (n ** dimension,), x1 varies slowest."""

    n: int
    h: float
    x1: FloatArray
    x2: FloatArray
    alpha: float
    beta: float
    bound: float
    case: str
    exact_control: FloatArray | None
    dimension: int = 2
    x3: FloatArray | None = None

    @property
    def points(self) -> FloatArray:
        """Coordinates, shape (n ** dimension, dimension)."""
        return np.column_stack([x for x in (self.x1, self.x2, self.x3) if x is not None])


def build(
    n: int = 64,
    alpha: float = 1e-5,
    beta: float = 1e-3,
    bound: float = 30.0,
    case: str = "tracking",
    dimension: int = 2,
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.
    alpha : float
        Weight of the square of the control, positive.
    beta : float
        Weight of the L1 norm of the control, not negative.
    bound : float
        |u| <= bound, positive; may be infinite.
    case : {"tracking", "manufactured"}
    dimension : {2, 3}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    if not bound > 0:
        raise ssn.InputError(f"bound must be positive, got {bound!r}")
    if case not in ("tracking", "manufactured"):
        raise ssn.InputError(f"case must be 'tracking' or 'manufactured', got {case!r}")
    if dimension not in (2, 3):
        raise ssn.InputError(f"dimension must be 2 or 3, got {dimension!r}")
    h = 1.0 / (n + 1)
    line = np.arange(1, n + 1) * h
    x = [c.ravel() for c in np.meshgrid(*[line] * dimension, indexing="ij")]
    mass = np.full(n**dimension, h**dimension if dimension > 2 else h * h)
    p = np.sin(2 * np.pi * x[0]) * np.sin(2 * np.pi * x[1])
    y = np.sin(np.pi * x[0]) * np.sin(np.pi * x[1])
    if dimension == 3:
        p, y = p * np.sin(2 * np.pi * x[2]), y * np.sin(np.pi * x[2])
    cost = ssn.SparseCost(beta, -bound, bound)
    source = exact = None
    if case == "tracking":
        target = p * np.exp(2 * x[0]) / 6
    else:
        exact = np.clip((p - np.clip(p, -beta, beta)) / alpha, -bound, bound)
        source = mass * (dimension * np.pi**2 * y - exact)
        target = y + 4 * dimension * np.pi**2 * p
    plane = dimension == 2
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(five_point(n))
        if plane
        else ssn.SteadyState(seven_point(n), solver="multigrid"),
        target=target,
        cost=cost,
        control_weight=alpha,
        source=source,
        state_mass=mass,
        control_mass=mass,
    )
    weights = (float(alpha), float(beta), float(bound))
    problem.mesh_data = MeshData(
        int(n), h, x[0], x[1], *weights, case, exact, int(dimension), None if plane else x[2]
    )
    return problem


def five_point(n: int) -> sp.csr_array:
    """Stiffness matrix of linear elements on right triangles, n x n interior points."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def seven_point(n: int) -> sp.csr_array:
    """Stiffness matrix of linear elements on cubes cut into six tetrahedra each, n x n x n interior points."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    plane = sp.kron(second, identity) + sp.kron(identity, second)
    return sp.csr_array((sp.kron(plane, identity) + sp.kron(sp.eye_array(n * n), second)) / (n + 1))


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a control of `coarse` to `fine`: multilinear, zero on the boundary."""
    mesh, line = coarse.mesh_data, np.linspace(0.0, 1.0, coarse.mesh_data.n + 2)

    def carry(control: FloatArray) -> FloatArray:
        padded = np.pad(np.reshape(control, (mesh.n,) * mesh.dimension), 1)
        return RegularGridInterpolator((line,) * mesh.dimension, padded)(fine.mesh_data.points)

    return carry


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with what is known about the exact solution; at most one further solve."""
    mesh = problem.mesh_data
    checks = [_zero_below_beta(problem, solution)]
    if mesh.case == "manufactured":
        checks.append(_control_error(problem, solution))
    else:
        checks += _vanishing(problem)
    return checks


def _zero_below_beta(problem: ssn.ControlProblem, solution: ssn.Solution) -> dict[str, Any]:
    beta = problem.mesh_data.beta
    # 1e-6: the adjoint state is as accurate as alpha times the control
    below = np.abs(solution.adjoint) < beta * (1.0 - 1e-6)
    largest = float(np.abs(solution.x[below]).max(initial=0.0))
    return {
        "what": "largest |u| where |p| < beta (absolute)",
        "kind": "absolute",
        "expected": 0.0,
        "computed": largest,
        "tolerance": 0.0,
        "source": "optimality condition; Stadler (2009), Lemma 2.2 (number from memory)",
        "holds": largest == 0.0,
    }


def _control_error(problem: ssn.ControlProblem, solution: ssn.Solution) -> dict[str, Any]:
    """The discrete problem's u_h satisfies alpha ||u_h - u|| <= ||p_h(u) - p||, by strong convexity.

    The exact y and p are eigenvectors of the five- (seven-) point matrix, so the right-hand side is known exactly.
    """
    mesh = problem.mesh_data

    def excess(k: int) -> float:
        """Relative error of the discrete inverse of -Lap on the product of sin(k pi x_i), in any dimension."""
        return 2 * (k * np.pi) ** 2 / (8 / mesh.h**2 * np.sin(k * np.pi * mesh.h / 2) ** 2) - 1

    state_part = excess(1) * (1 + excess(1)) / (mesh.dimension * np.pi**2)
    bound = 0.5 ** (0.5 * mesh.dimension) * np.hypot(excess(2), state_part) / mesh.alpha
    bound += 10 * solution.tolerance * problem.controls.norm(mesh.exact_control)
    error = problem.controls.norm(solution.x - mesh.exact_control)
    return {
        "what": "L2 error of the control (absolute), bound of order h^2",
        "kind": "absolute",
        "expected": 0.0,
        "computed": error,
        "tolerance": float(bound),
        "source": "manufactured solution (module docstring); bound by strong convexity",
        "holds": bool(error <= bound),
    }


def _vanishing(problem: ssn.ControlProblem) -> list[dict[str, Any]]:
    mesh = problem.mesh_data
    threshold = float(np.abs(problem.adjoint(problem.reduced_target())).max())
    # the largest value lies between nodes
    factor = 6 if mesh.dimension == 2 else 12
    tolerance = factor * mesh.h**2
    above = build(mesh.n, mesh.alpha, threshold * (1 + 1e-9), mesh.bound, dimension=mesh.dimension)
    expected = VANISHING_BETA
    source = "max |S* z| in the limit of the mesh, by an independent program; Stadler (2009) for the data"
    if mesh.dimension == 3:
        expected, source = VANISHING_BETA_3D, "max |S* z|, separation of variables in closed form"
    largest = float(np.abs(ssn.solve(above).x).max())
    return [
        {
            "what": f"beta from which the control vanishes (relative, {factor} h^2)",
            "kind": "relative",
            "expected": expected,
            "computed": threshold,
            "tolerance": tolerance,
            "source": source,
            "holds": bool(abs(threshold - expected) <= tolerance * expected),
        },
        {
            "what": "largest |u| for beta just above this mesh's max |S* z| (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": largest,
            "tolerance": 0.0,
            "source": "optimality condition of u = 0",
            "holds": largest == 0.0,
        },
    ]


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the control, grey where it is exactly zero, and the state; in three dimensions in the plane x3 = 1/4."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    extent = (mesh.h / 2, 1 - mesh.h / 2) * 2
    plane = round(0.25 * (mesh.n + 1)) - 1

    def section(values: FloatArray) -> FloatArray:
        field = values.reshape((mesh.n,) * mesh.dimension)
        return field if mesh.dimension == 2 else field[:, :, plane]

    def show(axes: Any, values: FloatArray, limit: float, title: str) -> Any:
        image = axes.imshow(
            section(values).T, origin="lower", extent=extent, cmap="RdBu_r", vmin=-limit, vmax=limit
        )
        axes.set(title=title, xlabel="$x_1$", xlim=(0, 1), ylim=(0, 1), aspect="equal")
        figure.colorbar(image, ax=axes, shrink=0.85)

    largest = float(np.abs(solution.x).max()) or 1.0
    left.set_facecolor("0.82")
    show(left, np.where(solution.x == 0, np.nan, solution.x), largest, "control; grey: exactly zero")
    line = np.linspace(mesh.h, 1 - mesh.h, mesh.n)
    at_bound = (np.abs(solution.x) >= mesh.bound).astype(float)
    if section(at_bound).any() and not section(at_bound).all():
        left.contour(line, line, section(at_bound).T, levels=[0.5], colors="black", linewidths=0.8)
        left.set_title("control; grey: exactly zero, line: at the bound")
    show(right, solution.state, float(np.abs(solution.state).max()) or 1.0, "state")
    left.set_ylabel("$x_2$")
    zero = float((solution.x == 0).mean())
    where = "" if mesh.dimension == 2 else " in a cube"
    figure.suptitle(
        rf"Sparse control{where}: n = {mesh.n}, $\alpha$ = {mesh.alpha:g}, $\beta$ = {mesh.beta:g}, "
        rf"$|u| \leq$ {mesh.bound:g}; zero on {zero:.0%}"
    )
    return figure
