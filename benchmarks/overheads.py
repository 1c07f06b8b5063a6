"""What tracing and batching cost, each beside the same written by hand in the same run.

    python benchmarks/overheads.py

Prints three lines: a traced evaluation with derivative at 1e6 unknowns over the matrix built by hand (target: at most
3); a Newton step of a traced problem with 10 unknowns in milliseconds (target: at most 1.5); `ssn.solve_many` on 1e5
friction problems of 3 unknowns over a Newton iteration written in NumPy for them (target: at most 5). Ratios are
medians of pairs within the run; milliseconds depend on the machine. Exit code 1 where a target is missed.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse as sp

import ssn

PAIRS = 7


def seconds(function: Callable[[], Any]) -> float:
    """Wall time of one call."""
    begin = time.perf_counter()
    function()
    return time.perf_counter() - begin


def ratio(ours: Callable[[], Any], theirs: Callable[[], Any]) -> float:
    """The median of ours over theirs, pair by pair, after one call of each."""
    ours()
    theirs()
    return statistics.median(seconds(ours) / seconds(theirs) for _ in range(PAIRS))


def traced_matrix() -> float:
    """K u - load + rho max(0, u - ceiling) for a 2-D Laplacian with 1e6 unknowns."""
    n = 1000
    one = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    stiffness = sp.csr_array(sp.kron(sp.eye_array(n), one) + sp.kron(one, sp.eye_array(n)))
    u, load = np.random.default_rng(0).standard_normal(n * n), np.ones(n * n)
    equation = ssn.TracedEquation(lambda u: stiffness @ u - load + 7.0 * np.maximum(0.0, u - 0.3), u)

    def by_hand() -> Any:
        return stiffness + sp.diags_array(7.0 * (u > 0.3))

    assert abs(equation.linearize(u).derivative - by_hand()).max() == 0.0
    return ratio(lambda: equation.linearize(u), by_hand)


def small_step() -> float:
    """Milliseconds of a Newton step with 10 traced unknowns, everything in `ssn.solve` included."""
    rng = np.random.default_rng(1)
    a, b = rng.standard_normal((10, 10)) + 5.0 * np.eye(10), rng.standard_normal(10)
    start = rng.standard_normal(10)

    def function(u: Any) -> Any:
        return a @ u + 0.1 * u**3 - b + 3.0 * np.maximum(0.0, u - 0.2) + 0.1 * np.exp(-u)

    steps = len(ssn.solve(function, start).require().steps)
    return 1e3 * statistics.median(seconds(lambda: ssn.solve(function, start)) for _ in range(50)) / steps


def friction(p: Any, stiffness: Any, gap: Any, mu: Any) -> tuple[Any, Any]:
    """Contact and Coulomb friction at a node: F and its Newton derivative, vectorised over the nodes."""
    u = np.einsum("bij,bj->bi", stiffness, p) - gap
    pressing = p[:, 0] - u[:, 0]
    normal, on = np.maximum(pressing, 0.0), pressing > 0
    t = p[:, 1:] - u[:, 1:]
    size = np.sqrt((t * t).sum(axis=1))
    stick = size <= mu * normal
    safe = np.where(size > 0, size, 1.0)
    shrink = np.where(stick, 1.0, mu * normal / safe)
    residual = np.concatenate([(p[:, 0] - normal)[:, None], p[:, 1:] - shrink[:, None] * t], axis=1)
    derivative = np.empty((len(p), 3, 3))
    d_pressing = np.eye(3)[0] - stiffness[:, 0, :]
    derivative[:, 0, :] = np.eye(3)[0] - on[:, None] * d_pressing
    unit = t / safe[:, None]
    turn = shrink[:, None, None] * (np.eye(2) - unit[:, :, None] * unit[:, None, :])
    projection = np.where(stick[:, None, None], np.eye(2), turn)
    derivative[:, 1:, :] = np.eye(3)[1:] - np.einsum(
        "bij,bjk->bik", projection, np.eye(3)[1:] - stiffness[:, 1:, :]
    )
    growth = unit[:, :, None] * (mu * on)[:, None, None] * d_pressing[:, None, :]
    derivative[:, 1:, :] -= np.where(stick[:, None, None], 0.0, growth)
    return residual, derivative


def many() -> float:
    """1e5 friction problems: `solve_many` over a plain vectorised Newton iteration."""
    batch = 100_000
    rng = np.random.default_rng(0)
    root = 0.2 * rng.standard_normal((batch, 3, 3))
    data = (
        root @ root.transpose(0, 2, 1) + np.eye(3),
        rng.standard_normal((batch, 3)),
        rng.uniform(0.1, 0.6, batch),
    )
    start = np.zeros((batch, 3))

    def by_hand() -> Any:
        p = start
        for _ in range(30):
            residual, derivative = friction(p, *data)
            if (np.sqrt((residual**2).mean(axis=1)) <= 1e-10).all():
                return p
            p = p - np.linalg.solve(derivative, residual[..., None])[..., 0]
        raise AssertionError("the plain iteration does not converge")

    assert ssn.solve_many(friction, start, parameters=data).converged.all()
    return ratio(lambda: ssn.solve_many(friction, start, parameters=data), by_hand)


def main() -> int:
    """Print the three lines."""
    missed = 0
    for what, function, target, unit in (
        ("traced evaluation with derivative, 1e6 unknowns, over K + diag by hand", traced_matrix, 3.0, ""),
        ("Newton step of a traced problem with 10 unknowns", small_step, 1.5, " ms"),
        ("solve_many, 1e5 friction problems, over a NumPy iteration by hand", many, 5.0, ""),
    ):
        figure = function()
        missed += figure > target
        print(f"{what}: {figure:.2f}{unit} (target {target:g}{unit})")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
