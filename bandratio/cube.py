"""What a calibrated cube is; build one and find its bands."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from ._checks import listed
from .bands import TOLERANCE_NM, nearest_band, wavelength_array

__all__ = ["QUANTITIES", "as_cube", "band_indices", "is_lazy", "quantity_of", "require_cube"]

#: The reflectance quantities a cube may hold (Hapke, Theory of Reflectance and Emittance Spectroscopy,
#: 2nd ed. 2012, ch. 10; from memory), with unit and readable name.
QUANTITIES = {
    "reflectance_factor": ("1", "reflectance factor (REFF)"),
    "radiance_factor": ("1", "radiance factor (I/F)"),
    "bidirectional_reflectance": ("sr-1", "bidirectional reflectance"),
    "brdf": ("sr-1", "bidirectional reflectance distribution function (BRDF)"),
    "zero_phase_albedo": ("1", "reflectance factor at zero phase, as a lidar sees it"),
}


def as_cube(
    array: ArrayLike | xr.DataArray,
    wavelengths: ArrayLike | None = None,
    fwhm: ArrayLike | None = None,
    *,
    quantity: str | None = None,
) -> xr.DataArray:
    """Put labels on reflectances: a cube from an array and its band centres.

    Parameters
    ----------
    array : array_like or DataArray, shape (band, …)
        Reflectance as a fraction. A DataArray keeps its coordinates and map projection; its band dimension
        is `wavelength` or `band`, else the first.
    wavelengths : array_like, shape (band,)
        Band centres [nm]; may be left out where a DataArray has them as the coordinate `wavelength`.
    fwhm : array_like, shape (band,), optional
        Full widths at half maximum [nm].
    quantity : str, optional
        Which reflectance quantity it is, one of `QUANTITIES`.

    Returns
    -------
    DataArray of float
        Dimensions (wavelength, y, x), (wavelength, sample) or (wavelength,). Integers become float32; float32
        and float64 stay.

    Raises
    ------
    ValueError, TypeError
        If the numbers of bands and wavelengths differ, wavelengths look like micrometres, the array is not
        numeric, or the quantity is unknown.

    Examples
    --------
    >>> import bandratio as br
    >>> br.as_cube([[0.1, 0.2], [0.15, 0.3]], [600, 700]).dims
    ('wavelength', 'sample')
    """
    cube = array if isinstance(array, xr.DataArray) else _labelled(array)
    if "wavelength" not in cube.dims:
        band = "band" if "band" in cube.dims else cube.dims[0]
        if "wavelength" in cube.coords and cube["wavelength"].dims == (band,):
            cube = cube.swap_dims({band: "wavelength"}).drop_vars("band", errors="ignore")
        else:
            # a coordinate `band` counts the bands 1, 2, 3 …; renamed, it would be taken for wavelengths
            cube = cube.drop_vars(["band", "wavelength"], errors="ignore").rename({band: "wavelength"})
    if cube.dtype.kind not in "fiub":
        raise TypeError(f"reflectance must be real numbers, got {cube.dtype}")
    cube = _computable(cube)
    if wavelengths is None:
        if "wavelength" not in cube.coords:
            raise ValueError("the array has no wavelengths; give wavelengths=[…] in nm, one for each band")
        wavelengths = cube["wavelength"].values
    centres = wavelength_array(wavelengths)
    if centres.size != cube.sizes["wavelength"]:
        raise ValueError(
            f"wavelengths has {centres.size} values ({listed(centres.tolist(), 'nm')}), but the array has "
            f"{cube.sizes['wavelength']} bands (shape {tuple(cube.shape)}); give one for each band"
        )
    cube = cube.assign_coords(wavelength=("wavelength", centres, {**_WAVELENGTH}))
    if fwhm is not None:
        widths = _band_widths(fwhm, centres.size)
        cube = cube.assign_coords(fwhm=("wavelength", widths, {**_FWHM}))
    if quantity is not None:
        if quantity not in QUANTITIES:
            known = "; ".join(f"{word}: {readable}" for word, (_, readable) in QUANTITIES.items())
            raise ValueError(f"unknown quantity {quantity!r}; give one of these words: {known}")
        cube = cube.assign_coords(quantity=quantity)
    return cube.transpose("wavelength", ...).rename(cube.name or "reflectance")


_WAVELENGTH = {"units": "nm", "standard_name": "radiation_wavelength", "long_name": "band centre"}
_FWHM = {"units": "nm", "long_name": "full width at half maximum"}


def _computable(cube: xr.DataArray) -> xr.DataArray:
    # the compiled loop knows float32 and float64 in this machine's byte order
    if cube.dtype in (np.float32, np.float64) and cube.dtype.isnative:
        return cube
    wide = cube.dtype.kind == "f" and cube.dtype.itemsize >= 8
    return cube.astype(np.float64 if wide else np.float32)


def _labelled(array: Any) -> xr.DataArray:
    # dask arrays and other duck arrays are kept as they are
    data = array if hasattr(array, "dtype") and hasattr(array, "shape") else np.asarray(array)
    names: dict[int, tuple[str, ...]] = {
        1: ("wavelength",),
        2: ("wavelength", "sample"),
        3: ("wavelength", "y", "x"),
    }
    if data.ndim not in names:
        raise ValueError(
            f"an array of shape {tuple(data.shape)} is no cube; wanted (band,), (band, sample) or (band, y, x), or a "
            "DataArray with named dimensions"
        )
    # named here, since a dask array would give the cube the name of its task
    return xr.DataArray(data, dims=names[data.ndim], name="reflectance")


def _band_widths(values: ArrayLike, bands: int) -> np.ndarray:
    """Band widths as an array of float [nm], checked; one number serves for all bands."""
    try:
        widths = np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(f"fwhm must be numbers in nm, got {values!r}") from None
    if widths.ndim == 0:
        widths = np.full(bands, float(widths))
    if widths.shape != (bands,):
        raise ValueError(
            f"fwhm must hold one width in nm for each of {bands} bands, got shape {widths.shape}"
        )
    if not (np.isfinite(widths).all() and (widths > 0).all()):
        raise ValueError(f"fwhm must be positive and finite, got {listed(widths.tolist(), 'nm')}")
    return widths


def require_cube(cube: xr.DataArray) -> xr.DataArray:
    """Return `cube` where it is one, `wavelength` first, native float32 or float64; else raise what was wanted."""
    if not isinstance(cube, xr.DataArray):
        hint = "; pick one of its variables" if isinstance(cube, xr.Dataset) else "; br.as_cube makes one"
        raise TypeError(
            f"a cube must be a DataArray of reflectance with a wavelength dimension, got "
            f"{type(cube).__name__}{hint}"
        )
    if "wavelength" not in cube.dims or "wavelength" not in cube.coords:
        raise ValueError(
            f"a cube needs a wavelength dimension with its band centres in nm, got dimensions {cube.dims}; "
            "br.as_cube(array, wavelengths) puts it on"
        )
    wavelength_array(cube["wavelength"].values, "the cube's wavelengths")
    if cube.dtype.kind != "f":
        raise TypeError(f"a cube holds reflectance as float, got {cube.dtype}; br.as_cube converts it")
    return _computable(cube.transpose("wavelength", ...))


def band_indices(cube: xr.DataArray, wanted: Sequence[float], tolerance: float = TOLERANCE_NM) -> list[int]:
    """Index of the band nearest to each nominal wavelength [nm].

    Raises
    ------
    ValueError
        If none lies within `tolerance`: the message names the wavelength and the bands there are.
    """
    centres = require_cube(cube)["wavelength"].values
    return [nearest_band(centres, wavelength, tolerance) for wavelength in wanted]


def is_lazy(cube: xr.DataArray) -> bool:
    """True where the values are still to be computed (a dask array)."""
    return cube.chunks is not None


def quantity_of(labelled: xr.DataArray | xr.Dataset) -> str | None:
    """Which reflectance quantity it holds, None where that is not known."""
    if "quantity" not in labelled.coords:
        return None
    return str(labelled.coords["quantity"].values)
