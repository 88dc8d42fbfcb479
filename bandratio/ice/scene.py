"""A scene's arrays, in memory or lazy, on common dimensions, and functions of its points mapped over them."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..detection.outside import Points, over_blocks

__all__ = ["BlockPoints", "Scene"]


@dataclass(frozen=True)
class BlockPoints:
    """Makes the points of one block from its arrays; light, so that it can be sent to other processes.

    Parameters
    ----------
    names : tuple of str
        Names of the arrays that are not scalars, in their order.
    scalars : dict
        The others.
    gain_sigma, opposition_ratio : float
        As of the scene.
    """

    names: tuple[str, ...]
    scalars: dict[str, Any]
    gain_sigma: float
    opposition_ratio: float

    def arrays(self, parts: Sequence[NDArray]) -> dict[str, Any]:
        """All arrays of the block by name."""
        return self.scalars | dict(zip(self.names, parts, strict=True))

    def __call__(self, parts: Sequence[NDArray]) -> Points:
        """Points of the block."""
        given = self.arrays(parts)
        for name in ("red", "sigma_red", "covariance"):
            given[name] = given[name] / self.opposition_ratio
        albedos = [given.pop(name) for name in ("red", "infrared", "sigma_red", "sigma_infrared")]
        return Points.of(*albedos, gain_sigma=self.gain_sigma, **given)


@dataclass(frozen=True, eq=False)
class Scene:
    """Albedos and errors of a scene, on common dimensions.

    Parameters
    ----------
    arrays : dict
        Each a scalar or an array of the scene's shape, numpy or dask.
    template : DataArray
        Red: dimensions and coordinates of the result.
    gain_sigma : float
        Uncertainty shared by all points, as a fraction of the infrared.
    opposition_ratio : float
        The red is divided by it.
    """

    arrays: dict[str, Any]
    template: xr.DataArray
    gain_sigma: float
    opposition_ratio: float

    @classmethod
    def of(cls, values: Mapping[str, Any], *, gain_sigma: float, opposition_ratio: float) -> Scene:
        """Bring arrays to common dimensions.

        Raises
        ------
        ValueError
            If shapes or coordinates differ, or the errors are those of nothing.
        """
        red = values["red"]
        template = red if isinstance(red, xr.DataArray) else _labelled(red)
        template = template.drop_vars(["wavelength", "fwhm"], errors="ignore")
        arrays = {name: _fitted(name, value, template) for name, value in values.items()}
        return cls(arrays, template, gain_sigma, opposition_ratio)

    @cached_property
    def full(self) -> dict[str, Any]:
        """The arrays that are not scalars."""
        return {name: array for name, array in self.arrays.items() if np.ndim(array)}

    @cached_property
    def block_points(self) -> BlockPoints:
        """What makes the points of one block."""
        scalars = {name: array for name, array in self.arrays.items() if name not in self.full}
        return BlockPoints(tuple(self.full), scalars, self.gain_sigma, self.opposition_ratio)

    @cached_property
    def _flat(self) -> list[NDArray]:
        return [np.ravel(array) for array in self.full.values()]

    def points(self, first: int, last: int) -> Points:
        """Points of a scene in memory from `first` up to `last`."""
        return self.block_points([array[first:last] for array in self._flat])

    @cached_property
    def chunked(self) -> list[Any]:
        """The arrays that are not scalars as dask arrays of common chunks; none where nothing is lazy."""
        lazy = [array for array in self.full.values() if hasattr(array, "dask")]
        if not lazy:
            return []
        import dask.array as da

        chunks = lazy[0].chunks
        arrays = [
            array if hasattr(array, "dask") else da.from_array(array, chunks) for array in self.full.values()
        ]
        pairs = (part for array in arrays for part in (array, range(array.ndim)))
        return list(da.core.unify_chunks(*pairs)[1])

    def mapped(
        self, work: Callable[[Points], Any], names: Sequence[str], dtypes: Mapping[str, Any]
    ) -> dict[str, Any]:
        """Arrays of the scene's shape from a function of points that gives one row for each name."""
        if not self.chunked:
            size = self.template.size
            results = {name: np.empty(size, dtype=dtypes[name]) for name in names}

            def fill(first: int, last: int) -> None:
                for name, row in zip(names, work(self.points(first, last)), strict=True):
                    results[name][first:last] = row

            over_blocks(fill, size)
            return {name: values.reshape(self.template.shape) for name, values in results.items()}
        import dask.array as da

        chunked, points_of = self.chunked, self.block_points

        def rows(*parts: NDArray) -> NDArray[np.float64]:
            return np.stack(work(points_of(parts))).reshape(len(names), *parts[0].shape)

        stacked = da.map_blocks(
            rows, *chunked, dtype=np.float64, new_axis=0, chunks=((len(names),), *chunked[0].chunks),
            meta=np.empty((0,) * (chunked[0].ndim + 1)),
        )  # fmt: skip
        return {name: stacked[i].astype(dtypes[name]) for i, name in enumerate(names)}

    def labelled(self, values: Any, attributes: Mapping[str, Any]) -> xr.DataArray:
        """An array of the scene's shape with its coordinates."""
        array = self.template.copy(data=values).rename(None)
        array.attrs = dict(attributes)
        return array


def _labelled(values: Any) -> xr.DataArray:
    if not hasattr(values, "dask"):
        try:
            values = np.asarray(values, dtype=float)
        except (TypeError, ValueError):
            raise TypeError(f"red must be numbers (albedos as fractions), got {str(values)[:60]}") from None
    dims = {0: (), 1: ("shot",), 2: ("y", "x")}.get(
        values.ndim, tuple(f"dim_{i}" for i in range(values.ndim))
    )
    return xr.DataArray(values, dims=dims)


def _fitted(name: str, value: Any, template: xr.DataArray) -> Any:
    """A scalar, or an array of the template's shape."""
    if isinstance(value, xr.DataArray):
        strange = [str(dim) for dim in value.dims if dim not in template.dims]
        if strange:
            raise ValueError(
                f"{name} has the dimension {', '.join(strange)}, which red has not; red has "
                f"{', '.join(map(str, template.dims)) or 'none'}"
            )
        plain = value.reset_coords(drop=True)
        bare = template.reset_coords(drop=True)
        try:
            plain, bare = xr.align(plain, bare, join="exact", copy=False)
        except ValueError:
            sizes = ", ".join(f"{dim}: {size}" for dim, size in value.sizes.items())
            raise ValueError(
                f"{name} does not lie on red's coordinates (it has {sizes}); put both on one grid first"
            ) from None
        return _number(name, plain.broadcast_like(bare).transpose(*template.dims).data)
    array = value if hasattr(value, "dask") else np.asarray(value)
    if array.ndim and array.shape != template.shape:
        try:
            array = np.broadcast_to(array, template.shape)
        except ValueError:
            raise ValueError(
                f"{name} must be one number or have the shape of red, {template.shape}, got {array.shape}"
            ) from None
    return _number(name, array)


def _number(name: str, array: Any) -> Any:
    if array.dtype.kind not in "fiu":
        raise TypeError(f"{name} must be real numbers, got {array.dtype}")
    return array
