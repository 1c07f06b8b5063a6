"""Linear solvers for Newton systems, one a file; `CATALOGUE` is the explicit list."""

from .augmented import AugmentedSolver
from .coupled import CoupledSolver
from .full_space import FullSpaceSolver
from .general import GeneralSolver
from .normal import NormalSolver
from .primal_dual import PrimalDualSolver
from .reduced import ReducedSolver
from .schur import SchurSolver
from .subspace import SubspaceSolver

CATALOGUE = {
    "subspace": SubspaceSolver,
    "coupled": CoupledSolver,
    "schur": SchurSolver,
    "reduced": ReducedSolver,
    "general": GeneralSolver,
    "full space": FullSpaceSolver,
    "augmented": AugmentedSolver,
    "primal-dual": PrimalDualSolver,
}

__all__ = [
    "CATALOGUE",
    "AugmentedSolver",
    "CoupledSolver",
    "FullSpaceSolver",
    "GeneralSolver",
    "NormalSolver",
    "PrimalDualSolver",
    "ReducedSolver",
    "SchurSolver",
    "SubspaceSolver",
]
