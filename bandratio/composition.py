"""Iron oxide, titanium oxide and optical maturity: smooth functions of two band ratios.

The formulas are array functions with the papers' own symbols. Their uncertainty uses the covariance of the two
ratios, which share the 750 nm band and the calibration's errors.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ._checks import non_negative, one_of, require_noise
from .bands import TOLERANCE_NM, nearest_bands
from .cube import quantity_of, require_cube
from .noise import Noise
from .ratio import BandRatio

__all__ = ["iron_oxide", "optical_maturity", "titanium_oxide"]

# Every formula gives its value and its derivatives by u = R750 and by v, the ratio of a second band to 750 nm.
Formula = Callable[[Any, Any], tuple[Any, Any, Any]]

#: Latitude to which the calibrations hold, where the cube knows its latitude [deg] (from memory).
LATITUDE_LIMIT = 70.0
_REASONS = ("valid", "missing", "below_origin", "out_of_range", "beyond_latitude")


def feo_lucey2000(R750: Any, R950_R750: Any) -> tuple[Any, Any, Any]:
    """FeO [wt%] by the angle about (0.08, 1.19), and its derivatives by R750 and by R950/R750.

    ``θ_Fe = −arctan[(R950/R750 − 1.19)/(R750 − 0.08)]``, ``FeO = 17.427·θ_Fe − 7.565`` (Lucey, Blewett & Jolliff
    2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117; constants from memory).
    """
    x, y = R750 - 0.08, R950_R750 - 1.19
    theta_Fe = -np.arctan(y / x)
    r2 = x**2 + y**2
    return 17.427 * theta_Fe - 7.565, 17.427 * y / r2, -17.427 * x / r2


def feo_wilcox2005(R750: Any, R950_R750: Any) -> tuple[Any, Any, Any]:
    """FeO [wt%] by a rotated axis, and its derivatives by R750 and by R950/R750.

    ``FeO = −137.97·(R750·sin θ + (R950/R750)·cos θ) + 57.46`` with θ = 1.3885 rad (Wilcox, Lucey & Gillis 2005,
    JGR 110, E11001, doi:10.1029/2005JE002512).
    """
    theta = 1.3885
    feo = -137.97 * (R750 * np.sin(theta) + R950_R750 * np.cos(theta)) + 57.46
    return feo, -137.97 * np.sin(theta) + 0 * R750, -137.97 * np.cos(theta) + 0 * R750


def tio2_lucey2000(R750: Any, R415_R750: Any) -> tuple[Any, Any, Any]:
    """TiO2 [wt%] by the angle about (0, 0.42), and its derivatives by R750 and by R415/R750.

    ``θ_Ti = arctan[(R415/R750 − 0.42)/(R750 − 0.0)]``, ``TiO2 = 3.708·θ_Ti^5.979`` (Lucey, Blewett & Jolliff 2000,
    JGR 105(E8), 20297, doi:10.1029/1999JE001117; constants from memory).
    """
    x, y = R750 - 0.0, R415_R750 - 0.42
    theta_Ti = np.arctan(y / x)
    r2 = x**2 + y**2
    slope = 3.708 * 5.979 * theta_Ti**4.979
    return 3.708 * theta_Ti**5.979, -slope * y / r2, slope * x / r2


def omat_lucey2000(R750: Any, R950_R750: Any) -> tuple[Any, Any, Any]:
    """Optical maturity [1], and its derivatives by R750 and by R950/R750.

    ``OMAT = √((R750 − 0.08)² + (R950/R750 − 1.19)²)`` (Lucey, Blewett, Taylor & Hawke 2000, JGR 105(E8), 20377,
    doi:10.1029/1999JE001110; from memory).
    """
    x, y = R750 - 0.08, R950_R750 - 1.19
    omat = np.sqrt(x**2 + y**2)
    r = np.maximum(omat, 1e-12)
    return omat, x / r, y / r


@dataclass(frozen=True)
class _Method:
    """A formula with the second band [nm], the origin of its angle, and where its calibration ends."""

    formula: Formula
    second: float
    least_750: float = 0.0
    least_ratio: float = -np.inf
    range: tuple[float, float] = (-np.inf, np.inf)
    source: str = ""


_IRON = {
    "lucey2000": _Method(
        feo_lucey2000,
        950,
        least_750=0.08,
        range=(0, 25),
        source="Lucey et al. 2000, doi:10.1029/1999JE001117",
    ),
    "wilcox2005": _Method(
        feo_wilcox2005, 950, range=(0, 25), source="Wilcox et al. 2005, doi:10.1029/2005JE002512"
    ),
}
_TITANIUM = _Method(
    tio2_lucey2000, 415, least_ratio=0.42, range=(0, 15), source="Lucey et al. 2000, doi:10.1029/1999JE001117"
)
_MATURITY = _Method(omat_lucey2000, 950, source="Lucey et al. 2000, doi:10.1029/1999JE001110")


def iron_oxide(
    cube: xr.DataArray,
    noise: Noise | None = None,
    method: str = "lucey2000",
    *,
    method_scatter: float = 1.0,
    tolerance: float = TOLERANCE_NM,
) -> xr.Dataset:
    """Iron oxide of mature and immature lunar soils, from 750 and 950 nm.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance factor at i = 30°, e = 0°, phase 30°; a lazy cube gives a lazy result.
    noise : Noise, optional
        What is known about the errors.
    method : {"lucey2000", "wilcox2005"}
        The angle about an origin, for all terrains; or the rotated axis, calibrated on maria.
    method_scatter : float
        Scatter of the method about the returned samples [wt%]; it is no part of ``feo_sigma``. About 1 wt% (common
        practice, from memory).
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    Dataset, dimensions of `cube` without `wavelength`
        ``feo`` [wt%]; with noise ``feo_sigma``, of the measurement alone; ``feo_method_scatter`` (one number);
        ``feo_reason``, why a value is missing (CF flags); ``feo_reason_count`` over `reason`, pixels of each.

    Raises
    ------
    ValueError
        If a band is missing, the method is unknown, or the cube says that it holds another reflectance quantity.

    Notes
    -----
    Limits of validity: the calibration stands on soils of the landing sites (about 4–18 wt%, from memory), at the
    laboratory geometry and away from the poles: where shading is strong, and beyond 70° latitude (from memory; used
    where the cube has a coordinate ``latitude`` [deg]), values follow the terrain, not the iron. With ``lucey2000``
    R750 must exceed the origin's 0.08, since the arctangent turns there. Results outside 0–25 wt% are no iron
    contents. Each becomes NaN with its reason.

    References
    ----------
    Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117. Wilcox, Lucey & Gillis 2005, JGR 110,
    E11001, doi:10.1029/2005JE002512.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.17715, 0.19390], [750, 950])
    >>> print(f"{float(br.iron_oxide(soil).feo):.2f}")
    5.97
    """
    chosen = _IRON[one_of("method", method, _IRON)]
    scatter = non_negative("method_scatter", method_scatter, "wt%")
    return _composed(cube, noise, chosen, "feo", "wt%", "iron oxide FeO", scatter, tolerance)


def titanium_oxide(
    cube: xr.DataArray,
    noise: Noise | None = None,
    *,
    method_scatter: float = 1.0,
    tolerance: float = TOLERANCE_NM,
) -> xr.Dataset:
    """Titanium oxide of mature lunar soils, from 415 and 750 nm.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance factor at i = 30°, e = 0°, phase 30°; a lazy cube gives a lazy result.
    noise : Noise, optional
        What is known about the errors.
    method_scatter : float
        Scatter of the method about the returned samples [wt%]; about 1 wt% (common practice, from memory).
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    Dataset, dimensions of `cube` without `wavelength`
        ``tio2`` [wt%], ``tio2_sigma``, ``tio2_method_scatter``, ``tio2_reason``, ``tio2_reason_count``, as
        :func:`iron_oxide` gives them.

    Raises
    ------
    ValueError
        If a band is missing, or the cube says that it holds another reflectance quantity.

    Notes
    -----
    Limits of validity: mature soils at the laboratory geometry, below 70° latitude (from memory). The angle is
    counted from R415/R750 = 0.42, where the arctangent turns negative and the power is not defined; there, at
    R750 ≤ 0, and above 15 wt% the result is NaN with its reason.

    References
    ----------
    Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.10796, 0.17715], [415, 750])
    >>> print(f"{float(br.titanium_oxide(soil).tio2):.2f}")
    1.12
    """
    scatter = non_negative("method_scatter", method_scatter, "wt%")
    return _composed(cube, noise, _TITANIUM, "tio2", "wt%", "titanium oxide TiO2", scatter, tolerance)


def optical_maturity(
    cube: xr.DataArray, noise: Noise | None = None, *, tolerance: float = TOLERANCE_NM
) -> xr.Dataset:
    """Optical maturity of lunar soils, from 750 and 950 nm: small for mature, large for fresh soil.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance factor at i = 30°, e = 0°, phase 30°; a lazy cube gives a lazy result.
    noise : Noise, optional
        What is known about the errors.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    Dataset, dimensions of `cube` without `wavelength`
        ``omat`` [1], ``omat_sigma``, ``omat_reason``, ``omat_reason_count``, as :func:`iron_oxide` gives them. It is
        an index and has no scatter of a method.

    Raises
    ------
    ValueError
        If a band is missing, or the cube says that it holds another reflectance quantity.

    Notes
    -----
    Limits of validity: the laboratory geometry, below 70° latitude (from memory).

    References
    ----------
    Lucey, Blewett, Taylor & Hawke 2000, JGR 105(E8), 20377, doi:10.1029/1999JE001110.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.17715, 0.19390], [750, 950])
    >>> print(f"{float(br.optical_maturity(soil).omat):.3f}")
    0.136
    """
    return _composed(cube, noise, _MATURITY, "omat", "1", "optical maturity", None, tolerance)


def _composed(
    cube: xr.DataArray,
    noise: Noise | None,
    method: _Method,
    name: str,
    units: str,
    long_name: str,
    scatter: float | None,
    tolerance: float,
) -> xr.Dataset:
    cube = require_cube(cube)
    require_noise(noise)
    quantity = quantity_of(cube)
    if quantity not in (None, "reflectance_factor"):
        raise ValueError(
            f"{long_name} is calibrated on the reflectance factor at i=30, e=0, and the cube holds {quantity}; convert "
            "it with convert_quantity and normalise"
        )
    centres = cube["wavelength"].values
    at_750, at_second = (float(centres[i]) for i in nearest_bands(centres, [750, method.second], tolerance))
    level = BandRatio({at_750: 1}, name="r750")
    ratio = BandRatio({at_second: 1}, {at_750: 1}, name="colour")
    u, v = level.value(cube), ratio.value(cube)
    reason = _reasons(method, cube, u, v, tolerance)
    inside = reason == 0
    value, by_u, by_v = method.formula(u.where(inside), v.where(inside))
    low, high = method.range
    out = inside & ((value < low) | (value > high))
    reason = reason.where(~out, _REASONS.index("out_of_range")).astype(np.int8)
    valid = reason == 0
    kind = cube.dtype
    result = {name: value.where(valid).astype(kind)}
    result[name].attrs = {"long_name": long_name, "units": units, "source": method.source}
    if noise is not None:
        c_uu, c_uv, c_vv = _covariances(cube, level, ratio, noise)
        variance = by_u**2 * c_uu + 2 * by_u * by_v * c_uv + by_v**2 * c_vv
        result[f"{name}_sigma"] = np.sqrt(variance.clip(min=0)).where(valid).astype(kind)
        result[f"{name}_sigma"].attrs = {
            "long_name": f"standard uncertainty of {long_name}, of the measurement alone",
            "units": units,
        }
        result[name].attrs["ancillary_variables"] = f"{name}_sigma"
    if scatter is not None:
        result[f"{name}_method_scatter"] = xr.DataArray(
            scatter,
            attrs={"long_name": f"scatter of the method about returned samples, {long_name}", "units": units},
        )
    reason.attrs = {
        "long_name": f"why {long_name} is missing",
        "flag_values": np.arange(len(_REASONS), dtype=np.int8),
        "flag_meanings": " ".join(_REASONS),
    }
    result[f"{name}_reason"] = reason
    result[f"{name}_reason_count"] = xr.concat(
        [(reason == code).sum() for code in range(len(_REASONS))], dim="reason"
    ).assign_coords(reason=list(_REASONS))
    maps = xr.Dataset({key: each.drop_vars("fwhm", errors="ignore") for key, each in result.items()})
    from . import __version__

    centres = np.asarray(cube["wavelength"].values, dtype=float)
    maps.attrs = {
        "Conventions": "CF-1.11",
        "bandratio_version": __version__,
        "wavelengths": ", ".join(f"{centre:g}" for centre in centres) + " nm",
        "noise": noise.describe() if noise is not None else "none given",
    }
    return maps


def _reasons(
    method: _Method, cube: xr.DataArray, u: xr.DataArray, v: xr.DataArray, tolerance: float
) -> xr.DataArray:
    """Why a pixel has no value, before the formula is used; 0 where it may have one."""
    reason = xr.zeros_like(u, dtype=np.int8).drop_attrs()
    latitude = cube.coords.get("latitude")
    if latitude is not None:
        reason = reason.where(np.abs(latitude) <= LATITUDE_LIMIT, _REASONS.index("beyond_latitude"))
    below = (u <= method.least_750) | (v <= method.least_ratio)
    reason = reason.where(~below, _REASONS.index("below_origin"))
    bands = cube.isel(wavelength=nearest_bands(cube["wavelength"].values, [750, method.second], tolerance))
    reason = reason.where(bands.notnull().all("wavelength"), _REASONS.index("missing"))
    return reason.transpose(*u.dims).astype(np.int8)


def _covariances(
    cube: xr.DataArray, first: BandRatio, second: BandRatio, noise: Noise
) -> tuple[xr.DataArray, xr.DataArray, xr.DataArray]:
    """Variances and covariance of two band ratios under every part of the noise.

    ``cov(p, q) = Σ_j g_j h_j var_j + (common_gain² + pixel_gain²)·(Σ g_j R_j)(Σ h_j R_j)``, with g and h the two
    gradients.
    """
    used: NDArray[np.bool_] = np.zeros(cube.sizes["wavelength"], dtype=bool)
    for ratio in (first, second):
        used |= np.any(ratio.weights_for(cube["wavelength"].values), axis=0)
    band = noise.for_cube(cube)
    R = cube.astype(float)
    var = (band.random_variance(R) + band.shared_variance(R)).isel(wavelength=used)
    R = R.isel(wavelength=used)
    g, h = (ratio.gradient(cube).isel(wavelength=used) for ratio in (first, second))
    along_g, along_h = ((each * R).sum("wavelength", skipna=False) for each in (g, h))
    if second.is_pure:
        along_h = xr.zeros_like(along_h)  # a common gain cancels exactly in a pure ratio
    c2 = band.common_gain**2 + band.pixel_gain**2

    def covariance(a: xr.DataArray, b: xr.DataArray, along: xr.DataArray) -> xr.DataArray:
        return (a * b * var).sum("wavelength", skipna=False) + c2 * along

    return (
        covariance(g, g, along_g**2),
        covariance(g, h, along_g * along_h),
        covariance(h, h, along_h**2),
    )
