"""Overviews of a map: each level has half the rows and columns of the one before."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["halved", "levels_for", "levels_within_blocks"]

#: The coarsest level has no more rows and columns than one tile of the GeoTIFF.
_SMALLEST = 512
#: Levels made while a block is in memory; the next ones are made of the last of these, 1/64 of the pixels.
_IN_PASS = 3


def levels_for(rows: int, columns: int) -> int:
    """How many levels a map of this size has."""
    levels = 0
    while max(rows, columns) > _SMALLEST:
        rows, columns, levels = -(-rows // 2), -(-columns // 2), levels + 1
    return levels


def levels_within_blocks(chunks: Sequence[Sequence[int]], levels: int) -> int:
    """How many of the levels can be made block by block: inner edges must fall on whole pixels of the level."""
    most = min(levels, _IN_PASS)
    for sizes in chunks:
        if len(sizes) > 1:
            while most and sizes[0] % (1 << most):
                most -= 1
    return most


def halved(values: NDArray) -> NDArray:
    """The next level: the mean of each 2 × 2 pixels that are not missing; of flags, the upper left one.

    Parameters
    ----------
    values : ndarray, shape (row, column)
        A map, or a block of it.

    Returns
    -------
    ndarray, shape (⌈row/2⌉, ⌈column/2⌉)
    """
    if values.dtype.kind != "f":
        return np.ascontiguousarray(values[::2, ::2])
    values = np.ascontiguousarray(values)
    out = np.empty([-(-size // 2) for size in values.shape], values.dtype)
    _mean_of_four(values, out)
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def _mean_of_four(values, out):  # type: ignore[no-untyped-def]
    rows, columns = values.shape
    for i in range(out.shape[0]):
        for j in range(out.shape[1]):
            total, n = 0.0, 0
            for a in range(2 * i, min(2 * i + 2, rows)):
                for b in range(2 * j, min(2 * j + 2, columns)):
                    x = values[a, b]
                    if not np.isnan(x):
                        total += x
                        n += 1
            out[i, j] = total / n if n else np.nan
