"""Maps as one cloud-optimised GeoTIFF: a band for each variable, with all that is known about it."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape, quoteattr

import numpy as np
import xarray as xr

from ..kernel import cores
from .block_shape import block_shape
from .layout import Layout, writable_attributes
from .overviews import halved
from .raster_cubes import spatial_coordinates
from .sources import RasterSource, identity_of, open_raster

__all__ = ["finish_geotiff", "open_geotiff", "require_image"]

#: Tag that holds what a GeoTIFF has no place for, as JSON: for a band its attributes and type, for the file
#: its attributes and the coordinates without dimension.
_TAG = "labels"
_TILE = 512
#: Cache of decoded blocks while the file is put together [bytes]: what one row of tiles needs of it.
_CACHE = 256 << 20


def require_image(maps: xr.Dataset, path: Path) -> None:
    """Refuse what a GeoTIFF cannot hold.

    Raises
    ------
    ValueError
        If a variable is no image, or is of a type that has no place in a GeoTIFF.
    """
    others = {
        str(name): tuple(array.dims)
        for name, array in maps.data_vars.items()
        if set(array.dims) != {"y", "x"}
    }
    if others:
        told = ", ".join(f"{name} has {dims}" for name, dims in others.items())
        raise ValueError(
            f"{path}: a GeoTIFF holds images with the dimensions y and x, but {told}; write .zarr or .nc, or leave "
            f"them out with maps.drop_vars({list(others)})"
        )
    for name, array in maps.data_vars.items():
        if array.dtype.kind not in "fiub":
            raise ValueError(
                f"{path}: a GeoTIFF holds numbers, but {name} is {array.dtype}; write .zarr or .nc"
            )


def _common_type(layout: Layout) -> np.dtype:
    """One type for all bands, in which each is exact."""
    return np.result_type(*(layout.maps[name].dtype for name in layout.gridded))


def finish_geotiff(layout: Layout, store: Path, made: Path) -> None:
    """Turn a finished Zarr store into a cloud-optimised GeoTIFF.

    GDAL reads the store through a virtual raster, so that never more than some blocks are in memory. Overviews
    that are not in the store yet are made here, of the last that is.
    """
    import rasterio
    from rasterio.shutil import copy

    _remaining_overviews(layout, store)
    virtual = made.with_name("finished.vrt")
    virtual.write_text("\n".join(_virtual(layout, store)), encoding="utf-8")
    kind = _common_type(layout).kind
    made.unlink(missing_ok=True)
    with rasterio.Env(GDAL_CACHEMAX=_CACHE, GDAL_NUM_THREADS=cores()):
        try:
            copy(
                str(virtual),
                str(made),
                driver="COG",
                COMPRESS="DEFLATE",
                LEVEL=1,
                PREDICTOR="FLOATING_POINT" if kind == "f" else "STANDARD",
                BLOCKSIZE=_TILE,
                BIGTIFF="IF_SAFER",
                OVERVIEWS="FORCE_USE_EXISTING" if layout.levels else "NONE",
                NUM_THREADS=cores(),
            )
        except rasterio.errors.RasterioError as error:
            made.unlink(missing_ok=True)
            raise OSError(" ".join(str(error.__cause__ or error).split())) from None


def _remaining_overviews(layout: Layout, store: Path) -> None:
    """Make the levels that did not fall on whole pixels of a block, each of the one before, stripe by stripe."""
    import zarr
    from numcodecs import Zstd

    group: Any = zarr.open_group(store, mode="r+", use_consolidated=False)
    for level in range(layout.levels_in_pass + 1, layout.levels + 1):
        for name in layout.gridded:
            finer = group[f"overviews/{level - 1}/{name}" if level > 1 else name]
            shape = tuple(-(-size // 2) for size in finer.shape)
            coarser = group.create_array(
                f"overviews/{level}/{name}",
                shape=shape,
                chunks=(min(_TILE, shape[0]), min(_TILE, shape[1])),
                dtype=finer.dtype,
                compressors=Zstd(level=1),
                fill_value=np.nan if finer.dtype.kind == "f" else 0,
                overwrite=True,
            )
            for top in range(0, shape[0], _TILE):
                bottom = min(top + _TILE, shape[0])
                coarser[top:bottom] = halved(finer[2 * top : 2 * bottom])


def _virtual(layout: Layout, store: Path) -> Iterator[str]:
    """Lines of a virtual raster whose bands are the store's arrays, with everything that goes into the file."""
    import rioxarray  # noqa: F401 (puts .rio on xarray)

    maps = layout.maps
    rows, columns = (maps.sizes[dim] for dim in layout.dims)
    kind = _common_type(layout)
    gdal_type = {"float32": "Float32", "float64": "Float64", "bool": "Byte"}.get(
        kind.name, kind.name.capitalize()
    )
    gdal_type = gdal_type.replace("Uint8", "Byte").replace("Uint", "UInt")
    yield f'<VRTDataset rasterXSize="{columns}" rasterYSize="{rows}">'
    crs = maps.rio.crs
    if crs is not None:
        yield f"<SRS>{escape(crs.to_wkt())}</SRS>"
    place = _geotransform(maps)
    if place is not None:
        yield f"<GeoTransform>{', '.join(map(repr, place))}</GeoTransform>"
    scalars = {
        str(name): coordinate.values.item()
        for name, coordinate in maps.coords.items()
        if coordinate.ndim == 0 and name != "spatial_ref"
    }
    attributes = writable_attributes(maps.attrs)
    yield _metadata({**attributes, **scalars}, {"attributes": attributes, "coordinates": scalars})
    for number, name in enumerate(layout.gridded, start=1):
        array = maps[name]
        attributes = writable_attributes(array.attrs)
        yield f'<VRTRasterBand dataType="{gdal_type}" band="{number}" blockXSize="{_TILE}" blockYSize="{_TILE}">'
        yield _metadata(attributes, {"attributes": attributes, "dtype": str(array.dtype)})
        yield f"<Description>{escape(name)}</Description>"
        yield f"<UnitType>{escape(str(attributes.get('units', '')))}</UnitType>"
        if kind.kind == "f":
            yield "<NoDataValue>nan</NoDataValue>"
        yield f"<SimpleSource>{_source(store, name)}</SimpleSource>"
        for level in range(1, layout.levels + 1):
            yield f"<Overview>{_source(store, f'overviews/{level}/{name}')}</Overview>"
        yield "</VRTRasterBand>"
    yield "</VRTDataset>"


def _source(store: Path, array: str) -> str:
    name = escape(f'ZARR:"{store}":/{array}')
    return f'<SourceFilename relativeToVRT="0">{name}</SourceFilename><SourceBand>1</SourceBand>'


def _metadata(readable: Mapping[str, Any], labels: Mapping[str, Any]) -> str:
    items = {key: str(value) for key, value in readable.items() if not isinstance(value, np.ndarray)}
    items[_TAG] = json.dumps(labels, default=lambda value: value.tolist())
    lines = [f"<MDI key={quoteattr(key)}>{escape(value)}</MDI>" for key, value in items.items()]
    return "<Metadata>" + "".join(lines) + "</Metadata>"


def _geotransform(maps: xr.Dataset) -> list[float] | None:
    """GDAL's six numbers, from the coordinates of rows and columns where there are some, else as written down."""
    written = maps.coords["spatial_ref"].attrs.get("GeoTransform") if "spatial_ref" in maps.coords else None
    stated = [float(number) for number in str(written).split()] if written else None
    if not {"y", "x"} <= set(maps.coords):
        return stated
    numbers = []
    for dim, origin, step in (("x", 0, 1), ("y", 3, 5)):
        centres = maps[dim].values.astype(float)
        if centres.size > 1:
            size = (centres[-1] - centres[0]) / (centres.size - 1)
        elif stated:
            size = stated[step]
        else:
            return None
        start = centres[0] - size / 2
        if stated and abs(stated[step] - size) < 1e-6 * abs(size):
            # without the rounding of a difference of large numbers
            size = stated[step]
            start = (
                stated[origin] if abs(stated[origin] - start) < 1e-4 * abs(size) else centres[0] - size / 2
            )
        numbers.append((float(start), float(size)))
    (left, wide), (top, high) = numbers
    return [left, wide, 0.0, top, 0.0, high]


def open_geotiff(path: str) -> xr.Dataset:
    """Maps from a GeoTIFF, lazily; names are the bands' descriptions."""
    import dask.array as da
    import rasterio
    from dask.base import tokenize

    try:
        dataset = open_raster(path)
    except rasterio.errors.RasterioIOError as error:
        raise OSError(f"{path}: cannot be opened as maps ({' '.join(str(error).split())})") from None
    with dataset:
        bands = range(1, dataset.count + 1)
        labels = [json.loads(dataset.tags(k).get(_TAG, "{}")) for k in bands]
        of_file = json.loads(dataset.tags().get(_TAG, "{}"))
        names = [dataset.descriptions[k - 1] or f"band_{k}" for k in bands]
        stored = np.dtype(dataset.dtypes[0])
        wide = stored.itemsize > 4 or (stored.kind in "iu" and stored.itemsize == 4)
        ones = (1.0,) * dataset.count
        source = RasterSource(
            path,
            (dataset.count, dataset.height, dataset.width),
            identity_of(path),
            bands=tuple(bands),
            nodata=dataset.nodatavals,
            scale=ones,
            offset=(0.0,) * dataset.count,
            dtype=np.dtype(np.float64 if wide else np.float32),
        )
        tile = dataset.block_shapes[0]
        chunks = (dataset.count, *block_shape((dataset.height, dataset.width), dataset.count, tile))
        # one read serves all bands, since a tile of the file holds all of them
        planes = da.from_array(
            source,
            chunks=chunks,
            name="maps-" + tokenize(source),
            meta=np.empty((0, 0, 0), source.dtype),
            inline_array=True,
        )
        coords = {**spatial_coordinates(dataset), **of_file.get("coordinates", {})}
        variables = {}
        for k, name in enumerate(names):
            attributes = labels[k].get("attributes") or _foreign_attributes(dataset, k + 1)
            variables[name] = xr.Variable(
                ("y", "x"), planes[k].astype(labels[k].get("dtype", source.dtype)), attributes
            )
        return xr.Dataset(variables, coords, of_file.get("attributes", {}))


def _foreign_attributes(dataset: Any, band: int) -> dict[str, Any]:
    unit = dataset.units[band - 1]
    return {"units": unit} if unit else {}
