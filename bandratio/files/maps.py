"""Write maps and open them again: names, units, sigmas, flags, projection and provenance survive."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from .labelled_cubes import engine_for
from .layout import Layout
from .stream import Streamed, stream_maps

__all__ = ["open_maps", "write_and_count", "write_maps"]

_ENDINGS = (".tif", ".tiff", ".zarr", ".nc")


def write_maps(maps: xr.Dataset, path: str | Path, *, overwrite: bool = False, resume: bool = False) -> Path:
    """Write maps to one file, all or nothing, at any size.

    Lazy maps are computed and written block by block, by the dask scheduler or client that is active. The output
    is made beside its final name and moved into place when it is whole. After a kill or an error, what was
    finished is kept, and the same call with ``resume=True`` makes the rest.

    Parameters
    ----------
    maps : Dataset
        As `parameters` and the other functions give it.
    path : str or Path
        Its ending says the format: ``.tif`` (cloud-optimised GeoTIFF, a band for each variable, with overviews),
        ``.zarr`` or ``.nc`` (netCDF, CF conventions).
    overwrite : bool
        Replace what is there.
    resume : bool
        Continue an unfinished run, where there is one. It is refused where the input, the noise or the
        parameters have changed since.

    Returns
    -------
    Path
        The output.

    Raises
    ------
    FileExistsError
        If something is there, or another run is writing it now.
    OSError
        If a block cannot be read or written; the message names file and block.
    ValueError
        If the ending is unknown, the maps do not fit the format, or another job is to be resumed.

    Examples
    --------
    >>> import tempfile, bandratio as br
    >>> cube = br.as_cube([[[0.1, 0.2]], [[0.15, 0.3]]], [600, 700])
    >>> path = write_maps(br.parameters(cube, names="red_slope"), Path(tempfile.mkdtemp()) / "maps.tif")
    >>> open_maps(path).red_slope.values.round(2).tolist()
    [[40.0, 40.0]]
    """
    return write_and_count(maps, path, overwrite=overwrite, resume=resume).path


def write_and_count(
    maps: xr.Dataset,
    path: str | Path,
    *,
    overwrite: bool = False,
    resume: bool = False,
    progress: Callable[[int, int], None] | None = None,
) -> Streamed:
    """Write maps as `write_maps` does, and give the counts of their values, taken in the same pass."""
    from .geotiff import finish_geotiff, require_image

    if isinstance(maps, xr.DataArray):
        if maps.name is None:
            raise ValueError("the map has no name; give it one with .rename, or put it into a Dataset")
        maps = maps.to_dataset()
    if not isinstance(maps, xr.Dataset):
        raise TypeError(f"maps must be a Dataset, as br.parameters gives it, got {type(maps).__name__}")
    if not maps.data_vars:
        raise ValueError("the maps hold no variable, so there is nothing to write")
    path = Path(path).absolute()
    ending = path.suffix.lower()
    if ending not in _ENDINGS:
        raise ValueError(
            f"{path.name}: the ending must say the format, one of .tif, .zarr, .nc; got {ending!r}"
        )
    for name in maps.data_vars:
        if "/" in str(name):
            raise ValueError(
                f"the name {name!r} holds a slash, which no file format takes; rename the variable"
            )
    finish: Callable[[Layout, Path, Path], None] | None = None
    if ending in (".tif", ".tiff"):
        require_image(maps, path)
        finish = finish_geotiff
    elif ending == ".nc":
        finish = _finish_netcdf
    return stream_maps(maps, path, finish, overwrite=overwrite, resume=resume, progress=progress)


def _finish_netcdf(layout: Layout, store: Path, made: Path) -> None:
    import dask

    # HDF5 takes one writer at a time, so that more than this process would only wait
    with (
        dask.config.set(scheduler="threads"),
        xr.open_dataset(store, engine="zarr", chunks={}, consolidated=False, decode_coords="all") as maps,
    ):
        encoding: dict[str, Any] = {}
        for name in layout.gridded:
            encoding[name] = {
                "chunksizes": tuple(sizes[0] for sizes in layout.chunks),
                "zlib": True,
                "complevel": 1,
                "shuffle": True,
            }
            floating = layout.maps[name].dtype.kind == "f"
            encoding[name]["_FillValue"] = np.nan if floating else None
            linked = maps[name].encoding.pop("grid_mapping", None)
            maps[name].encoding = {}
            if linked:
                maps[name].attrs["grid_mapping"] = linked
        try:
            maps.to_netcdf(made, engine="h5netcdf", encoding=encoding)
        except RuntimeError as error:
            # how HDF5 says that it could not write, for instance to a full disk
            raise OSError(" ".join(str(error).split())) from None


def open_maps(path: str | Path) -> xr.Dataset:
    """Open maps that `write_maps` wrote, lazily.

    Parameters
    ----------
    path : str or Path
        A ``.tif``, ``.zarr`` or ``.nc``. A GeoTIFF from elsewhere is opened too, with its bands' descriptions
        as names.

    Returns
    -------
    Dataset
        As it was written: names, attributes, flags, projection, provenance.

    Raises
    ------
    FileNotFoundError, OSError
        If there is no such file, or it cannot be opened.
    """
    text = str(path)
    if "://" not in text and not text.startswith("/vsi"):
        if not Path(text).exists():
            raise FileNotFoundError(f"{text}: no such file")
        text = str(Path(text).absolute())
    engine = engine_for(text)
    if engine is None:
        from .geotiff import open_geotiff

        return _tidy(open_geotiff(text))
    try:
        maps = xr.open_dataset(text, engine=engine, chunks={}, decode_coords="all")
    except Exception as error:  # noqa: BLE001 (each library raises its own)
        raise OSError(f"{path}: cannot be opened as maps ({' '.join(str(error).split())})") from None
    return _tidy(maps)


def _tidy(maps: xr.Dataset) -> xr.Dataset:
    """Undo what formats do to attributes: lists that should be arrays, arrays that are numbers."""
    for array in maps.variables.values():
        for key in ("flag_values", "flag_masks"):
            if key in array.attrs:
                array.attrs[key] = np.atleast_1d(np.asarray(array.attrs[key], dtype=array.dtype))
        for key, value in array.attrs.items():
            if isinstance(value, np.generic):
                array.attrs[key] = value.item()
    for key, value in maps.attrs.items():
        if isinstance(value, np.generic):
            maps.attrs[key] = value.item()
    return maps
