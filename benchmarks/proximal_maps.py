"""Time of proximal maps and their derivatives on many components, against NumPy copies and sorts of the same array.

    python benchmarks/proximal_maps.py [--components 10000000] [--rounds 3]

Each row is the smallest of some rounds: one proximal map and one derivative (the projection alone for the simplex), in
the same run as the copy and the sort, so that the ratios hold on any machine. `peak` is the memory that the call takes
beside its argument, in arrays of the argument's size, results included.
"""

from __future__ import annotations

import argparse
import time
import tracemalloc
from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np

import ssn


def cases(n: int) -> list[tuple[str, Any, float]]:
    """Name, cost and step; n is a multiple of 100."""
    rng = np.random.default_rng(1)
    varying = rng.uniform(0.5, 1.5, n)
    return [
        ("bounds", ssn.Bounds(-1.0, 1.0), 0.5),
        ("bounds, one a component", ssn.Bounds(-varying, varying), 0.5),
        ("L1 with bounds", ssn.SparseCost(0.5, -1.0, 1.0), 0.5),
        ("L1, weights and bounds a component", ssn.SparseCost(varying, -varying, 2.0 * varying), 0.5),
        ("piecewise quadratic, 2 kinks", ssn.PiecewiseQuadraticCost(
            [-0.5, 0.5], [-1.0, 0.0, 1.0], [1.0, 0.0, 0.5], lower=-2.0, upper=2.0), 0.5),
        ("piecewise quadratic, 6 kinks", ssn.PiecewiseQuadraticCost(
            np.linspace(-1.5, 1.5, 6), np.linspace(-3.0, 3.0, 7), lower=-2.0, upper=2.0), 0.2),
        ("Huber", ssn.HuberCost(0.5, 0.3), 0.5),
        ("multi-bang, 3 values", ssn.MultiBangCost([-1.0, 0.0, 1.0], 0.5), 0.3),
        ("groups of 100 along the slow axis", ssn.GroupSparseCost(0.5, shape=(100, n // 100), axis=0), 10.0),
        ("groups of 10 in a row", ssn.GroupSparseCost(0.5, np.arange(n) // 10), 3.0),
        ("groups of 10 scattered", ssn.GroupSparseCost(0.5, rng.permutation(np.arange(n) // 10)), 3.0),
    ]  # fmt: skip


def smallest(function: Callable[[], Any], rounds: int) -> float:
    """The shortest of some rounds, in seconds."""
    best = np.inf
    for _ in range(rounds):
        begin = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - begin)
    return best


def peak(functions: list[Callable[[], Any]], size: int) -> float:
    """The memory that calls take whose results are kept, in arrays of `size` floats."""
    tracemalloc.start()
    kept = [function() for function in functions]
    found = tracemalloc.get_traced_memory()[1] / (8.0 * size)
    tracemalloc.stop()
    del kept
    return found


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--components", type=int, default=10_000_000)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--only", default="", help="rows whose name contains this")
    given = parser.parse_args()
    n = max(100, given.components // 100 * 100)
    v = 1.5 * np.random.default_rng(0).standard_normal(n)
    copy, sort = smallest(v.copy, given.rounds), smallest(lambda: np.sort(v), given.rounds)
    print(f"{n} components; a copy takes {1e3 * copy:.1f} ms, a sort {1e3 * sort:.1f} ms")
    print(f"{'':38}{'map':>8}{'derivative':>12}{'both':>8}  in copies {'peak':>8}")
    for name, cost, step in cases(n):
        if given.only not in name:
            continue
        maps = [partial(cost.prox, v, step), partial(cost.prox_derivative, v, step)]
        a, b = (smallest(one, given.rounds) / copy for one in maps)
        both = peak(maps, n)
        print(f"{name:38}{a:8.1f}{b:12.1f}{a + b:8.1f}{both:20.1f}", flush=True)
    for name, cost in (
        ("simplex", ssn.Simplex(1.0)),
        ("simplex, many positive", ssn.Simplex(float(n))),
        ("L1 ball", ssn.L1Ball(0.1 * n)),
    ):
        if given.only not in name:
            continue
        project = partial(cost.prox, v, 1.0)
        a = smallest(project, given.rounds) / sort
        print(f"{name:38}{a:8.2f}  in sorts{peak([project], n):39.1f}", flush=True)


if __name__ == "__main__":
    main()
