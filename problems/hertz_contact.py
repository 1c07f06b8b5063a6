"""Hertz contact: a ball pressed against a half-space, by an influence operator that is never formed.

Find the pressure p >= 0 on a grid of square panels such that the gap g = u(p) + r^2 / (2 R) - d >= 0 and p g = 0, for a
given approach d. u(p) is the surface displacement of an elastic half-space under panels of constant pressure, at their
centres: Boussinesq's solution integrated over a panel (Love). Only differences of panel positions matter, so a product
is a convolution, done by fast Fourier transforms: n^2 log n operations and n^2 numbers for n^2 panels.

Lengths across are in units of sqrt(R d), pressures in E* sqrt(d / R), forces in E* sqrt(R) d^(3/2), displacements in d;
1 / E* = (1 - nu1^2) / E1 + (1 - nu2^2) / E2. In these units the closed form is: contact radius 1, peak pressure 2 / pi,
force 4 / 3, p = (2 / pi) sqrt(1 - r^2).

Source: K. L. Johnson, Contact Mechanics (1985), sections 3.2.2 (panels), 4.2 (Hertz) (from memory).

Caution: a design aid for smooth, elastic, frictionless bodies and a contact small against the radius. Yield, fatigue,
roughness and the applicable standards decide about a real contact.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.fft import irfft2, next_fast_len, rfft2
from scipy.interpolate import RegularGridInterpolator
from scipy.sparse.linalg import LinearOperator

import ssn
from ssn.plotting import new_figure

FloatArray = npt.NDArray[np.float64]

SIZES = (32, 64, 128)

HALF_WIDTH = 1.25  # of the square of panels
PEAK = 2.0 / np.pi
FORCE = 4.0 / 3.0
#: n -> force of the discrete problem, by a dense program
DENSE = {20: 1.335454, 40: 1.333790, 64: 1.333423}
#: steel ball of 25 mm on aluminium ball of 40 mm diameter, 10 N: moduli in MPa, Poisson's ratios, radii in mm
BALLS = ((207e3, 0.292, 12.5), (71.7e3, 0.333, 20.0), 10.0)
BALLS_RADIUS, BALLS_PEAK = 0.0990, 487.0  # mm, MPa
_CLOSED = "closed form; Johnson (1985), section 4.2 (from memory)"


@dataclass(frozen=True)
class MeshData:
    """n x n square panels of side h; x1, x2 of shape (n * n,) are their centres, x1 varies slowest."""

    n: int
    h: float
    line: FloatArray
    x1: FloatArray
    x2: FloatArray


def panel_displacement(x: FloatArray, y: FloatArray, half: float) -> FloatArray:
    """Displacement at (x, y) under unit pressure on the square |x|, |y| <= half, for E* = 1 (Love)."""

    def corner(a: FloatArray, b: FloatArray) -> FloatArray:
        return a * np.arcsinh(b / np.abs(a)) + b * np.arcsinh(a / np.abs(b))

    parts = corner(x + half, y + half) - corner(x + half, y - half)
    parts += corner(x - half, y - half) - corner(x - half, y + half)
    return np.asarray(parts / np.pi)


def influence(n: int, h: float) -> tuple[LinearOperator, float]:
    """Return the map from pressures to displacements on n x n panels of side h, and its (constant) diagonal."""
    size = next_fast_len(2 * n - 1, real=True)
    distance = np.minimum(np.arange(size), size - np.arange(size)) * h
    kernel = panel_displacement(*np.meshgrid(distance, distance, indexing="ij"), h / 2)
    spectrum = rfft2(kernel)

    def product(pressure: FloatArray) -> FloatArray:
        padded = rfft2(np.reshape(pressure, (n, n)), s=(size, size))
        return np.asarray(irfft2(spectrum * padded, s=(size, size))[:n, :n].ravel())

    operator = LinearOperator((n * n, n * n), matvec=product, rmatvec=product, dtype=np.float64)
    return operator, float(kernel[0, 0])


def build(n: int = 64) -> ssn.ComplementarityProblem:
    """Build the complementarity problem; the unknown is the pressure, F(p) the gap.

    Parameters
    ----------
    n : int
        Panels a side, at least 4.

    Raises
    ------
    ssn.InputError
        For another n.
    """
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 4:
        raise ssn.InputError(f"n must be a whole number of at least 4, got {n!r}")
    h = 2.0 * HALF_WIDTH / n
    line = -HALF_WIDTH + h * (np.arange(n) + 0.5)
    x1, x2 = (x.ravel() for x in np.meshgrid(line, line, indexing="ij"))
    operator, diagonal = influence(int(n), h)
    gap = 0.5 * (x1**2 + x2**2) - 1.0
    F = ssn.AffineMap(operator, gap, diagonal=np.full(n * n, diagonal), symmetric=True)
    problem = ssn.ComplementarityProblem(F)
    problem.mesh_data = MeshData(int(n), h, line, x1, x2)
    return problem


def exact_pressure(r: FloatArray) -> FloatArray:
    """Return the pressure at distance r from the centre."""
    return PEAK * np.sqrt(np.maximum(1.0 - r**2, 0.0))


def transfer(
    coarse: ssn.ComplementarityProblem, fine: ssn.ComplementarityProblem
) -> Callable[[FloatArray], FloatArray]:
    """Return the function that carries a pressure of `coarse` to `fine`: bilinear between the centres of panels."""
    mesh, points = coarse.mesh_data, np.column_stack([fine.mesh_data.x1, fine.mesh_data.x2])

    def carry(pressure: FloatArray) -> FloatArray:
        line = np.concatenate([[-HALF_WIDTH], mesh.line, [HALF_WIDTH]])
        padded = np.pad(np.reshape(pressure, (mesh.n, mesh.n)), 1)
        return RegularGridInterpolator((line, line), padded)(points)

    return carry


def figures(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> tuple[float, float, float]:
    """Return contact radius (from the area), peak pressure and force in the units of the docstring."""
    h = problem.mesh_data.h
    radius = float(np.sqrt(h**2 * np.count_nonzero(solution.x > 0) / np.pi))
    return radius, float(solution.x.max()), float(h**2 * solution.x.sum())


def ball_on_ball(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> tuple[float, float]:
    """Return contact radius (mm) and peak pressure (MPa) of the steel ball on the aluminium ball."""
    (e1, nu1, r1), (e2, nu2, r2), load = BALLS
    modulus = 1.0 / ((1 - nu1**2) / e1 + (1 - nu2**2) / e2)
    radius_of_curvature = 1.0 / (1 / r1 + 1 / r2)
    radius, peak, force = figures(problem, solution)
    approach = (load / (modulus * np.sqrt(radius_of_curvature) * force)) ** (2 / 3)
    return (
        float(radius * np.sqrt(radius_of_curvature * approach)),
        float(peak * modulus * np.sqrt(approach / radius_of_curvature)),
    )


def known(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> list[dict[str, Any]]:
    """Compare with the closed form, with forces of a dense program, and with a textbook example."""
    mesh = problem.mesh_data
    h, n = mesh.h, mesh.n
    radius, peak, force = figures(problem, solution)
    error = solution.x - exact_pressure(np.hypot(mesh.x1, mesh.x2))
    # the pressure meets the surface vertically: at the edge a panel is wrong by as much as sqrt(h)
    checks = [
        _check("contact radius, h / 2", "relative", 1.0, radius, h / 2, _CLOSED),
        _check("peak pressure, h^2 / 2", "relative", PEAK, peak, h**2 / 2, _CLOSED),
        _check("force for the approach, h^2 / 4", "relative", FORCE, force, h**2 / 4, _CLOSED),
        _check("L2 error of the pressure, h / 2", "absolute", 0.0, h * np.linalg.norm(error), h / 2, _CLOSED),
    ]
    if n in DENSE:
        source = "independent program with the dense matrix, same panels"
        checks.append(_check("force, digits given", "absolute", DENSE[n], force, 6e-7, source))
    source = "textbook example of machine elements, 25 mm steel on 40 mm aluminium, 10 N (from memory)"
    a, p0 = ball_on_ball(problem, solution)
    checks.append(
        _check("contact radius of two balls in mm, h / 2", "relative", BALLS_RADIUS, a, h / 2, source)
    )
    checks.append(
        _check(
            "peak pressure of two balls in MPa, 0.1 % and h^2 / 2",
            "relative",
            BALLS_PEAK,
            p0,
            1e-3 + h**2 / 2,
            source,
        )
    )
    return checks


def _check(
    what: str, kind: str, expected: float, computed: float, tolerance: float, source: str
) -> dict[str, Any]:
    off = abs(computed - expected) / (abs(expected) if kind == "relative" else 1.0)
    return {
        "what": f"{what} ({kind})",
        "kind": kind,
        "expected": expected,
        "computed": float(computed),
        "tolerance": float(tolerance),
        "source": source,
        "holds": bool(off <= tolerance),
    }


def picture(problem: ssn.ComplementarityProblem, solution: ssn.Solution) -> Any:
    """Draw the pressure on a cut against the closed form, and the contact area with the exact circle."""
    mesh = problem.mesh_data
    n, row = mesh.n, (mesh.n - 1) // 2
    figure = new_figure(9.0, 4.0)
    left, right = figure.subplots(1, 2, width_ratios=[1.35, 1])
    fine = np.linspace(-HALF_WIDTH, HALF_WIDTH, 1001)
    left.plot(
        fine, exact_pressure(np.hypot(fine, mesh.line[row])), color="C1", lw=3, alpha=0.5, label="closed form"
    )
    left.plot(mesh.line, solution.x.reshape(n, n)[:, row], "C0.", ms=4, label="panels")
    left.set(
        xlabel=r"$x_1 / \sqrt{R d}$", ylabel=r"$p / (E^* \sqrt{d / R})$", title="pressure near the middle"
    )
    left.legend(frameon=False)
    shown = np.where(solution.x > 0, solution.x, np.nan).reshape(n, n)
    image = right.imshow(shown.T, origin="lower", extent=(-HALF_WIDTH, HALF_WIDTH) * 2, cmap="viridis")
    figure.colorbar(image, ax=right, shrink=0.85)
    angle = np.linspace(0.0, 2 * np.pi, 200)
    right.plot(np.cos(angle), np.sin(angle), color="C1", label="exact edge")
    right.set(title="contact area", xlabel=r"$x_1 / \sqrt{R d}$", aspect="equal")
    radius, peak, force = figures(problem, solution)
    figure.suptitle(
        f"Ball on half-space, {n} x {n} panels, {len(solution.steps)} Newton steps: radius {radius:.4f} (1), "
        f"peak {peak:.4f} ({PEAK:.4f}),\nforce {force:.5f} ({FORCE:.5f}); closed form in brackets"
    )
    return figure
