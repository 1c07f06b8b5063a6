"""A taut string over an elastic bed, solved by semismooth Newton steps."""

from .string import StringOverBed

__all__ = ["StringOverBed"]
