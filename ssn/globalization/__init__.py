"""Globalisations, one a file; `CATALOGUE` is the explicit list."""

from .dual import DualSearch
from .envelope import EnvelopeSearch
from .full import FullStep
from .residual import ResidualSearch

CATALOGUE = {"full": FullStep, "dual": DualSearch, "residual": ResidualSearch, "envelope": EnvelopeSearch}

__all__ = ["CATALOGUE", "DualSearch", "EnvelopeSearch", "FullStep", "ResidualSearch"]
