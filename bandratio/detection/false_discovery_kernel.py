"""Compiled loops that count and gather p-values by the bits of their floats."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

__all__ = ["ABOVE_ONE", "BINS", "SHIFT", "count_blocks", "gather"]

#: The upper 21 bits of a float number the bins: 512 to every factor of two, from zero to one.
SHIFT = 43
#: Number of bins that hold 0 … 1.
BINS = (0x3FF0000000000000 >> SHIFT) + 1
#: Answer of `count_blocks` where a value lies outside [0, 1].
ABOVE_ONE = -1


@numba.njit(cache=True, nogil=True, error_model="numpy")
def count_blocks(
    values: NDArray[np.float64],
    keys: NDArray[np.int64],
    limit: float,
    first: int,
    shift: int,
    counts: NDArray[np.int64],
    kept: NDArray[np.float64],
    filled: int,
) -> tuple[int, int]:
    """Count the values up to `limit` into bins of 2^shift keys from key `first` on, and keep them while there is room.

    Returns the number of values that are not NaN (`ABOVE_ONE` if one is outside [0, 1]), and how many were to be
    kept so far, which may be more than there is room for.
    """
    seen = 0
    for i in range(values.size):
        value = values[i]
        if value <= limit:
            if value < 0:
                return ABOVE_ONE, filled
            seen += 1
            place = ((keys[i] if value > 0 else 0) - first) >> shift  # -0.0 has the sign bit set
            if 0 <= place < counts.size:
                counts[place] += 1
            if filled < kept.size:
                kept[filled] = value
            filled += 1
        elif value > limit:
            if value > 1:
                return ABOVE_ONE, filled
            seen += 1
    return seen, filled


@numba.njit(cache=True, nogil=True, error_model="numpy")
def gather(
    values: NDArray[np.float64],
    keys: NDArray[np.int64],
    first: int,
    shift: int,
    wanted: NDArray[np.bool_],
    into: NDArray[np.float64],
    filled: int,
) -> int:
    """Copy the values of the wanted bins behind the `filled` ones of `into`; returns how many there are then."""
    for i in range(values.size):
        place = ((keys[i] if values[i] > 0 else 0) - first) >> shift
        if 0 <= place < wanted.size and wanted[place] and values[i] >= 0:
            if filled < into.size:
                into[filled] = values[i] + 0.0
            filled += 1
    return filled
