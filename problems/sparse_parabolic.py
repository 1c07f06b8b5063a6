"""When and where was heat released? Sparse control of the heat equation that follows the heat of a moving source.

minimise 1/2 ||y - z||^2 + alpha/2 ||u||^2 + beta g(u) with |u| <= bound, y' - kappa Lap y = u + f in the unit square
for 0 < t < 1, y = 0 on its boundary, kappa = 0.1; norms over time and square. Linear finite elements on right
triangles with n interior points a side, whose stiffness matrix is the five-point matrix; lumped mass h^2,
h = 1 / (n + 1); equal time steps. A control value for each point and step; time varies slowest. Dimensionless.

g by `sparsity`, with L1 and L2 norms of functions:
"both": ||u||_L1 over time and square; the place may move. "space": the integral over the square of the L2(0, 1) norms
of u(., x); each place acts at some time or never. "time": the integral over time of the L2 norms of u(t, .) over the
square; all places rest at once.
    Source: R. Herzog, G. Stadler and G. Wachsmuth, SIAM J. Control Optim. 50 (2012) 943-963, doi:10.1137/100815037
    (the three functionals, from memory); the data are our own.

case="moving source": z is the temperature, in this same discretisation, due to the source 30 exp(-|x - c(t)|^2 /
    (2 * 0.08^2)), c(t) on three quarters of a circle of radius 1/4 about the centre; y = 0 at t = 0, f = 0.
case="manufactured": known for sparsity="both" and all alpha, beta and bound: p = cos(pi t / 2) sin(2 pi x1)
    sin(2 pi x2), y = cos(2 t) sin(pi x1) sin(pi x2), u = clip(soft(p, beta) / alpha, -bound, bound), f = y' +
    2 kappa pi^2 y - u, z = y - p' + 8 kappa pi^2 p. alpha = 0.01, beta = 0.3, bound = 50 have regions at zero, at both
    bounds and between.
dimension=3: the unit cube, with one more coordinate in each square and one more sine in each product, 2 kappa replaced
    by 3 kappa and 8 by 12; the source, of width 0.12, moves in the plane x3 = 1/2. The seven-point matrix, mass h^3.

Caution: plain full steps fail where bounds and small alpha meet (`PLAIN_STEPS_FAIL`). Without bounds and with
alpha <= 1e-5 the Newton systems take most of the time.
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

SIZES = (8, 16, 32)

#: (n, alpha), other parameters as by default: globalization="full" fails from zero, the default does not.
PLAIN_STEPS_FAIL = (
    (8, 1e-3),
    (16, 1e-3),
    (24, 1e-3),
    (8, 1e-4),
    (16, 1e-4),
    (24, 1e-4),
    (8, 1e-5),
    (16, 1e-5),
    (24, 1e-5),
)

KAPPA = 0.1
STRENGTH, WIDTH, RADIUS, TURN = 30.0, 0.08, 0.25, 0.75
WIDTH_3D = 0.12

#: sparsity -> objective for n = 8 and all other parameters as by default, by a general interior-point solver on an
#: assembly without ssn (tests/problems/test_sparse_parabolic.py).
REFERENCE_OBJECTIVE = {"both": 0.0514011293766, "space": 0.0742504903288, "time": 0.1027681504866}


@dataclass(frozen=True)
class MeshData:
    """What `transfer`, `known` and `picture` need; fields on the mesh have shape (steps, n, n)
    or (steps, n, n, n)."""

    n: int
    steps: int
    h: float
    line: FloatArray
    control_times: FloatArray
    parameters: dict[str, Any]
    exact_control: FloatArray | None

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return int(self.parameters["dimension"])

    @property
    def shape(self) -> tuple[int, ...]:
        """(steps, n, n) or (steps, n, n, n)."""
        return (self.steps, *[self.n] * self.dimension)


def build(
    n: int = 16,
    steps: int = 0,
    alpha: float = 1e-4,
    beta: float = 0.05,
    bound: float = 20.0,
    sparsity: str = "both",
    scheme: str = "implicit Euler",
    case: str = "moving source",
    dimension: int = 2,
) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Interior points a side, at least 2.
    steps : int
        Time steps; 0 means 2 n.
    alpha : float
        Weight of the square of the control, positive.
    beta : float
        Weight of the sparsity term, not negative.
    bound : float
        |u| <= bound, positive; may be infinite.
    sparsity : {"both", "space", "time"}
    scheme : {"implicit Euler", "Crank-Nicolson"}
    case : {"moving source", "manufactured"}
    dimension : {2, 3}
        In the cube n = 20 with 128 steps makes 1.0e6 unknowns of the state, in the square n = 63 with 256.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    parameters = locals().copy()
    for name, value, least in (("n", n, 2), ("steps", steps, 0)):
        if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
            raise ssn.InputError(f"{name} must be a whole number of at least {least}, got {value!r}")
    if not (alpha > 0 and np.isfinite(alpha)):
        raise ssn.InputError(f"alpha must be positive and finite, got {alpha!r}")
    if not bound > 0:
        raise ssn.InputError(f"bound must be positive, got {bound!r}")
    for name, choices in (
        ("sparsity", ("both", "space", "time")),
        ("scheme", ("implicit Euler", "Crank-Nicolson")),
        ("case", ("moving source", "manufactured")),
    ):
        if parameters[name] not in choices:
            raise ssn.InputError(f"{name} must be one of {', '.join(choices)}, got {parameters[name]!r}")
    if case == "manufactured" and sparsity != "both":
        raise ssn.InputError("case='manufactured' is known for sparsity='both' only")
    if dimension not in (2, 3):
        raise ssn.InputError(f"dimension must be 2 or 3, got {dimension!r}")
    n, steps, d = int(n), int(steps or 2 * n), int(dimension)
    h = 1.0 / (n + 1)
    line = np.arange(1, n + 1) * h
    cell = h * h if d == 2 else h**3
    stiffness = five_point(n) if d == 2 else seven_point(n)
    state = ssn.TimeDependentState(
        np.full(n**d, cell), KAPPA * stiffness, steps=steps, duration=1.0, scheme=scheme
    )
    source = exact = None
    if case == "moving source":
        target = state.solve(state.source(cell * true_source(state.load_times, line, d)))
    else:
        eigen = KAPPA * np.pi**2
        first, second = (_mode(k, line, d) for k in (1, 2))
        t, levels = state.load_times[:, None], state.times[1:, None]
        p = np.cos(0.5 * np.pi * t) * second
        exact = np.clip((p - np.clip(p, -beta, beta)) / alpha, -bound, bound).ravel()
        load = _heat(t, d * eigen) * first - exact.reshape(steps, -1)
        source = state.source(cell * load, initial=first)
        target = (np.cos(2 * levels) * first + _misfit(levels, 4 * d * eigen) * second).ravel()
    problem = ssn.ControlProblem(
        state=state,
        target=target,
        cost=_cost(sparsity, beta, bound, state),
        control_weight=alpha,
        control_operator=state.control_operator(),
        source=source,
        control_mass=state.control_mass(),
        observation_mass=state.observation_mass(),
    )
    problem.mesh_data = MeshData(
        n, steps, h, line, state.load_times, parameters | {"n": n, "steps": steps, "dimension": d}, exact
    )
    return problem


def _cost(sparsity: str, beta: float, bound: float, state: ssn.TimeDependentState) -> Any:
    if sparsity == "both":
        return ssn.SparseCost(beta, -bound, bound)
    axis, inner = (0, state.step_sizes) if sparsity == "space" else (1, state.lumped_mass)
    return ssn.GroupSparseCost(
        beta, shape=(state.steps, state.points), axis=axis, inner_weights=inner, lower=-bound, upper=bound
    )


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
    return sp.csr_array((sp.kron(five_point(n), identity) + sp.kron(sp.eye_array(n * n), second)) / (n + 1))


def centre(times: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where the true source is."""
    angle = 2 * np.pi * TURN * times
    return 0.5 + RADIUS * np.cos(angle), 0.5 + RADIUS * np.sin(angle)


def true_source(times: FloatArray, line: FloatArray, dimension: int = 2) -> FloatArray:
    """The source whose temperature is the target, shape (times, points)."""
    c1, c2 = (c[:, None, None] for c in centre(times))
    square = (line[:, None] - c1) ** 2 + (line - c2) ** 2
    width = WIDTH
    if dimension == 3:
        square, width = square[..., None] + (line - 0.5) ** 2, WIDTH_3D
    return STRENGTH * np.exp(-square / (2 * width**2)).reshape(times.size, -1)


# the manufactured case: amplitudes in time of the two modes sin(k pi x1) sin(k pi x2) (sin(k pi x3)), whose eigenvalues
# of -kappa Lap are given


def _mode(k: int, line: FloatArray, dimension: int) -> FloatArray:
    wave = np.sin(k * np.pi * line)
    plane = np.outer(wave, wave).ravel()
    return plane if dimension == 2 else np.outer(plane, wave).ravel()


def _heat(t: FloatArray, eigen: float) -> FloatArray:
    """Amplitude of y' - kappa Lap y."""
    return -2 * np.sin(2 * t) + eigen * np.cos(2 * t)


def _misfit(t: FloatArray, eigen: float) -> FloatArray:
    """Amplitude of z - y = -p' - kappa Lap p."""
    return 0.5 * np.pi * np.sin(0.5 * np.pi * t) + eigen * np.cos(0.5 * np.pi * t)


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a control of `coarse` to `fine`: multilinear, zero on the boundary."""
    old, new = coarse.mesh_data, fine.mesh_data
    space = np.concatenate([[0.0], old.line, [1.0]])
    times = np.concatenate([[0.0], old.control_times, [1.0]])
    # control_times may end at 1: a doubled last time would be no grid
    last = 2 if old.control_times[-1] < 1.0 else 1
    times = times[: old.steps + last]
    axes = [space] * old.dimension
    points = np.stack(np.meshgrid(new.control_times, *[new.line] * old.dimension, indexing="ij"), axis=-1)

    def carry(control: FloatArray) -> FloatArray:
        padded = np.pad(np.reshape(control, old.shape), ((0, 0), *[(1, 1)] * old.dimension))
        padded = np.concatenate([padded[:1], padded, padded[-1:]])[: times.size]
        return RegularGridInterpolator((times, *axes), padded)(points).ravel()

    return carry


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with what is known about the solution; at most one further solve."""
    mesh = problem.mesh_data
    checks = [_zero_below_beta(problem, solution)]
    if mesh.parameters["case"] == "manufactured":
        return [*checks, _control_error(problem, solution)]
    checks.append(_vanishing(problem))
    defaults = dict(zip(build.__code__.co_varnames, build.__defaults__ or (), strict=False))
    sparsity = mesh.parameters["sparsity"]
    standard = defaults | {"n": 8, "steps": 16, "sparsity": sparsity} == mesh.parameters
    if standard and sparsity in REFERENCE_OBJECTIVE:
        expected, computed = REFERENCE_OBJECTIVE[sparsity], solution.objective
        checks.append(
            {
                "what": "objective (relative)",
                "kind": "relative",
                "expected": expected,
                "computed": computed,
                "tolerance": 1e-8,
                "source": "general interior-point solver on an independent assembly",
                "holds": bool(abs(computed - expected) <= 1e-8 * expected),
            }
        )
    return checks


def strength(problem: ssn.ControlProblem, field: FloatArray) -> FloatArray:
    """What is compared with beta, for each value of an adjoint state or control: |p|, or the norm of its group."""
    mesh = problem.mesh_data
    square = np.reshape(field, (mesh.steps, mesh.n**mesh.dimension)) ** 2
    sparsity = mesh.parameters["sparsity"]
    if sparsity == "space":
        square = np.broadcast_to(square.mean(axis=0), square.shape)
    elif sparsity == "time":
        square = np.broadcast_to(mesh.h**mesh.dimension * square.sum(axis=1, keepdims=True), square.shape)
    return np.sqrt(square).ravel()


def _zero_below_beta(problem: ssn.ControlProblem, solution: ssn.Solution) -> dict[str, Any]:
    beta = problem.mesh_data.parameters["beta"]
    # 1e-6: the adjoint state is as accurate as alpha times the control
    below = strength(problem, solution.adjoint) < beta * (1.0 - 1e-6)
    largest = float(np.abs(solution.x[below]).max(initial=0.0))
    return {
        "what": "largest |u| where the adjoint state, or the norm of its group, is below beta (absolute)",
        "kind": "absolute",
        "expected": 0.0,
        "computed": largest,
        "tolerance": 0.0,
        "source": "optimality condition; Herzog, Stadler and Wachsmuth (2012) (from memory)",
        "holds": largest == 0.0,
    }


def _vanishing(problem: ssn.ControlProblem) -> dict[str, Any]:
    threshold = float(strength(problem, problem.adjoint(problem.reduced_target())).max())
    above = build(**problem.mesh_data.parameters | {"beta": threshold * (1 + 1e-9)})
    largest = float(np.abs(ssn.solve(above).x).max())
    return {
        "what": f"largest |u| for beta just above {threshold:.6f}, where the control vanishes (absolute)",
        "kind": "absolute",
        "expected": 0.0,
        "computed": largest,
        "tolerance": 0.0,
        "source": "optimality condition of u = 0",
        "holds": largest == 0.0,
    }


def _control_error(problem: ssn.ControlProblem, solution: ssn.Solution) -> dict[str, Any]:
    """The discrete problem's u_h satisfies alpha ||u_h - u|| <= ||p_h(u) - p||, by strong convexity.

    The exact y and p are eigenvectors of the five- (seven-) point matrix times an amplitude in time, so that p_h(u) - p
    follows from recursions in one variable for each of the two modes.
    """
    mesh = problem.mesh_data
    bound = adjoint_error(mesh) / mesh.parameters["alpha"]
    bound += 10 * solution.tolerance * problem.controls.norm(mesh.exact_control)
    error = problem.controls.norm(solution.x - mesh.exact_control)
    return {
        "what": "L2 error of the control (absolute), bound of the order of the scheme",
        "kind": "absolute",
        "expected": 0.0,
        "computed": error,
        "tolerance": float(bound),
        "source": "manufactured solution (module docstring); bound by strong convexity",
        "holds": bool(error <= bound),
    }


def adjoint_error(mesh: MeshData) -> float:
    """||p_h(u) - p|| in the manufactured case, without the state model."""
    theta = 1.0 if mesh.parameters["scheme"] == "implicit Euler" else 0.5
    tau, eigen = 1.0 / mesh.steps, KAPPA * np.pi**2
    levels = np.arange(1, mesh.steps + 1) * tau
    d = mesh.dimension
    first, second = (KAPPA * (4 * d) / mesh.h**2 * np.sin(0.5 * k * np.pi * mesh.h) ** 2 for k in (1, 2))

    def sweep(loads: FloatArray, eigenvalue: float, value: float) -> FloatArray:
        result = np.empty_like(loads)
        for k, load in enumerate(loads):
            value = ((1 - (1 - theta) * tau * eigenvalue) * value + load) / (1 + theta * tau * eigenvalue)
            result[k] = value
        return result

    y = sweep(tau * _heat(mesh.control_times, d * eigen), first, 1.0)
    weights = np.full(mesh.steps, tau)
    weights[-1] *= theta
    errors = [
        sweep((weights * (np.cos(2 * levels) - y))[::-1], first, 0.0)[::-1],
        sweep((weights * _misfit(levels, 4 * d * eigen))[::-1], second, 0.0)[::-1]
        - np.cos(0.5 * np.pi * mesh.control_times),
    ]
    return float(np.sqrt(0.5**d * tau * sum(e @ e for e in errors)))


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw when and where the control acts: in time and one coordinate, and in the plane; grey: never."""
    mesh = problem.mesh_data
    control = np.reshape(solution.x, mesh.shape)
    figure = new_figure(11.0, 3.8)
    left, middle, right = figure.subplots(1, 3)
    edge = (mesh.h / 2, 1 - mesh.h / 2)

    def largest(axis: int) -> FloatArray:
        """The value of largest size along an axis, and along x3, NaN where all are zero."""
        values = control
        for along in (3, axis) if mesh.dimension == 3 else (axis,):
            where = np.abs(values).argmax(axis=along, keepdims=True)
            values = np.take_along_axis(values, where, axis=along).squeeze(along)
        return np.where(values == 0, np.nan, values)

    limit = float(np.abs(control).max()) or 1.0
    c1, c2 = centre(mesh.control_times)
    for axes, axis, extent, line, labels in (
        (left, 2, (0.0, 1.0, *edge), (mesh.control_times, c1), ("$t$", "$x_1$")),
        (middle, 1, (0.0, 1.0, *edge), (mesh.control_times, c2), ("$t$", "$x_2$")),
        (right, 0, edge * 2, (c1, c2), ("$x_1$", "$x_2$")),
    ):
        values = largest(axis)
        axes.set_facecolor("0.82")
        image = axes.imshow(
            values.T, origin="lower", extent=extent, cmap="RdBu_r", vmin=-limit, vmax=limit, aspect="auto"
        )
        if mesh.parameters["case"] == "moving source":
            axes.plot(*line, color="black", lw=0.8, ls="--")
        axes.set(xlabel=labels[0], ylabel=labels[1], xlim=(0, 1), ylim=(0, 1))
    more = ", $x_3$" if mesh.dimension == 3 else ""
    left.set_title(f"largest over $x_2${more}")
    middle.set_title(f"largest over $x_1${more}")
    right.set_title(f"largest over time{more}")
    figure.colorbar(image, ax=right)
    p = mesh.parameters
    dashed = "; dashed: the true source" if p["case"] == "moving source" else ""
    figure.suptitle(
        rf"Control, sparse in {'space and time' if p['sparsity'] == 'both' else p['sparsity']}: n = {mesh.n}, "
        rf"{mesh.steps} steps, $\alpha$ = {p['alpha']:g}, $\beta$ = {p['beta']:g}, zero on "
        f"{(control == 0).mean():.0%}{dashed}"
    )
    return figure
