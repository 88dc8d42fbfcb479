"""Incidence, emission and phase: checked at the door, and their cosines."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "LABORATORY",
    "LEAST_COSINE",
    "Geometry",
    "angle_plane",
    "cosine",
    "refuse_impossible",
    "refuse_radians",
]

#: Below this cosine no quantity is divided by it [1] (common practice, no source).
LEAST_COSINE = 0.01


@dataclass(frozen=True)
class Geometry:
    """One set of angles [deg]: where the light comes from and where it goes.

    Parameters
    ----------
    incidence, emission : float
        Angle from the surface normal to the source and to the viewer, 0 to below 90 [deg].
    phase : float
        Angle between source and viewer [deg], between |incidence − emission| and incidence + emission.

    Raises
    ------
    ValueError
        If the three angles cannot belong together.

    Examples
    --------
    >>> Geometry(30, 0, 30).mu0.round(4)
    np.float64(0.866)
    """

    incidence: float
    emission: float
    phase: float

    def __post_init__(self) -> None:
        for name in ("incidence", "emission", "phase"):
            value = getattr(self, name)
            try:
                object.__setattr__(self, name, float(value))
            except (TypeError, ValueError):
                raise TypeError(f"{name} must be a number in degrees, got {value!r}") from None
        for name in ("incidence", "emission"):
            if not 0 <= getattr(self, name) < 90:
                raise ValueError(
                    f"the standard geometry's {name} must lie from 0 to below 90°, got {getattr(self, name):g}°"
                )
        least, most = abs(self.incidence - self.emission), self.incidence + self.emission
        if not least - 1e-6 <= self.phase <= most + 1e-6:
            raise ValueError(
                f"no surface has incidence {self.incidence:g}°, emission {self.emission:g}° and phase "
                f"{self.phase:g}°: the phase angle must lie between {least:g}° and {most:g}°"
            )

    @classmethod
    def of(cls, angles: Geometry | Sequence[float]) -> Geometry:
        """From three numbers (incidence, emission, phase) [deg]."""
        if isinstance(angles, Geometry):
            return angles
        if isinstance(angles, str) or not isinstance(angles, (Sequence, np.ndarray)) or len(angles) != 3:
            raise ValueError(
                f"the standard geometry is three angles in degrees, (incidence, emission, phase), got {angles!r}"
            )
        return cls(*angles)

    @property
    def mu0(self) -> np.float64:
        """Cosine of incidence [1]."""
        return np.float64(cosine(self.incidence))

    @property
    def mu(self) -> np.float64:
        """Cosine of emission [1]."""
        return np.float64(cosine(self.emission))


#: Geometry of most laboratory spectra [deg].
LABORATORY = Geometry(30, 0, 30)


def cosine(angle_deg: ArrayLike) -> NDArray:
    """Cosine of an angle in degrees, in the angle's own precision."""
    angles = np.asarray(angle_deg)
    if angles.dtype.kind != "f":
        angles = angles.astype(float)
    result: NDArray = np.cos(np.deg2rad(angles))
    return result


def angle_plane(name: str, angles: Any, cube: xr.DataArray) -> xr.DataArray:
    """An angle [deg] for every pixel of a cube: one number, or a plane on the cube's grid.

    Parameters
    ----------
    name : {"incidence", "emission", "phase"}
        What it is, for the messages.
    angles : float or array_like, shape of one band
        Angle [deg].
    cube : DataArray
        The cube it belongs to.

    Returns
    -------
    DataArray, scalar or dimensions of the cube without `wavelength`

    Raises
    ------
    ValueError, TypeError
        If it is no number, negative, above 180°, in radians or cosines, or on another grid.
    """
    dims = tuple(dim for dim in cube.dims if dim != "wavelength")
    shape = tuple(cube.sizes[dim] for dim in dims)
    if isinstance(angles, xr.DataArray):
        plane = _on_the_same_grid(name, angles, cube, dims)
    else:
        data = angles if hasattr(angles, "dask") else _numbers(name, angles)
        if data.ndim and data.shape != shape:
            raise ValueError(
                f"{name} has shape {data.shape}, but a band of the cube has {shape}; give one number or one per pixel"
            )
        plane = xr.DataArray(data, dims=dims if data.ndim else ())
    if plane.dtype.kind != "f":
        plane = plane.astype(np.float32 if plane.dtype.kind in "iub" and plane.dtype.itemsize < 4 else float)
    if plane.chunks is None:
        _check_degrees(name, plane.values)
    return plane


def _numbers(name: str, angles: Any) -> NDArray:
    array = np.asarray(angles)
    if array.dtype.kind not in "fiu":
        raise TypeError(f"{name} must be angles in degrees, one number or one per pixel, got {angles!r}")
    return array


def _on_the_same_grid(
    name: str, plane: xr.DataArray, cube: xr.DataArray, dims: tuple[Any, ...]
) -> xr.DataArray:
    if plane.dtype.kind not in "fiu":
        raise TypeError(f"{name} must be angles in degrees, got {plane.dtype}")
    plane = plane.squeeze([dim for dim in plane.dims if dim not in dims and plane.sizes[dim] == 1], drop=True)
    strange = [dim for dim in plane.dims if dim not in dims]
    if strange or any(plane.sizes[dim] != cube.sizes[dim] for dim in plane.dims):
        raise ValueError(
            f"{name} is on another grid: it has {dict(plane.sizes)}, the cube "
            f"{ {str(dim): cube.sizes[dim] for dim in dims} }; resample it to the cube's pixels first"
        )
    for dim in plane.dims:
        if dim in plane.coords and dim in cube.coords:
            ours, theirs = cube[dim].values, plane[dim].values
            if ours.dtype.kind == "f" and theirs.dtype.kind in "fi":
                pixel = abs(float(ours[1] - ours[0])) if ours.size > 1 else 1.0
                same = np.allclose(ours, theirs, rtol=0, atol=0.01 * pixel)
            else:
                same = np.array_equal(ours, theirs)
            if not same:
                raise ValueError(
                    f"{name} is on another grid: its {dim} runs from {theirs[0]} to {theirs[-1]}, the cube's from "
                    f"{ours[0]} to {ours[-1]}; resample it to the cube's pixels first"
                )
    crs = [str(item.rio.crs) for item in (plane, cube) if "spatial_ref" in item.coords and _crs(item)]
    if len(crs) == 2 and crs[0] != crs[1]:
        raise ValueError(f"{name} has the map projection {crs[0]}, the cube {crs[1]}; reproject it first")
    present = [dim for dim in dims if dim in plane.dims]
    if present and len(present) < len(dims):
        plane = plane.broadcast_like(cube.isel(wavelength=0, drop=True))
        present = list(dims)
    return plane.transpose(*present)


def _crs(labelled: xr.DataArray) -> Any:
    import rioxarray  # noqa: F401  the accessor

    return labelled.rio.crs


def _check_degrees(name: str, angles: NDArray) -> None:
    """Refuse planes that are plainly no angles in degrees; NaN is missing and allowed."""
    if angles.size == 0:
        raise ValueError(f"{name} holds no pixels")
    least, most = _range(angles)
    if least > most:
        raise ValueError(f"{name} holds no finite angle")
    if -1 <= least < 0 and most <= 1:
        raise ValueError(
            f"{name} runs from {least:g} to {most:g}, which look like cosines, some negative; give angles in degrees"
        )
    if least < 0:
        raise ValueError(f"{name} must not be negative, got {least:g}°; missing angles are NaN")
    if most > 180:
        raise ValueError(f"{name} must be at most 180°, got {most:g}°; missing angles are NaN")


def refuse_radians(**planes: xr.DataArray) -> None:
    """Refuse angles that are all so small that they are surely radians or cosines.

    Emission and phase alone may all be small in degrees too (seen from above, sun behind), so every plane given is
    looked at; zero everywhere is no sign of radians.
    """
    ranges = {name: _range(_sample(plane)) for name, plane in planes.items()}
    small = all(high <= np.pi for _, high in ranges.values())
    zero_phase = "phase" in ranges and ranges["phase"][1] == 0
    if small and not zero_phase and any(high > 0 for _, high in ranges.values()):
        told = ", ".join(f"{name} up to {high:.3g}" for name, (_, high) in ranges.items())
        raise ValueError(
            f"{told}: these look like radians or cosines; give degrees (np.degrees converts radians). Where the "
            "angles are truly this small, give 0"
        )


def refuse_impossible(
    incidence: xr.DataArray, emission: xr.DataArray, phase: xr.DataArray, slack: float
) -> None:
    """Refuse angles [deg] that violate |i − e| ≤ g ≤ i + e at every pixel looked at; lazy ones are left to the flags."""
    planes = (incidence, emission, phase)
    if any(plane.chunks is not None for plane in planes):
        return
    size = max(plane.size for plane in planes)
    step = max(1, size // 65_536)
    i, e, g = (plane.values.reshape(-1)[::step] if plane.size == size else plane.values for plane in planes)
    finite = np.isfinite(i + e + g)
    possible = finite & (g >= np.abs(i - e) - slack) & (g <= i + e + slack)
    if finite.any() and not possible.any():
        at = int(np.argmax(finite))
        first = [float(np.broadcast_to(angle, finite.shape).reshape(-1)[at]) for angle in (i, e, g)]
        raise ValueError(
            "incidence, emission and phase cannot belong together at any pixel: the phase angle lies between their "
            f"difference and their sum, got for example {first[0]:g}, {first[1]:g} and {first[2]:g}°; are all three in "
            "degrees?"
        )


def _sample(plane: xr.DataArray) -> NDArray:
    """The values; of a lazy plane one block from its middle."""
    data = plane.data
    if hasattr(data, "dask"):
        data = data.blocks[tuple(count // 2 for count in data.numblocks)].compute()
    values: NDArray = np.asarray(data)
    return values


def _range(angles: NDArray) -> tuple[float, float]:
    """Smallest and largest of the finite angles; of a large plane, of every n-th (errors of unit show anywhere)."""
    flat = angles.reshape(-1)[:: max(1, angles.size // 65_536)]
    return float(np.fmin.reduce(flat, initial=np.inf)), float(np.fmax.reduce(flat, initial=-np.inf))
