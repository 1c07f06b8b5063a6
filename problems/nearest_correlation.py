"""Nearest correlation matrix: repair an estimated table of correlations that contradicts itself.

minimise 1/2 ||X - A||^2 over symmetric positive semidefinite X with ones on the diagonal, Frobenius norm. Correlations
estimated from gappy data, or set by judgement, often give an A with negative eigenvalues. The unknown are the n
multipliers y of the diagonal: X = P(A + Diag(y)), P the projection onto the semidefinite cone, and

    diag P(A + Diag(y)) = 1.

The equation is the gradient of a convex, once differentiable function of y; it is strongly semismooth, and its Newton
derivative is regular at the solution, so full steps converge quadratically. n: order of the matrix. Dimensionless.

case="random": off the diagonal uniform in (-1, 1), an extreme case: about half of the eigenvalues are negative.
case="tridiagonal": 2 on the diagonal, -1 beside it. case="three": [[1, 1, 0], [1, 1, 1], [0, 1, 1]], n = 3.

Sources: N. J. Higham, IMA J. Numer. Anal. 22 (2002) 329-343 (problem, alternating projections, examples); H.-D. Qi and
D. Sun, SIAM J. Matrix Anal. Appl. 28 (2006) 360-385 (the equation and its Newton method; pages from memory).

Caution: the result is singular (its rank is that of the kept eigenvalues), and nearest is not most plausible. Before
it prices risk or feeds an allocation, ask where the contradiction came from; a design aid, not advice on investment.
"""

import time
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (50, 100, 200)

_HIGHAM = "Higham (2002), four digits printed; here recalled and confirmed by computation"
_TRIDIAGONAL = "Higham (2002); ten digits by a library's documented example of order 4"


@dataclass(frozen=True)
class Given:
    """What `known`, `reference` and `picture` need."""

    matrix: FloatArray
    cone: ssn.PositiveSemidefiniteCone
    case: str


def build(n: int = 100, case: str = "random", seed: int = 1) -> ssn.TracedEquation:
    """Build the equation for the multipliers of the diagonal.

    Parameters
    ----------
    n : int
        Order of the matrix, at least 2; 3 for case "three".
    case : {"random", "tridiagonal", "three"}
    seed : int
        Of the random matrix.

    Raises
    ------
    ssn.InputError
        For a parameter out of its range.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 2:
        raise ssn.InputError(f"n must be a whole number of at least 2, got {n!r}")
    if case not in ("random", "tridiagonal", "three"):
        raise ssn.InputError(f"case must be 'random', 'tridiagonal' or 'three', got {case!r}")
    if case == "three" and n != 3:
        raise ssn.InputError(f"case 'three' has n = 3, got {n!r}")
    if case == "random":
        below = np.tril(np.random.default_rng(seed).uniform(-1.0, 1.0, (n, n)), -1)
        matrix = below + below.T + np.eye(n)
    elif case == "tridiagonal":
        matrix = 2.0 * np.eye(n) - np.eye(n, k=1) - np.eye(n, k=-1)
    else:
        matrix = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    return equation(matrix, case)


def equation(matrix: FloatArray, case: str = "given") -> ssn.TracedEquation:
    """Return the equation for any symmetric matrix, shape (n, n), in plain NumPy."""
    n = matrix.shape[0]
    cone = ssn.PositiveSemidefiniteCone(n)
    fixed = cone.to_vector(matrix)
    row = np.arange(n)
    diagonal = sp.csr_array((np.ones(n), (row * (row + 3) // 2, row)), shape=(fixed.size, n))

    def diagonal_error(y: FloatArray) -> FloatArray:
        return diagonal.T @ cone.prox(fixed + diagonal @ y, 1.0) - 1.0

    made = ssn.TracedEquation(diagonal_error, 1.0 - np.diag(matrix))
    made.given = Given(matrix, cone, case)
    return made


def correlation(problem: ssn.TracedEquation, y: FloatArray) -> FloatArray:
    """Return X = P(A + Diag(y)), scaled so that its diagonal is one in all digits, shape (n, n)."""
    x = _projected(problem.given.matrix + np.diag(y))
    root = np.sqrt(np.diag(x))
    return x / np.outer(root, root)


def _projected(matrix: FloatArray) -> FloatArray:
    values, vectors = np.linalg.eigh(matrix)
    return (vectors * np.maximum(values, 0.0)) @ vectors.T


def known(problem: ssn.TracedEquation, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare the small examples with printed values, and this matrix with what optimality asks for."""
    a = problem.given.matrix
    x = correlation(problem, solution.x)
    multiplier = x - a - np.diag(solution.x)  # of X >= 0: semidefinite, and orthogonal to X
    size = float(np.linalg.norm(x - a)) or 1.0
    lowest = float(min(np.linalg.eigvalsh(x)[0], np.linalg.eigvalsh(multiplier)[0]))
    apart = abs(float(np.sum(multiplier * x))) / size**2
    source = "Qi and Sun (2006), optimality conditions: X >= 0, Z = X - A - Diag(y) >= 0, <Z, X> = 0"
    checks = [
        _check("lowest eigenvalue of X and of Z (absolute)", 0.0, min(lowest, 0.0), 1e-7 * size, source),
        _check("|<Z, X>| / ||X - A||^2 (absolute)", 0.0, apart, 1e-7, source),
    ]
    three, tridiagonal = build(3, "three"), build(4, "tridiagonal")
    small = correlation(three, ssn.solve(three).require().x)
    distance = float(np.linalg.norm(small - three.given.matrix))
    four = correlation(tridiagonal, ssn.solve(tridiagonal).require().x)
    checks += [
        _check("order 3: X12", 0.7606898534, float(small[0, 1]), 1e-9, _HIGHAM),
        _check("order 3: X13", 0.1572981061, float(small[0, 2]), 1e-9, _HIGHAM),
        _check("order 3: ||X - A||", 0.5277904636, distance, 1e-9, _HIGHAM),
    ]
    printed = {(0, 1): -0.8084124981, (0, 2): 0.1915875019, (0, 3): 0.1067750490, (1, 2): -0.6562326948}
    checks += [
        _check(f"tridiagonal: X{i + 1}{j + 1}", value, float(four[i, j]), 1e-9, _TRIDIAGONAL)
        for (i, j), value in printed.items()
    ]
    return checks


def _check(what: str, expected: float, computed: float, tolerance: float, source: str) -> dict[str, Any]:
    return {
        "what": what,
        "kind": "absolute",
        "expected": expected,
        "computed": computed,
        "tolerance": tolerance,
        "source": source,
        "holds": bool(abs(computed - expected) <= tolerance),
    }


def reference(problem: ssn.TracedEquation, budget: float) -> FloatArray:
    """Alternating projections with Dykstra's correction: first order, one eigenvalue decomposition an iteration.

    The corrections of the projection onto unit diagonals add up to y. Source: Higham (2002), algorithm 3.3 (number
    from memory). It stops where the diagonal is one to 1e-9, or at the end of the budget.
    """
    matrix = problem.given.matrix
    y = np.zeros(matrix.shape[0])
    end = time.monotonic() + budget
    while time.monotonic() < end:
        error = 1.0 - np.diag(_projected(matrix + np.diag(y)))
        y += error
        if np.abs(error).max() <= 1e-9:
            break
    return y


def summary(problem: ssn.TracedEquation, solution: ssn.Solution) -> list[tuple[str, str]]:
    """Return how contradictory A was, and how far X is from it."""
    a, x = problem.given.matrix, correlation(problem, solution.x)
    values = np.linalg.eigvalsh(x)
    return [
        ("lowest eigenvalue of A", f"{np.linalg.eigvalsh(a)[0]:.4g}"),
        ("rank of X", f"{int(np.count_nonzero(values > 1e-8 * values[-1]))} of {values.size}"),
        ("distance ||X - A||", f"{np.linalg.norm(x - a):.10g}"),
        ("largest change of an entry", f"{np.abs(x - a).max():.4g}"),
    ]


def picture(problem: ssn.TracedEquation, solution: ssn.Solution) -> Any:
    """Draw both matrices, and their eigenvalues."""
    a, x = problem.given.matrix, correlation(problem, solution.x)
    figure = new_figure(11.0, 3.6)
    left, middle, right = figure.subplots(1, 3, width_ratios=[1, 1, 1.2])
    for axes, matrix, title in ((left, a, "given"), (middle, x, "nearest correlation matrix")):
        image = axes.imshow(matrix, cmap="RdBu_r", vmin=-1.0, vmax=1.0)
        axes.set(title=title, xticks=[], yticks=[])
    figure.colorbar(image, ax=middle, shrink=0.85)
    order = np.arange(1, a.shape[0] + 1)
    right.axhline(0.0, color="0.6", lw=0.8)
    right.plot(order, np.linalg.eigvalsh(a), ".", color="C1", label="given")
    right.plot(order, np.linalg.eigvalsh(x), ".", color="C0", label="nearest")
    right.set(title="eigenvalues", xlabel="number")
    right.legend(frameon=False)
    figure.suptitle(f"Order {a.shape[0]}, {len(solution.steps)} Newton steps")
    return figure
