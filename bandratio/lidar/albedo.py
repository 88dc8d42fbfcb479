"""Return energy to albedo, with the parts of its uncertainty apart."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed, positive
from .calibration import CHANNELS, LidarCalibration, LidarChannel
from .equation import albedo_per_energy, return_variance, sigma_of_likely_count
from .returns import QUALITY, require_returns
from .shots import check_units, incidence_of, net_energy, own_geometry, refuse_impossible, transmitted_of

__all__ = [
    "albedo_from_returns",
    "check_units",
    "flag_arguments",
    "incidence_of",
    "net_energy",
    "transmitted_of",
]

_PARTS = {
    "": "albedo (reflectance factor at zero phase)",
    "_sigma": "standard uncertainty of the albedo, random and shared parts together",
    "_sigma_random": "standard uncertainty of the albedo, part that is new in each shot",
    "_sigma_shared": "standard uncertainty of the albedo, part that all shots share (calibration)",
    "_sigma_additive": "random standard uncertainty that does not scale with the albedo (counting, background, electronics)",
    "_sigma_common": "random standard uncertainty that moves both albedos of a shot together (range, incidence)",
    "_per_count": "albedo of one detected count, 0 where counting noise is not known",
    "_relative": "random error of this channel that scales with the albedo, as a fraction",
    "_limit": "least albedo that the receiver would have recorded",
    "_quality": "quality of the return",
}


def albedo_from_returns(
    returns: xr.Dataset,
    calibration: LidarCalibration,
    *,
    incidence_deg: Any = None,
    opposition_ratio: float = 1.0,
) -> xr.Dataset:
    """Albedo of each shot in both channels, by the lidar equation E_r = K E_t ρ cos i / R².

    Parameters
    ----------
    returns : Dataset
        As from `open_returns` or `as_returns`, with ``range_m`` [m]. Lazy returns give lazy albedos.
    calibration : LidarCalibration
        Receiver constants, noise and limits of both channels; `calibrate_lidar` estimates the constants.
    incidence_deg : float, array_like or "unknown", optional
        Angle between beam and surface normal [degree], where the returns do not hold it. ``"unknown"``: cos i is
        taken as 1, so that both albedos are too low by the same unknown factor, the ratio is right, and the result
        says so by holding no ``incidence_deg``.
    opposition_ratio : float
        How much more a lidar's zero phase brightens the surface at the red wavelength than at the infrared one, as
        against the laboratory's geometry: the red albedo is divided by it. Give it here or to `ice_flags`, not to
        both.

    Returns
    -------
    Dataset
        For each channel the albedo, NaN where there is none, and ``_sigma`` with its parts ``_sigma_random`` and
        ``_sigma_shared``. The random part is made of ``_sigma_additive``, which does not scale with the albedo,
        ``_sigma_common``, which moves both albedos of the shot by one factor, and ``_relative``, the fraction that
        scales with this albedo alone; ``_per_count`` is the albedo of one count; ``_limit`` is the albedo that the shot's dropout would lie below, NaN where
        the return is missing or saturated for another reason; ``_quality``; ``_live_fraction`` of a counter with a dead
        time, by which its counts were divided. ``covariance``: random covariance of the
        two albedos (range and incidence are one for both); ``covariance_shared``: that of the shared errors. Attributes: ``gain_sigma``, the shared error of the
        red over infrared gain [fraction].

    Raises
    ------
    ValueError
        If range, incidence or transmitted energy are not known or impossible, units differ from the calibration's, or
        the albedos cannot be any.

    Notes
    -----
    Eye safety of any laser follows IEC 60825-1, local rules and a licensed laser safety officer; no figure here is a
    safety assessment.

    Examples
    --------
    >>> import bandratio as br
    >>> returns = br.as_returns([160.0, 0.0], [269.0, 2.0], zero="dropout", range_m=[1e3, 1e3], incidence_deg=[0, 0])
    >>> channel = br.LidarChannel(constant=1.0, transmitted=1e9, energy_per_count=1, limit=3.0)
    >>> albedos = br.albedo_from_returns(returns, br.LidarCalibration(red=channel, infrared=channel))
    >>> albedos["red"].values.round(3).tolist(), albedos["red_limit"].values.round(4).tolist()
    ([0.16, nan], [0.003, 0.003])
    """
    require_returns(returns)
    if not isinstance(calibration, LidarCalibration):
        raise TypeError(f"calibration must be a LidarCalibration, got {type(calibration).__name__}")
    surge = positive("opposition_ratio", opposition_ratio)
    check_units(returns, calibration)
    if "range_m" not in returns:
        raise ValueError(
            "the returns hold no range_m [m]; name its column, or where energies are already normalised to one range "
            "say so with returns.assign(range_m=…)"
        )
    incidence, known = incidence_of(returns, incidence_deg)
    variables: dict[str, xr.DataArray] = {}
    for channel in CHANNELS:
        known_channel = getattr(calibration, channel)
        distance, tilt = (
            own_geometry(returns, name, channel, of_shot)
            for name, of_shot in (("range_m", returns["range_m"]), ("incidence_deg", incidence))
        )
        common = _common_relative(distance, tilt, calibration)
        surge_here = surge if channel == "red" else 1.0
        variables |= _channel(channel, returns, distance, tilt, common, known_channel, surge_here)
        if known_channel.dead_time_s:
            counts = returns[channel] / known_channel.energy_per_count
            variables[f"{channel}_live_fraction"] = (
                1 - counts * known_channel.dead_time_s / known_channel.gate_s
            ).assign_attrs(long_name=f"{channel}: share of the gate in which the counter was live", units="1")
    signs: xr.DataArray = np.sign(variables["red"] * variables["infrared"])  # type: ignore[assignment]
    covariance = signs * variables["red_sigma_common"] * variables["infrared_sigma_common"]
    variables["covariance"] = covariance.assign_attrs(
        long_name="random covariance of the red and the infrared albedo", units="1"
    )
    shared = variables["red_sigma_shared"] * variables["infrared_sigma_shared"] * calibration.correlation
    variables["covariance_shared"] = shared.assign_attrs(
        long_name="covariance of the red and the infrared albedo by the errors that all shots share",
        units="1",
    )
    if known:
        variables["incidence_deg"] = incidence.assign_attrs(long_name="incidence", units="degree")
    albedos = xr.Dataset(variables).assign_coords(
        {name: values for name, values in returns.coords.items() if name not in variables}
    )
    albedos.attrs = {
        "Conventions": "CF-1.11",
        "gain_sigma": calibration.gain_sigma,
        "gain_correlation": calibration.correlation,
        "opposition_ratio": surge,
        "incidence": "known"
        if known
        else "unknown; taken as 0, so both albedos may be too low by one factor",
        "source": calibration.source,
    }
    return albedos.assign_coords(quantity="zero_phase_albedo")


def flag_arguments(albedos: xr.Dataset) -> dict[str, Any]:
    """What `ice_flags` is to be given from albedos or a grid of them, by the names of its parameters.

    Parameters
    ----------
    albedos : Dataset
        As from `albedo_from_returns` or `grid_returns`.

    Returns
    -------
    dict
        ``red``, ``infrared``, ``sigma_red``, ``sigma_infrared`` (the additive and the common random part),
        ``relative_red``, ``relative_infrared``, ``covariance``, ``gain_sigma``, ``infrared_limit``, ``incidence_deg`` (NaN: unknown).

    Notes
    -----
    Counting noise of the infrared is not taken at the measured count, which is low just where ice-free ground looks
    like ice, but at the count five sigmas above it (`sigma_of_likely_count`): taken at the measured count, a precise
    red channel and ten infrared counts gave 240 times the nominal false alarms at 1e-5.

    Examples
    --------
    >>> import bandratio as br
    >>> returns = br.as_returns([160.0], [269.0], range_m=[1e3], incidence_deg=[0])
    >>> channel = br.LidarChannel(constant=1.0, transmitted=1e9, relative=0.03)
    >>> albedos = br.albedo_from_returns(returns, br.LidarCalibration(red=channel, infrared=channel))
    >>> float(flag_arguments(albedos)["relative_red"].values[0])
    0.03
    """
    names = ("", "_sigma_additive", "_sigma_common", "_per_count", "_relative")
    wanted = [*(f"{c}{part}" for c in CHANNELS for part in names), "covariance", "infrared_limit"]
    absent = [name for name in wanted if name not in albedos]
    if absent:
        raise ValueError(
            f"the albedos hold no {listed(absent)}; albedo_from_returns and grid_returns give what is needed"
        )
    # one missing or saturated channel has no sigma of its own; any number serves where there is no point to judge
    filled = albedos.fillna({name: 0.0 for name in wanted if name not in (*CHANNELS, "infrared_limit")})
    arguments: dict[str, Any] = {
        "infrared_limit": albedos["infrared_limit"],
        "covariance": filled["covariance"],
    }
    for name in CHANNELS:
        arguments[name] = albedos[name]
        additive = filled[f"{name}_sigma_additive"]
        if name == "infrared":
            additive = xr.apply_ufunc(
                sigma_of_likely_count,
                additive,
                filled[f"{name}_per_count"],
                dask="parallelized",
                output_dtypes=[float],
            )
        arguments[f"sigma_{name}"] = np.hypot(additive, filled[f"{name}_sigma_common"])
        arguments[f"relative_{name}"] = filled[f"{name}_relative"]
    arguments["gain_sigma"] = float(albedos.attrs.get("gain_sigma", 0))
    # unknown incidence is not the laboratory's: NaN asks for the hull of every incidence
    arguments["incidence_deg"] = albedos.get("incidence_deg", np.nan)
    return arguments


def _channel(
    name: str,
    returns: xr.Dataset,
    range_m: xr.DataArray,
    incidence: xr.DataArray,
    common: xr.DataArray,
    channel: LidarChannel,
    surge: float,
) -> dict[str, xr.DataArray]:
    transmitted = transmitted_of(name, returns, channel)

    # two pulses have their own range and incidence each: their errors are not common to both channels
    apart = "range_m_infrared" in returns

    def block(*given: Any) -> tuple[NDArray, ...]:
        return _one_channel(*given, channel=channel, name=name, apart=apart)

    results = xr.apply_ufunc(
        block,
        returns[name],
        returns[f"{name}_quality"],
        range_m,
        incidence,
        common,
        transmitted,
        returns.get(f"background_{name}", channel.background),
        returns.get(f"sigma_{name}", np.nan),
        output_core_dims=[[]] * len(_PARTS),
        dask="parallelized",
        output_dtypes=[float] * (len(_PARTS) - 1) + [np.int8],
    )
    made = {}
    for (part, text), result in zip(_PARTS.items(), results, strict=True):
        scaled = result if part in ("_relative", "_quality") else result / surge
        made[f"{name}{part}"] = scaled.assign_attrs(long_name=f"{name}: {text}", units="1")
    made[name].attrs["ancillary_variables"] = " ".join(f"{name}{part}" for part in _PARTS if part)
    made[f"{name}_quality"].attrs = dict(returns[f"{name}_quality"].attrs)
    return made


def _one_channel(
    energy: NDArray,
    quality: NDArray,
    range_m: NDArray,
    incidence: NDArray,
    common: NDArray,
    transmitted: NDArray,
    background: NDArray,
    stated: NDArray,
    *,
    channel: LidarChannel,
    name: str,
    apart: bool,
) -> tuple[NDArray, ...]:
    """Albedo and its parts, in the order of `_PARTS`, as arrays."""
    refuse_impossible(range_m, incidence, transmitted, name)
    net, live, quality = net_energy(energy, quality, background, channel)
    with np.errstate(invalid="ignore"):
        factor = albedo_per_energy(range_m, incidence, transmitted, channel.constant)
        variance = np.where(np.isnan(stated), _variance(net, background, live, channel), stated**2)
    if channel.limit is None:
        dropouts = int((quality == QUALITY["dropout"]).sum())
        if dropouts and name == "infrared":  # a missing red is no data whatever its limit
            raise ValueError(
                f"{dropouts} infrared returns are dropouts, but the infrared channel has no limit; give "
                "LidarChannel(limit=…), the least energy that it records, or zero='missing'"
            )
        limit = np.full(quality.shape, np.nan)
    else:
        below = channel.limit if channel.background_subtracted else np.maximum(channel.limit - background, 0)
        limit = np.where(quality <= QUALITY["dropout"], below * factor, np.nan)
        # a dropout has no energy of its own: its errors are those of a return at the limit
        at_limit = _variance(below, background, 1.0, channel)
        variance = np.where(quality == QUALITY["dropout"], at_limit, variance)
    used = quality == QUALITY["good"]
    albedo = np.where(used, net * factor, np.nan)
    _refuse_unbelievable(albedo, name)
    level = np.where(quality == QUALITY["dropout"], limit, albedo)
    both = 0 * level if apart else common * np.abs(level)
    per_count = np.where(np.isnan(stated), channel.energy_per_count, 0.0) * factor / live
    relative = np.broadcast_to(np.hypot(channel.relative, common if apart else 0.0), level.shape)
    additive = np.where(quality <= QUALITY["dropout"], np.sqrt(variance) * factor, np.nan)
    random = np.sqrt(additive**2 + both**2 + (relative * level) ** 2)
    shared = channel.constant_sigma / channel.constant * np.abs(level)
    total = np.sqrt(random**2 + shared**2)
    return albedo, total, random, shared, additive, both, per_count, relative, limit, quality.astype(np.int8)


def _variance(
    net: NDArray | float, background: NDArray, live: NDArray | float, channel: LidarChannel
) -> NDArray[np.float64]:
    return return_variance(
        net,
        background,
        energy_per_count=channel.energy_per_count,
        background_sigma=channel.background_sigma,
        read_noise=channel.read_noise,
        live=live,
    )


def _common_relative(
    range_m: xr.DataArray, incidence: xr.DataArray, calibration: LidarCalibration
) -> xr.DataArray:
    """Fraction by which errors of range and incidence move both albedos of one shot together."""
    tilt = np.radians(calibration.incidence_sigma_deg) * np.tan(np.radians(incidence))
    common: xr.DataArray = np.hypot(tilt, 2 * calibration.range_sigma_m / range_m)
    return common


def _refuse_unbelievable(albedo: NDArray, name: str) -> None:
    finite = albedo[np.isfinite(albedo)]
    if finite.size > 2 and np.median(np.abs(finite)) > 10:
        raise ValueError(
            f"the median {name} albedo would be {np.median(finite):.3g}, and no surface's is above about 1; check the "
            "units of energy, transmitted energy, range [m] and receiver constant [m²]"
        )
