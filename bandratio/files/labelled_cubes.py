"""Which variable of a Zarr store or netCDF file is the cube, and what it says about its bands."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from .._checks import listed, suggestion
from .band_metadata import to_nm
from .raster_cubes import Opened
from .sources import LabelledSource, identity_of, open_labelled

__all__ = ["engine_for", "labelled_cube"]

_BAND_DIMENSIONS = ("wavelength", "wavelengths", "band", "bands", "channel", "spectral", "wl", "lambda")
_CENTRE_NAMES = ("wavelength", "wavelengths", "central_wavelength", "center_wavelength", "wl", "lambda")
_CENTRE_STANDARD_NAMES = ("radiation_wavelength", "sensor_band_central_radiation_wavelength")
_VERTICAL_HORIZONTAL = ({"lat": "y", "latitude": "y", "row": "y", "line": "y"},
                        {"lon": "x", "longitude": "x", "column": "x", "col": "x"})  # fmt: skip


def engine_for(path: str) -> str | None:
    """What opens the file as labelled arrays; None where it is a raster for GDAL."""
    local = Path(path)
    if local.is_dir():
        inside = {entry.name for entry in local.iterdir()}
        return "zarr" if inside & {"zarr.json", ".zgroup", ".zmetadata", ".zattrs"} else None
    if path.rstrip("/").endswith(".zarr"):
        return "zarr"
    if not local.is_file():
        return None
    with local.open("rb") as stream:
        start = stream.read(8)
    if start[:3] == b"CDF":
        return "scipy"
    return "h5netcdf" if start == b"\x89HDF\r\n\x1a\n" else None


def labelled_cube(
    path: str, engine: str, variable: str | None, scale: float | None, nodata: float | None
) -> Opened:
    """Open a variable of a Zarr store or netCDF file.

    Raises
    ------
    OSError
        If it cannot be opened.
    ValueError
        If no variable, or more than one, could be the cube.
    """
    try:
        dataset = open_labelled(path, engine)
    except Exception as error:  # noqa: BLE001 (each library raises its own)
        raise OSError(f"{path}: cannot be opened as {engine} ({' '.join(str(error).split())})") from None
    with dataset:
        name = _pick(path, dataset, variable)
        array = dataset[name]
        band = _band_dimension(array)
        if band is None:
            if array.ndim == 0:
                raise ValueError(f"{path}: {name} is one number, not a cube")
            band = str(array.dims[0])
        dims = (band, *(str(dim) for dim in array.dims if dim != band))
        centres, widths = _spectral(array, band)
        stored = dataset.variables[name].encoding
        pieces = stored.get("preferred_chunks") or {}
        tile = tuple(int(pieces[dim]) for dim in dims[1:] if dim in pieces)
        source = LabelledSource(
            path,
            tuple(array.sizes[dim] for dim in dims),
            identity_of(path),
            engine=engine,
            variable=name,
            order=tuple(array.dims.index(dim) for dim in dims),
            nodata=nodata,
            scale=scale,
            dtype=np.dtype(np.float64 if array.dtype == np.float64 and not _packed(stored) else np.float32),
        )
        renamed = _plain_names(dims)
        projection = str(array.encoding.get("grid_mapping", array.attrs.get("grid_mapping", "")))
        if projection in array.coords:
            renamed[projection] = "spatial_ref"
        coords = {
            renamed.get(str(key), str(key)): xr.Variable(
                [renamed.get(str(dim), str(dim)) for dim in coordinate.dims],
                coordinate.values,
                coordinate.attrs,
            )
            for key, coordinate in array.coords.items()
            if band not in coordinate.dims
        }
        if "quantity" not in coords and isinstance(array.attrs.get("quantity"), str):
            coords["quantity"] = xr.Variable((), array.attrs["quantity"])
        return Opened(
            source,
            ("wavelength", *(renamed.get(dim, dim) for dim in dims[1:])),
            coords,
            centres,
            widths,
            (tile[0], tile[1]) if len(tile) == 2 else None,
        )


def _packed(encoding: dict[str, Any]) -> bool:
    """True where stored integers have been unpacked, whose float64 is no precision of their own."""
    return np.dtype(encoding.get("dtype", np.float64)).kind in "iu"


def _plain_names(dims: tuple[str, ...]) -> dict[str, str]:
    """Rows and columns under the names y and x, whatever the file calls them."""
    renamed: dict[str, str] = {}
    for names in _VERTICAL_HORIZONTAL:
        renamed |= {dim: names[dim.lower()] for dim in dims[1:] if dim.lower() in names}
    if len(dims) == 3 and not renamed and set(dims[1:]) != {"y", "x"}:
        renamed = {dims[1]: "y", dims[2]: "x"}
    return renamed


def _pick(path: str, dataset: xr.Dataset, variable: str | None) -> str:
    names = [
        str(name) for name, array in dataset.data_vars.items() if array.ndim and array.dtype.kind in "fiu"
    ]
    if variable is not None:
        if variable not in names:
            raise ValueError(f"{path}: no variable {variable!r}{suggestion(variable, names)}")
        return variable
    likely = [name for name in names if _band_dimension(dataset[name]) is not None]
    likely = likely or [name for name in names if dataset[name].ndim == 3]
    if "reflectance" in likely:
        return "reflectance"
    if len(likely) == 1:
        return likely[0]
    if not likely:
        raise ValueError(
            f"{path}: no variable with a band dimension such as wavelength; there are {listed(names)}; give variable=…"
        )
    raise ValueError(
        f"{path}: {listed(likely)} could each be the cube; say which with variable=… (--variable)"
    )


def _is_spectral(coordinate: xr.DataArray) -> bool:
    return (
        str(coordinate.name).lower() in _CENTRE_NAMES
        or coordinate.attrs.get("standard_name") in _CENTRE_STANDARD_NAMES
    )


def _band_dimension(array: xr.DataArray) -> str | None:
    for coordinate in array.coords.values():
        if coordinate.ndim == 1 and _is_spectral(coordinate):
            return str(coordinate.dims[0])
    return next((str(dim) for dim in array.dims if str(dim).lower() in _BAND_DIMENSIONS), None)


def _spectral(array: xr.DataArray, band: str) -> tuple[tuple[float, ...] | None, tuple[float, ...] | None]:
    centres = widths = None
    for name, coordinate in array.coords.items():
        if coordinate.dims != (band,) or coordinate.dtype.kind not in "fiu":
            continue
        values, unit = coordinate.values.astype(float).tolist(), coordinate.attrs.get("units")
        if str(name).lower() in ("fwhm", "bandwidth"):
            own = unit or next(
                (
                    c.attrs.get("units")
                    for c in array.coords.values()
                    if c.dims == (band,) and _is_spectral(c)
                ),
                "nm",
            )
            widths = to_nm(values, own)
        elif _is_spectral(coordinate) or (
            str(name) == band and centres is None and (unit or min(values) >= 100)
        ):
            centres = to_nm(values, unit)
    return centres, widths
