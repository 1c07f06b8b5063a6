"""The proximal map against the values of its cost, and the pieces against its derivative.

A reference method that shares the proximal map cannot see an error in it; these checks can.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from ..protocols import Cost, FloatArray
from .check import Check

COORDINATES = 24


def proximal_map(
    cost: Cost, v: FloatArray, step: float, weights: FloatArray, rng: np.random.Generator
) -> Check:
    """Whether prox(v, step) minimises step g(u) + 1/2 ||u - v||^2, tried against many other points.

    For convex g the objective is strongly convex, so every trial must lie above the minimum by half its squared
    distance. Trials move single components and whole pieces, towards v, towards zero and at random.
    """
    tried, worst = 0, 0.0
    for scale in (1.0, 0.5, 3.0):
        w = scale * v + (0.0 if scale == 1.0 else 0.1 * _rms(v) * rng.standard_normal(v.size))
        z = cost.prox(w, step)
        if not np.isfinite(z).all() or not np.isfinite(cost.value(z, weights)):
            return Check(
                "proximal map", False, "prox(v) lies outside the domain of the cost or is not finite"
            )
        at_z, size = _objective(cost, z, w, step, weights)
        for u in _trials(cost, z, w, step, rng):
            value, u_size = _objective(cost, u, w, step, weights)
            tried += 1
            if not np.isfinite(value):
                continue
            growth = 0.5 * float((weights * (u - z)) @ (u - z)) if cost.convex else 0.0
            rounding = 1e-14 * (size + u_size) + 1e-300
            worst = max(worst, (at_z + 0.999 * growth - value) / rounding)
    holds = worst <= 1.0
    if holds:
        return Check("proximal map", True, f"prox(v) minimises its objective against {tried} other points")
    return Check(
        "proximal map",
        False,
        f"another point is better, by {worst:.0e} rounding errors: prox is not that of value",
    )


def piece_labels(local: Any) -> Check | None:
    """Whether components with one label are either all on a sloped or all on a constant piece of the proximal map."""
    at = local.evaluate(local.x)
    derivative = getattr(at.data, "derivative", None) if at.finite else None
    labels = at.pieces.get("control")
    if derivative is None or labels is None or labels.shape != at.data.v.shape:
        return None
    diagonal = getattr(derivative, "diagonal", None)
    if diagonal is None:
        diagonal = row_sizes(derivative, labels.size)
    legend = at.pieces.legend.get("control", ())
    for label in np.unique(labels):
        sloped = diagonal[labels == label] != 0.0
        if sloped.any() and not sloped.all():
            name = legend[int(label)] if int(label) < len(legend) else str(label)
            few = int(min(sloped.sum(), (~sloped).sum()))
            return Check(
                "pieces", False, f"{few} components labelled {name!r} have the derivative of another piece"
            )
    return Check(
        "pieces", True, f"{np.unique(labels).size} labels agree with the derivative of the proximal map"
    )


def row_sizes(derivative: Any, size: int) -> FloatArray:
    """An estimate of the size of each row of a derivative that is not diagonal: zero where the row is zero.

    Three seeded random directions; a row that is not zero gives zero for all of them with probability zero.
    """
    probes = np.random.default_rng(7).standard_normal((size, 3))
    image: FloatArray = derivative.apply(probes)
    return np.asarray(np.abs(image).max(axis=1))


def _objective(
    cost: Cost, u: FloatArray, v: FloatArray, step: float, weights: FloatArray
) -> tuple[float, float]:
    """step g(u) + 1/2 ||u - v||^2, and the size of its terms."""
    g = step * cost.value(u, weights)
    gap = u - v
    distance = 0.5 * float((weights * gap) @ gap)
    return g + distance, abs(g) + distance


def _trials(
    cost: Cost, z: FloatArray, v: FloatArray, step: float, rng: np.random.Generator
) -> Iterator[FloatArray]:
    moves = [v - z, -z, cost.prox(v, 1.2 * step) - z, cost.prox(v, 0.8 * step) - z]
    for labels in cost.pieces(v, step).values():
        if labels.shape == z.shape:
            for label in np.unique(labels):
                inside = (labels == label).astype(np.float64)
                moves += [inside * (v - z), -inside * z, inside * rng.standard_normal(z.size) * _rms(v)]
    size = _rms(v - z) + 1e-3 * _rms(v)
    for i in rng.permutation(z.size)[:COORDINATES]:
        move = np.zeros_like(z)
        move[i] = size + abs(v[i] - z[i])
        moves.append(move)
    for move in moves:
        if move.any():
            for t in (1.0, 0.1, 0.01, -0.01, -0.1, 1e-4, -1e-4):
                yield z + t * move


def _rms(x: FloatArray) -> float:
    return float(np.sqrt(np.mean(x * x))) or 1.0
