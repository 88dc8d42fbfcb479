"""Large maps made small enough for a picture, in a single pass over lazy ones."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

__all__ = ["picture_of", "picture_step", "shrunk"]


def picture_step(sizes: tuple[int, ...], most_pixels: int) -> int:
    """Side of the square of pixels that becomes one picture element, 1 where the map is small enough.

    Examples
    --------
    >>> picture_step((3000, 3000), 1_000_000)
    3
    """
    return max(1, math.ceil(math.sqrt(sizes[0] * sizes[1] / most_pixels)))


def shrunk(values: xr.DataArray, step: int) -> xr.DataArray:
    """Two-dimensional map, each `step` × `step` pixels made one; lazy where it is.

    Parameters
    ----------
    values : DataArray, two-dimensional
        Flags (integers) keep the highest flag of the square, so that a lone candidate stays visible; other maps
        are averaged over the pixels that have a value.
    step : int
        As `picture_step` gives it. Squares at the end may be filled in part only.

    Returns
    -------
    DataArray
        Without coordinates, since a square is no pixel.
    """
    values = values.drop_vars([name for name in values.coords if values.coords[name].ndim])
    if step == 1:
        return values
    is_flag = values.dtype.kind in "iu"
    padded = values.astype(np.float32) if is_flag else values
    squares = padded.coarsen(dict.fromkeys(values.dims, step), boundary="pad")
    if is_flag:
        lowest = np.iinfo(values.dtype).min
        reduced: xr.DataArray = squares.max().fillna(lowest).astype(values.dtype)
    else:
        reduced = squares.mean()
    return reduced.assign_attrs(values.attrs)


def picture_of(values: xr.DataArray, step: int) -> xr.DataArray:
    """Map as `shrunk` makes it, in memory.

    Examples
    --------
    >>> picture_of(xr.DataArray(np.arange(16.0).reshape(4, 4), dims=("y", "x")), 2).values.tolist()
    [[2.5, 4.5], [10.5, 12.5]]
    """
    return shrunk(values, step).compute()
