"""Sparse control of a semilinear elliptic equation with a known solution.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 + beta ||u||_1 with |u| <= bound, -Lap y + kappa y^3 = u + f in the unit
square, y = 0 on its boundary. Five-point finite differences, n interior points a side, h = 1/(n + 1), lumped mass h^2.
Dimensionless.

The solution is manufactured: choose the adjoint p = sin(2 pi x1) sin(2 pi x2) and the state y = height sin(pi x1)
sin(pi x2); the optimality condition gives u = clip(soft(p, beta) / alpha, -bound, bound), the state equation
f = 2 pi^2 y + kappa y^3 - u, and the adjoint equation -Lap p + 3 kappa y^2 p = z - y gives z = y + 8 pi^2 p
+ 3 kappa y^2 p. alpha = 0.01, beta = 0.3, bound = 50 have regions at zero, at both bounds and between. Errors fall as
h^2. The second derivative of the Lagrangian with respect to the state, 1 + 6 kappa y p, is negative in two quarters of
the square: Gauss-Newton models are not the whole truth here.

Source: E. Casas, R. Herzog and G. Wachsmuth, SIAM J. Optim. 22 (2012) 795-820 (L1 cost and semilinear equation, from
memory); the data are our own.

Caution: the problem is not convex, and what is found is a stationary point: from zero the one above, which the tests
compare with two first-order methods.
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

SIZES = (16, 32, 64)

#: bound of ||u_h - u|| / h^2 for the default parameters; measured 100.6, 100.5, 100.7, 101.0 for n = 16, 32, 64, 128
ERROR_CONSTANT = 105.0


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need; fields of shape (n^2,), x1 varies slowest."""

    n: int
    h: float
    x1: FloatArray
    x2: FloatArray
    alpha: float
    beta: float
    bound: float
    standard: bool
    exact_control: FloatArray
    exact_state: FloatArray


def build(
    n: int = 48,
    alpha: float = 0.01,
    beta: float = 0.3,
    bound: float = 50.0,
    kappa: float = 5.0,
    height: float = 2.0,
) -> ssn.NonlinearControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.
    alpha : float
        Weight of the square of the control, positive.
    beta : float
        Weight of the L1 norm, not negative.
    bound : float
        |u| <= bound, positive; may be infinite.
    kappa : float
        Strength of the reaction, not negative.
    height : float
        Largest value of the state.

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
    if not (kappa >= 0 and np.isfinite(kappa)):
        raise ssn.InputError(f"kappa must not be negative, got {kappa!r}")
    if not np.isfinite(height):
        raise ssn.InputError(f"height must be finite, got {height!r}")
    standard = (alpha, beta, bound, kappa, height) == (0.01, 0.3, 50.0, 5.0, 2.0)
    h = 1.0 / (n + 1)
    line = np.arange(1, n + 1) * h
    x1, x2 = (x.ravel() for x in np.meshgrid(line, line, indexing="ij"))
    p = np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2)
    y = height * np.sin(np.pi * x1) * np.sin(np.pi * x2)
    u = np.clip((p - np.clip(p, -beta, beta)) / alpha, -bound, bound)
    mass = np.full(n * n, h * h)
    problem = ssn.NonlinearControlProblem(
        state=ssn.SemilinearState(
            five_point(n),
            lambda y: kappa * y**3,
            lambda y: 3 * kappa * y**2,
            lambda y: 6 * kappa * y,
            mass,
        ),
        target=y + 8 * np.pi**2 * p + 3 * kappa * y**2 * p,
        cost=ssn.SparseCost(beta, -bound, bound),
        control_weight=alpha,
        source=mass * (2 * np.pi**2 * y + kappa * y**3 - u),
        state_mass=mass,
        control_mass=mass,
    )
    problem.mesh_data = MeshData(int(n), h, x1, x2, float(alpha), float(beta), float(bound), standard, u, y)
    return problem


def five_point(n: int) -> sp.csr_array:
    """Stiffness matrix of linear elements on right triangles, n x n interior points."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    return sp.csr_array(sp.kron(second, identity) + sp.kron(identity, second))


def transfer(
    coarse: ssn.NonlinearControlProblem, fine: ssn.NonlinearControlProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a control of `coarse` to `fine`: bilinear, zero on the boundary."""
    mesh, line = coarse.mesh_data, np.linspace(0.0, 1.0, coarse.mesh_data.n + 2)
    points = np.column_stack([fine.mesh_data.x1, fine.mesh_data.x2])

    def carry(control: FloatArray) -> FloatArray:
        padded = np.pad(np.reshape(control, (mesh.n, mesh.n)), 1)
        return RegularGridInterpolator((line, line), padded)(points)

    return carry


def known(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the exact solution, and check where the control vanishes."""
    mesh = problem.mesh_data
    # 1e-6: the adjoint state is as accurate as alpha times the control
    below = np.abs(solution.adjoint) < mesh.beta * (1.0 - 1e-6)
    largest = float(np.abs(solution.x[below]).max(initial=0.0))
    checks = [
        {
            "what": "largest |u| where |p| < beta (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": largest,
            "tolerance": 0.0,
            "source": "optimality condition",
            "holds": largest == 0.0,
        }
    ]
    if mesh.standard:
        error = problem.controls.norm(solution.x - mesh.exact_control)
        tolerance = ERROR_CONSTANT * mesh.h**2
        checks.append(
            {
                "what": "L2 error of the control (absolute), of order h^2",
                "kind": "absolute",
                "expected": 0.0,
                "computed": error,
                "tolerance": tolerance,
                "source": "manufactured solution (module docstring); the constant is measured",
                "holds": bool(error <= tolerance),
            }
        )
    return checks


def picture(problem: ssn.NonlinearControlProblem, solution: ssn.Solution) -> Any:
    """Draw the control, grey where it is exactly zero, and the state."""
    mesh = problem.mesh_data
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    extent = (mesh.h / 2, 1 - mesh.h / 2) * 2
    shape = (mesh.n, mesh.n)

    def show(axes: Any, values: FloatArray, limit: float, title: str) -> None:
        image = axes.imshow(
            values.reshape(shape).T, origin="lower", extent=extent, cmap="RdBu_r", vmin=-limit, vmax=limit
        )
        axes.set(title=title, xlabel="$x_1$", xlim=(0, 1), ylim=(0, 1), aspect="equal")
        figure.colorbar(image, ax=axes, shrink=0.85)

    largest = float(np.abs(solution.x).max()) or 1.0
    left.set_facecolor("0.82")
    show(left, np.where(solution.x == 0, np.nan, solution.x), largest, "control; grey: exactly zero")
    line = np.linspace(mesh.h, 1 - mesh.h, mesh.n)
    at_bound = (np.abs(solution.x) >= mesh.bound).astype(float)
    if at_bound.any() and not at_bound.all():
        left.contour(line, line, at_bound.reshape(shape).T, levels=[0.5], colors="black", linewidths=0.8)
        left.set_title("control; grey: exactly zero, line: at the bound")
    show(right, solution.state, float(np.abs(solution.state).max()) or 1.0, "state")
    left.set_ylabel("$x_2$")
    zero = float((solution.x == 0).mean())
    figure.suptitle(
        rf"Semilinear state, sparse control: n = {mesh.n}, $\alpha$ = {mesh.alpha:g}, $\beta$ = {mesh.beta:g}, "
        rf"$|u| \leq$ {mesh.bound:g}; zero on {zero:.0%}"
    )
    return figure
