"""Nonsmooth costs, one family a file; `CATALOGUE` is the explicit list that the contract tests run over."""

from .bounds import Bounds
from .derivative import DiagonalDerivative
from .sparse import SparseCost

CATALOGUE = (SparseCost, Bounds)

__all__ = ["CATALOGUE", "Bounds", "DiagonalDerivative", "SparseCost"]
