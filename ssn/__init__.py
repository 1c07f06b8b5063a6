"""ssn: semismooth Newton solver kernel with a benchmark harness."""

from . import costs
from .batch import solve_many
from .complementarity import ComplementarityProblem
from .composite import CompositeProblem
from .control import ControlProblem
from .costs import (
    Bounds,
    ConjugateCost,
    CountCost,
    ElasticNetCost,
    EuclideanBall,
    GroupSparseCost,
    HalfSpace,
    HingeLoss,
    HuberCost,
    Hyperplane,
    InsensitiveLoss,
    L1Ball,
    MultiBangCost,
    PiecewiseQuadraticCost,
    PlanarMultiBangCost,
    PositiveSemidefiniteCone,
    PowerCost,
    Product,
    QuantileLoss,
    ScaledCost,
    SecondOrderCone,
    Simplex,
    SparseCost,
    SumWithQuadratic,
    SwitchingCost,
    TranslatedCost,
)
from .errors import (
    InputError,
    MissingExtraError,
    NotConverged,
    ProblemFileError,
    SolveInterrupted,
    StateSolveError,
    StopSolve,
)
from .follow import follow, follow_meshes
from .globalization import DualSearch, EnvelopeSearch, FullStep, ResidualSearch
from .iteration import Iteration
from .nonlinear_control import NonlinearControlProblem
from .nonlinear_states import NonlinearStateModel, SemilinearState
from .nonlinear_time_state import OrdinaryDifferentialSystem, TimeDependentSemilinearState
from .pieces import Pieces
from .primal_dual import primal_dual
from .protocols import Cost, Equation, Linearization, SmoothPart
from .records import Certificate, StepRecord
from .reference import proximal_gradient
from .smooth import AffineMap, LeastSquares, Logistic, Quadratic, SmoothMap
from .solution import Solution
from .solve import solve
from .states import StateModel, SteadyState
from .status import Outcome
from .sum_problem import SumProblem, Term
from .time_state import TimeDependentState
from .traced import TracedEquation, custom_operation, declare_continuous
from .weight_path import placements, refit, vanishing_weight, weight_path
from .work import WorkCounts

__version__ = "0.1.0"

__all__ = [
    "AffineMap",
    "Bounds",
    "Certificate",
    "ComplementarityProblem",
    "CompositeProblem",
    "ConjugateCost",
    "ControlProblem",
    "Cost",
    "CountCost",
    "DualSearch",
    "ElasticNetCost",
    "EnvelopeSearch",
    "Equation",
    "EuclideanBall",
    "FullStep",
    "GroupSparseCost",
    "HalfSpace",
    "HingeLoss",
    "HuberCost",
    "Hyperplane",
    "InputError",
    "InsensitiveLoss",
    "Iteration",
    "L1Ball",
    "LeastSquares",
    "Linearization",
    "Logistic",
    "MissingExtraError",
    "MultiBangCost",
    "NonlinearControlProblem",
    "NonlinearStateModel",
    "NotConverged",
    "OrdinaryDifferentialSystem",
    "Outcome",
    "Pieces",
    "PiecewiseQuadraticCost",
    "PlanarMultiBangCost",
    "PositiveSemidefiniteCone",
    "PowerCost",
    "ProblemFileError",
    "Product",
    "Quadratic",
    "QuantileLoss",
    "ResidualSearch",
    "ScaledCost",
    "SecondOrderCone",
    "SemilinearState",
    "Simplex",
    "SmoothMap",
    "SmoothPart",
    "Solution",
    "SolveInterrupted",
    "SparseCost",
    "StateModel",
    "StateSolveError",
    "SteadyState",
    "StepRecord",
    "StopSolve",
    "SumProblem",
    "SumWithQuadratic",
    "SwitchingCost",
    "Term",
    "TimeDependentSemilinearState",
    "TimeDependentState",
    "TracedEquation",
    "TranslatedCost",
    "WorkCounts",
    "costs",
    "custom_operation",
    "declare_continuous",
    "follow",
    "follow_meshes",
    "placements",
    "primal_dual",
    "proximal_gradient",
    "refit",
    "solve",
    "solve_many",
    "vanishing_weight",
    "weight_path",
]
