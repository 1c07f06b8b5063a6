"""Operators on a tensor-product mesh as stencils: recognition, and Galerkin products with linear interpolation.

A stencil maps offsets (-1, 0 or 1 along each axis) to coefficients: a number where it is the same at all nodes, else an
array of the shape of the mesh. The nodes are those inside a box, values on its boundary are zero. The coarse mesh keeps
every second node, those with odd index along each axis; where the number of nodes is even, the last cell of the coarse
mesh is shorter, which the weights of the interpolation respect. The Galerkin product P' A P is formed one axis at a
time, so that it costs a few passes over the coefficients and no sparse product.

Source: U. Trottenberg, C. W. Oosterlee and A. Schueller, Multigrid, 2001, ch. 2 and app. A (from memory).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
Offset = tuple[int, ...]
Stencil = dict[Offset, Any]

# coefficients that differ by less than this, relative to the largest, count as equal
EQUAL = 1e-12


def recognise(matrix: Any) -> tuple[tuple[int, ...], Stencil] | None:
    """The mesh and stencil of a matrix with constant coefficients and zero boundary values, or None.

    The stencil is read off a row in the middle and compared with the matrix by one product with a pseudorandom vector.

    Parameters
    ----------
    matrix : sparse csr array, shape (N, N)
        For instance the five-point or seven-point matrix, nodes numbered with the last axis fastest.

    Returns
    -------
    (shape, stencil) or None
        None also where the matrix is one-dimensional: a banded factorisation serves better.
    """
    size = int(matrix.shape[0])
    probe = np.sin(1.0 + np.arange(size) * 0.7390851332151607) + 1.5
    image = np.asarray(matrix @ probe)
    for shape in _candidates(matrix, size):
        stencil = _stencil_of(matrix, shape)
        if stencil is None:
            continue
        difference = image - apply(stencil, probe.reshape(shape)).ravel()
        if abs(difference).max() <= EQUAL * float(sum(abs(a) for a in stencil.values())):
            return shape, stencil
    return None


def _candidates(matrix: Any, size: int) -> list[tuple[int, ...]]:
    """Meshes whose strides 1, n and n m, each with or without its neighbours, the columns of a row may be."""
    row = size // 2
    columns = matrix.indices[matrix.indptr[row] : matrix.indptr[row + 1]]
    if columns.size > 27 or matrix.nnz > 27 * size:
        return []
    # the row in the middle may lie at the end of a line: take the next one, too
    after = matrix.indices[matrix.indptr[row + 1] : matrix.indptr[row + 2]] - 1 if row + 1 < size else columns
    shifts = np.unique(np.concatenate([columns, after]) - row)
    positive = [int(s) for s in shifts if s > 1]
    if not positive:
        return []
    lines = {s for s in (positive[0] - 1, positive[0], positive[0] + 1) if s > 2 and size % s == 0}
    found: list[tuple[int, ...]] = []
    for line in sorted(lines):
        largest = positive[-1]
        if largest <= line + 1 and size // line > 2:
            found.append((size // line, line))
        for layer in range(largest - line - 1, largest + 1):
            if (
                layer > line
                and layer % line == 0
                and size % layer == 0
                and min(layer // line, size // layer) > 2
            ):
                found.append((size // layer, layer // line, line))
    return found


def _stencil_of(matrix: Any, shape: tuple[int, ...]) -> Stencil | None:
    """The coefficients at a node in the middle of the mesh; None where a column lies further off than one node."""
    centre = np.array([n // 2 for n in shape])
    row = int(np.ravel_multi_index(tuple(centre), shape))
    which = slice(matrix.indptr[row], matrix.indptr[row + 1])
    offsets = np.stack(np.unravel_index(matrix.indices[which], shape), axis=1) - centre
    if abs(offsets).max(initial=0) > 1:
        return None
    stencil = {
        tuple(map(int, o)): float(a) for o, a in zip(offsets, matrix.data[which], strict=True) if a != 0.0
    }
    return stencil if (0,) * len(shape) in stencil else None


def apply(stencil: Mapping[Offset, float], values: FloatArray) -> FloatArray:
    """A stencil with constant coefficients applied to values on a mesh, zero outside."""
    result = np.zeros_like(values)
    for offset, value in stencil.items():
        here = tuple(slice(max(-o, 0), n - max(o, 0)) for o, n in zip(offset, values.shape, strict=True))
        there = tuple(slice(max(o, 0), n - max(-o, 0)) for o, n in zip(offset, values.shape, strict=True))
        result[here] += value * values[there]
    return result


def interpolation_weights(positions: FloatArray, ends: tuple[float, float]) -> tuple[FloatArray, FloatArray]:
    """Weights of the nodes with even index for their left and right coarse neighbours; 0 for the boundary."""
    padded = np.concatenate([[ends[0]], positions, [ends[1]]])
    even = positions[0::2]
    left, right = padded[0::2][: even.size], padded[2::2][: even.size]
    to_left, to_right = (right - even) / (right - left), (even - left) / (right - left)
    to_left[0] = 0.0
    if positions.size % 2 == 1:
        to_right[-1] = 0.0
    return to_left, to_right


def along(vector: FloatArray, axis: int, dimension: int) -> FloatArray:
    """A vector as an array that broadcasts along one axis."""
    return vector.reshape([-1 if k == axis else 1 for k in range(dimension)])


def part(array: Any, axis: int, which: slice) -> Any:
    """A slice along one axis."""
    return array[(slice(None),) * axis + (which,)]


def coarsen(
    stencil: Mapping[Offset, Any], shape: tuple[int, ...], weights: list[tuple[FloatArray, FloatArray]]
) -> Stencil:
    """The Galerkin product P' A P as a stencil on the coarse mesh, with arrays of its shape."""
    dimension = len(shape)
    result: Stencil = {
        # a number stays of size one along an axis until that axis is coarsened
        offset: np.reshape(value, (1,) * dimension) if np.ndim(value) == 0 else value
        for offset, value in stencil.items()
    }
    for axis, (n, (to_left, to_right)) in enumerate(zip(shape, weights, strict=True)):
        result = _coarsen_axis(result, axis, n, to_left, to_right)
    return result


def _coarsen_axis(stencil: Stencil, axis: int, n: int, to_left: FloatArray, to_right: FloatArray) -> Stencil:
    """sum over s, t of w_s(k) w_t(k + O) A(2k + 1 + s, 2(k + O) + 1 + t), O the coarse offset along the axis."""
    coarse = n // 2
    after = np.zeros(coarse)
    after[: to_left.size - 1] = to_left[1 : 1 + coarse]
    weight = {-1: to_right[:coarse], 0: np.ones(coarse), 1: after}
    result: Stencil = {}
    for offset, values in stencil.items():
        moved = {s: _at(values, axis, s, n) for s in (-1, 0, 1)}
        for wide in (-1, 0, 1):
            key = (*offset[:axis], wide, *offset[axis + 1 :])
            for s in (-1, 0, 1):
                t = offset[axis] - 2 * wide + s
                if t not in weight:
                    continue
                factor = (weight[s] * _shifted(weight[t], wide)).astype(values.dtype)
                if factor.any():
                    term = moved[s] * along(factor, axis, values.ndim)
                    if key not in result:
                        result[key] = term
                    elif result[key].shape == term.shape:
                        result[key] += term
                    else:
                        result[key] = result[key] + term
    return result


def _at(values: FloatArray, axis: int, s: int, n: int) -> FloatArray:
    """The values at the nodes 2k + 1 + s; zero beyond the last node."""
    if values.shape[axis] == 1 and n > 1:
        return values  # the same everywhere; the weights are zero beyond the last node
    coarse = n // 2
    taken = part(values, axis, slice(1 + s, None, 2))
    if taken.shape[axis] < coarse:
        widths = [(0, coarse - taken.shape[axis]) if k == axis else (0, 0) for k in range(values.ndim)]
        return np.pad(taken, widths)
    return part(taken, axis, slice(0, coarse))


def _shifted(vector: FloatArray, by: int) -> FloatArray:
    """vector[k + by], zero outside."""
    result = np.zeros_like(vector)
    if by == 0:
        return vector
    if by > 0:
        result[:-by] = vector[by:]
    else:
        result[-by:] = vector[:by]
    return result


def dense(stencil: Mapping[Offset, Any], shape: tuple[int, ...]) -> FloatArray:
    """The matrix of a stencil, for small meshes."""
    size = int(np.prod(shape))
    numbers = np.arange(size).reshape(shape)
    matrix = np.zeros((size, size))
    for offset, value in stencil.items():
        here = tuple(slice(max(-o, 0), n - max(o, 0)) for o, n in zip(offset, shape, strict=True))
        there = tuple(slice(max(o, 0), n - max(-o, 0)) for o, n in zip(offset, shape, strict=True))
        values = np.broadcast_to(np.asarray(value, dtype=np.float64), shape)[here]
        matrix[numbers[here], numbers[there]] = values
    return matrix
