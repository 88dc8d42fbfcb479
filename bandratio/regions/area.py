"""True areas and geographic positions on the body that a map projection belongs to."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

__all__ = ["geographic", "pixel_areas"]


def _crs(grid: xr.DataArray) -> Any:
    import pyproj
    import rioxarray  # noqa: F401 (it adds .rio)

    crs = grid.rio.crs
    return None if crs is None else pyproj.CRS.from_wkt(crs.to_wkt())


def geographic(grid: xr.DataArray, x: NDArray, y: NDArray) -> tuple[NDArray, NDArray] | None:
    """Longitude and latitude [°] of points in the map's coordinates; None where the projection is not known."""
    crs = _crs(grid)
    if crs is None or crs.geodetic_crs is None:
        return None
    import pyproj

    transformer = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    longitude, latitude = transformer.transform(np.asarray(x, dtype=float), np.asarray(y, dtype=float))
    return np.asarray(longitude), np.asarray(latitude)


def pixel_areas(
    grid: xr.DataArray, x: NDArray, y: NDArray, step_x: float, step_y: float
) -> NDArray[np.float64] | None:
    """Area on the body of the pixels around given centres.

    Parameters
    ----------
    grid : DataArray
        With the map projection.
    x, y : ndarray, shape (pixel,)
        Centres, in the map's coordinates.
    step_x, step_y : float
        Sides of a pixel in map units.

    Returns
    -------
    ndarray, shape (pixel,), or None
        [m²], on the ellipsoid (mostly a sphere) of the projection; None where the projection is not known.

    References
    ----------
    Snyder 1987, Map Projections: A Working Manual, USGS Professional Paper 1395, eq. 3-12 (authalic latitude) and
    section 4 (areal scale).
    """
    crs = _crs(grid)
    if crs is None or crs.geodetic_crs is None:
        return None
    sides = abs(step_x * step_y)
    if crs.is_geographic:
        a, b = crs.ellipsoid.semi_major_metre, crs.ellipsoid.semi_minor_metre
        half = np.abs(step_y) / 2
        edges = [np.clip(np.asarray(y, dtype=float) + side * half, -90, 90) for side in (-1, 1)]
        low, high = (_zone(np.radians(edge), a, b) for edge in edges)
        return np.asarray(np.radians(abs(step_x)) * (high - low))
    if np.size(x) == 0:
        return np.empty(0)
    import pyproj

    longitude, latitude = geographic(grid, x, y)  # type: ignore[misc]
    factors = pyproj.Proj(crs).get_factors(longitude, latitude)
    metres = crs.axis_info[0].unit_conversion_factor
    return np.asarray(sides * metres**2 / np.asarray(factors.areal_scale))


def _zone(latitude: NDArray, a: float, b: float) -> NDArray[np.float64]:
    """Area from the equator to a latitude, for one radian of longitude [m²]."""
    sine = np.sin(latitude)
    e = np.sqrt(max(1 - (b / a) ** 2, 0.0))
    if e < 1e-9:
        return np.asarray(a**2 * sine)
    return np.asarray(b**2 / 2 * (sine / (1 - (e * sine) ** 2) + np.arctanh(e * sine) / e))
