"""Convex envelope of a quadratic on settings in the plane: two controls that take listed pairs of values."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.spatial import ConvexHull, Delaunay, QhullError

from ..errors import InputError
from ..pieces import Pieces
from ..validate import float_array, scalar
from .derivative import GroupDerivative
from .grouping import ROUNDING, Groups

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

# relative to the extent of the settings: points nearer than this to a circle are on it, cells thinner than this are
# none, and points this far outside the domain are in it
SAME, FLAT, OUTSIDE = 1e-9, 1e-12, 1e-13
# Newton steps of the smoothed map, halvings of one, and steps at rounding level
STEPS, HALVINGS, QUIET = 100, 40, 3
# root of the temperature of the smoothed map, in units of eps
HEAT = 4.0


class _Edge(NamedTuple):
    """From setting i, of given length and direction; p across lies between low and high, along it is slope."""

    i: int
    j: int
    length: float
    along: FloatArray
    across: FloatArray
    slope: float
    low: float
    high: float


class PlanarMultiBangCost:
    """g(u) = the sum over points of the convex envelope of alpha/2 |u|^2 on settings u_1, ..., u_d in the plane.

    The envelope is affine on each cell of the Delaunay triangulation of the settings (on polygons where more than three
    are on one circle) and infinite outside their convex hull.

    Parameters
    ----------
    settings : array, shape (d, 2)
        At least three, not on one line, in the unit of u.
    alpha : float
        Weight of |u|^2/2, not negative; with alpha = 0 only the corners of the hull matter.

    Raises
    ------
    InputError
        For settings that are equal, on one line, or not pairs, or for a negative weight.

    Notes
    -----
    *Layout.* u = [first components, second components], shape (2, points), flattened. A problem with weights w needs
    equal ones for the two components of a point.

    *Staircase.* g*(p) is the largest <p, u_i> - alpha/2 |u_i|^2, so that a minimiser lies on the setting nearest to
    p/alpha, p = -grad f(u): in its Voronoi cell. It may be between two settings where p/alpha is on their Voronoi edge,
    and anywhere in a cell where p/alpha is its circumcentre.

    *Proximal map.* v is in exactly one of the sets u_i + s dg(u_i) (result u_i), edge + s dg(edge) (projection onto the
    edge), cell + s grad g (translation). Derivative 0, rank one, I. Selection: of the sets that meet at v the one of
    least dimension.

    Labels, one for each component of u and the same for both of a point: "setting 1", ..., "between 1 and 2", ...,
    "within 1, 2, 3", ...
    Source: C. Clason, C. Tameling and B. Wirth, SIAM J. Control Optim. 56 (2018) 3188-3217 (from memory); Delaunay
    triangulation as a convex hull: H. Edelsbrunner and R. Seidel, Discrete Comput. Geom. 1 (1986) 25-44 (from memory).
    """

    convex = True
    separable = False
    piecewise_affine = True

    def __init__(self, settings: Any, alpha: float) -> None:
        points = float_array(settings, "settings", ndim=2)
        if points.shape[0] < 3 or points.shape[1] != 2:
            raise InputError(f"settings must have shape (d, 2) with d >= 3, got {points.shape}")
        same = (points[:, None] == points).all(axis=2) & ~np.eye(len(points), dtype=bool)
        if same.any():
            first, second = np.argwhere(same)[0]
            raise InputError(f"settings must differ, but settings[{first}] = settings[{second}]")
        self.settings, self.alpha = points, scalar(alpha, "alpha", nonnegative=True)
        self._scale = float(np.abs(points - points.mean(axis=0)).max())
        self._height = 0.5 * self.alpha * (points**2).sum(axis=1)
        try:
            hull = ConvexHull(points)
            simplices = Delaunay(points).simplices if self.alpha > 0 else None
        except QhullError as error:
            raise InputError(
                "settings must not lie on one line; for settings on a line use MultiBangCost"
            ) from error
        self._hull = hull.equations  # normal . x + offset <= 0 inside
        self._cells = self._find_cells(hull.vertices, simplices)
        self._gradients = np.array([self._gradient(cell) for cell in self._cells])
        corners = self._height[[cell[0] for cell in self._cells]]
        first = self.settings[[cell[0] for cell in self._cells]]
        self._offsets = corners - (self._gradients * first).sum(axis=1)
        self._edges = self._find_edges()
        self._corners = sorted({i for cell in self._cells for i in cell})
        for array in (self.settings, self._height):
            array.setflags(write=False)

    def __repr__(self) -> str:
        return f"{type(self).__name__}({len(self.settings)} settings, alpha={self.alpha})"

    # geometry

    def _find_cells(self, hull: IntArray, simplices: Any) -> list[tuple[int, ...]]:
        """Cells as settings in positive order, the least one first."""
        if simplices is None:
            return [self._ordered(hull)]
        found = set()
        for simplex in simplices:
            a, b, c = self.settings[simplex]
            double = abs((b - a)[0] * (c - a)[1] - (b - a)[1] * (c - a)[0])
            if double <= FLAT * self._scale**2:
                continue
            centre = np.linalg.solve(np.stack([b - a, c - a]), 0.5 * np.array([b @ b - a @ a, c @ c - a @ a]))
            radius = float(np.linalg.norm(a - centre))
            distance = np.linalg.norm(self.settings - centre, axis=1)
            found.add(
                self._ordered(np.flatnonzero(np.abs(distance - radius) <= SAME * (self._scale + radius)))
            )
        return sorted(found)

    def _ordered(self, members: IntArray) -> tuple[int, ...]:
        middle = self.settings[members].mean(axis=0)
        angle = np.arctan2(*(self.settings[members] - middle).T[::-1])
        turned = np.asarray(members)[np.argsort(angle)]
        return tuple(int(i) for i in np.roll(turned, -int(np.argmin(turned))))

    def _gradient(self, cell: tuple[int, ...]) -> FloatArray:
        """The slope on a cell, alpha times its circumcentre; from a corner in the middle, for digits."""
        if self.alpha == 0.0:
            return np.zeros(2)
        corners = self.settings[list(cell)]
        sides = corners[1:] - corners[0]
        rise = self._height[list(cell[1:])] - self._height[cell[0]]
        return np.asarray(np.linalg.lstsq(sides, rise, rcond=None)[0])

    def _find_edges(self) -> list[_Edge]:
        sides: dict[tuple[int, int], list[int]] = {}
        for number, cell in enumerate(self._cells):
            for i, j in pairwise((*cell, cell[0])):
                sides.setdefault((min(i, j), max(i, j)), []).append(number)
        edges = []
        for (i, j), cells in sorted(sides.items()):
            e = self.settings[j] - self.settings[i]
            length = float(np.linalg.norm(e))
            along = e / length
            across = np.array([-along[1], along[0]])
            low, high = -np.inf, np.inf
            for number in cells:  # a cell on the positive side ends the slopes across from above
                middle = self.settings[list(self._cells[number])].mean(axis=0) - self.settings[i]
                if middle @ across > 0:
                    high = float(self._gradients[number] @ across)
                else:
                    low = float(self._gradients[number] @ across)
            low, high = min(low, high), max(low, high)
            slope = float(self._height[j] - self._height[i]) / length
            edges.append(_Edge(i, j, length, along, across, slope, low, high))
        return edges

    # the function

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless `size` is even."""
        if size % 2:
            raise InputError(
                f"{type(self).__name__} needs two components a point, an even number, not {size}"
            )

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless both components of a point have one weight."""
        first, second = np.split(np.asarray(weights), 2)
        apart = np.abs(first - second) > ROUNDING * np.abs(first)
        if apart.any():
            k = int(np.argmax(apart))
            raise InputError(
                f"the components of point {k} have weights {first[k]} and {second[k]}: make them one"
            )

    def _by_point(self, weights: FloatArray | None) -> FloatArray | None:
        if weights is None:
            return None
        self.check_weights(weights)
        return np.split(np.asarray(weights), 2)[0]

    def terms(self, u: FloatArray) -> FloatArray:
        """The envelope at each point, shape (points,); inf outside the hull."""
        x = u.reshape(2, -1)
        planes = self._gradients @ x + self._offsets[:, None]
        outside = (self._hull[:, :2] @ x + self._hull[:, 2:]).max(axis=0) > OUTSIDE * self._scale
        return np.where(outside, np.inf, planes.max(axis=0))

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u); inf outside the hull of the settings."""
        w = self._by_point(weights)
        terms = self.terms(u)
        if not np.isfinite(terms).all():
            return float("inf")
        return float(terms.sum() if w is None else w @ terms)

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float:
        """Return the sum of the largest <y, u_i> - alpha/2 |u_i|^2."""
        w = self._by_point(weights)
        terms = (self.settings @ y.reshape(2, -1) - self._height[:, None]).max(axis=0)
        return float(terms.sum() if w is None else w @ terms)

    def staircase(self, y: FloatArray) -> FloatArray:
        """The setting that maximises <u, y> - g(u) at each point, the one nearest to y/alpha; of several the first."""
        best = (self.settings @ y.reshape(2, -1) - self._height[:, None]).argmax(axis=0)
        return np.ascontiguousarray(self.settings[best].T).ravel()

    def regularised_staircase(self, y: FloatArray, gamma: float) -> FloatArray:
        """The Moreau-Yosida form of the staircase, that of g + gamma/2 |u|^2."""
        gamma = scalar(gamma, "gamma", positive=True)
        return self.prox(y / gamma, 1.0 / gamma)

    def share_between(
        self, u: FloatArray, weights: FloatArray | None = None, tolerance: float = 0.0
    ) -> float:
        """The share of the points (of their weights) that are further than `tolerance` from every setting."""
        x = u.reshape(2, -1)
        gap = np.min([np.linalg.norm(x - s[:, None], axis=0) for s in self.settings], axis=0)
        w = self._by_point(weights)
        w = np.ones(gap.shape) if w is None else w
        return float(w[gap > tolerance].sum() / w.sum())

    # the proximal map

    def _rooms(self, x: FloatArray, step: float) -> Iterator[FloatArray]:
        """How far x, shape (2, points), is inside each set of the plane: corners, edges, cells; negative outside."""
        neighbours: dict[int, list[_Edge]] = {}
        for edge in self._edges:
            neighbours.setdefault(edge.i, []).append(edge)
            neighbours.setdefault(edge.j, []).append(edge)
        coordinates = []
        for edge in self._edges:
            offset = x - self.settings[edge.i][:, None]
            coordinates.append((edge.along @ offset - step * edge.slope, edge.across @ offset))
        along = {id(edge): t for edge, (t, _) in zip(self._edges, coordinates, strict=True)}
        for i in self._corners:
            room = np.full(x.shape[1], np.inf)
            for edge in neighbours[i]:
                t = along[id(edge)]
                np.minimum(room, -t if edge.i == i else t - edge.length, out=room)
            yield room
        for edge, (t, n) in zip(self._edges, coordinates, strict=True):
            inside = np.minimum(t, edge.length - t)
            yield np.minimum(inside, np.minimum(n - step * edge.low, step * edge.high - n))
        for gradient, cell in zip(self._gradients, self._cells, strict=True):
            u = x - step * gradient[:, None]
            room = np.full(x.shape[1], np.inf)
            for i, j in pairwise((*cell, cell[0])):
                side = self.settings[j] - self.settings[i]
                inwards = np.array([-side[1], side[0]]) / np.linalg.norm(side)
                np.minimum(room, inwards @ (u - self.settings[i][:, None]), out=room)
            yield room

    def _located(self, v: FloatArray, step: float) -> tuple[IntArray, FloatArray]:
        """The set of each point, counted as `_rooms` does, and how far the point is inside; the first that holds it."""
        x = v.reshape(2, -1)
        best = np.full(x.shape[1], -np.inf)
        room = np.zeros(x.shape[1])
        which = np.zeros(x.shape[1], dtype=np.intp)
        for number, found in enumerate(self._rooms(x, step)):
            # rounding may leave a point in none of the sets: then the one that misses it least
            better = np.minimum(found, 0.0) > best
            which[better], best[better], room[better] = number, np.minimum(found, 0.0)[better], found[better]
        return which, np.maximum(room, 0.0)

    def _kind(self, which: IntArray) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_], IntArray]:
        """On an edge, in a cell, and the number there."""
        corners, edges = len(self._corners), len(self._edges)
        in_cell = which >= corners + edges
        on_edge = (which >= corners) & ~in_cell
        return on_edge, in_cell, which - corners * on_edge - (corners + edges) * in_cell

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return for each point the setting, the point of an edge, or the translate, by the set that holds v."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        which, _ = self._located(v, step)
        x = v.reshape(2, -1)
        on_edge, in_cell, number = self._kind(which)
        u = np.empty(x.shape)
        on_setting = ~(on_edge | in_cell)
        u[:, on_setting] = self.settings[self._corners].T[:, number[on_setting]]
        for k, edge in enumerate(self._edges):
            at = on_edge & (number == k)
            start = self.settings[edge.i][:, None]
            t = edge.along @ (x[:, at] - start) - step * edge.slope
            u[:, at] = start + np.clip(t, 0.0, edge.length) * edge.along[:, None]
        u[:, in_cell] = x[:, in_cell] - step * self._gradients.T[:, number[in_cell]]
        return u.ravel()

    def prox_derivative(self, v: FloatArray, step: float) -> GroupDerivative:
        """Return 0 on settings, the projection onto the direction of an edge on it, the identity in cells."""
        which, _ = self._located(v, step)
        on_edge, in_cell, number = self._kind(which)
        along = np.zeros((2, which.size))
        directions = np.array([edge.along for edge in self._edges]).T
        along[:, on_edge] = directions[:, number[on_edge]]
        kept = np.tile(in_cell.astype(np.float64), 2)
        return GroupDerivative(kept, along.ravel(), along.ravel(), _pairs(which.size))

    def _legend(self) -> tuple[str, ...]:
        words = [f"setting {i + 1}" for i in self._corners]
        words += [f"between {edge.i + 1} and {edge.j + 1}" for edge in self._edges]
        return (*words, *("within " + ", ".join(str(i + 1) for i in cell) for cell in self._cells))

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label both components of each point with its setting, edge or cell."""
        which, _ = self._located(v, step)
        return Pieces({"control": np.tile(which, 2)}, {"control": self._legend()})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return for both components the distance of their point to the border of its set, in the unit of v."""
        _, room = self._located(v, step)
        return np.tile(room, 2)

    # the smoothed map

    def _smoothed(self, v: FloatArray, step: float, eps: float) -> tuple[FloatArray, FloatArray]:
        """p and the Hessian of the smoothed conjugate there, shape (2, 2, points), by Newton steps.

        p minimises s/2 |p|^2 - <v, p> + h log sum exp((<p, u_i> - alpha/2 |u_i|^2)/h), h = (4 eps)^2/s, from the p of
        the proximal map on, which is no further than 4 eps sqrt(2 log d)/s.
        """
        x = v.reshape(2, -1)
        heat = (HEAT * eps) ** 2 / step

        def value_at(p: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
            shares, level = self._shares(p, heat)
            square, product = 0.5 * step * (p * p).sum(axis=0), (x * p).sum(axis=0)
            return shares, square - product + level, 4e-16 * (square + np.abs(product) + np.abs(level))

        p = (x - self.prox(v, step).reshape(2, -1)) / step
        shares, value, noise = value_at(p)
        quiet = 0
        for _ in range(STEPS):
            mean, hessian = self._moments(shares, heat)
            slope = step * p - x + mean
            (a, b), (_, d) = hessian
            a, d = a + step, d + step
            move = -np.stack([d * slope[0] - b * slope[1], a * slope[1] - b * slope[0]]) / (a * d - b * b)
            expected = (slope * move).sum(axis=0)  # negative
            length = np.ones(x.shape[1])
            for _ in range(HALVINGS):
                trial = p + length * move
                shares, new, _ = value_at(trial)
                # where values no longer tell, the full step is the better one
                short = (new > value + 1e-4 * length * expected + noise) & (np.abs(expected) > noise)
                if not short.any():
                    break
                length = np.where(short, 0.5 * length, length)
            p = trial
            shares, value, noise = value_at(p)
            # values no longer tell: the full steps still gain digits, for a while
            quiet = quiet + 1 if (np.abs(expected) <= noise).all() else 0
            if quiet == QUIET or not move.any():
                break
        return p, self._moments(shares, heat)[1]

    def _shares(self, p: FloatArray, heat: float) -> tuple[FloatArray, FloatArray]:
        """The weights of the settings at p, shape (d, points), and the smoothed conjugate."""
        heights = self.settings @ p - self._height[:, None]
        top = heights.max(axis=0)
        terms = np.exp((heights - top) / heat)
        total = terms.sum(axis=0)
        return terms / total, top + heat * np.log(total)

    def _moments(self, shares: FloatArray, heat: float) -> tuple[FloatArray, FloatArray]:
        mean = self.settings.T @ shares
        apart = self.settings.T[:, :, None] - mean[:, None]
        return mean, np.einsum("ikn,jkn,kn->ijn", apart, apart, shares) / heat

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the proximal map with the largest <p, u_i> - ... in g* replaced by h log sum exp(. / h).

        With h = (4 eps)^2/step it differs from the proximal map by at most 4 eps sqrt(2 log d).
        """
        return v - step * self._smoothed(v, step, eps)[0].ravel()

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> _BlockDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0: H (s I + H)^-1 for each point."""
        _, hessian = self._smoothed(v, step, eps)
        h = np.moveaxis(hessian, 2, 0)
        return _BlockDerivative(np.asarray(np.linalg.solve(h + step * np.eye(2), h), dtype=np.float64))

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Return the subgradient as ``price``."""
        return {"price": 1.0 * subgradient}


class _BlockDerivative:
    """One symmetric 2 x 2 matrix a point, shape (points, 2, 2)."""

    def __init__(self, blocks: FloatArray) -> None:
        self.diagonal: FloatArray | None = None
        self.blocks = 0.5 * (blocks + blocks.transpose(0, 2, 1))

    def apply(self, directions: FloatArray) -> FloatArray:
        """Multiply a vector (n,) or the columns of (n, k)."""
        h = directions.reshape(2, self.blocks.shape[0], -1)
        return np.einsum("nij,jnk->ink", self.blocks, h).reshape(directions.shape)


def _pairs(points: int) -> Groups:
    return Groups(np.tile(np.arange(points), 2))
