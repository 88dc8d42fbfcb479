"""What a raster says about itself: bands, scale, missing values, wavelengths, projection."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from .._checks import listed
from .band_metadata import BandMetadata, band_metadata, numbers_of
from .sources import RasterSource, Source, identity_of, open_raster

__all__ = ["Opened", "raster_cube", "spatial_coordinates"]


@dataclass(frozen=True)
class Opened:
    """A cube's file, opened: where its blocks come from and what it says about them."""

    source: Source
    dims: tuple[str, ...]
    coords: Mapping[str, Any]
    centres: tuple[float, ...] | None
    widths: tuple[float, ...] | None
    tile: tuple[int, int] | None
    free: bool = False
    attrs: dict[str, Any] = field(default_factory=dict)


def raster_cube(path: str, scale: float | None, nodata: float | None) -> Opened:
    """Open any raster that GDAL reads.

    Raises
    ------
    OSError
        If GDAL cannot open it.
    ValueError
        If it holds no bands of real numbers.
    """
    import rasterio
    from rasterio.enums import ColorInterp, MaskFlags

    try:
        dataset = open_raster(path)
    except rasterio.errors.RasterioIOError as error:
        raise OSError(
            f"{path}: no raster that can be opened ({' '.join(str(error).split())}); wanted a GeoTIFF, another raster "
            "that GDAL reads, a raw raster with its .hdr beside it, a Zarr store or netCDF"
        ) from None
    with dataset:
        if dataset.count == 0:
            inside = list(dataset.subdatasets)[:5]
            raise ValueError(f"{path}: the file has no bands of its own; open one of {listed(inside)}")
        flags = dataset.mask_flag_enums
        bands = [
            k + 1 for k, colour in enumerate(dataset.colorinterp) if colour != ColorInterp.alpha
        ] or list(range(1, dataset.count + 1))
        types = [dataset.dtypes[k - 1] for k in bands]
        if any(kind.startswith("complex") for kind in types):
            raise ValueError(f"{path}: reflectance must be real numbers, got {listed(sorted(set(types)))}")
        namespaces = [dataset.tags()] + [
            dataset.tags(ns=name) for name in dataset.tag_namespaces() if name != "DERIVED_SUBDATASETS"
        ]
        stated = {key.lower(): value for tags in reversed(namespaces) for key, value in tags.items()}
        _require_whole(path, dataset, stated)
        factor = _stated_factor(stated)
        gains = [dataset.scales[k - 1] / factor for k in bands]
        offsets = [dataset.offsets[k - 1] / factor for k in bands]
        if scale is not None:
            gains, offsets = [scale] * len(bands), [0.0] * len(bands)
        told = _wavelengths(dataset, namespaces, bands)
        wide = any(kind == "float64" for kind in types)
        source = RasterSource(
            path,
            (len(bands), dataset.height, dataset.width),
            identity_of(path),
            bands=tuple(bands),
            nodata=tuple(dataset.nodatavals[k - 1] if nodata is None else nodata for k in bands),
            scale=tuple(gains),
            offset=tuple(offsets),
            masked=any(
                MaskFlags.per_dataset in flags[k - 1] and MaskFlags.nodata not in flags[k - 1] for k in bands
            ),
            dtype=np.dtype(np.float64 if wide else np.float32),
        )
        coords = spatial_coordinates(dataset)
        if "quantity" in stated:
            coords["quantity"] = xr.Variable((), stated["quantity"])
        tile = dataset.block_shapes[bands[0] - 1]
        return Opened(
            source,
            ("wavelength", "y", "x"),
            coords,
            told.centres,
            told.widths,
            (int(tile[0]), int(tile[1])),
            free=(dataset.compression is None and dataset.driver in ("GTiff", "COG", "VRT"))
            or "header_offset" in stated,
        )


def _require_whole(path: str, dataset: Any, stated: Mapping[str, str]) -> None:
    """Refuse a raw raster that is shorter than its header says: GDAL would read zeros there."""
    local = Path(path)
    if "header_offset" not in stated or not local.is_file() or stated.get("file_compression", "0") != "0":
        return
    size = sum(dataset.height * dataset.width * np.dtype(kind).itemsize for kind in dataset.dtypes)
    size += int(float(stated["header_offset"]))
    if local.stat().st_size < size:
        raise OSError(
            f"{path}: the file has {local.stat().st_size} bytes, but its header describes {size} "
            f"({dataset.count} bands of {dataset.height} × {dataset.width}); the file is incomplete or the header is "
            "another's"
        )


def _stated_factor(stated: Mapping[str, str]) -> float:
    """By what a text header says that stored numbers are to be divided."""
    values = numbers_of(stated.get("reflectance_scale_factor", ""))
    return values[0] if len(values) == 1 and values[0] > 0 else 1.0


def _wavelengths(dataset: Any, namespaces: list[dict[str, str]], bands: list[int]) -> BandMetadata:
    of_bands = [
        [dataset.tags(k)] + [dataset.tags(k, ns=name) for name in dataset.tag_namespaces(k)] for k in bands
    ]
    return band_metadata(namespaces, of_bands, [dataset.descriptions[k - 1] for k in bands])


def spatial_coordinates(dataset: Any) -> dict[str, Any]:
    """Coordinates `y`, `x` (centres of the pixels) and `spatial_ref` of an open raster."""
    import rioxarray  # noqa: F401 (puts .rio on xarray)

    transform, crs = dataset.transform, dataset.crs
    template = xr.Dataset()
    if crs is not None:
        template = template.rio.write_crs(crs)
    if not transform.is_identity:
        template = template.rio.write_transform(transform)
    coords: dict[str, Any] = {str(name): coordinate for name, coordinate in template.coords.items()}
    if transform.is_identity or transform.b or transform.d:
        # a rotated grid has no coordinates of its rows and columns; the transform says all
        return coords
    unit = {"units": "m"} if crs is not None and crs.is_projected else {}
    names = ("projection_y_coordinate", "projection_x_coordinate")
    if crs is not None and crs.is_geographic:
        unit, names = {"units": "degrees"}, ("latitude", "longitude")
    attrs = [{"standard_name": name, **unit} if crs is not None else {} for name in names]
    coords["y"] = xr.Variable("y", transform.f + transform.e * (np.arange(dataset.height) + 0.5), attrs[0])
    coords["x"] = xr.Variable("x", transform.c + transform.a * (np.arange(dataset.width) + 0.5), attrs[1])
    return coords
