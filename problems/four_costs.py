"""Four costs of a control on one elliptic problem: smooth, sparse, over-smooth and piecewise constant controls.

minimise 1/2 ||y - z||^2 + cost of u over the unit square (or cube), -Lap y = u, y = 0 on the boundary:

    cost="squared":   alpha/2 ||u||^2: smooth, small, and nowhere zero;
    cost="sparse":    alpha/2 ||u||^2 + beta ||u||_1: exactly zero where the adjoint state is below beta;
    cost="gradient":  theta/2 ||grad u||^2 (and no other): smoother still, edges drown;
    cost="variation": alpha/2 ||u||^2 + weight TV(u): constant on patches, with edges.

u is extended by zero for the last two, so jumps at the boundary count. Five- or seven-point differences with n interior
points a side, h = 1 / (n + 1); gradients by difference quotients forward, their Euclidean norm at each point. z
is the state of two heated patches, one of them round, plus a smooth error: a source that is to be found from
temperatures. Dimensionless.

Source: textbook costs; F. Troeltzsch, Optimal Control of PDEs (AMS 2010) for the squared one, G. Stadler, Comput.
Optim. Appl. 44 (2009) 159-181 for the sparse one, C. Clason and K. Kunisch, ESAIM: COCV 17 (2011) 243-266 for the
variation (all from memory). Known values: closed forms by sine transforms, an optimality condition, and a manufactured
solution.

Caution: which control is right is a question to the application, not to the fit: all four match the same temperatures.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.fft import dstn, idstn
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]
Problem = ssn.ControlProblem | ssn.SumProblem

SIZES = (16, 24, 32)
COSTS = ("squared", "sparse", "gradient", "variation")
TITLES = {
    "squared": "squared: smooth",
    "sparse": "sparse",
    "gradient": "squared gradient: over-smooth",
    "variation": "variation: piecewise constant",
}
#: Points a side of the manufactured problem that `known` solves for cost="variation".
SMALL = 12


@dataclass(frozen=True)
class MeshData:
    """What was asked for, the mesh width, the target and the patches behind it, flat, x1 varies slowest."""

    n: int
    h: float
    dimension: int
    cost: str
    alpha: float
    beta: float
    theta: float
    weight: float
    target: FloatArray
    patches: FloatArray


def build(
    n: int = 32,
    cost: str = "variation",
    alpha: float = 1e-6,
    beta: float = 5e-5,
    theta: float = 1e-7,
    weight: float = 1e-6,
    dimension: int = 2,
) -> Problem:
    """Build the problem with one of the costs.

    Parameters
    ----------
    n : int
        Interior points a side, at least 3.
    cost : {"squared", "sparse", "gradient", "variation"}
    alpha : float
        Weight of the square of the control, positive; without effect for "gradient".
    beta : float
        Weight of the L1 norm, not negative; for "sparse".
    theta : float
        Weight of the squared gradient, positive; for "gradient".
    weight : float
        Weight of the variation, not negative; for "variation".
    dimension : {2, 3}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 3:
        raise ssn.InputError(f"n must be a whole number of at least 3, got {n!r}")
    if cost not in COSTS:
        raise ssn.InputError(f"cost must be one of {', '.join(map(repr, COSTS))}, got {cost!r}")
    if dimension not in (2, 3):
        raise ssn.InputError(f"dimension must be 2 or 3, got {dimension!r}")
    for name, value in (("alpha", alpha), ("theta", theta)):
        if not (value > 0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must be positive and finite, got {value!r}")
    for name, value in (("beta", beta), ("weight", weight)):
        if not (value >= 0 and np.isfinite(value)):
            raise ssn.InputError(f"{name} must not be negative, got {value!r}")
    h = 1.0 / (n + 1)
    points = np.meshgrid(*[np.arange(1, n + 1) * h] * dimension, indexing="ij")
    first, second = points[0], points[1]
    away = np.sqrt(sum((x - 0.68) ** 2 for x in points))
    box = np.all([np.abs(x - c) < 0.16 for x, c in zip(points, (0.3, 0.35, 0.4), strict=False)], axis=0)
    patches = (np.where(box, 1.0, 0.0) + np.where(away < 0.17, 2.0, 0.0)).ravel()
    state = ssn.SteadyState(laplacian(n, dimension) * h**dimension)
    clean = state.solve(h**dimension * patches)
    error = np.sin(5 * np.pi * first) * np.sin(7 * np.pi * second)
    target = clean + 0.01 * float(np.abs(clean).max()) * error.ravel()
    problem = _stated(n, h, dimension, cost, (alpha, beta, theta, weight), target, state)
    problem.mesh_data = MeshData(
        int(n), h, dimension, cost, float(alpha), float(beta), float(theta), float(weight), target, patches
    )
    return problem


def _stated(
    n: int, h: float, dimension: int, cost: str, weights: tuple[float, ...], target: FloatArray, state: Any
) -> Problem:
    alpha, beta, theta, weight = weights
    size = n**dimension
    mass = np.full(size, h**dimension)
    control = ssn.ControlProblem(
        state=state,
        target=target,
        cost=ssn.SparseCost(beta if cost == "sparse" else 0.0),
        control_weight=0.0 if cost == "gradient" else alpha,
        state_mass=mass,
        control_mass=mass,
    )
    if cost in ("squared", "sparse"):
        return control
    operator = gradient(n, dimension)
    cells = operator.shape[0] // dimension
    variation: ssn.Cost = (
        ssn.ElasticNetCost(0.0, theta)
        if cost == "gradient"
        else ssn.GroupSparseCost(weight, shape=(dimension, cells), axis=0)
    )
    term = ssn.Term(variation, operator, weights=np.full(operator.shape[0], h**dimension))
    return ssn.SumProblem(smooth=control, terms=[term])


def laplacian(n: int, dimension: int) -> sp.csr_array:
    """Minus the Laplacian by differences, zero boundary values, n interior points a side."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1]) * (n + 1) ** 2
    identity = sp.eye_array(n)
    terms = [[second if k == axis else identity for k in range(dimension)] for axis in range(dimension)]
    return sp.csr_array(sum(reduce(sp.kron, factors) for factors in terms))


def gradient(n: int, dimension: int) -> sp.csr_array:
    """Forward difference quotients of functions extended by zero, shape (dimension (n + 1)^dimension, n^dimension).

    Row k (n + 1)^dimension + j is direction k at point j of the grid 0 .. n in all directions.
    """
    rise = sp.diags_array([np.ones(n), -np.ones(n)], offsets=[0, -1], shape=(n + 1, n)) * (n + 1)
    place = sp.eye_array(n + 1, n, k=-1)
    parts = [
        reduce(sp.kron, [rise if k == axis else place for k in range(dimension)]) for axis in range(dimension)
    ]
    return sp.csr_array(sp.vstack(parts))


def transfer(coarse: Problem, fine: Problem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a control of `coarse` to `fine`: linear in each direction, zero outside."""
    mesh, new = coarse.mesh_data, fine.mesh_data
    line = np.linspace(0.0, 1.0, mesh.n + 2)
    inner = np.arange(1, new.n + 1) * new.h
    points = np.stack([x.ravel() for x in np.meshgrid(*[inner] * new.dimension, indexing="ij")], axis=1)

    def carry(control: FloatArray) -> FloatArray:
        padded = np.pad(np.reshape(control, (mesh.n,) * mesh.dimension), 1)
        return RegularGridInterpolator((line,) * mesh.dimension, padded)(points)

    return carry


def _symbol(mesh: MeshData) -> FloatArray:
    """Eigenvalues of the difference Laplacian."""
    one = (2.0 / mesh.h * np.sin(0.5 * np.pi * mesh.h * np.arange(1, mesh.n + 1))) ** 2
    return np.asarray(sum(np.meshgrid(*[one] * mesh.dimension, indexing="ij")))


def spectral_control(mesh: MeshData) -> FloatArray:
    """The optimal control for "squared" and "gradient": u_k = z_k / (1/l_k + l_k w), w = alpha or theta l_k."""
    shape = (mesh.n,) * mesh.dimension
    eigen = _symbol(mesh)
    data = dstn(mesh.target.reshape(shape), type=1)
    weight = mesh.theta * eigen if mesh.cost == "gradient" else mesh.alpha
    return np.asarray(idstn(data / (1.0 / eigen + eigen * weight), type=1)).ravel()


def manufactured(n: int, dimension: int, alpha: float, weight: float) -> tuple[ssn.SumProblem, FloatArray]:
    """A problem whose solution is known: a round and a square patch.

    For any u, q = weight D u / |D u| where D u is not zero, else 0, is a multiplier of the variation. The target
    z = S u + S^-* (alpha u + D' q) makes the pair optimal: it takes products with E and D only.
    """
    h = 1.0 / (n + 1)
    points = np.meshgrid(*[np.arange(1, n + 1) * h] * dimension, indexing="ij")
    away = np.sqrt(sum((x - 0.65) ** 2 for x in points))
    box = np.all([np.abs(x - 0.25) < 0.15 for x in points], axis=0)
    exact = (np.where(box, -1.0, 0.0) + np.where(away < 0.25, 2.0, 0.0)).ravel()
    operator = gradient(n, dimension)
    slopes = (operator @ exact).reshape(dimension, -1)
    length = np.linalg.norm(slopes, axis=0)
    q = weight * np.where(length > 0, slopes / np.where(length > 0, length, 1.0), 0.0)
    e = laplacian(n, dimension)
    state = ssn.SteadyState(e * h**dimension)
    target = state.solve(h**dimension * exact) + e @ (alpha * exact + operator.T @ q.ravel())
    problem = _stated(n, h, dimension, "variation", (alpha, 0.0, 1.0, weight), target, state)
    return problem, exact


def known(problem: Problem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with a closed form, an optimality condition, or a manufactured solution (one small solve)."""
    mesh = problem.mesh_data
    if mesh.cost in ("squared", "gradient"):
        exact = spectral_control(mesh)
        error = problem.controls.norm(solution.x - exact) / problem.controls.norm(exact)
        return [
            _row(
                "distance to the control by sine transforms",
                0.0,
                error,
                1e-8,
                "closed form, module docstring",
            )
        ]
    if mesh.cost == "sparse":
        below = np.abs(solution.adjoint) < mesh.beta * (1.0 - 1e-6)
        largest = float(np.abs(solution.x[below]).max(initial=0.0))
        shape = (mesh.n,) * mesh.dimension
        image = idstn(dstn(mesh.target.reshape(shape), type=1) / _symbol(mesh), type=1)
        threshold = float(np.abs(image).max())
        computed = ssn.vanishing_weight(problem)
        return [
            _row("largest |u| where |p| < beta", 0.0, largest, 0.0, "optimality condition; Stadler (2009)"),
            _row(
                "weight from which on u = 0, by sine transforms", threshold, computed, 1e-8 * threshold,
                "max |S* z|, closed form",
            ),
        ]  # fmt: skip
    small, exact = manufactured(SMALL, mesh.dimension, mesh.alpha, mesh.weight or 1e-6)
    error = small.controls.norm(ssn.solve(small).x - exact) / small.controls.norm(exact)
    return [
        _row(
            f"distance to a manufactured control, n = {SMALL}",
            0.0,
            error,
            1e-7,
            "`manufactured`: its docstring",
        )
    ]


def _row(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": f"{what} (absolute)",
        "kind": "absolute",
        "expected": float(expected),
        "computed": float(computed),
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def picture(problem: Problem, solution: ssn.Solution) -> Any:
    """Draw the patches behind the target and the controls of all four costs, the other three solved for here."""
    mesh = problem.mesh_data
    names = [f for f in mesh.__dataclass_fields__ if f in ("alpha", "beta", "theta", "weight", "dimension")]
    parameters = {name: getattr(mesh, name) for name in names}
    figure = new_figure(13.0, 3.0)
    axes = figure.subplots(1, 5)
    top = float(np.abs(mesh.patches).max()) * 1.2
    fields = [("behind the target", mesh.patches)]
    for cost in COSTS:
        control = solution.x if cost == mesh.cost else ssn.solve(build(mesh.n, cost, **parameters)).x
        fields.append((TITLES[cost] + (" *" if cost == mesh.cost else ""), control))
    for axis, (title, field) in zip(axes, fields, strict=True):
        grid = field.reshape((mesh.n,) * mesh.dimension)
        plane = grid if mesh.dimension == 2 else grid[:, :, mesh.n // 2]
        shown = axis.imshow(plane.T, origin="lower", extent=(0, 1, 0, 1), cmap="RdBu_r", vmin=-top, vmax=top)
        axis.set_title(title, fontsize=9)
        axis.set(xticks=[], yticks=[])
    figure.colorbar(shown, ax=list(axes), fraction=0.012)
    return figure


def summary(problem: Problem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Tell how far the control is from the patches, how much is zero, and how well the state fits."""
    mesh = problem.mesh_data
    norm = problem.controls.norm
    apart = norm(solution.x - mesh.patches) / norm(mesh.patches)
    zero = float(np.mean(np.abs(solution.x) <= 1e-9 * float(np.abs(solution.x).max(initial=0.0))))
    fit = norm(solution.state - mesh.target) / norm(mesh.target)
    return [
        ("distance to the patches behind the target", f"{100 * apart:.0f} %"),
        ("share of the control that is zero", f"{100 * zero:.0f} %"),
        ("misfit of the state", f"{100 * fit:.1f} %"),
    ]
