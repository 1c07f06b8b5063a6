"""Hot joints and heating wires in a cast block: sources that live on points and lines, found from a temperature map.

A plate or block of casting resin holds cable joints that run hot, cooling pins that draw heat, or wires. Its faces are
kept at one temperature, and the temperature y above that is known everywhere (from an optical fibre, say).
Which sources make it? Heat comes from points and lines, not from regions, so that the unknown is a measure:

    minimise 1/2 ||y - z||^2 + beta ||u||_M,   -Lap y = u in the unit square or cube, y = 0 on its faces,

||u||_M the total strength, sum of the absolute values. The control is the vector of the strengths at the mesh points,
load vectors as they are: control_operator is the identity, control_mass is 1, control_weight is 0. Linear elements on
right triangles (five-point matrix) and the seven-point matrix in the cube; lumped mass h^d, h = 1/(n + 1).
Dimensionless: lengths in sides, y in degrees, strengths in units of conductivity times degree times side^(d - 2).

The adjoint p of a solution satisfies |p| <= beta, and sources lie where |p| = beta, of the sign of p. So solutions are
made to order: take any p with |p| <= beta, |p| = beta on a small set, p = 0 on the faces, any strengths on that set
with the sign of p, and z = y - Lap p with the discrete Laplacian: the discrete problem then has this solution, and no
other.

case="points": p = beta sin(2 pi x1) sin(2 pi x2) [sin(pi x3)], four sources of different strengths and signs.
case="lines": p = beta plateau(x1) sin(pi x2) [sin(pi x3)], a wire of uneven heat along the middle, 1/4 <= x1 <= 3/4.
case="survey": z from joints that are on no mesh point, computed on a mesh of half the size, with 1 % noise.
case="benchmark": z = sin(2 pi x1) sin(2 pi x2) exp(2 x1)/6, in the square. G. Stadler, Comput. Optim. Appl. 44 (2009)
    159-181 (target from memory).

Source: K. Pieper and B. Vexler, SIAM J. Control Optim. 51 (2013) 2788-2808, for the setting (from memory); the scenario
and the solutions are our own.

Caution: a design aid. A joint that is not found may still run hot: what may carry current in service is decided by
measurement on the part and by the local electrical code, not by this model. beta draws every strength towards zero:
places are found better than strengths.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (15, 31, 63)

CASES = ("points", "lines", "survey", "benchmark")
#: strengths in case="points", at (1/4, 1/4), (1/4, 3/4), (3/4, 1/4), (3/4, 3/4)
STRENGTHS = (1.0, -0.6, -0.8, 0.5)
#: joints in case="survey": place and strength
JOINTS = (((0.31, 0.23, 0.45), 1.0), ((0.72, 0.41, 0.52), 0.7), ((0.43, 0.77, 0.6), -0.8))
NOISE, SEED = 0.01, 7
#: max |S* z| of case="benchmark": by sine series with up to 1023 terms a side (tests/problems/test_measure_sources.py)
BENCHMARK_THRESHOLD = 0.0100348289


@dataclass(frozen=True)
class MeshData:
    """Mesh and what is known; fields have one value a mesh point, the last coordinate fastest."""

    n: int
    dimension: int
    h: float
    points: FloatArray
    parameters: dict[str, Any]
    exact: FloatArray | None


def build(n: int = 31, dimension: int = 2, case: str = "points", beta: float = 1e-3) -> ssn.ControlProblem:
    """Build the control problem.

    Parameters
    ----------
    n : int
        Inner mesh points a side, at least 3; n + 1 a multiple of 4 for case="points" and "lines".
    dimension : {2, 3}
    case : {"points", "lines", "survey", "benchmark"}
        "benchmark" in two dimensions only.
    beta : float
        Price of strength, degree^2 side^d a unit of strength; positive.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 3:
        raise ssn.InputError(f"n must be a whole number of at least 3, got {n!r}")
    if dimension not in (2, 3):
        raise ssn.InputError(f"dimension must be 2 or 3, got {dimension!r}")
    if case not in CASES:
        raise ssn.InputError(f"case must be one of {', '.join(CASES)}, got {case!r}")
    if not (beta > 0 and np.isfinite(beta)):
        raise ssn.InputError(f"beta must be positive and finite, got {beta!r}")
    if case in ("points", "lines") and (n + 1) % 4:
        raise ssn.InputError(
            f"case={case!r} needs n + 1 a multiple of 4, so that sources are mesh points; got n = {n}"
        )
    if case == "benchmark" and dimension != 2:
        raise ssn.InputError("case='benchmark' is a problem in the square: dimension must be 2")
    n, dimension = int(n), int(dimension)
    h = 1.0 / (n + 1)
    points = mesh_points(n, dimension)
    matrix, mass = stiffness(n, dimension), h**dimension
    state = ssn.SteadyState(matrix)
    exact = None
    if case in ("points", "lines"):
        exact, p = _made_to_order(points, h, case, beta)
        target = state.solve(exact) + (matrix @ p) / mass
    elif case == "survey":
        target = _survey(n, dimension)
    else:
        x1, x2 = points
        target = np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2) * np.exp(2 * x1) / 6
    problem = ssn.ControlProblem(
        state=state,
        target=target,
        cost=ssn.SparseCost(beta),
        control_weight=0.0,
        control_operator=sp.eye_array(n**dimension, format="csr"),
        observation_mass=np.full(n**dimension, mass),
    )
    parameters = {"n": n, "dimension": dimension, "case": case, "beta": beta}
    problem.mesh_data = MeshData(n, dimension, h, points, parameters, exact)
    return problem


def mesh_points(n: int, dimension: int) -> FloatArray:
    """Inner mesh points, shape (dimension, n^dimension)."""
    line = np.arange(1, n + 1) / (n + 1)
    return np.stack(np.meshgrid(*[line] * dimension, indexing="ij")).reshape(dimension, -1)


def stiffness(n: int, dimension: int) -> sp.csr_array:
    """Stiffness matrix: h^(dimension - 2) times the five- or seven-point matrix."""
    ones = np.ones(n - 1)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    identity = sp.eye_array(n)
    terms = [
        reduce(sp.kron, [second if axis == turn else identity for axis in range(dimension)])
        for turn in range(dimension)
    ]
    return sp.csr_array(sum(terms[1:], terms[0]) * (n + 1.0) ** (2 - dimension))


def _made_to_order(points: FloatArray, h: float, case: str, beta: float) -> tuple[FloatArray, FloatArray]:
    """Strengths and adjoint of the solution."""
    depth = np.sin(np.pi * points[2]) if len(points) == 3 else 1.0
    strengths = np.zeros(points.shape[1])
    middle = np.abs(depth - 1.0) < 1e-12
    if case == "points":
        p = np.sin(2 * np.pi * points[0]) * np.sin(2 * np.pi * points[1]) * depth
        peaks = np.flatnonzero((np.abs(np.abs(p) - 1.0) < 1e-12) & middle)
        strengths[peaks] = STRENGTHS
    else:
        p = _plateau(points[0]) * np.sin(np.pi * points[1]) * depth
        wire = (np.abs(points[1] - 0.5) < 1e-12) & middle & (np.abs(points[0] - 0.5) < 0.25 + 1e-12)
        strengths[wire] = h * (
            2.0 + np.cos(4 * np.pi * points[0, wire])
        )  # strength a length, times the mesh size
        p[wire] = 1.0
    return strengths, beta * p


def _plateau(x: FloatArray) -> FloatArray:
    """One on [1/4, 3/4], zero at the ends, two continuous derivatives."""
    t = np.clip(4.0 * np.minimum(x, 1.0 - x), 0.0, 1.0)
    return t**3 * (10.0 + t * (6.0 * t - 15.0))


def _survey(n: int, dimension: int) -> FloatArray:
    """Temperature of the joints on a mesh of half the size, their heat shared by the corners around, and noise."""
    fine = 2 * n + 1
    load = np.zeros([fine] * dimension)
    for place, strength in JOINTS:
        where = np.array(place[:dimension]) * (fine + 1) - 1
        low = np.floor(where).astype(int)
        for corner in np.ndindex(*[2] * dimension):
            share = np.prod(np.where(corner, where - low, 1.0 - (where - low)))
            load[tuple(low + corner)] += strength * share
    y = ssn.SteadyState(stiffness(fine, dimension)).solve(load.ravel()).reshape([fine] * dimension)
    y = y[(slice(1, None, 2),) * dimension].ravel()
    noise = np.random.default_rng(SEED).standard_normal(y.size)
    return y + NOISE * np.sqrt(np.mean(y**2)) * noise


def transfer(coarse: ssn.ControlProblem, fine: ssn.ControlProblem) -> Callable[[FloatArray], FloatArray]:
    """Return the function that moves every source to the nearest mesh point of `fine`, its strength kept."""
    new = fine.mesh_data
    index = np.clip(np.rint(coarse.mesh_data.points * (new.n + 1)).astype(int) - 1, 0, new.n - 1)
    flat = np.ravel_multi_index(tuple(index), (new.n,) * new.dimension)

    def carry(strengths: FloatArray) -> FloatArray:
        return np.bincount(flat, weights=strengths, minlength=new.n**new.dimension)

    return carry


def known(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with what is known about the solution; one further solve."""
    mesh = problem.mesh_data
    beta = mesh.parameters["beta"]
    p = problem.pull_back(solution.adjoint)
    threshold = float(np.abs(problem.adjoint(problem.target)).max())
    above = ssn.solve(problem.with_cost(ssn.SparseCost(threshold * (1 + 1e-9))))
    condition = "optimality conditions; Pieper and Vexler (2013) (from memory)"
    checks = [
        _check(
            "excess of the largest |p| / beta over 1 (absolute)", 0.0,
            max(0.0, float(np.abs(p).max()) / beta - 1.0), 1e-9, condition,
        ),
        _check(
            "largest | |p| / beta - 1 | and wrong sign where there is a source (absolute)", 0.0,
            float(np.abs(p / beta - np.sign(solution.x))[solution.x != 0].max(initial=0.0)), 1e-7, condition,
        ),
        _check(
            f"largest |u| for beta just above {threshold:.7f} = max |S* z|, where all sources vanish (absolute)",
            0.0, float(np.abs(above.x).max()), 0.0, "optimality condition of u = 0",
        ),
    ]  # fmt: skip
    if mesh.exact is not None:
        error = float(np.abs(solution.x - mesh.exact).max() / np.abs(mesh.exact).max())
        what = "largest error of a strength, over the largest strength (absolute)"
        checks.append(
            _check(what, 0.0, error, 1e-6, "solution made to order from its adjoint state (docstring)")
        )
    if mesh.parameters["case"] == "benchmark":
        off = threshold / BENCHMARK_THRESHOLD - 1.0
        what = f"vanishing threshold {threshold:.8f} over {BENCHMARK_THRESHOLD}, less 1 (absolute), within 10 h^2"
        source = "sine series; target: Stadler (2009) (from memory)"
        checks.append(_check(what, 0.0, off, 10 * mesh.h**2, source))
    return checks


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what, "kind": "absolute", "expected": expected, "computed": computed, "tolerance": tolerance,
        "source": source, "holds": bool(abs(computed - expected) <= tolerance),
    }  # fmt: skip


def sources(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[FloatArray, float]]:
    """Places and strengths, strongest first: mesh points with a source, neighbours of one sign merged.

    A joint between mesh points appears as sources at the points around it; the place is their centre of strength.
    """
    mesh = problem.mesh_data
    shape = (mesh.n,) * mesh.dimension
    left = {int(i) for i in np.flatnonzero(solution.x)}
    found = []
    while left:
        group, waiting = [], [left.pop()]
        while waiting:
            here = waiting.pop()
            group.append(here)
            spot = np.array(np.unravel_index(here, shape))
            for step in np.ndindex(*[3] * mesh.dimension):
                to = spot + step - 1
                if (to >= 0).all() and (to < mesh.n).all():
                    there = int(np.ravel_multi_index(tuple(to), shape))
                    if there in left and solution.x[there] * solution.x[here] > 0:
                        left.remove(there)
                        waiting.append(there)
        strength = solution.x[group]
        found.append((mesh.points[:, group] @ strength / strength.sum(), float(strength.sum())))
    return sorted(found, key=lambda source: -abs(source[1]))


def summary(problem: ssn.ControlProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Say where the sources are; in case="survey" also how far off."""
    mesh = problem.mesh_data
    found = sources(problem, solution)
    told = [
        (f"{len(found)} sources at {np.count_nonzero(solution.x)} mesh points", f"mesh size {mesh.h:.3g}")
    ]
    for place, strength in found[:6]:
        told.append((f"strength {strength:+.4f}", "at " + ", ".join(f"{x:.3f}" for x in place)))
    if mesh.parameters["case"] == "survey":
        for place, strength in JOINTS:
            best = min(found, key=lambda s: np.linalg.norm(s[0] - place[: mesh.dimension]), default=None)
            if best is not None:
                off = np.linalg.norm(best[0] - place[: mesh.dimension]) / mesh.h
                told.append(
                    (
                        f"true joint {strength:+.2f}",
                        f"found {off:.2f} mesh sizes off, at {best[1] / strength:.0%}",
                    )
                )
    return told


def picture(problem: ssn.ControlProblem, solution: ssn.Solution) -> Any:
    """Draw the temperature with the sources, area by strength, and the adjoint state, which is +-beta at them."""
    mesh = problem.mesh_data
    shape = (mesh.n,) * mesh.dimension
    beta = mesh.parameters["beta"]
    fields = [solution.state.reshape(shape), problem.pull_back(solution.adjoint).reshape(shape) / beta]
    titles = ["temperature", r"adjoint state over $\beta$"]
    if mesh.dimension == 3:  # the largest value along x3
        fields = [np.take_along_axis(f, np.abs(f).argmax(axis=2)[..., None], axis=2)[..., 0] for f in fields]
        titles = [f"{title}, largest over $x_3$" for title in titles]
    figure = new_figure(9.6, 4.2)
    on = np.flatnonzero(solution.x)
    size = 250.0 * np.sqrt(np.abs(solution.x[on]) / (np.abs(solution.x).max() or 1.0))
    for axes, field, title in zip(figure.subplots(1, 2), fields, titles, strict=True):
        limit = float(np.abs(field).max()) or 1.0
        image = axes.imshow(
            field.T,
            origin="lower",
            extent=(mesh.h / 2, 1 - mesh.h / 2) * 2,
            cmap="RdBu_r",
            vmin=-limit,
            vmax=limit,
        )
        for sign, colour in ((1.0, "firebrick"), (-1.0, "navy")):
            part = solution.x[on] * sign > 0
            axes.scatter(
                *mesh.points[:2, on[part]], s=size[part], facecolors="none", edgecolors=colour, lw=1.4
            )
        if mesh.parameters["case"] == "survey":
            axes.plot(*np.array([place[:2] for place, _ in JOINTS]).T, "k+", ms=9)
        axes.set(title=title, xlabel="$x_1$", ylabel="$x_2$", xlim=(0, 1), ylim=(0, 1))
        figure.colorbar(image, ax=axes)
    p = mesh.parameters
    crosses = "; crosses: the true joints" if p["case"] == "survey" else ""
    figure.suptitle(rf"Sources, {p['case']}: n = {p['n']}, $\beta$ = {beta:g}{crosses}")
    return figure
