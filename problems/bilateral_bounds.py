"""Control between two bounds, down to the bang-bang limit: two textbook problems with known solutions, in 2-D and 3-D.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 + int over the boundary of e y, lower <= u <= upper, in the unit square or
cube. Linear elements on a uniform mesh with n widths a side, whose stiffness matrix is the five- (seven-) point matrix;
lumped mass. Dimensionless. d is the dimension.

case="bang_bang": -Lap y = u + f, y = 0 on the boundary, |u| <= 1, e = 0. With k = `waves` and s the product of
    sin(k pi x_i): y = product of sin(pi x_i), p = s / (d k^2 pi^2), z = y + s, f = d pi^2 y - u,
    u = clip(p / alpha, -1, 1), and u = sign(s) for alpha = 0, a chequerboard.
    Source: F. Troeltzsch, Optimal Control of Partial Differential Equations (2010), sec. 2.9, for d = 2, k = 8 and
    alpha = 0 (from memory, identities verified); the other values are ours, by the same construction.
case="boundary_term": -Lap y + y = u + f, no flux through the boundary, 0 <= u <= 1, alpha = 1, e = -12. With r the
    distance to the centre: y = 1, p = 12 r^2 - 1/3, u = clip(p, 0, 1), f = 1 - u, z = 2/3 - 24 d + 12 r^2.
    Source: the same section, d = 2 (from memory, identities verified). In nodal values of y and p this solution is that
    of the discrete problem, too.

The boundary term is a linear one of the state; it is brought into the tracking term: 1/2 ||y - z||^2 + b'y is
1/2 ||y - (z - b/mass)||^2 and a constant, which `functional` adds.

Caution: for alpha = 0 the problem has no strong convexity: a duality gap is reported instead of a distance, and the
control is as accurate as the lines where p changes its sign; where lines of nodes lie on them (even n) more steps are
needed. In three dimensions multigrid solves the state equation.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.interpolate import RegularGridInterpolator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (33, 65, 129)

SOURCE = "F. Troeltzsch, Optimal Control of Partial Differential Equations (2010), sec. 2.9 (from memory, verified)"
BOUNDARY_TERM = -12.0


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need; fields have one value a node, x1 varies slowest.

    `line` holds the coordinates of the unknowns along a side, `constant` what the functional has beyond the objective.
    """

    n: int
    line: FloatArray
    dimension: int
    alpha: float
    waves: int
    case: str
    exact_control: FloatArray
    exact_adjoint: FloatArray
    constant: float

    @property
    def h(self) -> float:
        """Mesh width."""
        return 1.0 / self.n

    @property
    def shape(self) -> tuple[int, ...]:
        """One axis a coordinate."""
        return (self.line.size,) * self.dimension


def build(
    n: int = 65, alpha: float | None = None, waves: int = 8, dimension: int = 2, case: str = "bang_bang"
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Mesh widths a side, at least 3. For case="bang_bang" a multiple of `waves` puts nodes on the lines where p = 0.
    alpha : float, optional
        Weight of the square of the control, not negative; 1e-5 by default. case="boundary_term" has 1.
    waves : int
        k of case="bang_bang", at least 1.
    dimension : {2, 3}
    case : {"bang_bang", "boundary_term"}

    Raises
    ------
    ssn.InputError
        For a parameter out of its range, or without effect.
    """
    for name, value, least in (("n", n, 3), ("waves", waves, 1)):
        if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
            raise ssn.InputError(f"{name} must be a whole number of at least {least}, got {value!r}")
    if case not in ("bang_bang", "boundary_term"):
        raise ssn.InputError(f"case must be 'bang_bang' or 'boundary_term', got {case!r}")
    if dimension not in (2, 3):
        raise ssn.InputError(f"dimension must be 2 or 3, got {dimension!r}")
    if alpha is not None and not (alpha >= 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be finite and not negative, got {alpha!r}")
    if case == "boundary_term" and (alpha not in (None, 1.0) or waves != 8):
        raise ssn.InputError(
            "case='boundary_term' is known for alpha = 1 only, and has no waves: leave both out"
        )
    n, dimension = int(n), int(dimension)
    if case == "bang_bang":
        return _bang_bang(n, 1e-5 if alpha is None else float(alpha), int(waves), dimension)
    return _boundary_term(n, dimension)


def _bang_bang(n: int, alpha: float, waves: int, d: int) -> ssn.ControlProblem:
    h = 1.0 / n
    line = np.arange(1, n) * h
    mass = np.full((n - 1) ** d, h**d)
    y, s = (_product(np.sin(k * np.pi * line), d) for k in (1, waves))
    p = s / (d * (waves * np.pi) ** 2)
    u = np.clip(p / alpha, -1.0, 1.0) if alpha > 0 else np.sign(s)
    stiffness = _sum_over_axes(_second_difference(n)[1:-1, 1:-1], np.full(n - 1, h), d)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(stiffness, solver="multigrid" if d == 3 else "auto"),
        target=y + s,
        cost=ssn.Bounds(-1.0, 1.0),
        control_weight=alpha,
        source=mass * (d * np.pi**2 * y - u),
        state_mass=mass,
        control_mass=mass,
    )
    problem.mesh_data = MeshData(n, line, d, alpha, waves, "bang_bang", u, p, 0.0)
    return problem


def _boundary_term(n: int, d: int) -> ssn.ControlProblem:
    line = np.arange(n + 1) / n
    length = np.full(n + 1, 1.0 / n)
    length[[0, -1]] *= 0.5
    mass = _product(length, d)
    ends = np.zeros(n + 1)
    ends[[0, -1]] = 1.0
    boundary = BOUNDARY_TERM * sum(
        _kron([ends if i == axis else length for i in range(d)]) for axis in range(d)
    )
    square = (line - 0.5) ** 2
    r2 = sum(_kron([square if i == axis else np.ones(n + 1) for i in range(d)]) for axis in range(d))
    p = 12.0 * r2 - 1.0 / 3.0
    u = np.clip(p, 0.0, 1.0)
    z = 2.0 / 3.0 - 24.0 * d + 12.0 * r2
    target = z - boundary / mass
    operator = _sum_over_axes(_second_difference(n), length, d) + sp.diags_array(mass)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(operator, solver="multigrid" if d == 3 else "auto"),
        target=target,
        cost=ssn.Bounds(0.0, 1.0),
        control_weight=1.0,
        source=mass * (1.0 - u),
        state_mass=mass,
        control_mass=mass,
    )
    constant = float(boundary @ z - 0.5 * (boundary @ (boundary / mass)))
    problem.mesh_data = MeshData(n, line, d, 1.0, 0, "boundary_term", u, p, constant)
    return problem


def _second_difference(n: int) -> sp.csr_array:
    """Stiffness matrix of linear elements on n equal intervals of (0, 1), ends included."""
    diagonal = np.full(n + 1, 2.0)
    diagonal[[0, -1]] = 1.0
    return sp.csr_array(sp.diags_array([-np.ones(n), diagonal, -np.ones(n)], offsets=[-1, 0, 1]) * n)


def _kron(factors: list[FloatArray]) -> FloatArray:
    return np.asarray(reduce(np.kron, factors), dtype=np.float64)


def _product(line: FloatArray, d: int) -> FloatArray:
    """The product of one function of each coordinate."""
    return _kron([line] * d)


def _sum_over_axes(second: sp.csr_array, length: FloatArray, d: int) -> sp.csr_array:
    """The stiffness matrix in d dimensions: the difference along each axis times the lengths along the others."""
    lengths = sp.diags_array(length)
    terms = [reduce(sp.kron, [second if i == axis else lengths for i in range(d)]) for axis in range(d)]
    return sp.csr_array(sum(terms[1:], terms[0]))


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a control of `coarse` to `fine`: linear along each axis, held at the ends."""
    old, new = coarse.mesh_data, fine.mesh_data
    line = np.clip(new.line, old.line[0], old.line[-1])
    points = np.stack(np.meshgrid(*[line] * old.dimension, indexing="ij"), axis=-1)

    def carry(control: FloatArray) -> FloatArray:
        return RegularGridInterpolator((old.line,) * old.dimension, np.reshape(control, old.shape))(
            points
        ).ravel()

    return carry


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the exact solution."""
    mesh = problem.mesh_data
    error = solution.x - mesh.exact_control
    if mesh.case == "boundary_term":
        expected = exact_functional(mesh.dimension)
        # trapezoidal rule in each direction, of a polynomial of degree 4 and of u^2
        tolerance = 0.5 * mesh.h**2
        return [
            _check(
                "largest error of the control", "absolute", 0.0, float(np.abs(error).max()), 1e-7,
                "the discrete problem has the exact solution's nodal values; " + SOURCE,
            ),
            _check(
                "largest error of the state", "absolute", 0.0, float(np.abs(solution.state - 1.0).max()), 1e-7, SOURCE
            ),
            _check(
                "functional, h^2 / 2", "relative", expected, functional(problem, solution), tolerance,
                "integrals of the exact solution in closed form",
            ),
        ]  # fmt: skip
    if mesh.alpha > 0:
        bound = bounded_error(problem) + 10 * solution.tolerance * problem.controls.norm(mesh.exact_control)
        return [
            _check(
                "L2 error of the control, bound of order h^2", "absolute", 0.0, problem.controls.norm(error), bound,
                "exact solution; optimality conditions of both controls added (see bounded_error); " + SOURCE,
            )
        ]  # fmt: skip
    return [
        _check(
            "L1 error of the control, bound of order h^2 |log h|", "absolute", 0.0,
            float(problem.weights @ np.abs(error)), bang_bang_bound(mesh, solution.tolerance),
            "exact solution; optimality conditions of both controls added (see bang_bang_bound); " + SOURCE,
        )
    ]  # fmt: skip


def _check(
    what: str, kind: str, expected: float, computed: float, tolerance: float, source: str
) -> dict[str, Any]:
    off = abs(computed - expected) / (abs(expected) if kind == "relative" else 1.0)
    return {
        "what": f"{what} ({kind})",
        "kind": kind,
        "expected": expected,
        "computed": computed,
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(off <= tolerance),
    }


def adjoint_error(mesh: MeshData) -> FloatArray:
    """p_h(u) - p of case="bang_bang" at the nodes.

    Both sines are eigenvectors of the five- (seven-) point matrix, so that it is known without a solve.
    """
    d, h = mesh.dimension, mesh.h

    def discrete(k: int) -> float:
        return d * 4.0 / h**2 * float(np.sin(0.5 * k * np.pi * h)) ** 2

    # state error y - y_h(u), which is part of the load of the adjoint, and the error of the inverse on s
    y, s = (_product(np.sin(k * np.pi * mesh.line), d) for k in (1, mesh.waves))
    state = (1.0 - d * np.pi**2 / discrete(1)) / discrete(1)
    return state * y + (1.0 / discrete(mesh.waves) - 1.0 / (d * (mesh.waves * np.pi) ** 2)) * s


def bounded_error(problem: ssn.ControlProblem) -> float:
    """A bound on ||u_h - u||_L2 for alpha > 0, without the solver.

    With w the masses, e = u_h - u, d = p_h(u) - p and m = max(0, |p| - alpha), the distance of p from where u leaves
    its bound, the optimality conditions of u (for p) and u_h (for p_h) add up to
    sum w m |e| + alpha ||e||^2 <= sum w d e, so alpha ||e|| <= ||max(0, |d| - m)||.
    """
    mesh = problem.mesh_data
    margin = np.maximum(np.abs(mesh.exact_adjoint) - mesh.alpha, 0.0)
    return problem.controls.norm(np.maximum(np.abs(adjoint_error(mesh)) - margin, 0.0)) / mesh.alpha


def bang_bang_bound(mesh: MeshData, tolerance: float) -> float:
    """A bound on ||u_h - u||_L1 for alpha = 0, without the solver.

    With w the masses and e = u_h - u the optimality conditions of u (for p) and u_h (for p_h) add up to
    sum w (|p| - |d|) |e| <= 0, d = p_h(u) - p, and |e| <= 2: the largest sum w |e| has |e| = 2 where |p| - |d| is
    smallest, as far as the inequality allows. A control accurate to a relative tolerance adds its own error.
    """
    excess = np.cumsum(np.sort(np.abs(mesh.exact_adjoint) - np.abs(adjoint_error(mesh))))
    nodes = int(np.count_nonzero(excess <= 0))
    return 2.0 * (nodes + 1) * mesh.h**mesh.dimension + 10.0 * tolerance


def functional(problem: ssn.ControlProblem, solution: ssn.Solution) -> float:
    """The functional of the statement, the boundary term included."""
    return float(solution.objective + problem.mesh_data.constant)


def exact_functional(d: int) -> float:
    """The functional of case="boundary_term" at the exact solution.

    y - z = 24 d + 1/3 - 12 r^2; over the cube int r^2 = d/12, int r^4 = d/80 + d (d - 1)/144; u rises from 0 at r = 1/6
    to 1 at r = 1/3.
    """
    a = 24.0 * d + 1.0 / 3.0
    misfit = a * a - 24.0 * a * d / 12.0 + 144.0 * (d / 80.0 + d * (d - 1) / 144.0)
    sphere = 2.0 * np.pi if d == 2 else 4.0 * np.pi

    def shell(power: int) -> float:
        """Int of r^(power + d - 1) from 1/6 to 1/3."""
        e = power + d
        return float((1 / 3) ** e - (1 / 6) ** e) / e

    rising = sphere * (144.0 * shell(4) - 8.0 * shell(2) + shell(0) / 9.0)
    square = 1.0 - sphere / d * (1 / 3) ** d + rising
    return 0.5 * misfit + BOUNDARY_TERM * 2 * d + 0.5 * float(square)


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return how much of the domain is at a bound, and the error."""
    mesh = problem.mesh_data
    at_bound = (solution.x <= problem.cost.lower) | (solution.x >= problem.cost.upper)
    error = float(problem.weights @ np.abs(solution.x - mesh.exact_control))
    return [
        ("at a bound", f"{problem.weights @ at_bound / problem.weights.sum():.1%} of the domain"),
        ("L1 distance to the exact control", f"{error:.3g}"),
    ]


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw control and error in the square; in three dimensions in the plane x3 = 1/4, or 1/2 (boundary term)."""
    mesh = problem.mesh_data
    figure = new_figure(9.6, 4.0)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    height = 0.25 if mesh.case == "bang_bang" else 0.5
    plane = int(np.abs(mesh.line - height).argmin())
    half = 0.5 * mesh.h
    extent = (mesh.line[0] - half, mesh.line[-1] + half) * 2

    def show(axes: Any, values: FloatArray, low: float, high: float, colours: str, title: str) -> None:
        field = values.reshape(mesh.shape)
        field = field if mesh.dimension == 2 else field[:, :, plane]
        image = axes.imshow(field.T, origin="lower", extent=extent, cmap=colours, vmin=low, vmax=high)
        figure.colorbar(image, ax=axes, shrink=0.85)
        axes.set(title=title, xlabel="$x_1$", aspect="equal")

    low, high = float(problem.cost.lower), float(problem.cost.upper)
    show(left, solution.x, low, high, "RdBu_r" if low < 0 else "viridis", "control")
    error = np.abs(solution.x - mesh.exact_control)
    show(right, error, 0.0, float(error.max()) or 1.0, "magma", "distance to the exact control")
    left.set_ylabel("$x_2$")
    where = "" if mesh.dimension == 2 else f", $x_3$ = {mesh.line[plane]:.2f}"
    words = dict(summary(problem, solution))
    figure.suptitle(
        rf"Control between two bounds: n = {mesh.n}, $\alpha$ = {mesh.alpha:g}{where}; {words['at a bound']} at a bound"
    )
    return figure
