"""Total variation denoising of a picture or a signal: noise goes, edges stay, heights sink.

minimise 1/2 int (u - b)^2 + weight TV(u). In two dimensions over the square (-1, 1)^2 with n x n square pixels of width
h = 2 / n and difference quotients to the right and down, none across the rim; `isotropic` takes their Euclidean norm in
each pixel, else the sum of their absolute values. In one dimension over (-1, 1) with n samples. Dimensionless.

case="disc": b = 1 in a disc of radius 0.6, else 0. In the plane the disc keeps its edge and sinks by 2 weight / radius.
    Source: D. Strong and T. Chan, Inverse Problems 19 (2003) S165-S187 (from memory).
case="scene": a thermal camera's picture of a circuit board (our own): a warm board, two hot parts, a cold screw.
case="step": one dimension, 0 on the left and 1 on the right third. The levels move together by weight / length of their
    sides, exactly, also on the mesh. Source: closed form of the field; recomputed.

`noise` adds seeded normal noise of that standard deviation.

Caution: heights are biased, small details vanish before large ones sink: measure temperatures on the raw data.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (24, 48, 96)
RADIUS = 0.6

#: (samples, weight, result): recomputed by a general QP solver.
EIGHT_POINTS = (1.0, 2.5, 2.0, 5.0, 4.5, 4.0, 0.5, 1.0)
EIGHT_RESULTS = (
    (0.5, (1.5, 2.25, 2.25, 4.25, 4.25, 4.0, 1.0, 1.0)),
    (2.0, (2.5, 2.5, 2.5, 19 / 6, 19 / 6, 19 / 6, 1.75, 1.75)),
)


@dataclass(frozen=True)
class MeshData:
    """Pixels: n a side, width h; data and clean data, flat, rows first; whether there is noise."""

    n: int
    h: float
    weight: float
    case: str
    noise: float
    data: FloatArray
    clean: FloatArray


def build(
    n: int = 48, weight: float = 0.05, case: str = "disc", noise: float = 0.0, isotropic: bool = True
) -> ssn.SumProblem:
    """Build the denoising problem.

    Parameters
    ----------
    n : int
        Pixels a side (samples for case="step"), at least 6.
    weight : float
        Weight of the variation, not negative; in the unit of the data times length.
    case : {"disc", "scene", "step"}
    noise : float
        Standard deviation of the noise, in the unit of the data, not negative.
    isotropic : bool
        Euclidean norm of the gradient, else the sum of its components' absolute values; no difference for "step".

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 6:
        raise ssn.InputError(f"n must be a whole number of at least 6, got {n!r}")
    if not (weight >= 0 and np.isfinite(weight)):
        raise ssn.InputError(f"weight must not be negative, got {weight!r}")
    if not (noise >= 0 and np.isfinite(noise)):
        raise ssn.InputError(f"noise must not be negative, got {noise!r}")
    if case not in ("disc", "scene", "step"):
        raise ssn.InputError(f"case must be 'disc', 'scene' or 'step', got {case!r}")
    h = 2.0 / n
    clean = _clean(n, case)
    data = clean + noise * np.random.default_rng(1).standard_normal(clean.size)
    if case == "step":
        volume, operator = h, differences(n) / h
        cost: ssn.Cost = ssn.SparseCost(weight)
        weights = np.full(n - 1, h)
    else:
        volume, operator = h * h, gradient(n, h)
        cost = ssn.GroupSparseCost(weight, shape=(2, n * n), axis=0) if isotropic else ssn.SparseCost(weight)
        weights = np.full(2 * n * n, h * h)
    fit = ssn.Quadratic(volume * sp.eye_array(clean.size), volume * data)
    problem = ssn.SumProblem(smooth=fit, terms=[ssn.Term(cost, operator, weights=weights)])
    problem.mesh_data = MeshData(int(n), h, float(weight), case, float(noise), data, clean)
    return problem


def _clean(n: int, case: str) -> FloatArray:
    middle = -1.0 + 2.0 / n * (np.arange(n) + 0.5)
    if case == "step":
        return (middle > 1.0 / 3.0).astype(float)
    y, x = np.meshgrid(middle, middle, indexing="ij")
    if case == "disc":
        return (np.hypot(x, y) < RADIUS).astype(float).ravel()
    board = np.where((np.abs(x) < 0.8) & (np.abs(y) < 0.7), 0.4, 0.0)
    board = np.where((np.abs(x + 0.35) < 0.25) & (np.abs(y + 0.1) < 0.3), 1.0, board)
    board = np.where(np.hypot(x - 0.4, y - 0.25) < 0.2, 0.8, board)
    return np.where(np.hypot(x - 0.55, y + 0.45) < 0.1, 0.0, board).ravel()


def differences(n: int) -> sp.csr_array:
    """Differences of neighbours, shape (n - 1, n)."""
    ones = np.ones(n - 1)
    return sp.csr_array(sp.diags_array([-ones, ones], offsets=[0, 1], shape=(n - 1, n)))


def gradient(n: int, h: float) -> sp.csr_array:
    """Difference quotients in both directions, shape (2 n^2, n^2); zero rows at the far rim."""
    line = sp.csr_array(sp.vstack([differences(n), sp.csr_array((1, n))])) / h
    identity = sp.eye_array(n)
    return sp.csr_array(sp.vstack([sp.kron(identity, line), sp.kron(line, identity)]))


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


def known(problem: ssn.SumProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with closed forms, and the eight-point example (two small solves) with its published solution."""
    mesh = problem.mesh_data
    mean = float(mesh.data.mean())
    rows = [
        _row(
            "mean of the result, that of the data",
            mean,
            float(solution.x.mean()),
            1e-8,
            "stationarity tested with 1",
        )
    ]
    if mesh.case == "disc" and mesh.noise == 0.0:
        height = float(solution.x.reshape(mesh.n, mesh.n)[mesh.n // 2, mesh.n // 2])
        expected = max(0.0, 1.0 - 2.0 * mesh.weight / RADIUS)
        rows.append(
            _row(
                "height at the centre of the disc, h / 10", expected, height, 0.1 * mesh.h,
                "Strong and Chan (2003), from memory; in the plane",
            )
        )  # fmt: skip
    if mesh.case == "step" and mesh.noise == 0.0:
        right = float(mesh.clean.sum()) * mesh.h
        left = 2.0 - right
        together = mesh.weight * (1 / left + 1 / right) >= 1.0
        low = mean if together else mesh.weight / left
        high = mean if together else 1.0 - mesh.weight / right
        source = "closed form of two levels"
        rows.append(_row("left level", low, float(solution.x[0]), 1e-7, source))
        rows.append(_row("right level", high, float(solution.x[-1]), 1e-7, source))
    for weight, result in EIGHT_RESULTS:
        fit = ssn.Quadratic(sp.eye_array(8), EIGHT_POINTS)
        small = ssn.SumProblem(smooth=fit, terms=[ssn.Term(ssn.SparseCost(weight), differences(8))])
        error = float(np.abs(ssn.solve(small).x - result).max())
        rows.append(
            _row(
                f"eight-point example, weight {weight:g}: largest error",
                0.0,
                error,
                1e-8,
                "general QP solver",
            )
        )
    return rows


def picture(problem: ssn.SumProblem, solution: ssn.Solution) -> Any:
    """Draw the data, the result, and a cut through the middle."""
    mesh = problem.mesh_data
    n = mesh.n
    middle = -1.0 + mesh.h * (np.arange(n) + 0.5)
    if mesh.case == "step":
        figure = new_figure(7.0, 3.5)
        axes = figure.subplots()
        axes.plot(middle, mesh.data, ".", color="0.6", label="data")
        axes.plot(middle, solution.x, color="C0", label="result")
        axes.set(xlabel="position", ylabel="signal")
        axes.legend(frameon=False)
    else:
        figure = new_figure(10.0, 3.4)
        left, centre, right = figure.subplots(1, 3, width_ratios=[1, 1, 1.2])
        shown = {"origin": "lower", "extent": (-1, 1, -1, 1), "cmap": "inferno", "vmin": 0.0, "vmax": 1.1}
        left.imshow(mesh.data.reshape(n, n), **shown)
        left.set(title="data")
        centre.imshow(solution.x.reshape(n, n), **shown)
        centre.set(title="result")
        row = n // 2
        right.plot(middle, mesh.data.reshape(n, n)[row], color="0.7", label="data")
        right.plot(middle, mesh.clean.reshape(n, n)[row], "--", color="C1", label="without noise")
        right.plot(middle, solution.x.reshape(n, n)[row], color="C0", label="result")
        right.set(title=f"cut at $x_2$ = {middle[row]:.2f}", xlabel="$x_1$")
        right.legend(frameon=False, fontsize=8)
    figure.suptitle(f"Total variation denoising, n = {n}, {len(solution.steps)} Newton steps")
    return figure


def summary(problem: ssn.SumProblem, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Tell how much is flat, and the distance to the clean data before and after."""
    mesh = problem.mesh_data
    jumps = np.abs(problem.arguments(solution.x))
    flat = float(np.mean(jumps <= 1e-6 * max(float(jumps.max(initial=0.0)), 1e-300)))
    rows = [("difference quotients that vanish", f"{100 * flat:.0f} %")]
    if mesh.noise > 0:
        before, after = (np.sqrt(np.mean((v - mesh.clean) ** 2)) for v in (mesh.data, solution.x))
        rows.append(("root mean square error, data and result", f"{before:.3f}, {after:.3f}"))
    return rows
