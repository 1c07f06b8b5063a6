"""Complementarity from seeded starts: share solved, Newton steps, failures by outcome, and what plain steps do.

    python benchmarks/complementarity_report.py [--starts 100] [--only NAME]

Each line: share solved (converged, and a solution by a check that shares nothing with the kernel), mean and largest
number of Newton steps of the solved ones, share of plain full steps that fail from the same starts, outcomes of the
failures. Exit 1 if a claim is wrong, a problem is below 90 % or all together below 98 %.
"""

from __future__ import annotations

import argparse
import importlib.util
import sys
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

import ssn

_PATH = Path(__file__).resolve().parents[1] / "tests" / "external" / "complementarity_collection.py"
CHECKED = 1e-6  # residual of the independent check, F scaled by its rows


def load_collection() -> Any:
    """Return the module that holds the published problems, loaded by path."""
    spec = importlib.util.spec_from_file_location("complementarity_collection", _PATH)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules.setdefault(spec.name, module)
    spec.loader.exec_module(module)
    return module


@dataclass
class Tally:
    """What happened from a number of starts."""

    name: str
    starts: int = 0
    solved: int = 0
    listed: int = 0
    wrong_claims: int = 0
    steps: list[int] = field(default_factory=list)
    failures: Counter[str] = field(default_factory=Counter)
    failed_starts: list[int] = field(default_factory=list)
    plain_failures: int = 0

    @property
    def share(self) -> float:
        return self.solved / self.starts

    def line(self) -> str:
        mean = f"{np.mean(self.steps):6.1f} {max(self.steps):4d}" if self.steps else "     -    -"
        named = ", ".join(f"{n} {outcome}" for outcome, n in self.failures.most_common()) or "-"
        wrong = f"  WRONG CLAIMS: {self.wrong_claims}" if self.wrong_claims else ""
        return (
            f"{self.name:24s} {100 * self.share:5.1f} % {mean}   {100 * self.plain_failures / self.starts:5.1f} %"
            f"   {named}{wrong}"
        )


def statement(published: Any, **options: Any) -> ssn.ComplementarityProblem:
    """Return the problem as the kernel sees it."""
    if published.affine:
        zero = np.zeros(published.size)
        F: Any = ssn.AffineMap(published.derivative(zero), published.value(zero))
    else:
        F = ssn.SmoothMap(published.value, published.derivative)
    return ssn.ComplementarityProblem(F, published.lower, published.upper, size=published.size, **options)


def measure(
    published: Any, starts: np.ndarray, *, plain: bool = True, form: str | None = None, **options: Any
) -> Tally:
    """Solve from each start; plain full steps from the same starts for comparison."""
    tally = Tally(published.name)
    problem = statement(published, **({} if form is None else {"form": form}))
    for index, start in enumerate(starts):
        solution = ssn.solve(problem, start, **options)
        right = published.residual(solution.x) <= CHECKED
        tally.starts += 1
        tally.solved += solution.converged and right
        tally.wrong_claims += solution.converged and not right
        if solution.converged and right:
            tally.steps.append(len(solution.steps))
            near = 1e-2 if published.member else 1e-3
            tally.listed += not published.solutions or published.distance(solution.x) <= near
        else:
            tally.failures[solution.outcome.value] += 1
            tally.failed_starts.append(index)
        if plain:
            other = ssn.solve(problem, start, globalization="full")
            tally.plain_failures += not (other.converged and published.residual(other.x) <= CHECKED)
    return tally


def cyclic(collection: Any, n: int) -> Any:
    """Return the cyclic problem of order n in the form of the collection."""
    return collection.linear(
        f"cyclic shift, n = {n}", "", "", collection.cyclic_matrix(n), -np.ones(n), (np.full(n, 1 / 3),),
        collection.CYCLIC_SEED + n, box=(np.full(n, -2.0), np.full(n, 2.0)),
    )  # fmt: skip


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--starts", type=int, default=100)
    parser.add_argument("--cyclic-starts", type=int, default=200)
    parser.add_argument("--only", default="", help="problems whose name contains this")
    parser.add_argument("--form", default=None, choices=["mid", "fischer-burmeister"])
    options = parser.parse_args(arguments)
    collection = load_collection()
    print(f"{'problem':24s}  solved   mean  max   plain fail   failures by outcome")
    tallies = []
    for published in collection.COLLECTION:
        if options.only.lower() in published.name.lower():
            tallies.append(measure(published, published.starts(options.starts), form=options.form))
            print(tallies[-1].line(), flush=True)
    cycles = []
    for n in collection.CYCLIC_SIZES:
        published = cyclic(collection, n)
        if options.only.lower() in published.name.lower():
            cycles.append(measure(published, published.starts(options.cyclic_starts), form=options.form))
            print(cycles[-1].line(), flush=True)
    if not tallies + cycles:
        parser.error(f"no problem is called {options.only!r}")
    wrong = sum(t.wrong_claims for t in tallies + cycles)
    ok = wrong == 0 and all(t.share == 1.0 for t in cycles)
    if tallies:
        total = sum(t.solved for t in tallies) / sum(t.starts for t in tallies)
        print(f"{len(tallies)} published problems: {100 * total:.1f} % solved, {wrong} wrong claims")
        ok = ok and total >= 0.98 and min(t.share for t in tallies) >= 0.9
    return 0 if ok else 1


if __name__ == "__main__":
    sys.exit(main())
