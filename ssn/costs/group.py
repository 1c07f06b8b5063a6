"""The Euclidean norm of groups: directional sparsity, group selection, isotropic variation."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError
from ..pieces import Pieces
from ..validate import bound_arrays
from .blocks import BLOCK, by_blocks
from .derivative import GroupDerivative
from .grouping import Groups
from .piecewise import not_negative

FloatArray = npt.NDArray[np.float64]

LEGEND = ("zero", "nonzero", "lower", "upper")
ZERO, NONZERO, LOWER, UPPER = range(4)
# iterations of the scalar equations, which end at rounding much earlier
ITERATIONS = 200


class GroupSparseCost:
    """g(u) = sum over groups of beta_g ||u_g||, with lower_i <= u_i <= upper_i.

    Parameters
    ----------
    beta : float or array, one a group
        Weight, cost per unit of the norm; not negative. For groups along an axis the groups are numbered in the order
        of the other axes.
    groups : integer array, shape (n,), or list of index arrays
        The group of each component (0, 1, ...), or the components of each group; or give `shape` and `axis`.
    shape : tuple of int, axis : int
        The groups are the lines along `axis` of ``u.reshape(shape)``: with shape (times, places) and axis 0 the norm
        is taken over time, and whole places are zero.
    inner_weights : float or array, shape (n,) or (shape[axis],), optional
        a, the weights of the norm within a group (time weights); ones by default.
    lower, upper : float or array, shape (n,), optional
        Bounds in the unit of u; infinite where there is none. They need not contain zero.

    Raises
    ------
    InputError
        For groups that do not hold each component once, a negative weight, or crossing bounds.

    Notes
    -----
    *Inner product.* ||u_g||^2 = sum over g of a_i u_i^2. A problem with weights w needs w_i = outer_g a_i, with one
    outer weight a group (the mass of a place); `value` is then sum_g outer_g beta_g ||u_g||, raises `InputError` for
    other w, and the proximal map minimises step g(u) + 1/2 sum w_i (u_i - v_i)^2. Without weights the outer ones are 1.

    *Proximal map.* Without bounds max(0, 1 - step beta/||v_g||) v_g. With bounds
    u_i = clip(v_i r/(r + step beta), lower_i, upper_i), r = ||u_g||, one monotone scalar equation a group; u_g = 0
    where zero is within the bounds and the part of v_g that points into them is not longer than step beta. The
    derivative is the inverse of I + step beta Hess ||.|| on the components that are not clipped, a multiple of the
    identity plus a rank-one term.

    *Selection* at kinks: zero groups and clipped components own theirs (derivative 0).

    Sources: M. Yuan and Y. Lin, J. R. Statist. Soc. B 68 (2006) 49-67; R. Herzog, G. Stadler, G. Wachsmuth, SIAM J.
    Control Optim. 50 (2012) 943-963 (both from memory); the bounded form is our derivation.
    """

    convex = True
    separable = False
    piecewise_affine = False

    def __init__(
        self,
        beta: Any,
        groups: Any = None,
        *,
        shape: Any = None,
        axis: Any = None,
        inner_weights: Any = 1.0,
        lower: Any = -np.inf,
        upper: Any = np.inf,
    ) -> None:
        if (groups is None) == (shape is None) or (shape is None) != (axis is None):
            raise InputError("give either groups, or shape and axis")
        self.groups = Groups.given(groups) if shape is None else Groups.along(shape, axis)
        self.size = self.groups.size
        self.beta = not_negative(beta, "beta")
        if self.beta.shape not in ((), (1,), (self.groups.number,)):
            raise InputError(f"beta has shape {self.beta.shape} for {self.groups.number} groups")
        line = None if shape is None else (tuple(shape), axis % len(shape))
        self.inner_weights = self.groups.weights(inner_weights, "inner_weights", line)
        self._plain = bool((self.inner_weights == 1.0).all())
        low, high = bound_arrays(lower, upper)
        for name, array in (("lower", low), ("upper", high)):
            if array.shape not in ((), (1,), (self.size,)):
                raise InputError(f"{name} has shape {array.shape}, expected a number or ({self.size},)")
        self.lower, self.upper = (np.broadcast_to(a, (self.size,)).copy() for a in (low, high))
        self.bounded = bool(np.isfinite(self.lower).any() or np.isfinite(self.upper).any())
        # whether a group contains zero within its bounds
        outside = ((self.lower > 0) | (self.upper < 0)).astype(np.float64)
        self._holds_zero = self.groups.sum(outside) == 0
        for array in (self.beta, self.inner_weights, self.lower, self.upper):
            array.setflags(write=False)
        self._last: tuple[float, FloatArray, Any] | None = None

    def __repr__(self) -> str:
        text = f"{type(self).__name__}({self.groups.number} groups of {self.size} unknowns"
        return text + (", within bounds)" if self.bounded else ")")

    def check_size(self, size: int) -> None:
        """Raise `InputError` unless the groups hold `size` unknowns."""
        if size != self.size:
            raise InputError(f"{type(self).__name__} has groups of {self.size} unknowns, not {size}")

    def check_weights(self, weights: FloatArray) -> None:
        """Raise `InputError` unless the weights are outer times inner ones."""
        self.groups.outer(weights, self.inner_weights)

    def norms(self, u: FloatArray) -> FloatArray:
        """||u_g|| for each group, in the inner weights."""
        square = u * u
        if not self._plain:
            square *= self.inner_weights
        return np.sqrt(self.groups.sum(square))

    def value(self, u: FloatArray, weights: FloatArray | None = None) -> float:
        """Return g(u) for weights outer times inner; inf where a bound is violated."""
        outer = self.groups.outer(weights, self.inner_weights)
        if (u < self.lower).any() or (u > self.upper).any():
            return float("inf")
        return float(np.sum(outer * self.beta * self.norms(u)))

    def conjugate_value(self, y: FloatArray, weights: FloatArray | None = None) -> float | None:
        """Return 0 where ||y_g|| <= beta_g (up to rounding) in every group, else inf; None with bounds: not known."""
        if self.bounded:
            return None
        return 0.0 if (self.norms(y) <= self.beta * (1.0 + 1e-12)).all() else float("inf")

    # the proximal map

    def _inward(self, v: FloatArray) -> FloatArray:
        """The part of v that does not point out of a bound at zero."""
        return np.where(((self.lower == 0) & (v < 0)) | ((self.upper == 0) & (v > 0)), 0.0, v)

    def _threshold(self, step: float) -> FloatArray:
        return np.broadcast_to(step * self.beta, (self.groups.number,))

    def _solve(self, v: FloatArray, step: float) -> tuple[FloatArray, FloatArray, npt.NDArray[np.bool_]]:
        """r = ||u_g||, the factor r/(r + t) of each group, and which groups are zero; the last ones are remembered.

        Map, derivative and pieces at one point solve the same equations.
        """
        known = self._last
        if known is not None and known[0] == step and np.array_equal(known[1], v):
            return known[2]
        found = self._solved(v, step)
        if self.bounded:
            self._last = (step, v.copy(), found)
        return found

    def _solved(self, v: FloatArray, step: float) -> tuple[FloatArray, FloatArray, npt.NDArray[np.bool_]]:
        t = self._threshold(step)
        length = self.norms(self._inward(v) if self.bounded else v)
        zero = self._holds_zero & (length <= t) & (t > 0)
        if not self.bounded:
            r = np.maximum(length - t, 0.0)
        else:
            r = self._radius(v, t, zero)
        factor = np.where(t > 0, r / np.where(t > 0, r + t, 1.0), 1.0)
        return r, np.where(zero, 0.0, factor), zero

    def _radius(self, v: FloatArray, t: FloatArray, zero: npt.NDArray[np.bool_]) -> FloatArray:
        """The root of r/||clip(v r/(r + t))|| - 1, increasing in r, by Newton steps within a bracket.

        Without a clipped component, and with all of them clipped, the function is affine: one step.
        """
        near, far = np.clip(0.0, self.lower, self.upper), np.clip(v, self.lower, self.upper)
        low, high = self.norms(near), self.norms(np.maximum(np.abs(near), np.abs(far)))
        r = np.maximum(low, np.maximum(self.norms(v) - t, 1e-3 * high))
        r = np.minimum(r, high)
        open_ = ~zero & (high > low) & (t > 0)
        r = np.where(t > 0, r, self.norms(far))
        for _ in range(ITERATIONS):
            if not open_.any():
                break
            safe = np.where(open_, np.maximum(r, 1e-300), 1.0)
            scaled = v * self.groups.spread(safe / (safe + t))
            u = np.clip(scaled, self.lower, self.upper)
            free = (scaled > self.lower) & (scaled < self.upper)
            square = self.inner_weights * u * u
            norm = np.maximum(np.sqrt(self.groups.sum(square)), 1e-300)
            moving = self.groups.sum(np.where(free, square, 0.0)) / norm * (t / (safe + t))  # r d norm/dr
            rest = safe - norm
            low, high = np.where(open_ & (rest < 0), r, low), np.where(open_ & (rest > 0), r, high)
            newton = safe - (safe / norm - 1.0) * norm * norm / np.maximum(norm - moving, 1e-300)
            # at rounding level; the step is then noise, magnified where the derivative is small, and may go round
            settled = (np.abs(newton - safe) <= 2e-15 * safe) | (np.abs(rest) <= 1e-15 * safe)
            inside = ((newton >= low) & (newton <= high)) | settled
            following = np.where(inside, newton, 0.5 * (low + high))
            done = settled | (np.abs(following - r) <= 4e-16 * r) | (high - low <= 4e-16 * high)
            r = np.where(open_, np.where(rest == 0.0, r, following), r)
            open_ &= ~done
        return np.where(zero, 0.0, r)

    def prox(self, v: FloatArray, step: float) -> FloatArray:
        """Return the shrunken groups, within the bounds."""
        if hasattr(v, "through_prox"):  # a traced array: with derivative, pieces and smoothed form
            return v.through_prox(self, step)
        _, factor, zero = self._solve(v, step)
        if not self.bounded:
            return self._scaled(v, factor)
        u = np.clip(v * self.groups.spread(factor), self.lower, self.upper)
        return np.where(self.groups.spread(zero), 0.0, u)

    def prox_derivative(self, v: FloatArray, step: float) -> GroupDerivative:
        """Return factor (I + a multiple of u u') on the components that are free, 0 elsewhere."""
        r, factor, zero = self._solve(v, step)
        if not self.bounded:
            return self._free_derivative(v, r, factor, self._threshold(step))
        t, spread = self._threshold(step), self.groups.spread
        scaled = v * spread(factor)
        free = ~spread(zero) & (scaled > self.lower) & (scaled < self.upper)
        part = np.where(free, scaled, 0.0)
        # t s / (r^2 (r + t)) with s = ||u on the free components||^2, by ratios that cannot overflow
        positive = (r > 0) & (t > 0)
        length = np.where(positive, r, 1.0)
        unit = part / spread(length)
        share = self.groups.sum(self.inner_weights * unit * unit)
        bend = np.where(positive, t / (length + t), 0.0)
        rank_one = np.where(positive, factor * bend / (1.0 - bend * np.minimum(share, 1.0)), 0.0)
        return GroupDerivative(
            np.where(free, spread(factor), 0.0),
            spread(rank_one) * unit,
            self.inner_weights * unit,
            self.groups,
        )

    def _scaled(self, v: FloatArray, factor: FloatArray) -> FloatArray:
        """Each component times the factor of its group."""
        line = self.groups.line
        if line is not None:
            result = v.reshape(-1, *line) * factor.reshape(-1, 1, line[1])
            return result.reshape(v.shape)

        def fill(cut: slice, out: FloatArray) -> None:
            np.take(factor, self.groups.labels[cut], out=out, mode="clip")
            np.multiply(out, v[cut], out=out)

        return by_blocks(fill, v.size)

    def _free_derivative(
        self, v: FloatArray, r: FloatArray, factor: FloatArray, t: FloatArray
    ) -> GroupDerivative:
        """Without bounds: factor I + (1 - factor) y y', y = v / ||v||, on the groups that are not zero."""
        curved = (r > 0) & (t > 0)
        inverse = np.where(curved, 1.0 / np.where(curved, r + t, 1.0), 0.0)
        bend = t * inverse * inverse  # (1 - factor) / ||v||, without cancellation
        n = self.size
        entries, left, right = np.empty(n), np.empty(n), np.empty(n)
        line = self.groups.line
        if line is not None:
            shape = (-1, *line)
            columns = [part.reshape(-1, 1, line[1]) for part in (factor, bend, inverse)]
            entries.reshape(shape)[...] = columns[0]
            np.multiply(v.reshape(shape), columns[1], out=left.reshape(shape))
            np.multiply(v.reshape(shape), columns[2], out=right.reshape(shape))
        else:
            labels = self.groups.labels
            for begin in range(0, n, BLOCK):
                cut = slice(begin, begin + BLOCK)
                for table, out in ((factor, entries), (bend, left), (inverse, right)):
                    np.take(table, labels[cut], out=out[cut], mode="clip")
                left[cut] *= v[cut]
                right[cut] *= v[cut]
        if not self._plain:
            right *= self.inner_weights
        return GroupDerivative(entries, left, right, self.groups)

    def pieces(self, v: FloatArray, step: float) -> Pieces:
        """Label each component: its group is zero, or it is free (nonzero) or at a bound."""
        _, factor, zero = self._solve(v, step)
        scaled = v * self.groups.spread(factor)
        labels = np.where(scaled >= self.upper, np.int8(UPPER), np.int8(NONZERO))
        labels[(scaled <= self.lower) | (self.lower == self.upper)] = LOWER
        labels[self.groups.spread(zero)] = ZERO
        return Pieces({"control": labels}, {"control": LEGEND})

    def margins(self, v: FloatArray, step: float) -> FloatArray:
        """Return for each component how far v_i alone can move before its own label may change.

        Exact without bounds, else a lower bound. Any change of v_g shorter in the inner product than
        sqrt(a_i) times the margin leaves the label of i as it is.
        """
        r, factor, zero = self._solve(v, step)
        t, spread, root = self._threshold(step), self.groups.spread, np.sqrt(self.inner_weights)
        vanishing = np.where(
            self._holds_zero & (t > 0), np.abs(self.norms(self._inward(v) if self.bounded else v) - t), np.inf
        )
        distance = spread(vanishing) / root
        if not self.bounded:
            return distance
        scaled = v * spread(factor)
        length, t_each = spread(r), spread(t)
        curved = (length > 0) & (t_each > 0)
        safe = np.where(curved, length, 1.0)
        stretch = np.where(curved, 1.0 + t_each / safe, 1.0)
        for bound in (self.lower, self.upper):
            there = np.isfinite(bound)
            b = np.where(there, bound, 0.0)
            clipped = (scaled <= b) if bound is self.lower else (scaled >= b)
            held = np.abs(v - b * stretch) / (
                1.0 + np.where(curved, 2.0 * np.abs(b) * t_each * root / safe**2, 0.0)
            )
            held = np.minimum(held, np.where(curved, 0.5 * length / root, np.inf))
            moved = np.where(clipped, held, np.abs(scaled - b))
            seen = there & ~spread(zero) & (self.lower < self.upper)
            moved = np.where(seen, moved, np.inf)
            distance = np.minimum(distance, moved)
        return distance

    # the smoothed map

    def _smoothed_parts(
        self, v: FloatArray, step: float, eps: float
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """u, the diagonal e of the inverse derivative, and the factor of its rank-one term.

        With s the smoothed shrinkage of a length x: v_i = u_i x/s(x) + phi_i'(u_i), ||u_g|| = s(x), phi_i the
        logarithmic barrier of the bounds with weight eps^2. Without bounds x = ||v_g||.
        """
        t, spread = self._threshold(step), self.groups.spread
        x = self.norms(v)
        if self.bounded:
            r, _, zero = self._solve(v, step)
            start = np.where(zero, self.norms(self._inward(v)), r + t)
            x = self._smoothed_length(v, start, t, eps)
        _, ratio, rise = _shrunken_length(x, t, eps)
        u, bend = self._barrier(v, spread(ratio), eps)
        return u, spread(ratio) + bend, rise

    def _smoothed_length(self, v: FloatArray, start: FloatArray, t: FloatArray, eps: float) -> FloatArray:
        """The x of each group with ||u_g|| = s(x), by Newton steps within a bracket, from that of the sharp map."""
        ends = [np.where(np.isfinite(b), np.abs(b), 0.0) for b in (self.lower, self.upper)]
        largest = self.norms(np.maximum(np.abs(v), np.maximum(*ends)))
        room = 4.0 * eps * (1.0 + np.sqrt(self.groups.sum(self.inner_weights)))
        low, high = np.zeros_like(start), 2.0 * largest + t + room
        x = np.clip(start, 1e-6 * high, high)
        open_, labels = np.ones(x.shape, dtype=bool), self.groups.labels
        for _ in range(ITERATIONS):
            s, ratio, rise = _shrunken_length(x, t, eps)
            rows = np.flatnonzero(open_[labels])  # of the groups that are not settled
            of, spread = labels[rows], ratio[labels[rows]]
            u, bend = self._barrier(v[rows], spread, eps, rows)
            square = self.inner_weights[rows] * u * u
            length = np.sqrt(np.bincount(of, square, x.size))
            rest = length - s
            low, high = np.where(open_ & (rest > 0), x, low), np.where(open_ & (rest <= 0), x, high)
            # d ratio/ds = rise s, so that ds/dx = 1/(ratio + rise s^2)
            slope = 1.0 / (ratio + rise * s * s)
            inward = rise * s * np.bincount(of, square / (spread + bend), x.size) / np.maximum(length, 1e-300)
            newton = x + rest / np.maximum(slope * (1.0 + inward), 1e-300)
            inside = (newton > low) & (newton < high)
            following = np.where(inside, newton, 0.5 * (low + high))
            settled = (np.abs(newton - x) <= 1e-15 * x) | (np.abs(rest) <= 4e-16 * s)
            open_ &= ~(settled | (np.abs(following - x) <= 4e-16 * x))
            x = np.where(open_, following, x)
            if not open_.any():
                break
        return x

    def _barrier(
        self, v: FloatArray, ratio: FloatArray, eps: float, rows: Any = slice(None)
    ) -> tuple[FloatArray, FloatArray]:
        """Solve ratio u - eps^2/(u - lower) + eps^2/(upper - u) = v in these rows; also the barrier's derivative."""
        lower, upper = self.lower[rows], self.upper[rows]
        below, above = np.isfinite(lower), np.isfinite(upper)
        low, high = np.where(below, lower, 0.0), np.where(above, upper, 0.0)
        both = below & above & (low < high)
        # from the nearer bound, mirrored where it is the upper one; with one bound a quadratic
        mirrored = np.where(both, v > 0.5 * ratio * (low + high), above & ~below)
        base, force = np.where(mirrored, -high, low), np.where(mirrored, -v, v)
        width = np.where(both, high - low, 1.0)
        # the far barrier is at most that of the middle: the start is left of the root of a concave rising function
        y = force - ratio * base - np.where(both, 2.0 * eps * eps / width, 0.0)
        root = np.sqrt(y * y + 4.0 * ratio * eps * eps)
        gap = np.where(y > 0, (y + root) / (2.0 * ratio), 2.0 * eps * eps / np.maximum(root - y, 1e-300))
        if both.any():
            p, w = gap[both], width[both]
            r, f, b = ratio[both], force[both], base[both]
            for _ in range(ITERATIONS):
                near, far = eps / p, eps / (w - p)
                rest = f - r * (b + p) + eps * (near - far)
                rise = np.maximum(rest, 0.0) / (r + near * near + far * far)
                p = np.minimum(p + rise, 0.5 * w)
                noise = 4e-16 * (np.abs(f) + r * (np.abs(b) + p) + eps * (near + far))
                if (rest <= noise).all():
                    break
            gap = gap.copy()
            gap[both] = p
        u = np.where(mirrored, high - gap, low + gap)
        u = np.where(below | above, u, v / ratio)
        fixed = lower == upper
        u = np.where(fixed, low, u)
        with np.errstate(divide="ignore"):
            own = (eps / np.where(below | above, gap, 1.0)) ** 2
            other = np.where(both, (eps / (width - gap)) ** 2, 0.0)
            bend = np.where(below | above, own + other, 0.0)
        return u, np.where(fixed, np.inf, bend)

    def smoothed_prox(self, v: FloatArray, step: float, eps: float) -> FloatArray:
        """Return the map with the shrinkage of the length smoothed, and clipping by a barrier of weight eps^2.

        Without bounds it differs from the proximal map by at most 2 eps in the norm of each group.
        """
        return self._smoothed_parts(v, step, eps)[0]

    def smoothed_prox_derivative(self, v: FloatArray, step: float, eps: float) -> GroupDerivative:
        """Return the derivative of `smoothed_prox`, for eps > 0: a diagonal plus rank one, inverted."""
        u, e, rise = self._smoothed_parts(v, step, eps)
        inverse = 1.0 / e
        moved = inverse * u
        correction = rise / (1.0 + rise * self.groups.sum(self.inner_weights * u * moved))
        return GroupDerivative(
            inverse, -self.groups.spread(correction) * moved, self.inner_weights * moved, self.groups
        )

    def multipliers(self, u: FloatArray, subgradient: FloatArray) -> dict[str, FloatArray]:
        """Split xi = -grad f(u) into the norm's part and the bound force.

        ``sparsity`` is beta u/||u_g|| on nonzero groups and of norm at most beta on zero ones; ``bounds`` is positive
        at the upper bound (the bound pushes u down), negative at the lower bound, zero between.
        """
        r = self.groups.spread(self.norms(u))
        beta = self.groups.spread(np.broadcast_to(self.beta, (self.groups.number,)))
        sparsity = np.where(r > 0, beta * u / np.where(r > 0, r, 1.0), self._inward(subgradient))
        at_bound = (u <= self.lower) | (u >= self.upper)
        return {"sparsity": sparsity, "bounds": np.where(at_bound, subgradient - sparsity, 0.0)}


def _shrunken_length(x: FloatArray, t: FloatArray, eps: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """The smoothed shrinkage s of lengths x >= 0, x/s, and d(x/s)/ds / s, all without cancellation.

    s = (x + x - B + A)/2 with A, B = sqrt((x -+ t)^2 + 4 eps^2), so that x - s = 2 x t/(A + B).
    """
    a, b = np.sqrt((x - t) ** 2 + 4.0 * eps * eps), np.sqrt((x + t) ** 2 + 4.0 * eps * eps)
    both = a + b
    kept = (both - 2.0 * t) / both  # s / x
    kept = np.where(kept > 1e-3, kept, _difference(x, t, eps, a, b) / both)
    bend = 2.0 * t * (both + 2.0 * t) / (a * b * both * both)  # d(s/x)/dx, divided by x s/x
    return kept * x, 1.0 / kept, -bend / (kept**3 * (1.0 + x * x * bend))


def _difference(x: FloatArray, t: FloatArray, eps: float, a: FloatArray, b: FloatArray) -> FloatArray:
    """A + B - 2 t where it is small: (A + B)^2 - 4 t^2 = 8 eps^2 + 2 (A B - c) with c = t^2 - x^2.

    A^2 B^2 = c^2 + 8 eps^2 (x^2 + t^2) + 16 eps^4.
    """
    c = t * t - x * x
    extra = 8.0 * eps * eps * (x * x + t * t) + 16.0 * eps**4
    product_minus_c = np.where(c > 0, extra / (a * b + np.maximum(c, 0.0)), a * b - c)
    return (8.0 * eps * eps + 2.0 * product_minus_c) / (a + b + 2.0 * t)
