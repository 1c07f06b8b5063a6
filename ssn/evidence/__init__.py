"""Evidence for and against a solution: rates, derivative checks, agreement, certificates, mesh studies."""

from .check import Check
from .compare import Assessment, assess, compare
from .derivative import check_derivative
from .known import KnownValue
from .mesh_study import MeshRow, MeshStudy, mesh_study
from .method_result import MethodResult
from .rate import RateVerdict, rate

__all__ = [
    "Assessment",
    "Check",
    "KnownValue",
    "MeshRow",
    "MeshStudy",
    "MethodResult",
    "RateVerdict",
    "assess",
    "check_derivative",
    "compare",
    "mesh_study",
    "rate",
]
