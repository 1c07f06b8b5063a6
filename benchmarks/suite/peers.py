"""Other methods on the sparse elliptic problem, in the same run as ours: every figure is a ratio, or a check on one.

Ratios are our seconds (or state solves, a cycle on the pair of state and adjoint counted as one) divided by the peer's,
medians of five runs and more where the peer is not slower than `PATIENCE` allows, each from a fresh problem;
factorisation included, assembly excluded.

- lbfgsb: SciPy's L-BFGS-B with our state solver, u = p - m with 0 <= p, m <= bound for the L1 cost, stopped at a
  relative objective gap of 1e-10;
- proximal_gradient: `ssn.proximal_gradient`, stopped at a proven relative distance of 1e-7;
- interior_point: Clarabel, tolerance 1e-10, with the state as a variable and its equation as a constraint;
- yardstick: one plain pyamg solve of K y = f to 1e-9: Ruge-Stueben set-up and conjugate gradients.

The distances say that the peers have solved the same problem. All peers of a case run in one process, one after the
other, whichever figure asks first.
"""

from __future__ import annotations

import statistics
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyamg
import scipy.sparse as sp
from scipy.optimize import minimize

import ssn
from ssn.benchmarking import CaseFailedError, remembered
from ssn.problem_file import load

PROBLEM = Path(__file__).resolve().parents[2] / "problems" / "sparse_elliptic.py"
ALPHA = 1e-5
GAP = 1e-10
RUNS = 5
# seconds after which a peer is not run again
PATIENCE = 20.0


def ours(problem: ssn.ControlProblem) -> tuple[np.ndarray, int]:
    solution = ssn.solve(problem).require()
    return solution.x, solution.work.state_solves + solution.work.multigrid_cycles


def lbfgsb(problem: ssn.ControlProblem, least: float) -> tuple[np.ndarray, int]:
    """`least` is the minimum, for the stopping rule."""
    n, bound = problem.unknowns, problem.cost.upper
    mean = problem.weights.mean()  # variables and objective in units in which the mesh does not show
    price = problem.cost.beta * problem.weights / mean
    before = problem.work.copy()

    def objective(parts: np.ndarray) -> tuple[float, np.ndarray]:
        value, gradient = problem.smooth(parts[:n] - parts[n:])
        gradient = gradient * problem.weights / mean
        value = value / mean + float(price @ (parts[:n] + parts[n:]))
        return value, np.concatenate([gradient + price, price - gradient])

    def near_enough(intermediate_result: Any) -> None:
        if intermediate_result.fun * mean - least <= GAP * abs(least):
            raise StopIteration

    found = minimize(
        objective, np.zeros(2 * n), jac=True, method="L-BFGS-B", bounds=[(0.0, float(bound))] * (2 * n),
        callback=near_enough,
        options={"maxcor": 20, "ftol": 0.0, "gtol": 0.0, "maxiter": 100_000, "maxfun": 200_000},
    )  # fmt: skip
    if found.fun * mean - least > 2.0 * GAP * abs(least):
        raise CaseFailedError(f"L-BFGS-B stopped early: {found.message}, {found.nit} iterations")
    return found.x[:n] - found.x[n:], problem.work.since(before).state_solves


def proximal_gradient(problem: ssn.ControlProblem) -> tuple[np.ndarray, int]:
    result = ssn.proximal_gradient(problem)
    return result.x, result.work.state_solves


def interior_point(problem: ssn.ControlProblem) -> tuple[np.ndarray, int]:
    import clarabel

    n, states = problem.unknowns, problem.state.size
    mass, scale = problem.weights, 1.0 / problem.weights.mean()
    curvature = sp.diags_array(scale * problem.alpha * mass)
    observed = sp.diags_array(scale * problem.observations.vector)
    quadratic = sp.block_diag([observed, curvature, curvature], format="csc")
    price = scale * problem.cost.beta * mass
    linear = np.concatenate([-(observed @ problem.target), price, price])
    control = problem.control_operator
    parts = sp.hstack([sp.csr_array((2 * n, states)), sp.eye_array(2 * n)], format="csr")
    rows = [sp.hstack([problem.state.matrix, -control, control]), -parts, parts]
    limits = np.concatenate([np.zeros(states + 2 * n), np.full(2 * n, float(problem.cost.upper))])
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = GAP
    cones = [clarabel.ZeroConeT(states), clarabel.NonnegativeConeT(4 * n)]
    upper = sp.triu(quadratic, format="csc")
    matrix = sp.vstack(rows, format="csc")
    found = clarabel.DefaultSolver(upper, linear, matrix, limits, cones, settings).solve()
    if str(found.status) not in ("Solved", "AlmostSolved"):
        raise CaseFailedError(f"Clarabel: {found.status}")
    x = np.asarray(found.x)[states:]
    return x[:n] - x[n:], 0


def yardstick(problem: ssn.ControlProblem) -> tuple[np.ndarray, int]:
    load_vector = problem.weights
    with_hierarchy = pyamg.ruge_stuben_solver(sp.csr_matrix(problem.state.matrix))
    return with_hierarchy.solve(load_vector, tol=1e-9, accel="cg"), 1


def timed(
    build: Callable[[], ssn.ControlProblem], method: Callable[..., Any]
) -> tuple[float, np.ndarray, int]:
    """Median of the seconds, the point, and the state solves."""
    seconds: list[float] = []
    while len(seconds) < RUNS and sum(seconds) < PATIENCE:
        problem = build()
        began = time.perf_counter()
        x, solves = method(problem)
        seconds.append(time.perf_counter() - began)
    return statistics.median(seconds), x, solves


def race(n: int) -> dict[str, dict[str, Any]]:
    """All methods on one mesh; a peer that fails leaves its reason."""
    file = load(PROBLEM)

    def build() -> ssn.ControlProblem:
        return file.build(n=n, alpha=ALPHA)

    problem = build()
    timed(build, ours)  # what is done once a process
    seconds, x, solves = timed(build, ours)
    least = problem.objective(x)
    norm = problem.controls.norm
    results: dict[str, dict[str, Any]] = {"ours": {"seconds": seconds, "solves": solves}}
    peers: dict[str, Callable[..., Any]] = {
        "yardstick": yardstick,
        "proximal_gradient": proximal_gradient,
        "lbfgsb": lambda p: lbfgsb(p, least),
        "interior_point": interior_point,
    }
    for name, method in peers.items():
        try:
            took, point, peer_solves = timed(build, method)
        except Exception as error:
            results[name] = {"error": f"{type(error).__name__}: {error}"}
            continue
        results[name] = {
            "seconds": took,
            "solves": peer_solves,
            "distance": norm(point - x) / norm(x),
        }
    return results


class Peers:
    """Ours over theirs: below 1 we are faster; lower is better."""

    params = ([64, 256],)
    param_names = ("n",)
    version = "2, problem 1"
    timeout = 2400

    def setup_cache(self) -> str:
        return tempfile.mkdtemp(prefix="peers-", dir=Path.cwd())

    setup_cache.timeout = 60

    def _result(self, directory: str, n: int, name: str) -> dict[str, Any]:
        results = remembered(directory, f"peers {n}", lambda: race(n))
        if "error" in results[name]:
            raise CaseFailedError(results[name]["error"])
        return results[name]

    def _seconds(self, directory: str, n: int, name: str) -> float:
        mine, theirs = self._result(directory, n, "ours"), self._result(directory, n, name)
        return mine["seconds"] / theirs["seconds"]

    def _solves(self, directory: str, n: int, name: str) -> float:
        mine, theirs = self._result(directory, n, "ours"), self._result(directory, n, name)
        return mine["solves"] / theirs["solves"]

    def track_seconds_to_yardstick(self, directory: str, n: int) -> float:
        return self._seconds(directory, n, "yardstick")

    def track_seconds_to_lbfgsb(self, directory: str, n: int) -> float:
        return self._seconds(directory, n, "lbfgsb")

    def track_seconds_to_proximal_gradient(self, directory: str, n: int) -> float:
        return self._seconds(directory, n, "proximal_gradient")

    def track_seconds_to_interior_point(self, directory: str, n: int) -> float:
        return self._seconds(directory, n, "interior_point")

    def track_solves_to_lbfgsb(self, directory: str, n: int) -> float:
        return self._solves(directory, n, "lbfgsb")

    def track_solves_to_proximal_gradient(self, directory: str, n: int) -> float:
        return self._solves(directory, n, "proximal_gradient")

    def track_distance_of_lbfgsb(self, directory: str, n: int) -> float:
        return self._result(directory, n, "lbfgsb")["distance"]

    def track_distance_of_proximal_gradient(self, directory: str, n: int) -> float:
        return self._result(directory, n, "proximal_gradient")["distance"]

    def track_distance_of_interior_point(self, directory: str, n: int) -> float:
        return self._result(directory, n, "interior_point")["distance"]


for _name in [name for name in vars(Peers) if name.startswith("track_")]:
    getattr(Peers, _name).unit = "relative" if "distance" in _name else "ratio"
