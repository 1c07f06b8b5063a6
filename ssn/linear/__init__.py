"""Linear solvers for Newton systems, one a file; `CATALOGUE` is the explicit list."""

from .augmented import AugmentedSolver
from .full_space import FullSpaceSolver
from .general import GeneralSolver
from .reduced import ReducedSolver
from .subspace import SubspaceSolver

CATALOGUE = {
    "subspace": SubspaceSolver,
    "reduced": ReducedSolver,
    "general": GeneralSolver,
    "full space": FullSpaceSolver,
    "augmented": AugmentedSolver,
}

__all__ = [
    "CATALOGUE",
    "AugmentedSolver",
    "FullSpaceSolver",
    "GeneralSolver",
    "ReducedSolver",
    "SubspaceSolver",
]
