"""Outlines of regions as polygons."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from .membership import grid_transform

__all__ = ["outlines"]


def outlines(labels: xr.DataArray, count: int) -> list[Any]:
    """Outline of each region 1 … `count` along its pixels' edges, in the map's coordinates."""
    from rasterio.features import shapes
    from shapely import unary_union
    from shapely.geometry import shape

    numbers = np.ascontiguousarray(labels.values, dtype=np.int32)
    parts: list[list[Any]] = [[] for _ in range(count)]
    # pixels that touch at a corner only are parts of one multipolygon: joined there, the outline would cross itself
    for outline, number in shapes(
        numbers, mask=numbers > 0, connectivity=4, transform=grid_transform(labels)
    ):
        parts[int(number) - 1].append(shape(outline))
    return [unary_union(part) if len(part) > 1 else part[0] for part in parts]
