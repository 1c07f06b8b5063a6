"""Plain NumPy functions as equations: Newton derivatives and active sets from the operations themselves.

Each nonsmooth operation has a fixed selection at its kinks and a smoothed form, both in `ssn.traced.kinks`.
"""

from . import conditions, custom, kinks, reductions, shapes, smooth
from .array import TracedArray
from .assemble import TracedDerivative
from .conditions import declare_continuous
from .custom import custom_operation
from .equation import TracedEquation

# Imported because they fill the tables of array.py.
OPERATIONS = (smooth, kinks, shapes, reductions, conditions, custom)

__all__ = [
    "OPERATIONS",
    "TracedArray",
    "TracedDerivative",
    "TracedEquation",
    "custom_operation",
    "declare_continuous",
]
