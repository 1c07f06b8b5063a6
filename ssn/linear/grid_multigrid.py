"""Geometric multigrid for the coupled state and adjoint system on a tensor-product mesh.

The system is [[K, -T], [W, K]] [y; q] = [f; g] with K a constant stencil, W a constant or diagonal mass and T the
diagonal active-set term, both scaled so that they are of one size (see `ssn.linear.coupled`). Both unknowns of a node
are relaxed together, one colour after the other (red-black for five-point stencils), which smooths whatever the weight;
coarse operators are Galerkin products, the full coarse masses among them: lumping them doubles the cycles.

A field is kept as 2^d arrays, one for each parity of the indices, with a layer of zeros around: then the neighbours of
a colour are contiguous slices of other arrays, and a relaxation costs a few passes at the speed of memory.

Source: collective smoothing for optimality systems: A. Borzi and V. Schulz, SIAM Rev. 51 (2009) 361-395 (from memory);
U. Trottenberg, C. W. Oosterlee and A. Schueller, Multigrid, 2001, ch. 8 (from memory).
"""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import numpy.typing as npt

from .stencil import Offset, Stencil, along, coarsen, dense, interpolation_weights, part

FloatArray = npt.NDArray[np.float64]
Field = dict[Offset, Any]

# of the numbers inside a cycle: half the traffic of memory, and what single precision loses the outer iteration mends
PRECISION = np.float32

# nodes along the shortest axis, and nodes in all, at which coarsening ends
COARSEST, LARGEST_DENSE = 3, 150


class GridLevel:
    """One mesh of the hierarchy: stencils by colour, relaxation, residual and transfers.

    Parameters
    ----------
    shape : tuple of int
        Nodes along each axis.
    state, mass : dict of offset to float or array
        Stencils of K and W.
    """

    def __init__(self, shape: tuple[int, ...], state: Stencil, mass: Stencil) -> None:
        self.shape, self.dimension = shape, len(shape)
        self.centre: Offset = (0,) * self.dimension
        self.colours = sorted(itertools.product((0, 1), repeat=self.dimension), key=lambda c: sum(c) % 2)
        self._padded = tuple((n + 1) // 2 + 2 for n in shape)
        counts = {c: [(n - a + 1) // 2 for n, a in zip(shape, c, strict=True)] for c in self.colours}
        self.inside = {c: tuple(slice(1, 1 + m) for m in counts[c]) for c in self.colours}
        self._counts = counts
        self.state, self.mass = self.by_colour(state), self.by_colour(mass)
        self.active: dict[Offset, Stencil] = {c: {} for c in self.colours}
        self.inverse: Field = {}
        self.weights: list[tuple[Any, Any]] = []
        self.exact_weights: list[tuple[FloatArray, FloatArray]] = []
        self._near: dict[tuple[Offset, Offset], tuple[Offset, tuple[slice, ...]]] = {}
        self._settled = self._colours_settled()

    def set_weights(self, weights: list[tuple[FloatArray, FloatArray]]) -> None:
        """Take the interpolation weights along each axis, from the next coarser mesh."""
        self.exact_weights = weights
        self.weights = [(left.astype(PRECISION), right.astype(PRECISION)) for left, right in weights]

    def by_colour(self, stencil: Stencil) -> dict[Offset, Stencil]:
        """The coefficients at the nodes of each colour."""
        return {
            c: {
                o: float(a) if np.ndim(a) == 0 else a[_every_second(c)].astype(PRECISION, order="C")
                for o, a in stencil.items()
            }
            for c in self.colours
        }

    def couple(self, active: Stencil | None) -> None:
        """Take the stencil of T; None decouples: both T and W are left out until the next call."""
        zero = self.centre
        if active is None:
            self.inverse = {c: 1.0 / np.square(self.state[c][zero]) for c in self.colours}
            self.active = {}
            return
        self.active = self.by_colour(active)
        self.inverse = {
            c: 1.0 / (self.state[c][zero] ** 2 + self.mass[c][zero] * self.active[c][zero])
            for c in self.colours
        }

    def new(self) -> Field:
        """A field of zeros."""
        return {c: np.zeros(self._padded, PRECISION) for c in self.colours}

    def split(self, values: FloatArray) -> Field:
        """A field from an array of the shape of the mesh."""
        field = self.new()
        for c in self.colours:
            field[c][self.inside[c]] = values[_every_second(c)]
        return field

    def join(self, field: Field) -> Any:
        """The array of a field."""
        values = np.empty(self.shape, PRECISION)
        for c in self.colours:
            values[_every_second(c)] = field[c][self.inside[c]]
        return values

    def _neighbour(self, c: Offset, o: Offset) -> tuple[Offset, tuple[slice, ...]]:
        """Colour and slice of the nodes at an offset from those of a colour."""
        if (c, o) in self._near:
            return self._near[c, o]
        colour = tuple((a + s) % 2 for a, s in zip(c, o, strict=True))
        shift = [(a + s - b) // 2 for a, s, b in zip(c, o, colour, strict=True)]
        where = tuple(slice(1 + k, 1 + k + m) for k, m in zip(shift, self._counts[c], strict=True))
        self._near[c, o] = colour, where
        return colour, where

    def _colours_settled(self) -> set[Offset]:
        """Colours whose residual is zero after a relaxation: no neighbour of theirs is relaxed later."""
        settled = set()
        for k, c in enumerate(self.colours):
            near = {self._neighbour(c, o)[0] for o in (*self.state[c], *self.mass[c]) if any(o)}
            if not near & set(self.colours[k + 1 :]):
                settled.add(c)
        return settled

    def _subtract(
        self,
        stencil: Stencil,
        field: Field,
        c: Offset,
        out: FloatArray,
        sign: float,
        known: set[Offset],
        centre: bool,
    ) -> None:
        """out -= sign * (stencil applied to the field at the nodes of a colour), where the field is known."""
        groups: dict[float, list[FloatArray]] = {}
        buffer = np.empty_like(out)
        for o, a in stencil.items():
            if not centre and not any(o):
                continue
            colour, where = self._neighbour(c, o)
            if colour not in known:
                continue
            if isinstance(a, float):
                groups.setdefault(a, []).append(field[colour][where])
                continue
            np.multiply(a, field[colour][where], out=buffer)
            if sign > 0:
                out -= buffer
            else:
                out += buffer
        for a, terms in groups.items():
            if len(terms) == 1:
                np.multiply(terms[0], sign * a, out=buffer)
                out -= buffer
                continue
            np.add(terms[0], terms[1], out=buffer)
            for term in terms[2:]:
                buffer += term
            if sign * a == -1.0:
                out += buffer
            else:
                buffer *= sign * a
                out -= buffer

    def _loads(
        self, y: Field, q: Field, f: Field, g: Field, c: Offset, known: set[Offset], centre: bool
    ) -> tuple[FloatArray, FloatArray]:
        first, second = f[c][self.inside[c]].copy(), g[c][self.inside[c]].copy()
        self._subtract(self.state[c], y, c, first, 1.0, known, centre)
        self._subtract(self.state[c], q, c, second, 1.0, known, centre)
        if self.active:
            self._subtract(self.active[c], q, c, first, -1.0, known, centre)
            self._subtract(self.mass[c], y, c, second, 1.0, known, centre)
        return first, second

    def relax(self, y: Field, q: Field, f: Field, g: Field, *, from_zero: bool = False) -> None:
        """One collective Gauss-Seidel sweep over the colours."""
        known = set() if from_zero else set(self.colours)
        for c in self.colours:
            if 0 in self._counts[c]:
                continue
            first, second = self._loads(y, q, f, g, c, known, False)
            known.add(c)
            k, inverse = self.state[c][self.centre], self.inverse[c]
            new_y, new_q = y[c][self.inside[c]], q[c][self.inside[c]]
            np.multiply(first, k, out=new_y)
            np.multiply(second, k, out=new_q)
            if self.active:
                second *= self.active[c][self.centre]
                first *= self.mass[c][self.centre]
                new_y += second
                new_q -= first
            new_y *= inverse
            new_q *= inverse

    def residual(self, y: Field, q: Field, f: Field, g: Field) -> tuple[Field, Field]:
        """The residuals after a relaxation by colour, without padding; settled colours are left out."""
        known = set(self.colours)
        pairs = {c: self._loads(y, q, f, g, c, known, True) for c in self.colours if c not in self._settled}
        return {c: pair[0] for c, pair in pairs.items()}, {c: pair[1] for c, pair in pairs.items()}

    def restrict(self, residual: Field) -> FloatArray:
        """P' r as an array on the coarse mesh."""
        parts: dict[Offset, Any] = dict(residual)
        for axis, (to_left, to_right) in enumerate(self.weights):
            coarse, merged = self.shape[axis] // 2, {}
            for rest in {c[1:] for c in parts}:
                even, total = parts.get((0, *rest)), parts.get((1, *rest))
                if even is not None:
                    spread = along(to_right[:coarse], axis, self.dimension) * part(
                        even, axis, slice(0, coarse)
                    )
                    m = min(coarse, to_left.size - 1)
                    part(spread, axis, slice(0, m))[...] += along(
                        to_left[1 : 1 + m], axis, self.dimension
                    ) * part(even, axis, slice(1, 1 + m))
                    total = spread if total is None else total + spread
                merged[rest] = total
            parts = merged
        return np.asarray(parts[()])

    def prolong(self, values: FloatArray, into: Field) -> None:
        """Add P e to a field."""
        parts: dict[Offset, Any] = {(): values}
        for axis in reversed(range(self.dimension)):
            to_left, to_right = self.weights[axis]
            coarse, number, merged = self.shape[axis] // 2, to_left.size, {}
            for c, a in parts.items():
                even = np.zeros([number if k == axis else m for k, m in enumerate(a.shape)], PRECISION)
                m = min(coarse, number)
                part(even, axis, slice(0, m))[...] = along(to_right[:m], axis, self.dimension) * part(
                    a, axis, slice(0, m)
                )
                part(even, axis, slice(1, number))[...] += along(to_left[1:], axis, self.dimension) * part(
                    a, axis, slice(0, number - 1)
                )
                merged[(1, *c)], merged[(0, *c)] = a, even
            parts = merged
        for c in self.colours:
            into[c][self.inside[c]] += parts[c]


def _every_second(colour: Offset) -> tuple[slice, ...]:
    return tuple(slice(a, None, 2) for a in colour)


class GridHierarchy:
    """Cycles for the coupled system on a tensor-product mesh, V(1,1).

    Parameters
    ----------
    shape : tuple of int
        Nodes along each axis, at least 3.
    state, mass : dict of offset to float or array
        Stencils of K (symmetric) and W.
    """

    name = "geometric multigrid"

    def __init__(self, shape: tuple[int, ...], state: Stencil, mass: Stencil) -> None:
        self.size = int(np.prod(shape))
        self.levels: list[GridLevel] = []
        positions = [np.arange(1, n + 1) / (n + 1.0) for n in shape]
        while True:
            level = GridLevel(shape, state, mass)
            self.levels.append(level)
            if int(np.prod(shape)) <= LARGEST_DENSE or min(shape) <= COARSEST:
                break
            weights = [interpolation_weights(p, (0.0, 1.0)) for p in positions]
            state, mass = coarsen(state, shape, weights), coarsen(mass, shape, weights)
            level.set_weights(weights)
            shape, positions = tuple(n // 2 for n in shape), [p[1::2] for p in positions]
        self._state, self._mass = state, mass
        self._active: Stencil = {}
        self._coarsest: dict[bool, FloatArray] = {}

    def refresh(self, active: Any) -> None:
        """Take the active-set term T, a vector with the diagonal: Galerkin products down to the coarsest mesh."""
        first = self.levels[0]
        stencil: Stencil = {first.centre: np.reshape(active, first.shape).astype(PRECISION)}
        for level in self.levels:
            level.couple(stencil)
            if level.exact_weights:
                stencil = coarsen(stencil, level.shape, level.exact_weights)
        self._active = stencil
        self._invert_coarsest(True)

    def _invert_coarsest(self, coupled: bool) -> None:
        """The inverse of the coarsest operator, couplings left out or not."""
        level = self.levels[-1]
        state, mass = dense(self._state, level.shape), dense(self._mass, level.shape)
        active = dense(self._active, level.shape)
        matrix = np.block([[state, -active], [mass, state]])
        if not coupled:
            matrix = np.block([[state, 0.0 * active], [0.0 * mass, state]])
        self._coarsest[coupled] = np.linalg.inv(matrix)

    def correct(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for the coupled system."""
        return self._run(f, g, True)

    def solve_each(self, f: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
        """One cycle from zero for K y = f and K q = g."""
        kept = [(level.active, level.inverse) for level in self.levels]
        for level in self.levels:
            level.couple(None)
        if False not in self._coarsest:
            self._invert_coarsest(False)
        result = self._run(f, g, False)
        for level, (active, inverse) in zip(self.levels, kept, strict=True):
            level.active, level.inverse = active, inverse
        return result

    def _run(self, f: FloatArray, g: FloatArray, coupled: bool) -> tuple[FloatArray, FloatArray]:
        first = self.levels[0]
        # loads of size one, so that small numbers do not leave the range of single precision
        size = float(max(abs(f).max(), abs(g).max()))
        if size == 0.0 or not np.isfinite(size):
            return np.full(self.size, size * 0.0), np.full(self.size, size * 0.0)
        loads = [first.split((part / size).reshape(first.shape)) for part in (f, g)]
        pair = self._cycle(0, loads[0], loads[1], coupled)
        y, q = (first.join(part).ravel().astype(np.float64) * size for part in pair)
        return y, q

    def _cycle(self, k: int, f: Field, g: Field, coupled: bool) -> tuple[Field, Field]:
        level = self.levels[k]
        if k == len(self.levels) - 1:
            loads = np.concatenate([level.join(f).ravel(), level.join(g).ravel()])
            pair = np.reshape(self._coarsest[coupled] @ loads, (2, *level.shape))
            return level.split(pair[0]), level.split(pair[1])
        y, q = level.new(), level.new()
        level.relax(y, q, f, g, from_zero=True)
        r, s = level.residual(y, q, f, g)
        below = self.levels[k + 1]
        coarse = self._cycle(k + 1, below.split(level.restrict(r)), below.split(level.restrict(s)), coupled)
        level.prolong(below.join(coarse[0]), y)
        level.prolong(below.join(coarse[1]), q)
        level.relax(y, q, f, g)
        return y, q
