"""The scene made small enough for a page: pictures of every parameter, and points for selection."""

from __future__ import annotations

import math
from dataclasses import dataclass

import dask
import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from ..plots.frame import Grid, parameter_names, require_plane
from ..plots.maps import flag_meanings
from ..plots.resampling import picture_of, picture_step, shrunk

__all__ = ["PageData", "page_data"]

#: Bytes of pictures on a page; with the points and the libraries it stays below 15 MB.
_PICTURE_BYTES = 7_000_000
_MOST_PICTURE_PIXELS = 250_000
#: Bytes of the points, and how many there are at most: pixels spread over the scene, and candidates.
_POINT_BYTES = 3_000_000
_POINTS, _CANDIDATE_POINTS = 12_000, 8_000


#: What the views show at first, where it is there.
_FIRST = ("reflectance_700", "red_slope")


@dataclass(frozen=True)
class PageData:
    """What the page shows, in memory.

    Parameters
    ----------
    names : list of str
        Parameters.
    planes : dict of str to ndarray, shape (row, column)
        Picture of each parameter and of its sigma, lowest coordinates first.
    flag : ndarray of int or None
        Picture of the flags.
    words : dict of int to str
        Word of each flag.
    extent : tuple of float
        Left, right, bottom, top, in the units of the axes.
    covered : tuple of float
        The same of the pictures, whose last squares may reach beyond the scene.
    axes : tuple of str
        Names of the axes with their units.
    step : int
        Side of the square of pixels that was averaged.
    shape : tuple of int
        Rows and columns of the scene.
    points : DataFrame
        Pixels that can be selected: ``x``, ``y``, ``v0``, ``s0``, …, ``flag``, ``region``.
    candidates_left_out : int
        Candidate pixels that are not among the points.
    counts : dict of str to int
        Pixels of each flag, in the whole scene.
    """

    names: list[str]
    planes: dict[str, NDArray]
    flag: NDArray | None
    words: dict[int, str]
    extent: tuple[float, float, float, float]
    covered: tuple[float, float, float, float]
    axes: tuple[str, str]
    step: int
    shape: tuple[int, int]
    points: pd.DataFrame
    candidates_left_out: int
    counts: dict[str, int]

    @property
    def shown(self) -> tuple[int, int]:
        """Indices of the two parameters that the views show at first."""
        if all(name in self.names for name in _FIRST):
            return self.names.index(_FIRST[0]), self.names.index(_FIRST[1])
        return 0, min(1, len(self.names) - 1)


def page_data(maps: xr.Dataset, flags: xr.Dataset | None, labels: xr.DataArray | None) -> PageData:
    """Pictures and points of the maps, from one pass over each of them."""
    names = [name for name in parameter_names(maps) if maps[name].ndim == 2]
    first = require_plane(maps, names[0])
    dims, shape = first.dims, (first.shape[0], first.shape[1])
    names = [name for name in names if set(maps[name].dims) == set(dims) and maps[name].sizes == first.sizes]
    columns = [column for name in names for column in (name, f"{name}_sigma") if column in maps]
    budget = min(_MOST_PICTURE_PIXELS, int(_PICTURE_BYTES / (len(columns) * 4 * 4 / 3 + 12)))
    step = picture_step(shape, budget)
    grid = Grid.of(first)
    # a picture's first row is drawn at the lowest coordinate
    flip = tuple(
        slice(None, None, -1) if dim in first.coords and _falls(first[dim].values) else slice(None)
        for dim in dims
    )
    flag = None if flags is None else flags["flag"].transpose(*dims)
    words = {} if flag is None else flag_meanings(flag)
    whole_flag = None if flag is None else np.asarray(flag.values)
    row, column, left_out = _chosen_pixels(shape, len(names), whole_flag, words)
    # one pass for everything that is read from lazy maps
    small, at_points = dask.compute(  # type: ignore[attr-defined,no-untyped-call]
        {name: shrunk(maps[name].transpose(*dims), step) for name in columns},
        {
            name: maps[name].isel(
                {dims[0]: xr.DataArray(row, dims="point"), dims[1]: xr.DataArray(column, dims="point")}
            )
            for name in columns
        },
    )
    planes = {
        name: np.ascontiguousarray(plane.values[flip], dtype=np.float32) for name, plane in small.items()
    }
    picture = None
    if flag is not None:
        picture = np.ascontiguousarray(picture_of(flag.copy(data=whole_flag), step).to_numpy()[flip])
    scale, axes = _axes(grid, dims)
    left, right, bottom, top = (edge * scale for edge in grid.extent)
    points = _points(first, names, at_points, row, column, scale)
    points["flag"] = -1 if whole_flag is None else whole_flag[row, column].astype(int)
    points["region"] = 0 if labels is None else labels.transpose(*dims).to_numpy()[row, column].astype(int)
    points = points[np.isfinite(points["v0"].to_numpy())].reset_index(drop=True)
    pixels = tuple(edge * scale for edge in grid.covered(shape, step))
    counts = {} if whole_flag is None else {
        word: int((whole_flag == code).sum()) for code, word in words.items()
    }  # fmt: skip
    return PageData(
        names,
        planes,
        picture,
        words,
        (left, right, bottom, top),
        pixels,  # type: ignore[arg-type]
        axes,
        step,
        shape,
        points,
        left_out,
        counts,
    )


def _falls(values: NDArray) -> bool:
    return bool(values.size > 1 and values[0] > values[-1])


def _axes(grid: Grid, dims: tuple[object, ...]) -> tuple[float, tuple[str, str]]:
    if grid.unit == "m":
        longest = (
            max(abs(grid.extent[1] - grid.extent[0]), abs(grid.extent[3] - grid.extent[2])) * grid.metres
        )
        unit, length = ("km", 1000.0) if longest >= 2000 else ("m", 1.0)
        return grid.metres / length, (f"x [{unit}]", f"y [{unit}]")
    named = {"degree": ("longitude [°]", "latitude [°]"), "pixel": ("column", "row")}
    return 1.0, named.get(grid.unit, (str(dims[1]), str(dims[0])))


def _chosen_pixels(
    shape: tuple[int, int], parameters: int, flag: NDArray | None, words: dict[int, str]
) -> tuple[NDArray, NDArray, int]:
    """Rows and columns of pixels spread evenly and of the candidates, and how many candidates are left out."""
    rows, columns = shape
    share = min(1.0, _POINT_BYTES / ((_POINTS + _CANDIDATE_POINTS) * (2 * parameters + 12) * 4 * 4 / 3))
    most = int(share * _CANDIDATE_POINTS)
    step = max(1, math.ceil(math.sqrt(rows * columns / (share * _POINTS))))
    row, column = (axis.ravel() for axis in np.mgrid[step // 2 : rows : step, step // 2 : columns : step])
    if flag is None:
        return row, column, 0
    codes = [code for code, word in words.items() if word.endswith("candidate")]
    found_row, found_column = np.nonzero(np.isin(flag, codes))
    left_out = max(found_row.size - most, 0)
    if left_out:
        chosen = np.linspace(0, found_row.size - 1, most).astype(int)
        found_row, found_column = found_row[chosen], found_column[chosen]
    flat = np.unique(np.concatenate([row * columns + column, found_row * columns + found_column]))
    return flat // columns, flat % columns, left_out


def _points(
    first: xr.DataArray,
    names: list[str],
    at_points: dict[str, xr.DataArray],
    row: NDArray,
    column: NDArray,
    scale: float,
) -> pd.DataFrame:
    y, x = first.dims
    table = {
        "x": (first[x].to_numpy()[column] if x in first.coords else column).astype(float) * scale,
        "y": (first[y].to_numpy()[row] if y in first.coords else row).astype(float) * scale,
    }
    for place, name in enumerate(names):
        for letter, variable in (("v", name), ("s", f"{name}_sigma")):
            if variable in at_points:
                table[f"{letter}{place}"] = np.asarray(at_points[variable].values, dtype=np.float32)
    return pd.DataFrame(table)
