"""Plain NumPy functions as equations: Newton derivatives and active sets from the operations themselves.

Supported: arithmetic and powers; the smooth ufuncs of NumPy and expit, logit, erf, erfc, gammaln, xlogy of SciPy;
maximum, minimum, clip, abs, hypot, interp, max, min, linalg.norm (fixed selection at the kinks and smoothed form: see
`ssn.traced.kinks`); sum, mean, prod, cumsum, diff, dot, matmul, einsum, bincount; indexing, assignment to parts of an
array that was made with ``np.zeros_like(x)``, everything that moves numbers (reshape, transpose, roll, concatenate,
stack, split, pad, ...); ``A @ x`` with arrays, sparse arrays and LinearOperators; proximal maps of `ssn.costs`.
Everything else is refused by name: see `custom_operation`, and `declare_continuous` for comparisons.
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
