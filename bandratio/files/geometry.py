"""Planes of incidence, emission and phase, and elevation models, from files."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import xarray as xr

from .._checks import listed
from .cubes import _chunked, _existing
from .labelled_cubes import engine_for
from .raster_cubes import raster_cube
from .sources import identity_of, open_raster

__all__ = ["open_elevation", "open_geometry"]

_ANGLES = ("incidence", "emission", "phase")


def open_geometry(path: str | Path, *, like: xr.DataArray | None = None, chunks: Any = "auto") -> xr.Dataset:
    """Incidence, emission and phase of every pixel from a raster of three bands, netCDF or Zarr.

    Parameters
    ----------
    path : str or Path
        A raster that GDAL reads, with the bands incidence, emission and phase [deg] in this order or described by these
        names, a band `shadow` beside them where there is one; or netCDF or Zarr with variables of these names.
    like : DataArray, optional
        Cube whose chunks are used, so that both are read in step.
    chunks : "auto", None, int, tuple or dict
        Blocks to read, as for `open_cube`; None reads everything now.

    Returns
    -------
    Dataset over (y, x)
        ``incidence``, ``emission``, ``phase`` [deg], and ``shadow`` where there is one: ``normalise(cube, **planes)``.
        The attribute `input` names the file and its state.

    Raises
    ------
    FileNotFoundError, OSError
        If there is no such file, or nothing can open it.
    ValueError
        If it has not these three bands or variables.

    Examples
    --------
    >>> import numpy as np
    >>> folder = getfixture("tmp_path")
    >>> plane = xr.DataArray(np.full((4, 4), 30.0), dims=("y", "x"))
    >>> xr.Dataset({"incidence": plane, "emission": 0 * plane, "phase": plane}).to_netcdf(
    ...     folder / "angles.nc", engine="h5netcdf")
    >>> list(open_geometry(folder / "angles.nc"))
    ['incidence', 'emission', 'phase']
    """
    text = _existing(path)
    if like is not None and like.chunks is not None:
        chunks = {dim: sizes for dim, sizes in like.chunksizes.items() if dim != "wavelength"}
    engine: Any = engine_for(text)
    if engine is None:
        planes = _raster(text, chunks)
    else:
        chunks = None if chunks is None else {} if chunks == "auto" else chunks
        planes = xr.open_dataset(text, engine=engine, chunks=chunks, decode_coords="all")
    missing = [name for name in _ANGLES if name not in planes]
    if missing:
        raise ValueError(
            f"{path} has no {listed(missing)}; wanted {listed(_ANGLES)} in degrees, got {listed(planes.data_vars)}"
        )
    chosen = planes[[*_ANGLES, *(["shadow"] if "shadow" in planes else [])]]
    if "shadow" in chosen:
        chosen["shadow"] = chosen["shadow"].fillna(0) > 0
    return chosen.assign_attrs(input=_state(text))


def open_elevation(path: str | Path, *, variable: str | None = None) -> xr.DataArray:
    """Elevation model from a raster of one band, netCDF or Zarr, read into memory.

    Parameters
    ----------
    path : str or Path
        The file; its map projection is kept.
    variable : str, optional
        Which variable of a netCDF file or Zarr store, where there is more than one.

    Returns
    -------
    DataArray of float, dimensions (y, x)
        Heights [m], NaN where missing, as `terrain_geometry` takes them. The attribute `input` names the file and its
        state.

    Raises
    ------
    FileNotFoundError, OSError, ValueError
        If there is no such file, nothing can open it, or it holds more than one band.
    """
    text = _existing(path)
    engine = engine_for(text)
    if engine is None:
        opened = raster_cube(text, None, None)
        model = xr.DataArray(_chunked(opened, None), dims=("band", "y", "x"), coords=opened.coords)
        if model.sizes["band"] != 1:
            raise ValueError(
                f"{path} has {model.sizes['band']} bands; an elevation model has one, heights in m"
            )
        return model.isel(band=0, drop=True).assign_attrs(units="m", input=_state(text))
    dataset = xr.open_dataset(text, engine=engine, decode_coords="all")
    names = [str(name) for name, one in dataset.data_vars.items() if one.ndim >= 2]
    if variable is None and len(names) != 1:
        raise ValueError(f"{path} holds {listed(names)}; say which is the elevation model with variable=…")
    chosen = variable or names[0]
    if chosen not in dataset:
        raise ValueError(f"{path} has no variable {chosen!r}; there are {listed(names)}")
    return dataset[chosen].load().assign_attrs(input=_state(text))


def _raster(path: str, chunks: Any) -> xr.Dataset:
    opened = raster_cube(path, None, None)
    with open_raster(path) as dataset:
        described = [str(words or "").strip().lower() for words in dataset.descriptions]
    if not set(_ANGLES) <= set(described):
        if opened.source.shape[0] != len(_ANGLES):
            raise ValueError(
                f"{path} has {opened.source.shape[0]} bands; wanted three, incidence, emission and phase in degrees, or "
                "bands described by these names"
            )
        described = list(_ANGLES)
    bands = xr.DataArray(_chunked(opened, chunks), dims=opened.dims, coords=opened.coords)
    planes = {name: bands.isel(wavelength=k, drop=True) for k, name in enumerate(described) if name}
    return xr.Dataset(planes).drop_vars("quantity", errors="ignore")


def _state(path: str) -> str:
    files, size, changed = identity_of(path)
    return json.dumps({"path": path, "files": files, "bytes": size, "changed_ns": changed})
