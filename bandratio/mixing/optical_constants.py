"""Optical constants of water ice, and the albedo and reflectance of frost made of it."""

from __future__ import annotations

from functools import lru_cache
from importlib.resources import files

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .hapke import grain_albedo, reflectance_from_albedo

__all__ = ["ICE_DENSITY", "ice_albedo", "ice_constants", "ice_reflectance"]

#: Density of water ice Ih [g/cm³].
ICE_DENSITY = 0.917


@lru_cache(maxsize=1)
def _table() -> NDArray[np.float64]:
    text = (files("bandratio") / "data" / "water_ice_266k.csv").read_text(encoding="utf-8")
    rows = [
        line.split(",") for line in text.splitlines() if line and not line.startswith(("#", "wavelength"))
    ]
    return np.array(rows, dtype=float).T


def ice_constants(wavelength_nm: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Real and imaginary refractive index of water ice at 266 K.

    At the temperatures of shadowed lunar floors (below 110 K) the absorption near 1.5 µm is deeper and narrower
    than these constants say.

    Parameters
    ----------
    wavelength_nm : array_like
        Wavelength [nm], 400 to 1800.

    Returns
    -------
    n, k : ndarray, shape of `wavelength_nm`
        n interpolated linearly, k in its logarithm.

    Raises
    ------
    ValueError
        If a wavelength lies outside the table.

    References
    ----------
    Warren & Brandt 2008, J. Geophys. Res. 113, D14220, doi:10.1029/2007JD009744.

    Examples
    --------
    >>> n, k = ice_constants(1535)
    >>> f"{n:.3f} {k:.2e}"
    '1.291 4.68e-04'
    """
    table, n, k = _table()
    wavelength = np.asarray(wavelength_nm, dtype=float)
    if np.any(~((wavelength >= table[0]) & (wavelength <= table[-1]))):
        raise ValueError(
            f"the constants of ice here reach from {table[0]:g} to {table[-1]:g} nm, got "
            f"{np.nanmin(wavelength):g} to {np.nanmax(wavelength):g} nm; give wavelengths in nm within that range"
        )
    return np.interp(wavelength, table, n), np.exp(np.interp(wavelength, table, np.log(k)))


def ice_albedo(wavelength_nm: ArrayLike, grain_size_um: ArrayLike) -> NDArray[np.float64]:
    """Single-scattering albedo of ice grains.

    Parameters
    ----------
    wavelength_nm : array_like
        Wavelength [nm], 400 to 1800.
    grain_size_um : array_like, broadcastable with `wavelength_nm`
        Grain diameter [µm].

    Returns
    -------
    ndarray, broadcast shape

    Raises
    ------
    ValueError
        If a wavelength lies outside the table or a grain size is not above zero.

    Examples
    --------
    >>> ice_albedo(1535, [5, 50, 500]).round(3).tolist()
    [0.975, 0.789, 0.189]
    """
    n, k = ice_constants(wavelength_nm)
    return grain_albedo(n, k, wavelength_nm, grain_size_um)


def ice_reflectance(
    wavelength_nm: ArrayLike,
    grain_size_um: ArrayLike,
    incidence_deg: ArrayLike = 30.0,
    emission_deg: ArrayLike = 0.0,
) -> NDArray[np.float64]:
    """Reflectance factor of pure, deep frost of one grain size.

    Parameters
    ----------
    wavelength_nm, grain_size_um : array_like, broadcastable
        Wavelength [nm] and grain diameter [µm].
    incidence_deg, emission_deg : array_like, broadcastable
        Angles from the normal [degree].

    Returns
    -------
    ndarray, broadcast shape

    Examples
    --------
    >>> red, infrared = ice_reflectance([650, 1535], 100)
    >>> round(float(red / infrared), 1)
    6.4
    """
    return reflectance_from_albedo(ice_albedo(wavelength_nm, grain_size_um), incidence_deg, emission_deg)
