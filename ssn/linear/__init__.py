"""Linear solvers for Newton systems, one a file; `CATALOGUE` is the explicit list."""

from .general import GeneralSolver
from .reduced import ReducedSolver
from .subspace import SubspaceSolver

CATALOGUE = {"subspace": SubspaceSolver, "reduced": ReducedSolver, "general": GeneralSolver}

__all__ = ["CATALOGUE", "GeneralSolver", "ReducedSolver", "SubspaceSolver"]
