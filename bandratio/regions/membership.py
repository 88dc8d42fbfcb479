"""Which pixels belong to which region, from labels, polygons or a file of either."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed

__all__ = ["Membership", "grid_transform"]

_VECTOR = (".gpkg", ".geojson", ".json", ".shp", ".fgb", ".parquet")


@dataclass(frozen=True)
class Membership:
    """Pairs of a pixel and a region, sorted by pixel; a pixel may belong to several regions.

    Parameters
    ----------
    pixel : ndarray of int64, shape (pair,)
        Index into the flattened grid.
    region : ndarray of int64, shape (pair,)
        Index into `names`.
    names : ndarray, shape (region,)
        Labels or names of the regions.
    """

    pixel: NDArray[np.int64]
    region: NDArray[np.int64]
    names: NDArray

    @classmethod
    def of(cls, regions: Any, cube: xr.DataArray) -> Membership:
        """Read it from what a user gives: labels, polygons, or a path.

        Raises
        ------
        TypeError, ValueError, OSError
            If it is none of them, does not fit the cube, or holds no region.
        """
        if isinstance(regions, (str, Path)):
            regions = _read(Path(regions))
        if hasattr(regions, "geometry") and hasattr(regions, "crs"):
            return cls._of_polygons(regions, cube)
        return cls._of_labels(regions, cube)

    @classmethod
    def _of_labels(cls, labels: Any, cube: xr.DataArray) -> Membership:
        dims = tuple(dim for dim in cube.dims if dim != "wavelength")
        shape = tuple(cube.sizes[dim] for dim in dims)
        if isinstance(labels, xr.DataArray):
            if set(labels.dims) != set(dims):
                raise ValueError(
                    f"the labels have dimensions {labels.dims}, and the cube's pixels have {dims}"
                )
            labels = labels.transpose(*dims).values
        array = np.asarray(labels)
        if array.dtype.kind == "b":  # a mask is one region
            array = array.astype(np.int8)
        if array.dtype.kind not in "iu":
            raise TypeError(
                f"regions must be integer labels (0: no region), a mask, polygons (GeoDataFrame) or a path, got {array.dtype} "
                f"of type {type(labels).__name__}"
            )
        if array.shape != shape:
            raise ValueError(f"the labels have the shape {array.shape}, and the cube's pixels {shape}")
        flat = array.reshape(-1)
        pixel = np.flatnonzero(flat > 0)
        if pixel.size == 0:
            raise ValueError("the labels hold no region: regions are numbered from 1, 0 is none")
        names, region = np.unique(flat[pixel], return_inverse=True)
        return cls(pixel, region.astype(np.int64), names)

    @classmethod
    def _of_polygons(cls, polygons: Any, cube: xr.DataArray) -> Membership:
        if cube.ndim != 3:
            raise ValueError(
                f"polygons need an image, and this cube has dimensions {cube.dims}; give labels instead"
            )
        if len(polygons) == 0:
            raise ValueError("there is no polygon in regions")
        polygons = _in_crs_of(polygons, cube)
        names = _names_of(polygons)
        pixels = [_inside(shape, cube) for shape in polygons.geometry]
        if not any(each.size for each in pixels):
            raise ValueError(
                "no pixel's centre lies in any of the polygons; check that they have the map's coordinates"
            )
        pixel = np.concatenate(pixels)
        region = np.repeat(np.arange(len(pixels)), [each.size for each in pixels])
        order = np.argsort(pixel, kind="stable")
        return cls(pixel[order], region[order], names)

    def overlaps(self) -> Membership:
        """Pixels of every two regions that overlap, as regions of their own; `names` are pairs of indices."""
        again = np.flatnonzero(np.diff(self.pixel) == 0)
        if again.size == 0:
            nothing = np.empty(0, dtype=np.int64)
            return Membership(nothing, nothing, np.empty((0, 2), dtype=np.int64))
        starts = np.unique(np.searchsorted(self.pixel, self.pixel[again]))
        ends = np.searchsorted(self.pixel, self.pixel[starts], side="right")
        pixels, pairs = [], []
        for start, end in zip(starts.tolist(), ends.tolist(), strict=True):
            here = np.sort(self.region[start:end])
            for i in range(here.size):
                for j in range(i + 1, here.size):
                    pixels.append(self.pixel[start])
                    pairs.append((here[i], here[j]))
        names, region = np.unique(np.array(pairs), axis=0, return_inverse=True)
        return Membership(np.array(pixels), region.reshape(-1).astype(np.int64), names)


def _read(path: Path) -> Any:
    if not path.exists():
        raise FileNotFoundError(f"{path}: there is no such file of regions")
    if path.suffix.lower() in (".tif", ".tiff"):
        import rasterio

        with rasterio.open(path) as source:
            return source.read(1)
    if path.suffix.lower() not in _VECTOR:
        raise ValueError(
            f"{path}: regions are read from labels (.tif) or polygons ({listed(_VECTOR)}), not from {path.suffix!r}"
        )
    geopandas = require_geopandas("reading polygons")
    return geopandas.read_parquet(path) if path.suffix.lower() == ".parquet" else geopandas.read_file(path)


def require_geopandas(what: str) -> Any:
    """The library for polygons, or an error that says how to get it."""
    try:
        import geopandas
    except ImportError:
        raise ModuleNotFoundError(
            f"{what} needs geopandas; install it with pip install 'bandratio[regions]'"
        ) from None
    return geopandas


def _in_crs_of(polygons: Any, cube: xr.DataArray) -> Any:
    import rioxarray  # noqa: F401 (it adds .rio)

    crs = cube.rio.crs
    if crs is None and polygons.crs is None:
        return polygons
    if crs is None:
        raise ValueError(
            "the polygons have a map projection and the cube has none; give cube.rio.write_crs(…), or "
            "polygons.set_crs(None, allow_override=True) where both have the same coordinates"
        )
    if polygons.crs is None:
        raise ValueError(
            "the cube has a map projection and the polygons have none; give polygons.set_crs(cube.rio.crs)"
        )
    try:
        return polygons.to_crs(crs.to_wkt())
    except Exception as error:  # noqa: BLE001  whatever the projection library says of two bodies
        raise ValueError(
            f"the polygons are in {polygons.crs.name}, which does not lead to the cube's {crs.to_wkt()[:60]}… "
            f"({' '.join(str(error).split())[:120]}); where that is not their real projection, set it with "
            "polygons.set_crs(cube.rio.crs, allow_override=True)"
        ) from None


def _names_of(polygons: Any) -> NDArray:
    for column in ("name", "region"):
        if column in polygons.columns and polygons[column].is_unique and polygons[column].notna().all():
            return np.array(polygons[column].tolist())
    return np.arange(1, len(polygons) + 1)


def grid_transform(cube: xr.DataArray) -> Any:
    """Affine transform from columns and rows to the map's coordinates, pixels where there are none.

    Raises
    ------
    ValueError
        If the coordinates are not evenly spaced.
    """
    from rasterio.transform import Affine

    y, x = cube.dims[-2:]
    steps, origins = [], []
    for dim in (x, y):
        if dim not in cube.coords:
            steps.append(1.0)
            origins.append(-0.5)
            continue
        centres = np.asarray(cube[dim].values, dtype=float)
        step = (centres[-1] - centres[0]) / (centres.size - 1) if centres.size > 1 else 1.0
        if step == 0 or np.abs(np.diff(centres) - step).max(initial=0) > 0.01 * abs(step):
            raise ValueError(
                f"the coordinate {dim} is not evenly spaced, so its pixels have no outlines; regrid the cube"
            )
        steps.append(step)
        origins.append(centres[0] - step / 2)
    return Affine(steps[0], 0, origins[0], 0, steps[1], origins[1])


def _inside(shape: Any, cube: xr.DataArray) -> NDArray[np.int64]:
    """Flat indices of the pixels whose centre lies in a polygon."""
    from rasterio.features import geometry_mask

    rows, columns = cube.shape[-2:]
    nothing = np.empty(0, dtype=np.int64)
    if shape is None or shape.is_empty:
        return nothing
    transform = grid_transform(cube)
    left, low, right, high = shape.bounds
    corners = [~transform @ corner for corner in ((left, low), (right, high))]
    (c0, c1), (r0, r1) = (sorted(corner[axis] for corner in corners) for axis in (0, 1))
    c0, r0 = max(int(np.floor(c0)), 0), max(int(np.floor(r0)), 0)
    c1, r1 = min(int(np.ceil(c1)), columns), min(int(np.ceil(r1)), rows)
    if c1 <= c0 or r1 <= r0:
        return nothing
    window = transform @ transform.translation(c0, r0)
    inside = geometry_mask([shape], (r1 - r0, c1 - c0), window, invert=True)
    row, column = np.nonzero(inside)
    return (row + r0) * columns + column + c0
