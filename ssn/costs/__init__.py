"""Nonsmooth costs, one family a file; `CATALOGUE` is the explicit list that the contract tests run over."""

from .balls import EuclideanBall, L1Ball
from .bounds import Bounds
from .count import CountCost
from .derivative import DiagonalDerivative
from .elastic_net import ElasticNetCost
from .envelope import ConvexEnvelope
from .group import GroupSparseCost
from .halfspace import HalfSpace, Hyperplane
from .huber import HuberCost
from .losses import HingeLoss, InsensitiveLoss, QuantileLoss
from .multibang import MultiBangCost
from .operations import ConjugateCost, ScaledCost, SumWithQuadratic, TranslatedCost
from .piecewise import PiecewiseQuadraticCost
from .planar import PlanarMultiBangCost
from .power import PowerCost
from .product import Product
from .second_order_cone import SecondOrderCone
from .semidefinite import PositiveSemidefiniteCone
from .simplex import Simplex
from .sparse import SparseCost
from .switching import SwitchingCost

CATALOGUE = (
    SparseCost,
    Bounds,
    PiecewiseQuadraticCost,
    ElasticNetCost,
    HuberCost,
    HingeLoss,
    QuantileLoss,
    InsensitiveLoss,
    Simplex,
    EuclideanBall,
    L1Ball,
    HalfSpace,
    Hyperplane,
    SecondOrderCone,
    PositiveSemidefiniteCone,
    Product,
    CountCost,
    PowerCost,
    ConvexEnvelope,
    GroupSparseCost,
    SwitchingCost,
    MultiBangCost,
    PlanarMultiBangCost,
    SumWithQuadratic,
    ScaledCost,
    TranslatedCost,
    ConjugateCost,
)

__all__ = [
    "CATALOGUE",
    "Bounds",
    "ConjugateCost",
    "ConvexEnvelope",
    "CountCost",
    "DiagonalDerivative",
    "ElasticNetCost",
    "EuclideanBall",
    "GroupSparseCost",
    "HalfSpace",
    "HingeLoss",
    "HuberCost",
    "Hyperplane",
    "InsensitiveLoss",
    "L1Ball",
    "MultiBangCost",
    "PiecewiseQuadraticCost",
    "PlanarMultiBangCost",
    "PositiveSemidefiniteCone",
    "PowerCost",
    "Product",
    "QuantileLoss",
    "ScaledCost",
    "SecondOrderCone",
    "Simplex",
    "SparseCost",
    "SumWithQuadratic",
    "SwitchingCost",
    "TranslatedCost",
]
