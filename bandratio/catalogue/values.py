"""The values of the best known parameters as plain functions of a cube, with what they tell and their limits."""

from __future__ import annotations

from dataclasses import replace

import xarray as xr

from ..bands import TOLERANCE_NM
from ..cube import require_cube
from .definitions import flank_depth
from .lookup import named_ratio, picker

__all__ = ["mafic_depth", "red_slope", "reflectance_700", "uv_vis_slope"]


def _by_name(cube: xr.DataArray, name: str, tolerance: float) -> xr.DataArray:
    cube = require_cube(cube)
    return named_ratio(name, cube["wavelength"].values, tolerance=tolerance).value(cube, tolerance=tolerance)


def uv_vis_slope(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Normalised reflectivity gradient 480→600 nm [% per 100 nm].

    It depends on maturity, grain size and the content of opaques such as ilmenite (common practice, no source).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing.

    References
    ----------
    A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.12562, 0.15204], [480, 600])
    >>> round(float(br.uv_vis_slope(soil)), 2)
    15.86
    """
    return _by_name(cube, "uv_vis_slope", tolerance)


def red_slope(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Normalised reflectivity gradient 600→700 nm [% per 100 nm].

    Attenuated together with a high reflectance it marks candidate pyroclastic deposits of one family only:
    many deposits are dark, not bright (glass-rich and black-bead kinds), for which there is a rule of its own.

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing.

    References
    ----------
    A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.15204, 0.17002], [600, 700])
    >>> round(float(br.red_slope(soil)), 2)
    11.17
    """
    return _by_name(cube, "red_slope", tolerance)


def reflectance_700(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Reflectance at 700 nm [1].

    A higher value means less titanium and iron oxide, for mature soils of like grain size (common practice, no
    source).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between the nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If the band is missing.
    """
    return _by_name(cube, "reflectance_700", tolerance)


def mafic_depth(
    cube: xr.DataArray, *, shoulder: float | None = None, tolerance: float = TOLERANCE_NM
) -> xr.DataArray:
    """Depth of the 1 µm absorption's flank, ``1 − R830/R_shoulder`` [1].

    830 nm sits on the flank, so the depth depends on where the absorption is centred. Of the laboratory samples
    (USGS splib07a), olivine and low-calcium pyroxene stand clear of plagioclase (0.08–0.65 against at most
    0.02); augite and basalt are missed (−0.08 to 0.02).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    shoulder : float, optional
        750 or 700 [nm]; None takes the 750 nm band, or the 700 nm band where there is none. Depths from
        different shoulders must not be compared; the attribute `shoulder` says which it was.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing, or `shoulder` is neither 750 nor 700.

    References
    ----------
    Common practice, no source.
    """
    if shoulder is None:
        return _by_name(cube, "mafic_depth", tolerance)
    if shoulder not in (750, 700):
        raise ValueError(f"shoulder must be 750 or 700 nm, got {shoulder}")
    cube = require_cube(cube)
    ratio = flank_depth(picker(cube["wavelength"].values, tolerance), shoulder)
    return replace(ratio, name="mafic_depth").value(cube, tolerance=tolerance)
