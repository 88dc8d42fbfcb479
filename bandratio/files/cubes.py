"""Open a reflectance cube of any size: rasters that GDAL reads, raw rasters with a text header, Zarr, netCDF."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from .._checks import listed, positive
from ..cube import as_cube
from .block_shape import block_shape
from .sources import Source

if TYPE_CHECKING:
    from .raster_cubes import Opened

__all__ = ["open_cube"]


def open_cube(
    path: str | Path,
    wavelengths: ArrayLike | None = None,
    *,
    fwhm: ArrayLike | None = None,
    quantity: str | None = None,
    chunks: Any = "auto",
    scale: float | None = None,
    nodata: float | None = None,
    variable: str | None = None,
) -> xr.DataArray:
    """Reflectance cube from a file, lazily, in blocks that follow the file's own tiles.

    Parameters
    ----------
    path : str or Path
        GeoTIFF or another raster that GDAL opens, a raw raster with a text header (.hdr, beside it), a Zarr
        store or a netCDF file.
    wavelengths : array_like, shape (band,), optional
        Band centres [nm], in place of what the file says; needed where it says nothing.
    fwhm : array_like, shape (band,), optional
        Full widths at half maximum [nm], likewise.
    quantity : str, optional
        Which reflectance quantity it is, one of `bandratio.cube.QUANTITIES`.
    chunks : "auto", None, int, tuple or dict
        Blocks to read: "auto" takes whole tiles of the file; None reads everything now; else as in dask.
    scale : float, optional
        Factor from stored numbers to reflectance, in place of the file's own scale and offset.
    nodata : float, optional
        Stored number that means missing, in place of the file's own.
    variable : str, optional
        Which variable of a Zarr store or netCDF file, where more than one could be meant.

    Returns
    -------
    DataArray of float32 (float64 where the file is), dimensions (wavelength, y, x)
        Missing is NaN. Map projection and transform are kept in the coordinate `spatial_ref`. The attribute
        `input` names the file and its state.

    Raises
    ------
    FileNotFoundError, OSError
        If there is no such file, or nothing can open it.
    ValueError
        If the file has no wavelengths and none are given, or what is given does not fit its bands.

    Examples
    --------
    >>> import tempfile, numpy as np, bandratio as br
    >>> cube = br.as_cube(np.full((2, 3, 4), 0.1, np.float32), [600, 700])
    >>> path = Path(tempfile.mkdtemp()) / "cube.zarr"
    >>> _ = cube.to_dataset().to_zarr(path, zarr_format=2)
    >>> br.open_cube(path).sizes
    Frozen({'wavelength': 2, 'y': 3, 'x': 4})
    """
    from .labelled_cubes import engine_for, labelled_cube
    from .raster_cubes import raster_cube

    scale = None if scale is None else positive("scale", scale)
    nodata = None if nodata is None else float(nodata)
    text = _existing(path)
    engine = engine_for(text)
    if engine is None:
        if variable is not None:
            raise ValueError(f"{path}: variable= is for Zarr and netCDF; this file has bands only")
        opened = raster_cube(text, scale, nodata)
    else:
        opened = labelled_cube(text, engine, variable, scale, nodata)
    centres = _centres(path, opened, wavelengths)
    cube = xr.DataArray(
        _chunked(opened, chunks),
        dims=opened.dims,
        coords=opened.coords,
        name="reflectance",
        attrs=opened.attrs,
    )
    if quantity is None and "quantity" in opened.coords:
        quantity = str(opened.coords["quantity"].values)
    cube = as_cube(cube, centres, opened.widths if fwhm is None else fwhm, quantity=quantity)
    cube.attrs["input"] = _input_of(opened.source)
    return cube


def _existing(path: str | Path) -> str:
    """Path as text, made absolute where it is local, so that a worker elsewhere finds it too."""
    text = str(path)
    if "://" in text or text.startswith("/vsi") or (":" in text and not Path(text).exists()):
        return text
    local = Path(text)
    if not local.exists():
        near = (
            sorted(f.name for f in local.parent.glob(f"{local.stem}*"))[:5] if local.parent.is_dir() else []
        )
        raise FileNotFoundError(f"{text}: no such file" + (f"; there are {listed(near)}" if near else ""))
    if local.suffix.lower() == ".hdr" and local.is_file():
        return str(_raw_beside(local).absolute())
    return str(local.absolute())


def _raw_beside(header: Path) -> Path:
    """Raw raster that a text header belongs to: the same name without its ending, or with another one."""
    without = header.with_suffix("")
    if without.is_file():
        return without
    others = [
        file
        for file in sorted(header.parent.glob(f"{header.stem}.*"))
        if file.suffix.lower() in (".img", ".dat", ".raw", ".bsq", ".bil", ".bip", ".bin")
    ]
    if len(others) != 1:
        raise FileNotFoundError(
            f"{header}: wanted the one raw raster that this header describes, found "
            f"{listed(file.name for file in others)} beside it; give the raster's own name"
        )
    return others[0]


def _centres(path: str | Path, opened: Opened, wavelengths: ArrayLike | None) -> ArrayLike:
    bands = opened.source.shape[0]
    if wavelengths is None:
        if opened.centres is None:
            raise ValueError(
                f"{path}: the file does not say the wavelengths of its {bands} bands; give wavelengths=[…] in nm, "
                "one for each band (--wavelengths 480,600,… on the command line)"
            )
        return opened.centres
    given = np.atleast_1d(np.asarray(wavelengths, dtype=object))
    if given.size != bands:
        raise ValueError(
            f"{path}: {given.size} wavelengths are given ({listed(given.tolist(), 'nm')}), but the file has {bands} "
            "bands; give one for each band"
        )
    return wavelengths


def _chunked(opened: Opened, chunks: Any) -> Any:
    source: Source = opened.source
    if chunks is None:
        return np.asarray(source)
    import dask.array as da
    from dask.base import tokenize

    if isinstance(chunks, str) and chunks == "auto":
        chunks = source.shape
        if source.ndim == 3:
            chunks = (
                source.shape[0],
                *block_shape(source.shape[1:], source.shape[0], opened.tile, free=opened.free),
            )
        elif source.ndim == 2:
            chunks = (source.shape[0], max(1, min(source.shape[1], (16 << 20) // source.shape[0])))
    elif isinstance(chunks, dict):
        unknown = set(chunks) - set(opened.dims)
        if unknown:
            raise ValueError(
                f"chunks names {listed(sorted(unknown))}, but the dimensions are {listed(opened.dims)}"
            )
        chunks = tuple(chunks.get(dim, -1) for dim in opened.dims)
    return da.from_array(
        source,
        chunks=chunks,
        name="cube-" + tokenize(source),
        meta=np.empty((0,) * source.ndim, source.dtype),
        asarray=True,
        inline_array=True,
    )


def _input_of(source: Source) -> str:
    files, size, changed = source.identity
    return json.dumps({"path": source.path, "files": files, "bytes": size, "changed_ns": changed})
