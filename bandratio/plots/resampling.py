"""Large maps made small enough for a picture, in a single pass over lazy ones."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

__all__ = ["picture_of", "picture_step"]


def picture_step(sizes: tuple[int, ...], most_pixels: int) -> int:
    """Side of the square of pixels that becomes one picture element, 1 where the map is small enough.

    Examples
    --------
    >>> picture_step((3000, 3000), 1_000_000)
    3
    """
    return max(1, math.ceil(math.sqrt(sizes[0] * sizes[1] / most_pixels)))


def picture_of(values: xr.DataArray, step: int) -> xr.DataArray:
    """Two-dimensional map in memory, each `step` × `step` pixels made one.

    Parameters
    ----------
    values : DataArray, two-dimensional
        Flags (integers) keep the highest flag of the square, so that a lone candidate stays visible; other maps
        are averaged over the pixels that have a value.
    step : int
        As `picture_step` gives it.

    Returns
    -------
    DataArray
        With the squares' centres as coordinates.

    Examples
    --------
    >>> picture_of(xr.DataArray(np.arange(16.0).reshape(4, 4), dims=("y", "x")), 2).values.tolist()
    [[2.5, 4.5], [10.5, 12.5]]
    """
    if step > 1:
        squares = values.coarsen(dict.fromkeys(values.dims, step), boundary="pad", coord_func="mean")
        if values.dtype.kind in "iu":
            lowest = np.iinfo(values.dtype).min
            padded = values.astype(np.float32)
            squares = padded.coarsen(dict.fromkeys(values.dims, step), boundary="pad")
            reduced: xr.DataArray = squares.max().fillna(lowest).astype(values.dtype)
        else:
            reduced = squares.mean()
        values = reduced.assign_attrs(values.attrs)
    return values.compute()
