"""How maps lie in an unfinished output: which variables are written block by block, in which blocks."""

from __future__ import annotations

import json
from collections.abc import Hashable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from .block_shape import block_shape
from .overviews import levels_for, levels_within_blocks

__all__ = ["Layout", "describe", "lay_out", "writable_attributes"]

#: Fast, and made for numbers whose bytes differ in how they vary.
_CODEC = {"cname": "zstd", "clevel": 1, "shuffle": 1}


@dataclass(frozen=True)
class Layout:
    """Maps made ready for writing.

    `gridded`: the variables written block by block, all with the dimensions `dims` and the same dask chunks.
    `levels`: how many overviews there will be; `levels_in_pass`: how many are made with the blocks.
    """

    maps: xr.Dataset
    dims: tuple[str, ...]
    gridded: tuple[str, ...]
    chunks: tuple[tuple[int, ...], ...]
    levels: int = 0
    levels_in_pass: int = 0

    @property
    def numblocks(self) -> tuple[int, ...]:
        """Number of blocks along each dimension."""
        return tuple(len(sizes) for sizes in self.chunks)


def lay_out(maps: xr.Dataset, *, overviews: bool) -> Layout:
    """Put all variables of an image's size on one grid of blocks; what is small stays in memory."""
    shapes = {name: array.dims for name, array in maps.data_vars.items()}
    largest = max(shapes, key=lambda name: (len(shapes[name]), maps[name].size), default=None)
    dims = tuple(str(dim) for dim in shapes[largest]) if largest is not None else ()
    gridded = tuple(name for name, of_variable in shapes.items() if dims and set(of_variable) == set(dims))
    # what is not on the grid is small, and is needed as it is
    others: dict[Hashable, Any] = {
        name: maps[name].compute() for name in maps.data_vars if name not in gridded
    }
    lazy = {name: c.compute() for name, c in maps.coords.items() if c.chunks is not None}
    maps = maps.assign(others).assign_coords(lazy)
    maps = maps.assign({name: maps[name].transpose(*dims) for name in gridded})
    if gridded:
        maps = maps.assign({name: maps[name].chunk(_uniform(maps, gridded, dims)) for name in gridded})
    chunks = maps[gridded[0]].chunks if gridded else ()
    assert chunks is not None
    levels = levels_for(*(maps.sizes[dim] for dim in dims)) if overviews and len(dims) == 2 else 0
    return Layout(
        maps,
        dims,
        tuple(str(name) for name in gridded),
        chunks,
        levels,
        levels_within_blocks(chunks, levels) if levels else 0,
    )


def _uniform(maps: xr.Dataset, gridded: tuple[Hashable, ...], dims: tuple[str, ...]) -> dict[str, int]:
    """Size of a block along each dimension: that of the lazy variables, else one made for files."""
    lazy = [maps[name] for name in gridded if maps[name].chunks is not None]
    if lazy:
        # blocks of unlike size have no place in the store's grid: the largest serves for all
        return {
            dim: max(max(array.chunks[k], default=1) for array in lazy)  # type: ignore[index]
            for k, dim in enumerate(dims)
        }
    if len(dims) == 2:
        high, wide = block_shape([maps.sizes[dim] for dim in dims], 2 * len(gridded), (512, 512))
        return {dims[0]: high, dims[1]: wide}
    inner = int(np.prod([maps.sizes[dim] for dim in dims[1:]], dtype=int))
    return {dims[0]: max(1, (1 << 20) // max(inner, 1)), **{dim: maps.sizes[dim] for dim in dims[1:]}}


def writable_attributes(attributes: Any) -> dict[str, Any]:
    """Attributes that every format can hold: text, numbers and lists of numbers; anything else as JSON."""
    written: dict[str, Any] = {}
    for key, value in attributes.items():
        if isinstance(value, (bool, np.bool_)):
            written[str(key)] = int(value)
        elif isinstance(value, (str, int, float, np.number, np.ndarray)):
            written[str(key)] = value
        elif isinstance(value, (list, tuple)) and all(isinstance(item, (int, float)) for item in value):
            written[str(key)] = np.asarray(value)
        else:
            written[str(key)] = json.dumps(value, default=str)
    return written


def encoded(layout: Layout) -> xr.Dataset:
    """The maps with attributes that can be written, and with the map projection linked from each variable."""
    maps = layout.maps.copy(deep=False)
    maps.attrs = writable_attributes(maps.attrs)
    for array in maps.variables.values():
        projection = array.encoding.get("grid_mapping")
        array.attrs = writable_attributes(array.attrs)
        if projection is not None:
            array.attrs["grid_mapping"] = projection
        # what another file's chunks or packing were is nothing to this one
        array.encoding = {}
    for name in maps.data_vars:
        if "spatial_ref" in maps.coords:
            maps[name].attrs.setdefault("grid_mapping", "spatial_ref")
    return maps


def write_template(layout: Layout, store: Path) -> None:
    """Make the Zarr store: everything but the blocks, and room for the overviews."""
    import dask.array as da
    import zarr
    from numcodecs import Blosc

    maps = encoded(layout)
    encoding: dict[str, Any] = {}
    for name in layout.gridded:
        variable = maps[name].variable
        empty = da.zeros(variable.shape, chunks=-1, dtype=variable.dtype)
        maps[name] = xr.Variable(variable.dims, empty, variable.attrs)
        encoding[name] = {
            "chunks": tuple(sizes[0] for sizes in layout.chunks),
            "compressors": (Blosc(**_CODEC),),
            "_FillValue": np.nan if variable.dtype.kind == "f" else None,
        }
    maps.to_zarr(store, mode="w", zarr_format=2, consolidated=False, compute=False, encoding=encoding)
    if not layout.levels_in_pass:
        return
    group = zarr.open_group(store, mode="r+", use_consolidated=False)
    for level in range(1, layout.levels_in_pass + 1):
        for name in layout.gridded:
            dtype = layout.maps[name].dtype
            group.create_array(
                f"overviews/{level}/{name}",
                shape=tuple(_ceil(layout.maps.sizes[dim], level) for dim in layout.dims),
                chunks=tuple(_ceil(sizes[0], level) for sizes in layout.chunks),
                dtype=dtype,
                compressors=Blosc(**_CODEC),
                fill_value=np.nan if dtype.kind == "f" else 0,
            )


def _ceil(size: int, level: int) -> int:
    return -(-size // (1 << level))


def describe(layout: Layout, computation: str) -> dict[str, Any]:
    """The job, so that a resumed run can tell whether it is the same one, and what is different if not."""
    from .. import __version__

    maps = layout.maps
    attributes = writable_attributes(maps.attrs)
    variables = {
        name: {
            "dtype": str(maps[name].dtype),
            **{key: str(value) for key, value in writable_attributes(maps[name].attrs).items()},
        }
        for name in layout.gridded
    }
    return {
        "version of bandratio": __version__,
        "input": str(attributes.pop("input", "")),
        "noise": str(attributes.pop("noise", "")),
        "parameter list": list(layout.gridded),
        "definition of the parameters": variables,
        "description": {key: str(value) for key, value in attributes.items()},
        "grid": {dim: [sizes[0], sum(sizes)] for dim, sizes in zip(layout.dims, layout.chunks, strict=True)},
        "overviews": layout.levels,
        "computation": computation,
    }
