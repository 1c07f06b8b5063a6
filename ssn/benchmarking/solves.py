"""Time and memory of solves."""

from __future__ import annotations

from typing import Any

from ..solution import Solution
from ..solve import solve
from .cases import ProblemBenchmarks


class SolveBenchmarks(ProblemBenchmarks):
    """Seconds and memory of one solve."""

    number = 1
    rounds = 1
    repeat = (5, 11, 20.0)
    warmup_time = 0.0

    def setup(self, *values: Any) -> None:
        """Assemble."""
        self._fresh = self._build(values)

    def _solve(self) -> Solution:
        # a problem keeps its factorisation: solving it a second time would measure something else
        problem = self.__dict__.pop("_fresh")
        return solve(problem, tolerance=self.tolerance).require()

    def time_solve(self, *values: Any) -> None:
        """One solve, factorisation included, assembly excluded."""
        self._solve()

    def peakmem_solve(self, *values: Any) -> None:
        """Assembly and one solve."""
        self._solve()

    def peakmem_setup(self, *values: Any) -> None:
        """Assembly only: the baseline of `peakmem_solve`."""
