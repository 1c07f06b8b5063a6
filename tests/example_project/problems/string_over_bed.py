"""A taut string over an elastic bed.

Source: textbook model; caution: small slopes only.
"""

from taut_string import StringOverBed

SIZES = (50, 100, 200)
VERSION = "1"


def build(n: int = 100, stiffness: float = 1e4) -> StringOverBed:
    return StringOverBed(n, stiffness=stiffness)


def known(problem: StringOverBed, solution) -> list[dict]:
    y = solution.x
    push = problem.h * problem.stiffness * float(problem.depth(y).clip(0.0).sum())
    hanging = float((problem.tension @ y).sum())
    load = problem.h * problem.weight * y.size
    return [
        {
            "what": "bed and ends carry the weight, N",
            "expected": load,
            "computed": push - hanging,
            "tolerance": 1e-6 * load,
            "source": "balance of forces",
        }
    ]
