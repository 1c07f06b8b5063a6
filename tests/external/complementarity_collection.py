"""Published complementarity problems with known solutions, derivatives by hand, and a box of starts with a seed each.

The classic small ones stand in problems/complementarity_set.py; here they are joined by optimality systems, and by
three discretised problems.

Boxes and seeds were fixed before any method was tuned on them. Starts are drawn uniformly from the box, which reaches
over both sides of the bounds, except where the source says that the problem means nothing there. Components of
`LINE` problems (no bound, free multipliers) are drawn in the same way.

Solutions are listed to the printed digits or better; `refined` carries them to rounding level, one smooth piece at a
time, with a root finder that shares nothing with the kernel.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import scipy.optimize
import scipy.sparse as sp

from ssn.problem_file import load_module

INF = np.inf


def problem_file(name: str) -> Any:
    """The module problems/name.py."""
    return load_module(Path(__file__).resolve().parents[2] / "problems" / f"{name}.py")


classic = problem_file("complementarity_set")
Published, linear = classic.Published, classic.linear
_array, _box, _orthant = classic._array, classic._box, classic._orthant
cyclic_matrix = classic.cyclic_matrix


def refined(problem: Published, x: np.ndarray) -> np.ndarray:
    """Solve the smooth piece that a printed solution lies on: bounds where F is off zero there, F = 0 elsewhere."""
    force = problem.value(x)
    low = (x - problem.lower <= force) & (x - problem.lower < 1e-3)
    high = (problem.upper - x <= -force) & (problem.upper - x < 1e-3)
    free = np.flatnonzero(~(low | high))
    x = np.where(low, problem.lower, np.where(high, problem.upper, x))
    if free.size == 0:
        return x

    def fill(y: np.ndarray) -> np.ndarray:
        full = x.copy()
        full[free] = y
        return full

    def dense(y: np.ndarray) -> np.ndarray:
        derivative = problem.derivative(fill(y))
        return (derivative.toarray() if sp.issparse(derivative) else derivative)[np.ix_(free, free)]

    found = scipy.optimize.root(lambda y: problem.value(fill(y))[free], x[free], jac=dense, tol=1e-14)
    return fill(found.x)


# --- optimality systems of the test examples of Hock and Schittkowski ---------------------------------------------

_HS = "W. Hock, K. Schittkowski, Test Examples for Nonlinear Programming Codes (1981), problem {}"


def optimality(
    gradient: Callable[[np.ndarray], np.ndarray],
    hessian: Callable[[np.ndarray], np.ndarray],
    constraints: Callable[[np.ndarray], np.ndarray],
    jacobian: Callable[[np.ndarray], np.ndarray],
    curvature: Callable[[np.ndarray, np.ndarray], np.ndarray],
    n: int,
) -> tuple[Callable[[np.ndarray], np.ndarray], Callable[[np.ndarray], np.ndarray]]:
    """F(x, m) = (f' - c'^T m, c) for min f subject to c >= 0 with multipliers m >= 0; `curvature` is sum m_i c_i''."""

    def value(z: np.ndarray) -> np.ndarray:
        x, m = z[:n], z[n:]
        with np.errstate(all="ignore"):
            return np.concatenate([gradient(x) - jacobian(x).T @ m, constraints(x)])

    def derivative(z: np.ndarray) -> np.ndarray:
        x, m = z[:n], z[n:]
        with np.errstate(all="ignore"):
            rows = jacobian(x)
            return np.block([[hessian(x) - curvature(x, m), -rows.T], [rows, np.zeros((m.size, m.size))]])

    return value, derivative


def _hs_problem(
    number: int,
    maps: tuple[Callable[[np.ndarray], np.ndarray], Callable[[np.ndarray], np.ndarray]],
    x: np.ndarray,
    multipliers: np.ndarray,
    x_bounds: tuple[np.ndarray, np.ndarray],
    x_box: tuple[np.ndarray, np.ndarray],
    m_box: tuple[float, float],
    seed: int,
    digits: float,
    affine: bool = False,
    complete: bool = True,
    caution: str = "",
) -> Published:
    k = multipliers.size
    return Published(
        name=f"Hock-Schittkowski {number}",
        source=_HS.format(number),
        provenance="memory",
        value=maps[0],
        derivative=maps[1],
        lower=np.concatenate([x_bounds[0], np.zeros(k)]),
        upper=np.concatenate([x_bounds[1], np.full(k, INF)]),
        box=(
            np.concatenate([x_box[0], np.full(k, m_box[0])]),
            np.concatenate([x_box[1], np.full(k, m_box[1])]),
        ),
        seed=seed,
        solutions=(np.concatenate([x, multipliers]),),
        digits=digits,
        complete=complete,
        caution=caution,
        affine=affine,
    )


def _no_curvature(x: np.ndarray, m: np.ndarray) -> np.ndarray:
    return np.zeros((x.size, x.size))


def _line(n: int) -> tuple[np.ndarray, np.ndarray]:
    return np.full(n, -INF), np.full(n, INF)


HS2 = Published(
    name="Hock-Schittkowski 2",
    source=_HS.format(2) + " (Rosenbrock's function with x2 >= 1.5)",
    provenance="memory",
    value=lambda x: np.array([
        -400 * x[0] * (x[1] - x[0] ** 2) - 2 * (1 - x[0]),
        200 * (x[1] - x[0] ** 2),
    ]),
    derivative=lambda x: np.array([
        [1200 * x[0] ** 2 - 400 * x[1] + 2, -400 * x[0]],
        [-400 * x[0], 200.0],
    ]),
    lower=_array(-INF, 1.5),
    upper=_array(INF, INF),
    box=_box(2, -3.0, 3.0),
    seed=108,
    solutions=(_array(1.224370749, 1.5), _array(-1.221026882, 1.5), _array(-0.0033445, 1.5)),
    digits=1e-5,
    caution="a minimiser, a local minimiser and a maximiser between them solve the first-order system",
)  # fmt: skip

_C35 = np.array([[4, 2, 2], [2, 4, 0], [2, 0, 2]], dtype=float)
_A35 = np.array([[-1.0, -1.0, -2.0]])
HS35 = _hs_problem(
    35,
    optimality(
        lambda x: _C35 @ x - _array(8, 6, 4),
        lambda x: _C35,
        lambda x: 3 + _A35 @ x,
        lambda x: _A35,
        _no_curvature,
        3,
    ),
    _array(4 / 3, 7 / 9, 4 / 9),
    _array(2 / 9),
    _orthant(3),
    _box(3, -3.0, 3.0),
    (-2.0, 2.0),
    109,
    1e-9,
    affine=True,
)

_C76 = np.array([[2, 0, -1, 0], [0, 1, 0, 0], [-1, 0, 2, 1], [0, 0, 1, 1]], dtype=float)
_A76 = np.array([[-1, -2, -1, -1], [-3, -1, -2, 1], [0, 1, 4, 0]], dtype=float)
HS76 = _hs_problem(
    76,
    optimality(
        lambda x: _C76 @ x - _array(1, 3, -1, 1),
        lambda x: _C76,
        lambda x: _A76 @ x - _array(-5, -4, 1.5),
        lambda x: _A76,
        _no_curvature,
        4,
    ),
    _array(0.2727273, 2.090909, 0, 0.5454545),
    _array(0.4545455, 0, 0),
    _orthant(4),
    _box(4, -3.0, 3.0),
    (-2.0, 2.0),
    110,
    1e-5,
    affine=True,
)


def _c43(x: np.ndarray) -> np.ndarray:
    a, b, c, d = x
    return np.array([
        8 - a * a - b * b - c * c - d * d - a + b - c + d,
        10 - a * a - 2 * b * b - c * c - 2 * d * d + a + d,
        5 - 2 * a * a - b * b - c * c - 2 * a + b + d,
    ])  # fmt: skip


def _j43(x: np.ndarray) -> np.ndarray:
    a, b, c, d = x
    return np.array([
        [-2 * a - 1, -2 * b + 1, -2 * c - 1, -2 * d + 1],
        [-2 * a + 1, -4 * b, -2 * c, -4 * d + 1],
        [-4 * a - 2, -2 * b + 1, -2 * c, 1],
    ])  # fmt: skip


HS43 = _hs_problem(
    43,
    optimality(
        lambda x: _array(2, 2, 4, 2) * x + _array(-5, -5, -21, 7),
        lambda x: np.diag(_array(2, 2, 4, 2)),
        _c43,
        _j43,
        lambda x, m: np.diag(
            -m[0] * _array(2, 2, 2, 2) - m[1] * _array(2, 4, 2, 4) - m[2] * _array(4, 2, 2, 0)
        ),
        4,
    ),
    _array(0, 1, 2, -1),
    _array(1, 0, 2),
    _line(4),
    _box(4, -3.0, 3.0),
    (-1.0, 4.0),
    111,
    1e-9,
    caution="convex; F is not monotone for negative multipliers",
)


def _c66(x: np.ndarray) -> np.ndarray:
    return np.array([x[1] - np.exp(x[0]), x[2] - np.exp(x[1])])


HS66 = _hs_problem(
    66,
    optimality(
        lambda x: _array(-0.8, 0, 0.2),
        lambda x: np.zeros((3, 3)),
        _c66,
        lambda x: np.array([[-np.exp(x[0]), 1, 0], [0, -np.exp(x[1]), 1]]),
        lambda x, m: np.diag([-m[0] * np.exp(x[0]), -m[1] * np.exp(x[1]), 0.0]),
        3,
    ),
    _array(0.1841264879, 1.202167873, 3.327322322),
    _array(0.6655, 0.2),
    (np.zeros(3), _array(100, 100, 10)),
    (_array(-1, -1, -1), _array(3, 3, 11)),
    (-1.0, 2.0),
    112,
    1e-3,
    caution="linear objective: the Newton matrix is singular at many active sets",
)


HS34 = _hs_problem(
    34,
    optimality(
        lambda x: _array(-1, 0, 0),
        lambda x: np.zeros((3, 3)),
        _c66,
        lambda x: np.array([[-np.exp(x[0]), 1, 0], [0, -np.exp(x[1]), 1]]),
        lambda x, m: np.diag([-m[0] * np.exp(x[0]), -m[1] * np.exp(x[1]), 0.0]),
        3,
    ),
    _array(np.log(np.log(10)), np.log(10), 10),
    _array(0.4342944819, 0.04342944819),
    (np.zeros(3), _array(100, 100, 10)),
    (_array(-1, -1, -1), _array(3, 3, 11)),
    (-1.0, 2.0),
    113,
    1e-8,
    caution="linear objective, solution at a vertex",
)

_E86 = _array(-15, -27, -36, -18, -12)
_C86 = np.array([
    [30, -20, -10, 32, -10], [-20, 39, -6, -31, 32], [-10, -6, 10, -6, -10], [32, -31, -6, 39, -20],
    [-10, 32, -10, -20, 30],
], dtype=float)  # fmt: skip
_D86 = _array(4, 8, 10, 6, 2)
_A86 = np.array([
    [-16, 2, 0, 1, 0], [0, -2, 0, 0.4, 2], [-3.5, 0, 2, 0, 0], [0, -2, 0, -4, -1], [0, -9, -2, 1, -2.8],
    [2, 0, -4, 0, 0], [-1, -1, -1, -1, -1], [-1, -2, -3, -2, -1], [1, 2, 3, 4, 5], [1, 1, 1, 1, 1],
])  # fmt: skip
_B86 = _array(-40, -2, -0.25, -4, -4, -1, -40, -60, 5, 1)

HS86 = _hs_problem(
    86,
    optimality(
        lambda x: _E86 + 2 * _C86 @ x + 3 * _D86 * x**2,
        lambda x: 2 * _C86 + np.diag(6 * _D86 * x),
        lambda x: _A86 @ x - _B86,
        lambda x: _A86,
        _no_curvature,
        5,
    ),
    _array(0.3, 0.3334676, 0.4, 0.4283101, 0.2239649),
    _array(0, 0, 5.1740, 0, 3.0611, 11.8395, 0, 0, 0.1039, 0),
    _orthant(5),
    _box(5, -1.0, 2.0),
    (-2.0, 12.0),
    114,
    2e-3,
    caution="the first problem of A. Colville, IBM New York Scientific Center report 320-2949 (1968)",
)


def _g100(x: np.ndarray) -> np.ndarray:
    a, b, c, d, e, f, g = x
    return np.array([
        2 * (a - 10), 10 * (b - 12), 4 * c**3, 6 * (d - 11), 60 * e**5, 14 * f - 4 * g - 10,
        4 * g**3 - 4 * f - 8,
    ])  # fmt: skip


def _h100(x: np.ndarray) -> np.ndarray:
    hessian = np.diag([2, 10, 12 * x[2] ** 2, 6, 300 * x[4] ** 4, 14, 12 * x[6] ** 2])
    hessian[5, 6] = hessian[6, 5] = -4
    return hessian


def _c100(x: np.ndarray) -> np.ndarray:
    a, b, c, d, e, f, g = x
    return np.array([
        127 - 2 * a * a - 3 * b**4 - c - 4 * d * d - 5 * e,
        282 - 7 * a - 3 * b - 10 * c * c - d + e,
        196 - 23 * a - b * b - 6 * f * f + 8 * g,
        -4 * a * a - b * b + 3 * a * b - 2 * c * c - 5 * f + 11 * g,
    ])  # fmt: skip


def _j100(x: np.ndarray) -> np.ndarray:
    a, b, c, d, _, f, _ = x
    return np.array([
        [-4 * a, -12 * b**3, -1, -8 * d, -5, 0, 0],
        [-7, -3, -20 * c, -1, 1, 0, 0],
        [-23, -2 * b, 0, 0, 0, -12 * f, 8],
        [-8 * a + 3 * b, -2 * b + 3 * a, -4 * c, 0, 0, -5, 11],
    ])  # fmt: skip


def _k100(x: np.ndarray, m: np.ndarray) -> np.ndarray:
    total = np.diag([
        -4 * m[0] - 8 * m[3], -36 * x[1] ** 2 * m[0] - 2 * m[2] - 2 * m[3], -20 * m[1] - 4 * m[3], -8 * m[0], 0,
        -12 * m[2], 0,
    ])  # fmt: skip
    total[0, 1] = total[1, 0] = 3 * m[3]
    return total


HS100 = _hs_problem(
    100,
    optimality(_g100, _h100, _c100, _j100, _k100, 7),
    _array(2.330499, 1.951372, -0.4775414, 4.365726, -0.6244870, 1.038131, 1.594227),
    _array(1.1397, 0, 0, 0.3686),
    _line(7),
    _box(7, -3.0, 6.0),
    (-1.0, 3.0),
    115,
    1e-2,
    complete=False,
    caution="fourth and sixth powers: curvature vanishes at zero",
)


def _g113(x: np.ndarray) -> np.ndarray:
    weight = _array(0, 0, 1, 4, 1, 2, 5, 7, 2, 1)
    centre = _array(0, 0, 10, 5, 3, 1, 0, 11, 10, 7)
    gradient = 2 * weight * (x - centre)
    gradient[0] = 2 * x[0] + x[1] - 14
    gradient[1] = 2 * x[1] + x[0] - 16
    return gradient


def _h113(x: np.ndarray) -> np.ndarray:
    hessian = np.diag(_array(2, 2, 2, 8, 2, 4, 10, 14, 4, 2))
    hessian[0, 1] = hessian[1, 0] = 1
    return hessian


def _c113(x: np.ndarray) -> np.ndarray:
    a, b, c, d, e, f, g, h, i, j = x
    return np.array([
        105 - 4 * a - 5 * b + 3 * g - 9 * h,
        -10 * a + 8 * b + 17 * g - 2 * h,
        8 * a - 2 * b - 5 * i + 2 * j + 12,
        -3 * (a - 2) ** 2 - 4 * (b - 3) ** 2 - 2 * c**2 + 7 * d + 120,
        -5 * a**2 - 8 * b - (c - 6) ** 2 + 2 * d + 40,
        -0.5 * (a - 8) ** 2 - 2 * (b - 4) ** 2 - 3 * e**2 + f + 30,
        -(a**2) - 2 * (b - 2) ** 2 + 2 * a * b - 14 * e + 6 * f,
        3 * a - 6 * b - 12 * (i - 8) ** 2 + 7 * j,
    ])  # fmt: skip


def _j113(x: np.ndarray) -> np.ndarray:
    a, b, c, _, e, _, _, _, i, _ = x
    return np.array([
        [-4, -5, 0, 0, 0, 0, 3, -9, 0, 0],
        [-10, 8, 0, 0, 0, 0, 17, -2, 0, 0],
        [8, -2, 0, 0, 0, 0, 0, 0, -5, 2],
        [-6 * (a - 2), -8 * (b - 3), -4 * c, 7, 0, 0, 0, 0, 0, 0],
        [-10 * a, -8, -2 * (c - 6), 2, 0, 0, 0, 0, 0, 0],
        [-(a - 8), -4 * (b - 4), 0, 0, -6 * e, 1, 0, 0, 0, 0],
        [-2 * a + 2 * b, -4 * (b - 2) + 2 * a, 0, 0, -14, 6, 0, 0, 0, 0],
        [3, -6, 0, 0, 0, 0, 0, 0, -24 * (i - 8), 7],
    ])  # fmt: skip


def _k113(x: np.ndarray, m: np.ndarray) -> np.ndarray:
    total = np.zeros((10, 10))
    total[0, 0] = -6 * m[3] - 10 * m[4] - m[5] - 2 * m[6]
    total[1, 1] = -8 * m[3] - 4 * m[5] - 4 * m[6]
    total[0, 1] = total[1, 0] = 2 * m[6]
    total[2, 2] = -4 * m[3] - 2 * m[4]
    total[4, 4] = -6 * m[5]
    total[8, 8] = -24 * m[7]
    return total


HS113 = _hs_problem(
    113,
    optimality(_g113, _h113, _c113, _j113, _k113, 10),
    _array(
        2.171996, 2.363683, 8.773926, 5.095984, 0.9906548, 1.430574, 1.321644, 9.828726, 8.280092, 8.375927
    ),
    _array(1.7165, 0.4745, 1.3759, 0.0205, 0.3120, 0, 0.2870, 0),
    _line(10),
    _box(10, -5.0, 12.0),
    (-1.0, 3.0),
    116,
    1e-2,
    caution="convex; 18 unknowns",
)


def _hs110_value(x: np.ndarray) -> np.ndarray:
    with np.errstate(all="ignore"):
        product = np.prod(x) ** 0.2
        return 2 * np.log(x - 2) / (x - 2) - 2 * np.log(10 - x) / (10 - x) - 0.2 * product / x


def _hs110_derivative(x: np.ndarray) -> np.ndarray:
    with np.errstate(all="ignore"):
        product = np.prod(x) ** 0.2
        diagonal = 2 * (1 - np.log(x - 2)) / (x - 2) ** 2 + 2 * (1 - np.log(10 - x)) / (10 - x) ** 2
        return np.diag(diagonal + 0.2 * product / x**2) - 0.04 * product * np.outer(1 / x, 1 / x)


HS110 = Published(
    name="Hock-Schittkowski 110",
    source=_HS.format(110) + " (D. Himmelblau, problem 17)",
    provenance="memory",
    value=_hs110_value,
    derivative=_hs110_derivative,
    lower=np.full(10, 2.001),
    upper=np.full(10, 9.999),
    box=_box(10, 1.5, 10.5),
    seed=117,
    solutions=(np.full(10, 9.35026583),),
    digits=1e-7,
    complete=False,
    caution="F is not defined outside (2, 10): two starts of three lie there",
)


def torsion_problem(q: int) -> Published:
    """Elastic-plastic torsion with half-weight edges; the optimum of the energy is printed, not the solution."""
    problem = problem_file("torsion").build(2 * q - 2, case="half weight")
    return linear(
        "Torsion",
        "Elastic-plastic torsion: J. More, G. Toraldo, SIAM J. Optim. 1 (1991) 93-113; weights of I. Bongartz, "
        "A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995)",
        "read",
        problem.map.M,
        problem.map.q,
        (),
        123,
        bounds=(problem.lower, problem.upper),
        box=(2 * problem.lower, 2 * problem.upper),
        caution="two-sided bounds that meet at the edge",
    )


TORSION_OPTIMUM = -0.45608771  # q = 11
OBSTACLE_OPTIMUM = 1.678027027  # 23 points a side


def membrane_problem(points: int) -> Published:
    """Membrane over an obstacle sin(3.2 x1) sin(3.3 x2); the optimum of the energy is printed, not the solution."""
    n, h = points - 2, 1.0 / (points - 1)
    t = np.arange(1, n + 1) * h
    obstacle = np.outer(np.sin(3.2 * t), np.sin(3.3 * t)).ravel()
    return linear(
        "Membrane",
        "Membrane over an obstacle: I. Bongartz, A. Conn, N. Gould, Ph. Toint, ACM Trans. Math. Softw. 21 (1995)",
        "read",
        problem_file("double_obstacle").five_point(n, 0.5),
        np.full(n * n, -h * h),
        (),
        124,
        bounds=(obstacle, np.full(n * n, 2000.0)),
        box=_box(n * n, -2.0, 2.0),
    )


RATE, VOLATILITY, STRIKE = 0.06, 0.2, 40.0
PUT_EXPONENT = 2 * RATE / VOLATILITY**2
PUT_BOUNDARY = STRIKE * PUT_EXPONENT / (1 + PUT_EXPONENT)


def perpetual_put_value(price: np.ndarray) -> np.ndarray:
    """Exact value: K - S up to the exercise price, (K - S*) (S / S*)^(-2 r / s^2) beyond."""
    beyond = (STRIKE - PUT_BOUNDARY) * (np.maximum(price, 1e-9) / PUT_BOUNDARY) ** -PUT_EXPONENT
    return np.where(price <= PUT_BOUNDARY, STRIKE - price, beyond)


def perpetual_put_problem(n: int) -> Published:
    """Value of the American put that never expires, on n interior prices up to 200; an M-matrix."""
    h = 200.0 / (n + 1)
    price = h * np.arange(1, n + 1)
    diffusion = 0.5 * VOLATILITY**2 * price**2 / h**2
    drift = 0.5 * RATE * price / h
    matrix = sp.csr_array(
        sp.diags_array(
            [-(diffusion - drift)[1:], 2 * diffusion + RATE, -(diffusion + drift)[:-1]], offsets=[-1, 0, 1]
        )
    )
    vector = np.zeros(n)
    vector[0] = -(diffusion - drift)[0] * STRIKE
    vector[-1] = -(diffusion + drift)[-1] * perpetual_put_value(np.array([200.0]))[0]
    payoff = np.maximum(STRIKE - price, 0.0)
    # independent solution: exercise up to node k; the right k is where all inequalities hold
    solution = None
    for k in range(n):
        v = payoff.copy()
        free = np.arange(k, n)
        rhs = -(vector + matrix @ np.where(np.arange(n) < k, payoff, 0.0))[free]
        v[free] = sp.linalg.spsolve(sp.csc_array(matrix[free][:, free]), rhs)
        if (v >= payoff - 1e-9).all() and (matrix @ v + vector >= -1e-9).all():
            solution = v
            break
    assert solution is not None
    return linear(
        "Perpetual put",
        "R. Merton, Bell J. Econ. Manag. Sci. 4 (1973) 141-183: exact value and exercise price",
        "memory",
        matrix,
        vector,
        (solution,),
        125,
        bounds=(payoff, np.full(n, INF)),
        box=(payoff - 20.0, payoff + 20.0),
        digits=1e-8,
        caution="plain steps move the exercise price by one node a step",
    )


COLLECTION: tuple[Published, ...] = (
    classic.KOJIMA_SHINDO, classic.JOSEPHY, classic.BILLUPS, classic.MATHIESEN, classic.COURNOT5, classic.COURNOT10,
    classic.WATSON, HS2, HS34, HS43, HS66, HS86, HS100, HS110, HS113, HS35, HS76, classic.MURTY, classic.FATHI,
    classic.AHN, classic.BARD, classic.GOULD, torsion_problem(11), membrane_problem(23), perpetual_put_problem(99),
)  # fmt: skip

NONLINEAR = tuple(p for p in COLLECTION if not p.affine)


CYCLIC_SIZES = (3, 5, 7)
CYCLIC_BOX = (-2.0, 2.0)
CYCLIC_SEED = 200
