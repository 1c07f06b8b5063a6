"""Flexible Krylov iteration: generalised conjugate residuals, truncated, with the true residual at the end.

Source: S. C. Eisenstat, H. C. Elman and M. H. Schultz, SIAM J. Numer. Anal. 20 (1983) 345-357 (from memory).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

# iterations in a row in which the residual falls by less than a tenth in all, after which there is no more to gain
IDLE = 15


def conjugate_residuals(
    apply: Callable[[FloatArray], FloatArray],
    precondition: Callable[[FloatArray, int], FloatArray],
    rhs: FloatArray,
    forcing: float,
    *,
    max_inner: int,
    kept: int,
    idle: int = IDLE,
) -> tuple[FloatArray, float, int]:
    """Solve apply(x) = rhs to a relative residual of `forcing`, from zero.

    Parameters
    ----------
    apply, precondition : callable
        Matrix and approximate inverse, which gets the number of the iteration too and may change with it.
    rhs : array, shape (n,)
    forcing : float
    max_inner, kept, idle : int
        Iterations at most, directions kept (the latest), and iterations without progress after which it gives up.

    Returns
    -------
    x, relative residual, iterations
        The residual is computed, not updated; it is infinite where the iteration broke down.
    """
    left, x = rhs.copy(), np.zeros_like(rhs)
    norm = first = float(np.linalg.norm(rhs))
    if first == 0.0:
        return x, 0.0, 0
    directions: list[tuple[FloatArray, FloatArray]] = []
    norms = [norm]
    inner = 0
    while norm > forcing * first and inner < max_inner:
        if inner >= idle and norm > 0.9 * norms[-idle]:
            break
        z = precondition(left, inner)
        inner += 1
        image = apply(z)
        for old, old_image in directions:
            share = float(old_image @ image)
            z = z - share * old
            image = image - share * old_image
        length = float(np.linalg.norm(image))
        if not np.isfinite(length) or length == 0.0:
            return x, np.inf, inner
        z, image = z / length, image / length
        share = float(image @ left)
        x += share * z
        left -= share * image
        norm = float(np.linalg.norm(left))
        directions.append((z, image))
        if len(directions) > kept:
            directions.pop(0)
        if norm <= forcing * first:  # by recurrence, which drifts: go on from the residual itself
            left = rhs - apply(x)
            norm = float(np.linalg.norm(left))
            directions.clear()
        norms.append(norm)
    if directions:
        norm = float(np.linalg.norm(rhs - apply(x)))
    return x, norm / first, inner
