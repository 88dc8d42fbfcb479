"""Candidate ice in a scene of shots or pixels, with a known false discovery rate."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from .._checks import non_negative, one_of, open_fraction, positive
from .decision import FLAG_MEANINGS, Decision
from .judging import judged_scene
from .materials import MaterialChoice, ice_free_ground, ice_materials
from .scene import Scene

__all__ = ["FLAG_MEANINGS", "ice_flags"]

#: Wavelengths of the two lasers where nothing says otherwise [nm] (common practice, no source).
RED_NM, INFRARED_NM = 640.0, 1535.0

#: What a flag is worth; stands wherever a user meets one.
CAUTION = (
    "A flag is an indicator to follow up, never proof of ice. With errors shared by all shots the false discovery "
    "rate holds on average over calibrations, not within one scene."
)


def ice_flags(
    red: ArrayLike | xr.DataArray,
    infrared: ArrayLike | xr.DataArray,
    sigma_red: ArrayLike | xr.DataArray,
    sigma_infrared: ArrayLike | xr.DataArray,
    *,
    covariance: ArrayLike | xr.DataArray = 0.0,
    relative_red: ArrayLike | xr.DataArray = 0.0,
    relative_infrared: ArrayLike | xr.DataArray = 0.0,
    gain_sigma: float = 0.0,
    ice_free: MaterialChoice = None,
    ice_free_ratio: float | None = None,
    ice_free_sigma: float = 0.0,
    ice: MaterialChoice = None,
    opposition_ratio: float = 1.0,
    incidence_deg: ArrayLike | xr.DataArray | None = None,
    infrared_limit: ArrayLike | xr.DataArray | None = None,
    red_nm: float | None = None,
    infrared_nm: float | None = None,
    false_discovery_rate: float = 0.05,
    dependence: str = "positive",
    least_fraction: float = 0.1,
    confidence: float = 0.95,
) -> xr.Dataset:
    """Flag candidate ice by the albedos at two wavelengths, with a known false discovery rate.

    A shot is a candidate where it lies further outside the hull of everything that the ice-free ground can look
    like than its errors explain, on the side of ice (bright in the red, dark in the infrared). The flags are
    indicators to follow up, never proof of ice.

    Parameters
    ----------
    red, infrared : array_like or DataArray, any shape
        Albedos (reflectance factors) at the two wavelengths: lidar shots, or two bands of a cube normalised to the
        laboratory's geometry. NaN is missing. numpy or dask; of dask arrays the result is lazy again, after one
        streamed pass that finds the cut.
    sigma_red, sigma_infrared : array_like or DataArray, broadcastable
        Standard uncertainties of each shot's own, in albedo.
    covariance : array_like or DataArray, broadcastable
        Covariance of the two, in albedo squared.
    relative_red, relative_infrared : array_like or DataArray, broadcastable
        Standard uncertainties of each shot's own, as a fraction of the albedo; they are taken at the null point, not
        at the measured albedo, where they would be too small exactly where it matters.
    gain_sigma : float
        Standard uncertainty of the red/infrared gain, as a fraction; shared by all shots.
    ice_free : None, str, list of str, mapping, array_like or DataArray, optional
        What the ice-free ground is made of. The false discovery rate holds only where the list holds the ground; where
        more than a twentieth of all points are candidates, the attribute ``finding`` says so. None is any rock: safe, and
        blind to little ice. ``"mare"``,
        ``"highland"``, groups or samples of `reference_spectra`; albedos [red, infrared] at the laboratory's geometry,
        shape (material, 2), or a mapping from names to pairs; a library of spectra (sample, wavelength).
    ice_free_ratio : float, optional
        Highest ratio red/infrared of ice-free ground, for returns that are not calibrated to albedo: the plain ratio
        test. Excludes `ice_free`.
    ice_free_sigma : float
        Standard uncertainty of the ice-free materials' ratio red/infrared, as a fraction; shared by all shots.
    ice : None, str, list of str, mapping, array_like or DataArray, optional
        What ice there may be. None: snow, slush and frost of 5–500 µm. See `bandratio.ice.ice_materials`.
    opposition_ratio : float
        How much more the surface brightens from the laboratory's 30° of phase to the lidar's zero phase in the red
        than in the infrared; the red albedo is divided by it.
    incidence_deg : float, array_like or DataArray, optional
        Incidence of each shot [degree], 0 to 80; a lidar looks along it. NaN is unknown: the hull of every incidence.
        None: the albedos are at the laboratory's geometry.
    infrared_limit : float, array_like or DataArray, optional
        Least infrared albedo that the receiver sees. Where the infrared is missing or below it, the shot is a dropout:
        its albedo lies between zero and the limit. None: missing infrared is missing.
    red_nm, infrared_nm : float, optional
        Wavelengths [nm]; else from the arrays' coordinate ``wavelength``, else 640 and 1535.
    false_discovery_rate : float
        Expected share of false ones among the candidates, at most.
    dependence : {"positive", "any"}
        Benjamini & Hochberg's rule, or Benjamini & Yekutieli's, which holds for p-values of any dependence.
    least_fraction : float
        Ground is `ice_free` where less than this areal fraction of ice is possible.
    confidence : float
        One-sided, of the bounds of the fraction; two-sided, of the ratio's interval that an opaque is told by.

    Returns
    -------
    Dataset, shape of `red`
        ``ratio`` red/infrared [1], at the laboratory's phase angle (of a dropout the least it can be);
        ``outside_sigma`` distance outside the ice-free hull [sigma], 0 inside; ``p_value``; ``q_value``, the least
        false discovery rate at which the shot is a candidate; ``fraction_lower`` and ``fraction_upper``, bounds of the
        areal fraction of ice [1]; ``flag``, by `flag_meanings`. The attributes name the ground and ice lists and the
        least areal ice that can be seen at the median noise.

    Raises
    ------
    ValueError
        If an error is negative, a material unknown or at odds with others, shapes differ, or an option is out of range.

    Notes
    -----
    First that applies: ``no_data`` (red missing, or infrared missing with no limit); ``unexplained`` (outside all that
    listed ground and ice can be: the ground list is incomplete; its p is set to 1 before the false discovery rule);
    ``ice_candidate``; ``opaque_like`` (red surely below 0.1, ratio's interval overlaps 0.75–1.15); ``ice_free``
    (fraction_upper below `least_fraction`); ``undecided``.

    Errors shared by all shots (`gain_sigma`, `ice_free_sigma`) are part of each p-value; with them the false
    discovery rate holds on average over calibrations, not within one scene.

    References
    ----------
    Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289, doi:10.1111/j.2517-6161.1995.tb02031.x; Benjamini &
    Yekutieli 2001, Ann. Stat. 29, 1165, doi:10.1214/aos/1013699998; Naiman 1986, Ann. Stat. 14, 896,
    doi:10.1214/aos/1176350046; Hapke 2002, Icarus 157, 523, doi:10.1006/icar.2002.6853; Warren & Brandt 2008,
    J. Geophys. Res. 113, D14220, doi:10.1029/2007JD009744.

    Examples
    --------
    >>> import bandratio as br
    >>> flags = br.ice_flags([0.16, 0.055, 0.25], [0.27, 0.060, 0.19], 0.002, 0.002, relative_red=0.03,
    ...                      relative_infrared=0.03, ice_free=["Soil 62231", "Ilmenite HS231.3B"])
    >>> [flags.flag.flag_meanings.split()[value] for value in flags.flag.values]
    ['ice_free', 'opaque_like', 'ice_candidate']
    """
    if ice_free is not None and ice_free_ratio is not None:
        raise ValueError("give either ice_free=… (albedos) or ice_free_ratio=… (one ratio), not both")
    rate = open_fraction("false_discovery_rate", false_discovery_rate)
    one_of("dependence", dependence, ("positive", "any"))
    shared = float(
        np.hypot(non_negative("gain_sigma", gain_sigma), non_negative("ice_free_sigma", ice_free_sigma))
    )
    wavelengths = (
        laser_wavelength("red", red, red_nm, RED_NM),
        laser_wavelength("infrared", infrared, infrared_nm, INFRARED_NM),
    )
    decision = Decision(
        ground=(
            ice_free_ground(ice_free, wavelengths)
            if ice_free_ratio is None
            else positive("ice_free_ratio", ice_free_ratio)
        ),
        ice=ice_materials(ice, wavelengths),
        by_incidence=incidence_deg is not None,
        least_fraction=open_fraction("least_fraction", least_fraction),
        confidence=open_fraction("confidence", confidence),
    )
    opposition = positive("opposition_ratio", opposition_ratio)
    if ice_free_ratio is None:
        _refuse_counts(red)
    scene = Scene.of(
        {
            "red": red,
            "infrared": infrared,
            "sigma_red": sigma_red,
            "sigma_infrared": sigma_infrared,
            "covariance": covariance,
            "relative_red": relative_red,
            "relative_infrared": relative_infrared,
            "incidence_deg": np.nan if incidence_deg is None else incidence_deg,
            "infrared_limit": np.nan if infrared_limit is None else infrared_limit,
        },
        gain_sigma=shared,
        opposition_ratio=opposition,
    )
    flags = judged_scene(scene, decision, rate, dependence)
    flags.attrs |= {
        "red_nm": wavelengths[0],
        "infrared_nm": wavelengths[1],
        "false_discovery_rate": rate,
        "dependence": dependence,
        "least_fraction": decision.least_fraction,
        "confidence": decision.confidence,
        "gain_sigma": gain_sigma,
        "ice_free_sigma": ice_free_sigma,
        "opposition_ratio": opposition,
        "geometry": "laboratory (30°, 0°)" if incidence_deg is None else "lidar, each shot's incidence",
        "caution": CAUTION,
    }
    return flags


def _refuse_counts(red: Any) -> None:
    """Refuse numbers that can be no albedos; lazy ones are not looked at."""
    data = red.data if isinstance(red, xr.DataArray) else red
    if hasattr(data, "dask"):
        return
    values = np.asarray(data)
    if values.dtype.kind not in "fiu":
        return  # what is no number at all is told where it is labelled
    middle = float(np.median(values[np.isfinite(values)])) if np.isfinite(values).any() else 0.0
    if middle > 2:
        raise ValueError(
            f"red must be an albedo, a fraction, but half of the values are above {middle:g}: are they counts or "
            "percent? Use albedo_from_returns, or ice_free_ratio=… for returns that are not calibrated"
        )


def laser_wavelength(name: str, values: Any, given: float | None, usual: float) -> float:
    """Wavelength [nm]: the given one, the array's own, or the usual one; refuses quantities that are no albedo."""
    if isinstance(values, xr.DataArray):
        quantity = str(values.coords["quantity"].item()) if "quantity" in values.coords else ""
        if quantity and quantity not in ("reflectance_factor", "zero_phase_albedo"):
            raise ValueError(
                f"{name} must be a reflectance factor or a zero-phase albedo, got {quantity}; "
                "convert it with convert_quantity"
            )
        if given is None and "wavelength" in values.coords and values.coords["wavelength"].ndim == 0:
            given = float(values.coords["wavelength"])
    return usual if given is None else positive(f"{name}_nm", given, "nm")
