"""Checks of user input, used by every public entry point: at once, by name, with what to do."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import InputError

FloatArray = npt.NDArray[np.float64]


def float_array(
    value: Any,
    name: str,
    *,
    shape: tuple[int, ...] | None = None,
    finite: bool = True,
    ndim: int | None = None,
) -> FloatArray:
    """Return `value` as a new float64 array, or raise `InputError` naming the first bad entry.

    Infinite entries pass when ``finite=False`` (bounds); NaN never does.
    """
    try:
        raw = np.asarray(value)
        if np.iscomplexobj(raw):
            raise TypeError("complex values")
        array = np.array(raw, dtype=np.float64, copy=True)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name} must be an array of real numbers: {error}") from error
    if ndim is not None and array.ndim != ndim:
        raise InputError(f"{name} must have {ndim} dimension(s), got shape {array.shape}")
    if shape is not None and array.shape != shape:
        raise InputError(f"{name} has shape {array.shape}, expected {shape}")
    bad = ~np.isfinite(array) if finite else np.isnan(array)
    if bad.any():
        index = tuple(int(i) for i in np.argwhere(bad)[0])
        where = f"{name}[{', '.join(map(str, index))}]" if index else name
        raise InputError(
            f"{where} is {array[index]}: {int(bad.sum())} entr(y/ies) not usable; check the input"
        )
    return array


def scalar(
    value: Any, name: str, *, positive: bool = False, nonnegative: bool = False, finite: bool = True
) -> float:
    """Return `value` as a float of the required sign, or raise `InputError`."""
    try:
        number = float(value)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name} must be a number, got {value!r}") from error
    if math.isnan(number) or (finite and math.isinf(number)):
        raise InputError(f"{name} is {number}; give a finite number")
    if positive and number <= 0:
        raise InputError(f"{name} must be positive, got {number}")
    if nonnegative and number < 0:
        raise InputError(f"{name} must not be negative, got {number}")
    return number


def count(value: Any, name: str, *, least: int = 1) -> int:
    """Return `value` as an int of at least `least`, or raise `InputError`."""
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)):
        raise InputError(f"{name} must be a whole number, got {value!r}")
    if value < least:
        raise InputError(f"{name} must be at least {least}, got {value}")
    return int(value)


def weight_array(value: Any, name: str, size: int) -> FloatArray:
    """Return positive weights (a lumped mass) of length `size`; None means ones."""
    if value is None:
        return np.ones(size)
    array = float_array(value, name)
    if array.ndim == 0:
        array = np.full(size, float(array))
    if array.shape != (size,):
        raise InputError(f"{name} has shape {array.shape}, expected ({size},)")
    if (array <= 0).any():
        index = int(np.argmax(array <= 0))
        raise InputError(f"{name}[{index}] is {array[index]}: weights of an inner product must be positive")
    return array


def bound_arrays(
    lower: Any, upper: Any, *, names: tuple[str, str] = ("lower", "upper")
) -> tuple[FloatArray, FloatArray]:
    """Return bounds as arrays (scalars stay zero-dimensional); infinite entries are allowed, crossing ones not."""
    low = float_array(lower, names[0], finite=False)
    high = float_array(upper, names[1], finite=False)
    if np.isposinf(low).any():
        raise InputError(f"{names[0]} is +inf somewhere: no value satisfies it")
    if np.isneginf(high).any():
        raise InputError(f"{names[1]} is -inf somewhere: no value satisfies it")
    try:
        crossed = np.asarray(low > high)
    except ValueError as error:
        raise InputError(
            f"{names[0]} {low.shape} and {names[1]} {high.shape} do not broadcast together"
        ) from error
    if crossed.any():
        index = tuple(int(i) for i in np.argwhere(crossed)[0])
        at = f" at index {', '.join(map(str, index))}" if index else ""
        full_low, full_high = np.broadcast_arrays(low, high)
        raise InputError(
            f"{names[0]} {full_low[index]} > {names[1]} {full_high[index]}{at}: no value lies between"
        )
    return low, high
