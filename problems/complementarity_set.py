"""Complementarity problems from the literature, small and hard: games, markets, and matrices made to fail methods.

Find lower <= x <= upper with F(x) >= 0 at the lower, <= 0 at the upper bound and = 0 between; most have x >= 0 only.
Derivatives are written by hand. Parameter `name` chooses one: "kojima-shindo", "josephy", "billups", "mathiesen",
"nash-cournot-5", "nash-cournot-10", "watson", "murty", "fathi", "ahn", "murty-cycle", "gould", "cyclic"; `size` the
order of "murty", "fathi", "ahn" and "cyclic". Sources stand beside each. Dimensionless.

`provenance` of a problem: "read" (a copy of the source or a text that quotes it was read), "memory" (statement and
figures recalled, then confirmed by an independent computation that reproduces the printed figures).

Where a market is stated up to a common factor of its prices ("mathiesen") one price is fixed at 1: by Walras' law the
market of that good clears with the others.

Caution: several have more than one solution, or one where F and x vanish together (degenerate): a method may rightly
return either, and converge slowly at such a point. Market models are textbook examples, not a forecast.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

INF = np.inf


@dataclass(frozen=True)
class Published:
    """lower <= x <= upper with F(x) normal to the box.

    Attributes
    ----------
    name, source, provenance : str
    value, derivative : callable
    lower, upper : array, shape (n,)
    box : tuple of two arrays
        Starts are drawn uniformly between them.
    seed : int
    solutions : tuple of arrays
        As printed in the source (`digits` of them hold) or exact.
    digits : float
        Absolute error of the listed solutions.
    complete : bool
        Whether the list holds every solution (proved by enumeration, uniqueness or the source).
    caution : str
        What is known to be hard about it.
    member : callable, optional
        x -> distance to the solution set, where it is not a list of points.
    """

    name: str
    source: str
    provenance: str
    value: Callable[[np.ndarray], np.ndarray]
    derivative: Callable[[np.ndarray], Any]
    lower: np.ndarray
    upper: np.ndarray
    box: tuple[np.ndarray, np.ndarray]
    seed: int
    solutions: tuple[np.ndarray, ...]
    digits: float = 1e-9
    complete: bool = True
    caution: str = ""
    member: Callable[[np.ndarray], float] | None = None
    affine: bool = False

    @property
    def size(self) -> int:
        return self.lower.size

    def starts(self, number: int) -> np.ndarray:
        """The first `number` seeded starts, shape (number, n)."""
        rng = np.random.default_rng(self.seed)
        return self.box[0] + (self.box[1] - self.box[0]) * rng.random((number, self.size))

    def residual(self, x: np.ndarray) -> float:
        """max |mid(x - upper, x - lower, F)|, F divided by max(1, sum |F'_ij|) of its row; shares nothing with ssn."""
        with np.errstate(all="ignore"):
            force = self.value(x)
            derivative = self.derivative(x)
        if not np.isfinite(force).all():
            return INF
        rows = np.asarray(abs(derivative).sum(axis=1)).ravel()
        scaled = force / np.maximum(1.0, rows)
        return float(np.abs(np.maximum(np.minimum(scaled, x - self.lower), x - self.upper)).max())

    def distance(self, x: np.ndarray) -> float:
        """Largest difference from the nearest known solution."""
        if self.member is not None:
            return self.member(x)
        return min(float(np.abs(x - s).max()) for s in self.solutions)


def _array(*numbers: float) -> np.ndarray:
    return np.array(numbers, dtype=float)


def _orthant(n: int) -> tuple[np.ndarray, np.ndarray]:
    return np.zeros(n), np.full(n, INF)


def _box(n: int, low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
    return np.full(n, low), np.full(n, high)


# --- polynomial examples ------------------------------------------------------------------------------------------


def _kojima_value(
    third: float, constants: tuple[float, ...], fourth: float
) -> Callable[[np.ndarray], np.ndarray]:
    def value(x: np.ndarray) -> np.ndarray:
        a, b, c, d = x
        return np.array([
            3 * a * a + 2 * a * b + 2 * b * b + c + 3 * d - constants[0],
            2 * a * a + a + b * b + third * c + 2 * d - constants[1],
            3 * a * a + a * b + 2 * b * b + 2 * c + fourth * d - constants[2],
            a * a + 3 * b * b + 2 * c + 3 * d - constants[3],
        ])  # fmt: skip

    return value


def _kojima_derivative(third: float, fourth: float) -> Callable[[np.ndarray], np.ndarray]:
    def derivative(x: np.ndarray) -> np.ndarray:
        a, b = x[0], x[1]
        return np.array([
            [6 * a + 2 * b, 2 * a + 4 * b, 1, 3],
            [4 * a + 1, 2 * b, third, 2],
            [6 * a + b, a + 4 * b, 2, fourth],
            [2 * a, 6 * b, 2, 3],
        ])  # fmt: skip

    return derivative


_DEGENERATE = _array(np.sqrt(6) / 2, 0, 0, 0.5)

KOJIMA_SHINDO = Published(
    name="Kojima-Shindo",
    source="M. Kojima, S. Shindo, J. Oper. Res. Soc. Japan 29 (1986) 352-374",
    provenance="read",
    value=_kojima_value(10, (6, 2, 9, 3), 9),
    derivative=_kojima_derivative(10, 9),
    lower=_orthant(4)[0],
    upper=_orthant(4)[1],
    box=_box(4, -1.0, 5.0),
    seed=101,
    solutions=(_DEGENERATE, _array(1, 0, 3, 0)),
    caution="one solution is degenerate, and F' is not monotone",
)

JOSEPHY = Published(
    name="Josephy",
    source="N. Josephy, University of Wisconsin, MRC report 1965 (1979)",
    provenance="read",
    value=_kojima_value(3, (6, 2, 1, 3), 3),
    derivative=_kojima_derivative(3, 3),
    lower=_orthant(4)[0],
    upper=_orthant(4)[1],
    box=_box(4, -1.0, 5.0),
    seed=102,
    solutions=(_DEGENERATE,),
    caution="degenerate solution, F' not monotone",
)

BILLUPS = Published(
    name="Billups",
    source="S. Billups, thesis, University of Wisconsin (1995)",
    provenance="read",
    value=lambda x: (x - 1) ** 2 - 1.01,
    derivative=lambda x: np.array([[2 * (x[0] - 1)]]),
    lower=_orthant(1)[0],
    upper=_orthant(1)[1],
    box=_box(1, -1.0, 5.0),
    seed=103,
    solutions=(_array(1 + np.sqrt(1.01)),),
    caution="merit functions have a local minimiser near 0 that is no root",
)

# --- economic equilibria ------------------------------------------------------------------------------------------


def _mathiesen_value(x: np.ndarray) -> np.ndarray:
    y, p, q, r = x
    income = 5 * q + 3 * r
    with np.errstate(all="ignore"):
        return np.array([-p + q + r, y - 0.9 * income / p, 5 - y - 0.1 * income / q, 3 - y])


def _mathiesen_derivative(x: np.ndarray) -> np.ndarray:
    _, p, q, r = x
    income = 5 * q + 3 * r
    with np.errstate(all="ignore"):
        return np.array([
            [0, -1, 1, 1],
            [1, 0.9 * income / p**2, -4.5 / p, -2.7 / p],
            [-1, 0, 0.3 * r / q**2, -0.3 / q],
            [-1, 0, 0, 0],
        ])  # fmt: skip


def _mathiesen_distance(x: np.ndarray) -> float:
    scale = x[2]
    if not scale > 0:
        return INF
    return float(np.abs(x / np.array([1, scale, scale, scale]) - np.array([3, 6, 1, 5])).max())


MATHIESEN = Published(
    name="Mathiesen",
    source="L. Mathiesen, Math. Program. 37 (1987) 1-18: an economy with one sector and three goods",
    provenance="read",
    value=_mathiesen_value,
    derivative=_mathiesen_derivative,
    lower=_orthant(4)[0],
    upper=_orthant(4)[1],
    box=(_array(-1, 0.1, 0.1, 0.1), _array(6, 6, 6, 6)),
    seed=104,
    solutions=(_array(3, 6, 1, 5),),
    caution="prices are free up to a factor: F' is singular at every solution; no meaning for prices <= 0",
    member=_mathiesen_distance,
)


def _cournot(
    c: np.ndarray, beta: np.ndarray, gamma: float, inner: Callable[[np.ndarray], np.ndarray], factor: float
) -> tuple[Callable[[np.ndarray], np.ndarray], Callable[[np.ndarray], np.ndarray]]:
    """F_i = mc_i(q_i) - P(Q) - q_i P'(Q), P = (5000 / Q)^(1/gamma), mc_i = c_i + (factor q_i)^(1/beta_i)."""

    def value(q: np.ndarray) -> np.ndarray:
        total = q.sum()
        with np.errstate(all="ignore"):
            price = (5000.0 / total) ** (1 / gamma)
            return c + inner(q) ** (1 / beta) - price + q * price / (gamma * total)

    def derivative(q: np.ndarray) -> np.ndarray:
        total = q.sum()
        with np.errstate(all="ignore"):
            price = (5000.0 / total) ** (1 / gamma)
            marginal = factor / beta * inner(q) ** (1 / beta - 1)
        slope = -price / (gamma * total)
        common = -slope - q * price / (gamma * total**2) * (1 / gamma + 1)
        return common[:, None] * np.ones(q.size) + np.diag(marginal - slope)

    return value, derivative


_BETA5, _C5 = _array(1.2, 1.1, 1.0, 0.9, 0.8), _array(10, 8, 6, 4, 2)
_COURNOT5 = _cournot(_C5, _BETA5, 1.1, lambda q: q / 5.0, 0.2)

COURNOT5 = Published(
    name="Nash-Cournot, 5 firms",
    source="F. Murphy, H. Sherali, A. Soyster, Math. Program. 24 (1982) 92-106; P. Harker (1988)",
    provenance="memory",
    value=_COURNOT5[0],
    derivative=_COURNOT5[1],
    lower=_orthant(5)[0],
    upper=_orthant(5)[1],
    box=_box(5, -10.0, 100.0),
    seed=105,
    solutions=(_array(36.9325, 41.8181, 43.7066, 42.6592, 39.1790),),
    digits=1e-3,
    caution="F is not defined for negative quantities: about four starts of ten lie there",
)

_BETA10 = _array(1.2, 1.0, 0.9, 0.6, 1.5, 1.0, 0.7, 1.1, 0.95, 0.75)
_C10 = _array(5, 3, 8, 5, 1, 3, 7, 4, 6, 3)
_COURNOT10 = _cournot(_C10, _BETA10, 1.2, lambda q: 10.0 * q, 10.0)

COURNOT10 = Published(
    name="Nash-Cournot, 10 firms",
    source="P. Harker, Math. Program. 41 (1988) 29-59, data of the ten-firm market",
    provenance="memory",
    value=_COURNOT10[0],
    derivative=_COURNOT10[1],
    lower=_orthant(10)[0],
    upper=_orthant(10)[1],
    box=_box(10, -1.0, 30.0),
    seed=106,
    solutions=(_array(7.4415, 4.0978, 2.5906, 0.9353, 17.9490, 4.0978, 1.3047, 5.5901, 3.2222, 1.6771),),
    digits=1e-3,
    caution="F is not defined for negative quantities: about three starts of ten lie there",
)

# --- exponentials -------------------------------------------------------------------------------------------------

_WATSON = _array(-1, 0, 1, 2, 3)


def _watson_value(x: np.ndarray) -> np.ndarray:
    t = x - _WATSON
    return 2 * np.exp(t @ t) * t


def _watson_derivative(x: np.ndarray) -> np.ndarray:
    t = x - _WATSON
    return 2 * np.exp(t @ t) * (np.eye(5) + 2 * np.outer(t, t))


WATSON = Published(
    name="Watson",
    source="L. Watson, SIAM J. Control Optim. 17 (1979) 36-46",
    provenance="memory",
    value=_watson_value,
    derivative=_watson_derivative,
    lower=_orthant(5)[0],
    upper=_orthant(5)[1],
    box=_box(5, -0.5, 3.5),
    seed=107,
    solutions=(_array(0, 0, 1, 2, 3),),
    caution="F reaches 1e20 within the box; the second component is degenerate",
)


# --- linear problems ----------------------------------------------------------------------------------------------


def linear(
    name: str,
    source: str,
    provenance: str,
    matrix: Any,
    vector: np.ndarray,
    solutions: tuple[np.ndarray, ...],
    seed: int,
    *,
    bounds: tuple[np.ndarray, np.ndarray] | None = None,
    box: tuple[np.ndarray, np.ndarray] | None = None,
    caution: str = "",
    digits: float = 1e-9,
    complete: bool = True,
) -> Published:
    n = vector.size
    lower, upper = bounds or _orthant(n)
    return Published(
        name=name,
        source=source,
        provenance=provenance,
        value=lambda x: matrix @ x + vector,
        derivative=lambda x: matrix,
        lower=lower,
        upper=upper,
        box=box or _box(n, -2.0, 2.0),
        seed=seed,
        solutions=solutions,
        caution=caution,
        digits=digits,
        complete=complete,
        affine=True,
    )


def unit(n: int, k: int) -> np.ndarray:
    vector = np.zeros(n)
    vector[k] = 1.0
    return vector


def murty_matrix(n: int) -> np.ndarray:
    return np.triu(2.0 * np.ones((n, n)), 1) + np.eye(n)


def fathi_matrix(n: int) -> np.ndarray:
    lower = np.tril(2.0 * np.ones((n, n)), -1) + np.eye(n)
    return lower @ lower.T


def ahn_matrix(n: int) -> np.ndarray:
    return 4 * np.eye(n) - 2 * np.eye(n, k=1) + np.eye(n, k=-1)


def cyclic_matrix(n: int, a: float = 2.0) -> np.ndarray:
    """I + a times the cyclic shift: a P-matrix for odd n, on which plain steps cycle for a > 1.

    I. Ben Gharbia, J. Ch. Gilbert, Math. Program. 134 (2012) 349-364 (abstract read, examples recomputed).
    """
    return np.eye(n) + a * np.roll(np.eye(n), 1, axis=1)


def murty(n: int = 10) -> Published:
    """Upper triangular, ones on the diagonal, twos above."""
    return linear(
        "Murty", "K. Murty, Math. Program. 8 (1975) 345-366", "memory",
        murty_matrix(n), -np.ones(n), (unit(n, n - 1),), 118,
        caution="pivoting methods need 2^n steps",
    )  # fmt: skip


def fathi(n: int = 10) -> Published:
    """Symmetric: L L' with ones on the diagonal of L, twos below."""
    return linear(
        "Fathi", "Y. Fathi, Math. Program. 17 (1979) 335-344", "memory",
        fathi_matrix(n), -np.ones(n), (unit(n, 0),), 119,
        caution="pivoting methods need 2^n steps",
    )  # fmt: skip


def ahn(n: int = 16) -> Published:
    """Tridiagonal, not symmetric."""
    return linear(
        "Ahn", "B. Ahn, Math. Program. 26 (1983) 295-315: tridiagonal (1, 4, -2)", "memory",
        ahn_matrix(n), -np.ones(n), (np.linalg.solve(ahn_matrix(n), np.ones(n)),), 120,
    )  # fmt: skip


def cyclic(n: int = 3) -> Published:
    """The identity plus twice the cyclic shift, of odd order."""
    return linear(
        f"cyclic P-matrix, n = {n}", "I. Ben Gharbia, J. Ch. Gilbert, Math. Program. 134 (2012) 349-364", "read",
        cyclic_matrix(n), -np.ones(n), (np.full(n, 1 / 3),), 200,
        caution="plain steps cycle from many starts",
    )  # fmt: skip


MURTY, FATHI, AHN = murty(), fathi(), ahn()
BARD = linear(
    "Murty's cycle", "K. Murty, Linear Complementarity (1988): simple principal pivots cycle", "memory",
    np.array([[1.0, 2, 0], [0, 1, 2], [2, 0, 1]]), -np.ones(3), (np.full(3, 1 / 3),), 121,
    caution="a P-matrix on which plain steps cycle",
)  # fmt: skip
GOULD = linear(
    "Gould",
    "N. Gould (nonconvex quadratic program with several stationary points), quoted by M. Croci and P. Farrell, "
    "arXiv:1510.02433",
    "memory",
    np.array([[-4.0, 0, 1, 6], [0, 4, 1, 2], [-1, -1, 0, 0], [-6, -2, 0, 0]]),
    _array(1, -2, 1, 3),
    (
        _array(0, 0.5, 0, 0),
        _array(0.25, 0.5, 0, 0),
        _array(11 / 32, 15 / 32, 0, 1 / 16),
    ),
    122,
    caution="not monotone; a minimiser and two saddle points",
)  # fmt: skip


ENTRIES: dict[str, Callable[..., Published] | Published] = {
    "kojima-shindo": KOJIMA_SHINDO,
    "josephy": JOSEPHY,
    "billups": BILLUPS,
    "mathiesen": MATHIESEN,
    "nash-cournot-5": COURNOT5,
    "nash-cournot-10": COURNOT10,
    "watson": WATSON,
    "murty": murty,
    "fathi": fathi,
    "ahn": ahn,
    "murty-cycle": BARD,
    "gould": GOULD,
    "cyclic": cyclic,
}


def build(name: str = "kojima-shindo", size: int = 0) -> ssn.ComplementarityProblem:
    """Build the complementarity problem.

    Parameters
    ----------
    name : str
        See the module docstring.
    size : int
        Order of "murty", "fathi", "ahn" and "cyclic" (odd), at least 3; 0: that of the source or 10.

    Raises
    ------
    ssn.InputError
        For an unknown name, or a size that does not fit it.
    """
    entry = ENTRIES.get(name)
    if entry is None:
        raise ssn.InputError(f"name must be one of {', '.join(map(repr, ENTRIES))}, got {name!r}")
    if isinstance(size, bool) or not isinstance(size, int | np.integer) or not (size == 0 or size >= 3):
        raise ssn.InputError(f"size must be 0 or a whole number of at least 3, got {size!r}")
    if isinstance(entry, Published):
        if size:
            raise ssn.InputError(f"size={size} has no effect with name={name!r}; leave it out")
        published = entry
    else:
        if name == "cyclic" and size % 2 == 0 and size:
            raise ssn.InputError(
                f"size must be odd with name='cyclic', got {size}: even orders have no P-matrix"
            )
        published = entry(int(size)) if size else entry()
    F: Any
    if published.affine:
        F = ssn.AffineMap(published.derivative(published.lower), published.value(np.zeros(published.size)))
    else:
        F = ssn.SmoothMap(published.value, published.derivative)
    lower, upper = published.lower.copy(), published.upper.copy()
    if name == "mathiesen":  # prices are free up to a factor: the second good is the unit of account
        lower[2] = upper[2] = 1.0
    problem = ssn.ComplementarityProblem(F, lower, upper, size=published.size)
    problem.published = published
    return problem


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the nearest known solution, and evaluate the statement by itself."""
    published: Published = problem.published
    nearest = published.distance(solution.x)
    residual = published.residual(solution.x)
    tolerance = max(published.digits, 1e-7)
    return [
        {
            "what": "largest difference from the nearest known solution (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": nearest,
            "tolerance": tolerance,
            "source": f"{published.source} ({'from memory' if published.provenance == 'memory' else 'read'})",
            "holds": bool(nearest <= tolerance),
        },
        {
            "what": "residual of the statement, rows scaled (absolute)",
            "kind": "absolute",
            "expected": 0.0,
            "computed": residual,
            "tolerance": 1e-7,
            "source": "evaluated apart from the kernel",
            "holds": bool(residual <= 1e-7),
        },
    ]


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw x and F(x) side by side: where one is off zero, the other is not."""
    published: Published = problem.published
    figure = new_figure(9.0, 4.0)
    top, bottom = figure.subplots(2, 1, sharex=True)
    number = np.arange(1, published.size + 1)
    force = published.value(solution.x)
    top.bar(number, solution.x, color="C0", width=0.6)
    if published.solutions:
        near = min(published.solutions, key=lambda s: float(np.abs(s - solution.x).max()))
        top.plot(number, near, "k_", ms=12, label="known solution")
        top.legend(frameon=False)
    bottom.bar(number, force, color="C1", width=0.6)
    top.set_ylabel("x")
    bottom.set(ylabel="F(x)", xlabel="component")
    for axes in (top, bottom):
        axes.axhline(0.0, color="k", lw=0.6)
    figure.suptitle(f"{published.name}: {len(solution.steps)} Newton steps")
    return figure
