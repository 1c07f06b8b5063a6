"""What "auto" decides, one kind of problem a file: equation, linear solver, globalisation, start, and why."""

from .bounded import plan_nonlinear
from .complementarity import plan_complementarity
from .composite import plan_composite
from .control import plan_control
from .equation import plan_equation
from .plan import Plan
from .sums import plan_sum

__all__ = [
    "Plan",
    "plan_complementarity",
    "plan_composite",
    "plan_control",
    "plan_equation",
    "plan_nonlinear",
    "plan_sum",
]
