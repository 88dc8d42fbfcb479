"""Connected candidate pixels merged into regions, in a table that people can act on."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed
from ..noise import Noise
from ..ratio import BandRatio
from .area import geographic, pixel_areas
from .means import region_means
from .membership import grid_transform, require_geopandas

__all__ = ["candidate_regions", "candidate_table"]

#: At most so many pixels of a region are asked for their true area: it changes slowly over a map.
_AREA_SAMPLE = 500


def candidate_regions(
    flags: xr.Dataset,
    cube: xr.DataArray | None = None,
    noise: Noise | None = None,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | None = None,
    *,
    min_pixels: int = 1,
    correlation_area: float = 1.0,
) -> Any:
    """Candidate pixels that touch, also at a corner, merged into regions, the largest first.

    Parameters
    ----------
    flags : Dataset
        Result of a flagging function over an image, with ``flag`` and its CF attributes. Lazy flags are computed: one
        byte a pixel is held.
    cube : DataArray, optional
        Reflectance on the same grid; its parameters are then given for each region, as by ``region_means``.
    noise : Noise, optional
        For their standard uncertainties.
    names : sequence of str and BandRatio, or mapping, optional
        Which parameters.
    min_pixels : int
        Smaller regions are left out.
    correlation_area : float
        As for ``region_means``.

    Returns
    -------
    GeoDataFrame
        One row a region: ``region`` (number), ``kind``, ``n_pixels``, ``area_map`` [map unit²], ``area_km2`` (true, on
        the projection's sphere or ellipsoid), centroid ``x``, ``y``, ``longitude``, ``latitude`` [°],
        ``expected_false_pixels``, the parameters with their sigmas and spread, and the outline. What the map does not
        say is left out.

    Raises
    ------
    TypeError, ValueError
        If the flags are no image of flags, or the cube does not fit them.
    ModuleNotFoundError
        Without geopandas; :func:`candidate_table` does without outlines.

    Notes
    -----
    ``expected_false_pixels`` is the false discovery rate times the number of pixels: the most that is false on average,
    spread evenly. The rate is promised for the whole list, so the lone pixels of a list are false more often than
    that and the large regions less; a minimum size leaves out more false ones than true ones. Regions are not joined
    across the edge of a map, such as ±180° of longitude.

    Examples
    --------
    >>> import bandratio as br
    >>> R = np.full((5, 6), 0.1)
    >>> R[1:3, 1:3], R[4, 5] = 0.3, 0.3
    >>> cube = br.as_cube([0.9 * R, R], [600, 700])
    >>> noise = br.Noise(random=0.001)
    >>> flags = br.pyroclastic_flags(br.parameters(cube, noise), brighter_than=0.2)
    >>> regions = br.candidate_regions(flags, cube, noise, ["reflectance_700"], min_pixels=2)
    >>> regions[["kind", "n_pixels", "x", "y"]].values.tolist()
    [['bright', 4, 1.5, 1.5]]
    """
    geopandas = require_geopandas("outlines of regions")
    table, labels = candidate_table(
        flags, cube, noise, names, min_pixels=min_pixels, correlation_area=correlation_area
    )
    from .outlines import outlines

    import rioxarray  # noqa: F401 (it adds .rio)  # isort: skip

    crs = labels.rio.crs
    shapes = outlines(labels, len(table))
    found = geopandas.GeoDataFrame(table, geometry=shapes, crs=None if crs is None else crs.to_wkt())
    found.attrs.update(table.attrs)
    return found


def candidate_table(
    flags: xr.Dataset,
    cube: xr.DataArray | None = None,
    noise: Noise | None = None,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | None = None,
    *,
    min_pixels: int = 1,
    correlation_area: float = 1.0,
) -> tuple[pd.DataFrame, xr.DataArray]:
    """Table of candidate regions without outlines, and the label of every pixel (0: in no region).

    Parameters and errors as for :func:`candidate_regions`.

    Returns
    -------
    table : DataFrame
    labels : DataArray of int32
    """
    flag = _require_flags(flags).compute()
    if min_pixels != int(min_pixels) or min_pixels < 1:
        raise ValueError(f"min_pixels is a number of pixels, 1 or more, got {min_pixels}")
    numbers, kinds = _connected(np.asarray(flag.values), _candidate_codes(flag), int(min_pixels))
    labels = flag.copy(data=numbers).rename("region")
    labels.attrs = {"long_name": "candidate region"}
    row, column = np.nonzero(numbers)
    region = numbers[row, column] - 1
    count = np.bincount(region, minlength=len(kinds))
    table = pd.DataFrame({"region": np.arange(1, len(kinds) + 1), "kind": kinds, "n_pixels": count})
    _place(table, flag, row, column, region)
    rate = flags.attrs.get("false_discovery_rate")
    if rate is not None:
        table["expected_false_pixels"] = float(rate) * count
    if cube is not None:
        _add_means(table, labels, cube, noise, names, correlation_area)
    table.attrs["false_discovery_rate"] = None if rate is None else float(rate)
    table.attrs["min_pixels"] = int(min_pixels)
    table.attrs["candidate_pixels"] = int(np.isin(flag.values, list(_candidate_codes(flag))).sum())
    return table, labels


def _require_flags(flags: Any) -> xr.DataArray:
    flag = flags["flag"] if isinstance(flags, xr.Dataset) and "flag" in flags else flags
    if not isinstance(flag, xr.DataArray) or "flag_values" not in flag.attrs:
        raise TypeError(
            f"flags must be the Dataset of a flagging function, with flag and its CF flag_values, got {type(flags).__name__}"
        )
    if flag.ndim != 2:
        raise ValueError(f"regions need an image of flags, and these have dimensions {flag.dims}")
    return flag


def _candidate_codes(flag: xr.DataArray) -> dict[int, str]:
    codes = np.ravel(flag.attrs["flag_values"]).tolist()
    words = str(flag.attrs["flag_meanings"]).split()
    wanted = {
        code: word.removesuffix("_candidate")
        for code, word in zip(codes, words, strict=True)
        if word.endswith("_candidate")
    }
    if not wanted:
        raise ValueError(f"no flag is a candidate: the flags are {listed(words)}")
    return wanted


def _connected(flag: NDArray, codes: dict[int, str], min_pixels: int) -> tuple[NDArray[np.int32], list[str]]:
    """Region number of each pixel, the largest first, and the kind of each region."""
    from scipy.ndimage import label

    numbers = np.zeros(flag.shape, dtype=np.int32)
    kinds: list[str] = []
    for code, kind in codes.items():
        found, count = label(flag == code, structure=np.ones((3, 3)))
        numbers[found > 0] = found[found > 0] + len(kinds)
        kinds += [kind] * count
    size = np.bincount(numbers.reshape(-1), minlength=len(kinds) + 1)[1:]
    order = [i for i in np.argsort(-size, kind="stable").tolist() if size[i] >= min_pixels]
    renumbered = np.zeros(len(kinds) + 1, dtype=np.int32)
    renumbered[np.array(order, dtype=int) + 1] = np.arange(1, len(order) + 1)
    return renumbered[numbers], [kinds[i] for i in order]


def _place(table: pd.DataFrame, flag: xr.DataArray, row: NDArray, column: NDArray, region: NDArray) -> None:
    """Area and centroid, in map units and on the body."""
    dim_y, dim_x = flag.dims
    transform = grid_transform(flag)
    x = np.asarray(flag[dim_x].values, dtype=float)[column] if dim_x in flag.coords else column.astype(float)
    y = np.asarray(flag[dim_y].values, dtype=float)[row] if dim_y in flag.coords else row.astype(float)
    count = np.maximum(table["n_pixels"].to_numpy(), 1)
    table["area_map"] = table["n_pixels"] * abs(transform.a * transform.e)
    centre_x, centre_y = (np.bincount(region, axis, len(table)) / count for axis in (x, y))
    every = np.maximum(1, count // _AREA_SAMPLE)
    order = np.argsort(region, kind="stable")
    rank = np.arange(order.size) - np.repeat(
        np.cumsum(table["n_pixels"]) - table["n_pixels"], table["n_pixels"]
    )
    sample = order[rank % every[region[order]] == 0]
    areas = pixel_areas(flag, x[sample], y[sample], transform.a, transform.e)
    if areas is not None:
        of = region[sample]
        mean = np.bincount(of, areas, len(table)) / np.maximum(np.bincount(of, minlength=len(table)), 1)
        table["area_km2"] = table["n_pixels"] * mean / 1e6
    table["x"], table["y"] = centre_x, centre_y
    position = geographic(flag, centre_x, centre_y)
    if position is not None:
        table["longitude"], table["latitude"] = position


def _add_means(
    table: pd.DataFrame,
    labels: xr.DataArray,
    cube: xr.DataArray,
    noise: Noise | None,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | None,
    correlation_area: float,
) -> None:
    if len(table) == 0:
        return
    same = set(labels.dims) == set(cube.dims[1:])
    means = region_means(
        cube,
        noise,
        labels if same else labels.to_numpy(),
        names,
        correlation_area=correlation_area,
        covariance=False,
    )
    for name, of_regions in means.data_vars.items():
        if name != "n_pixels":
            table[str(name)] = of_regions.to_numpy()
