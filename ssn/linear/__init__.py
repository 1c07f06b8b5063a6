"""Linear solvers for Newton systems, one a file; `CATALOGUE` is the explicit list."""

from .full_space import FullSpaceSolver
from .general import GeneralSolver
from .reduced import ReducedSolver
from .subspace import SubspaceSolver

CATALOGUE = {
    "subspace": SubspaceSolver,
    "reduced": ReducedSolver,
    "general": GeneralSolver,
    "full space": FullSpaceSolver,
}

__all__ = ["CATALOGUE", "FullSpaceSolver", "GeneralSolver", "ReducedSolver", "SubspaceSolver"]
