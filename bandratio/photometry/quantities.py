"""Which reflectance is meant: bidirectional reflectance, I/F, BRDF, reflectance factor, and how they convert."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import listed, one_of
from ..cube import QUANTITIES, quantity_of, require_cube
from ..noise import brightness_factor_of
from .angles import LEAST_COSINE, angle_plane, cosine, refuse_radians

__all__ = ["convert_quantity", "per_bidirectional", "require_quantity"]

#: Quantities that are defined relative to the light that falls on the surface, hence divided by μ0.
_DIVIDED_BY_MU0 = ("brdf", "reflectance_factor")
#: Quantities relative to a perfect Lambert surface, hence multiplied by π.
_TIMES_PI = ("radiance_factor", "reflectance_factor")
_BRIGHTNESS = {"units": "1", "long_name": "what the reflectances were multiplied by since they were measured"}


def per_bidirectional(quantity: str, mu0: ArrayLike) -> NDArray:
    """Value of a quantity per bidirectional reflectance r, at one cosine of incidence.

    BRDF = r/μ0, radiance factor I/F = π·r, reflectance factor REFF = π·r/μ0.

    Parameters
    ----------
    quantity : str
        One of ``bidirectional_reflectance``, ``radiance_factor``, ``brdf``, ``reflectance_factor``.
    mu0 : array_like, any shape
        Cosine of the incidence angle [1].

    Returns
    -------
    ndarray, shape of `mu0`

    References
    ----------
    Hapke 2012, Theory of Reflectance and Emittance Spectroscopy, 2nd ed., ch. 10,
    doi:10.1017/CBO9781139025683.

    Examples
    --------
    >>> round(float(per_bidirectional("reflectance_factor", 0.5)), 6)
    6.283185
    """
    mu0 = np.asarray(mu0)
    factor = math.pi if quantity in _TIMES_PI else 1.0
    return factor / mu0 if quantity in _DIVIDED_BY_MU0 else np.full_like(mu0, factor, dtype=float)


def require_quantity(
    labelled: xr.DataArray | xr.Dataset, *wanted: str, what: str = "this computation"
) -> str:
    """Return which quantity a cube or its maps hold where it is among those `wanted`, else raise.

    Parameters
    ----------
    labelled : DataArray or Dataset
        A cube, or maps made from one.
    *wanted : str
        Quantities that serve; none: any that is known.
    what : str
        What needs it, for the message.

    Returns
    -------
    str

    Raises
    ------
    ValueError
        If the quantity is not known, or is another one.

    Examples
    --------
    >>> import bandratio as br
    >>> require_quantity(br.as_cube([0.2], [700], quantity="brdf"), "brdf")
    'brdf'
    """
    held = quantity_of(labelled)
    names = wanted or tuple(QUANTITIES)
    if held is None:
        raise ValueError(
            f"{what} needs to know which reflectance quantity this is ({listed(names)}), and it is not said; give "
            "quantity=… when opening the cube, or br.as_cube(cube, quantity=…)"
        )
    one_of("the cube's coordinate quantity", held, QUANTITIES)
    if held not in names:
        raise ValueError(
            f"{what} needs {listed(names)}, got {QUANTITIES[held][1]}; br.convert_quantity(cube, {names[0]!r}, "
            "incidence=…) converts it"
        )
    return held


def convert_quantity(
    cube: xr.DataArray, to: str, *, incidence: ArrayLike | xr.DataArray | None = None
) -> xr.DataArray:
    """Reflectances as another quantity, at the same geometry.

    Bidirectional reflectance r [1/sr], radiance factor I/F = π·r, BRDF = r/μ0 [1/sr], reflectance factor
    REFF = π·r/μ0, with μ0 the cosine of incidence. Laboratory spectra relative to a white standard are reflectance
    factors; spacecraft images are mostly radiance factors, which are smaller by μ0.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance that says which quantity it is (coordinate `quantity`).
    to : str
        Quantity that is wanted, one of ``bidirectional_reflectance``, ``radiance_factor``, ``brdf``,
        ``reflectance_factor``.
    incidence : float or array_like, shape of a band, optional
        Incidence angle [deg]; needed where just one of the two quantities is divided by μ0. A cube that carries the
        coordinate `incidence` (a normalised one does) needs none.

    Returns
    -------
    DataArray
        The same cube in the other quantity; lazy where `cube` is. NaN where μ0 is below 0.01. The coordinate
        `brightness_factor` [1] holds what its reflectances were multiplied by, this conversion included, since the cube
        came: ``Noise`` is stated for the cube as it came, and its errors count by it in the new quantity.

    Raises
    ------
    ValueError
        If the cube does not say which quantity it is, incidence is missing or not in degrees, or one of the two is
        ``zero_phase_albedo``: that is another geometry, which takes a phase function, not a definition.

    References
    ----------
    Hapke 2012, Theory of Reflectance and Emittance Spectroscopy, 2nd ed., ch. 10,
    doi:10.1017/CBO9781139025683.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube([0.05, 0.06], [600, 700], quantity="radiance_factor")
    >>> convert_quantity(cube, "reflectance_factor", incidence=60).values.round(3)
    array([0.1 , 0.12])
    """
    cube = require_cube(cube)
    one_of("to", to, QUANTITIES)
    held = require_quantity(cube, what="convert_quantity")
    if held == to:
        return cube
    if "zero_phase_albedo" in (held, to):
        other = to if held == "zero_phase_albedo" else held
        raise ValueError(
            f"zero_phase_albedo and {other} differ in geometry, not in definition: a surface is brighter at zero phase "
            "(opposition effect). Use br.normalise(cube, …, phase=…, phase_function=…) to bring a lidar albedo to the "
            "laboratory's geometry, or divide by a measured opposition ratio and say quantity='reflectance_factor'"
        )
    if (held in _DIVIDED_BY_MU0) != (to in _DIVIDED_BY_MU0):
        mu0 = _cosine_of_incidence(cube, incidence, held, to)
        factor: xr.DataArray | float = mu0 ** (1 if held in _DIVIDED_BY_MU0 else -1)
    else:
        factor = 1.0
    pi_power = (to in _TIMES_PI) - (held in _TIMES_PI)
    if pi_power:
        factor = factor * math.pi**pi_power
    if isinstance(factor, xr.DataArray):
        factor = factor.astype(cube.dtype)
    converted = (cube * factor).transpose(*cube.dims)
    converted.attrs = dict(cube.attrs)
    if "units" in converted.attrs:
        converted.attrs["units"] = QUANTITIES[to][0]
    factor = factor if isinstance(factor, xr.DataArray) else xr.DataArray(factor)
    return converted.assign_coords(quantity=to, brightness_factor=multiplied(cube, factor)).rename(cube.name)


def multiplied(cube: xr.DataArray, factor: xr.DataArray) -> xr.Variable:
    """The coordinate `brightness_factor` of a cube whose reflectances are multiplied once more."""
    # both lie on the cube's pixels, so there is nothing to align by coordinates
    product = factor.drop_vars(list(factor.coords))
    before = brightness_factor_of(cube)
    if isinstance(before, xr.DataArray):
        product = before.drop_vars(list(before.coords)) * product
    product = product.astype(np.float32, copy=False)
    order = [dim for dim in cube.dims if dim in product.dims]
    return product.transpose(*order).assign_attrs(_BRIGHTNESS).variable


def _cosine_of_incidence(
    cube: xr.DataArray, incidence: ArrayLike | xr.DataArray | None, held: str, to: str
) -> xr.DataArray:
    if incidence is None:
        if "incidence" not in cube.coords:
            raise ValueError(
                f"from {held} to {to} the cosine of incidence enters; give incidence=… in degrees, one number or one "
                "per pixel"
            )
        incidence = cube.coords["incidence"]
    plane = angle_plane("incidence", incidence, cube).reset_coords(drop=True)
    refuse_radians(incidence=plane)
    mu0: xr.DataArray = xr.apply_ufunc(cosine, plane, dask="parallelized", output_dtypes=[float])
    return mu0.where(mu0 >= LEAST_COSINE)
