"""Array-like views of files: sliced by dask, they read just that block and name it where it cannot be read.

They hold no open file, so that they travel to other processes and are recognised again by a resumed run.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["BlockReadError", "LabelledSource", "RasterSource", "Source", "identity_of"]

#: Open datasets kept for each thread: GDAL's may not be shared by threads.
_KEPT_OPEN = 4
#: GDAL's own cache of decoded tiles [bytes]; its default, a share of all memory, is more than is needed here.
_GDAL_CACHE = 64 << 20
_open = threading.local()


class BlockReadError(OSError):
    """A block of a file that cannot be read; the message names both."""


def identity_of(path: str) -> tuple[int, int, int]:
    """Files, bytes and last change [ns] of a file or of all files of a folder; zeros where it is not local."""
    local = Path(path)
    if local.is_file():
        state = local.stat()
        return 1, state.st_size, state.st_mtime_ns
    files = size = latest = 0
    folders = [path] if local.is_dir() else []
    while folders:
        for entry in os.scandir(folders.pop()):
            if entry.is_dir():
                folders.append(entry.path)
                continue
            state = entry.stat()
            files, size, latest = files + 1, size + state.st_size, max(latest, state.st_mtime_ns)
    return files, size, latest


@dataclass(frozen=True)
class Source:
    """A file's reflectances as something that is sliced: (band, row, column) or any dimensions.

    Parameters
    ----------
    path : str
        The file.
    shape : tuple of int
        Its shape, the bands first.
    identity : tuple of int
        What `identity_of` said when it was opened; a change is noticed by a resumed run.
    """

    path: str
    shape: tuple[int, ...]
    identity: tuple[int, int, int]
    dtype: np.dtype = field(default=np.dtype(np.float32), kw_only=True)

    @property
    def ndim(self) -> int:
        """Number of dimensions."""
        return len(self.shape)

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> NDArray:
        return np.asarray(self[(slice(None),) * self.ndim], dtype=dtype)

    def __getitem__(self, index: Any) -> NDArray:
        index = index if isinstance(index, tuple) else (index,)
        if Ellipsis in [i for i in index if not isinstance(i, np.ndarray)]:
            raise IndexError("an ellipsis is not wanted here")
        index = (*index, *(slice(None),) * (self.ndim - len(index)))
        bounds, rest = [], []
        for wanted, size in zip(index, self.shape, strict=True):
            low, high, inner = _bounds(wanted, size)
            bounds.append((low, high))
            rest.append(inner)
        if any(low >= high for low, high in bounds):
            sizes = [
                high - low if isinstance(inner, slice) else np.size(inner)
                for (low, high), inner in zip(bounds, rest, strict=True)
                if isinstance(inner, slice) or np.ndim(inner)
            ]
            return np.empty(sizes, self.dtype)
        block = self._block(tuple(bounds))
        for axis in reversed(range(self.ndim)):
            if not isinstance(rest[axis], slice):
                block = block[(slice(None),) * axis + (rest[axis],)]
        return block

    def _block(self, bounds: tuple[tuple[int, int], ...]) -> NDArray:
        raise NotImplementedError

    def _unreadable(self, bounds: tuple[tuple[int, int], ...], reason: object) -> BlockReadError:
        names = ("rows", "columns") if len(bounds) == 3 else tuple(f"axis {k}" for k in range(1, len(bounds)))
        block = ", ".join(
            f"{name} {low}–{high - 1}" for name, (low, high) in zip(names, bounds[1:], strict=True)
        )
        text = " ".join(str(reason).split()).rstrip(".") or type(reason).__name__
        return BlockReadError(
            f"{self.path}: the block of {block or 'all bands'} cannot be read ({text}); the file is damaged or "
            "incomplete there; restore it from its origin"
        )


def _bounds(wanted: Any, size: int) -> tuple[int, int, Any]:
    """First and last element that are needed along an axis, and the index within them."""
    if isinstance(wanted, slice):
        start, stop, step = wanted.indices(size)
        if step == 1:
            return start, max(start, stop), slice(None)
        chosen = np.arange(start, stop, step)
    elif np.ndim(wanted) == 0:
        position = int(wanted) % size
        return position, position + 1, 0
    else:
        chosen = np.asarray(wanted)
        chosen = np.flatnonzero(chosen) if chosen.dtype == bool else chosen % size
    if chosen.size == 0:
        return 0, 0, slice(None)
    low = int(chosen.min())
    return low, int(chosen.max()) + 1, chosen - low


def _kept_open(key: tuple[Any, ...], opener: Callable[[], Any]) -> Any:
    kept: dict[tuple[Any, ...], Any] = _open.__dict__.setdefault("datasets", {})
    if key not in kept:
        while len(kept) >= _KEPT_OPEN:
            kept.pop(next(iter(kept))).close()
        kept[key] = opener()
    return kept[key]


@dataclass(frozen=True)
class RasterSource(Source):
    """Bands of any raster that GDAL opens, as float32 with NaN where missing.

    `bands` are GDAL's band numbers; `nodata`, `scale` and `offset` have one entry for each of them. `masked`:
    the file has a mask beside its values.
    """

    bands: tuple[int, ...] = ()
    nodata: tuple[float | None, ...] = ()
    scale: tuple[float, ...] = ()
    offset: tuple[float, ...] = ()
    masked: bool = False

    def _block(self, bounds: tuple[tuple[int, int], ...]) -> NDArray:
        import rasterio
        from rasterio.windows import Window

        (first, last), (top, bottom), (left, right) = bounds
        window = Window(left, top, right - left, bottom - top)
        bands = self.bands[first:last]
        try:
            with rasterio.Env(GDAL_CACHEMAX=_GDAL_CACHE):
                dataset = _kept_open((self.path, self.identity), lambda: open_raster(self.path))
                stored = dataset.read(list(bands), window=window)
                mask = dataset.dataset_mask(window=window) if self.masked else None
        except (rasterio.errors.RasterioError, OSError) as error:
            raise self._unreadable(bounds, error.__cause__ or error) from None
        values: NDArray = stored.astype(self.dtype, copy=False)
        for k, band in enumerate(range(first, last)):
            missing = _equals(stored[k], self.nodata[band])
            if self.scale[band] != 1:
                values[k] *= self.dtype.type(self.scale[band])
            if self.offset[band] != 0:
                values[k] += self.dtype.type(self.offset[band])
            if missing is not None:
                values[k][missing] = np.nan
            if mask is not None:
                values[k][mask == 0] = np.nan
        return values


def _equals(stored: NDArray, nodata: float | None) -> NDArray | None:
    if nodata is None or np.isnan(nodata):
        return None
    if stored.dtype.kind == "f":
        missing = stored == stored.dtype.type(nodata)
    elif nodata % 1 or not np.iinfo(stored.dtype).min <= nodata <= np.iinfo(stored.dtype).max:
        return None
    else:
        missing = stored == int(nodata)
    return missing if missing.any() else None


def open_raster(path: str, mode: str = "r", **options: Any) -> Any:
    """Open a raster; one without map projection is no reason for a warning."""
    import warnings

    import rasterio

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", rasterio.errors.NotGeoreferencedWarning)
        return rasterio.open(path, mode, **options)


@dataclass(frozen=True)
class LabelledSource(Source):
    """A variable of a Zarr store or netCDF file, as float with NaN where missing.

    `order` says which of the variable's axes comes where. `nodata`, `scale` and `offset` None: as the file
    says by the CF conventions.
    """

    engine: str = "zarr"
    variable: str = ""
    order: tuple[int, ...] = ()
    nodata: float | None = None
    scale: float | None = None

    def _block(self, bounds: tuple[tuple[int, int], ...]) -> NDArray:
        key = (self.path, self.identity, self.plain)
        try:
            dataset = _kept_open(key, lambda: open_labelled(self.path, self.engine, decode=not self.plain))
            variable = dataset.variables[self.variable]
            index: list[slice] = [slice(None)] * self.ndim
            for axis, (low, high) in zip(self.order, bounds, strict=True):
                index[axis] = slice(low, high)
            stored = np.asarray(variable[tuple(index)].values)
        except Exception as error:  # noqa: BLE001 (each codec of a store raises its own)
            raise self._unreadable(bounds, error) from None
        values = stored.transpose(self.order).astype(self.dtype, copy=self.plain)
        if self.plain:
            nodata = variable.attrs.get("_FillValue") if self.nodata is None else self.nodata
            missing = _equals(stored.transpose(self.order), None if nodata is None else float(nodata))
            values *= self.dtype.type(
                variable.attrs.get("scale_factor", 1) if self.scale is None else self.scale
            )
            if self.scale is None:
                values += self.dtype.type(variable.attrs.get("add_offset", 0))
            if missing is not None:
                values[missing] = np.nan
        return values

    @property
    def plain(self) -> bool:
        """True where the stored numbers are read, since the user said how they are to be understood."""
        return self.nodata is not None or self.scale is not None


def open_labelled(path: str, engine: str, *, decode: bool = True) -> Any:
    """Open a Zarr store or netCDF file, nothing of it read yet."""
    import xarray as xr

    return xr.open_dataset(
        path, engine=engine, chunks=None, cache=False, mask_and_scale=decode, decode_coords="all"
    )
