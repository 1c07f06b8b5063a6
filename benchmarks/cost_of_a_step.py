"""What a solve costs in state solves, and what a Newton step costs beside linear solves.

    python benchmarks/cost_of_a_step.py [--n 256] [--alpha 1e-5] [--runs 7]

On the sparse elliptic problem, from zero. Prints the state solves of the whole solve, final checks included, with each
factorisation counted as what it costs in solves (measured here), and the time outside the linear solver and the state
model, a Newton step, in units of one product with the state matrix. Set-up before the first step and the checks after
the last one count as time of the steps. Processor time, medians of the runs, each from a fresh problem; run it with one
BLAS thread (OMP_NUM_THREADS=1). SSN_WITHOUT_CHOLMOD=1 shows the figures of the other back end.
"""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

import ssn
from ssn.linear import SubspaceSolver
from ssn.linear.direct import Factorization
from ssn.problem_file import load

PROBLEM = Path(__file__).resolve().parents[1] / "problems" / "sparse_elliptic.py"
MOST_SOLVES, MOST_PRODUCTS = 90, 60


class Clock:
    """Seconds inside the functions that it watches, calls from one to another counted once."""

    def __init__(self) -> None:
        self.seconds, self._depth = 0.0, 0

    def watch(self, owner: type, name: str) -> None:
        """Replace a method by one that is timed."""
        inside = getattr(owner, name)

        def timed(*arguments: Any, **options: Any) -> Any:
            self._depth += 1
            began = time.process_time()
            try:
                return inside(*arguments, **options)
            finally:
                self._depth -= 1
                if self._depth == 0:
                    self.seconds += time.process_time() - began

        setattr(owner, name, timed)


def median_seconds(run: Callable[[], Any], repeats: int) -> float:
    """Median processor seconds of a call."""
    taken = []
    for _ in range(repeats):
        began = time.process_time()
        run()
        taken.append(time.process_time() - began)
    return statistics.median(taken)


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--n", type=int, default=256)
    parser.add_argument("--alpha", type=float, default=1e-5)
    parser.add_argument("--runs", type=int, default=7, help="at least 5")
    options = parser.parse_args()
    runs = max(5, options.runs)
    file = load(PROBLEM)

    def build() -> ssn.ControlProblem:
        return file.build(n=options.n, alpha=options.alpha)

    matrix = build().state.matrix
    right = np.ones(matrix.shape[0])
    factors: list[Factorization] = []

    def factorise() -> None:
        factors[:] = [Factorization(matrix, symmetric=True, positive_definite=True)]

    clock = Clock()
    for owner, name in (
        (SubspaceSolver, "solve"),
        (ssn.SteadyState, "factor"),
        (ssn.SteadyState, "solve"),
        (ssn.SteadyState, "adjoint_solve"),
    ):
        clock.watch(owner, name)
    rows = []
    for _ in range(runs):
        # side by side, since the speed of a shared machine drifts
        factorisation = median_seconds(factorise, 1)
        one_solve = median_seconds(lambda: factors[0].solve(right), 5)
        one_product = median_seconds(lambda: matrix @ right, 40)
        problem = build()
        clock.seconds = 0.0
        began = time.process_time()
        solution = ssn.solve(problem).require()
        total = time.process_time() - began
        one_product = 0.5 * (one_product + median_seconds(lambda: matrix @ right, 40))
        outside = (total - clock.seconds) / len(solution.steps) / one_product
        rows.append((total, factorisation, one_solve, one_product, factorisation / one_solve, outside))
    seconds, factorisation, one_solve, one_product, in_solves, products = map(
        statistics.median, zip(*rows, strict=True)
    )
    work = solution.work
    total = work.state_solves + work.factorizations * in_solves

    def verdict(figure: float, most: int) -> str:
        return f"(target {most}: {'met' if figure <= most else 'NOT met'})"

    print(f"sparse_elliptic, n = {options.n}, alpha = {options.alpha:g}; {factors[0].method}; {runs} runs")
    print(f"solve                     {seconds:8.3f} s, {len(solution.steps)} Newton steps")
    print(f"one factorisation         {1e3 * factorisation:8.2f} ms, as much as {in_solves:.1f} state solves")
    print(f"one state solve           {1e3 * one_solve:8.2f} ms")
    print(f"one operator product      {1e3 * one_product:8.3f} ms")
    print(f"state solves              {work.state_solves:8d}   and {work.factorizations} factorisations")
    print(f"all counted in solves     {total:8.1f}   {verdict(total, MOST_SOLVES)}")
    print(f"a step outside solves     {products:8.1f}   operator products {verdict(products, MOST_PRODUCTS)}")


if __name__ == "__main__":
    main()
