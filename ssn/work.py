"""Counts of what a solve has done: the currency in which methods are compared."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass
class WorkCounts:
    """Counters shared by a problem's operators during one solve; no wall time, so they repeat exactly.

    Attributes
    ----------
    state_solves : int
        Solves with the state operator or its adjoint, each right-hand side counted once.
    operator_products : int
        Products with a matrix or operator of the problem (A, A', a Hessian, a Newton derivative).
    factorizations : int
        Numeric factorisations, of the state operator or of a Newton matrix.
    symbolic_analyses : int
        Symbolic factorisations (orderings); at most one where the pattern stays.
    linear_solves : int
        Solves with a factorised Newton matrix.
    proximal_maps : int
        Evaluations of the proximal map.
    multigrid_cycles : int
        Cycles on the pair of state and adjoint, those for the norm of a residual among them.
    """

    state_solves: int = 0
    operator_products: int = 0
    factorizations: int = 0
    symbolic_analyses: int = 0
    linear_solves: int = 0
    proximal_maps: int = 0
    multigrid_cycles: int = 0

    def copy(self) -> WorkCounts:
        """Return a snapshot."""
        return WorkCounts(**vars(self))

    def since(self, earlier: WorkCounts) -> WorkCounts:
        """Return the work done since a snapshot."""
        return WorkCounts(**{k: v - getattr(earlier, k) for k, v in vars(self).items()})

    def as_dict(self) -> dict[str, int]:
        """Return the counters as a plain dictionary."""
        return dict(vars(self))
