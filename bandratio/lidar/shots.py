"""What a lidar channel says about each of its shots: net energy, transmitted energy, incidence."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .calibration import CHANNELS, LidarCalibration, LidarChannel
from .equation import live_fraction
from .returns import QUALITY

__all__ = ["check_units", "incidence_of", "net_energy", "own_geometry", "refuse_impossible", "transmitted_of"]


def transmitted_of(name: str, returns: xr.Dataset, channel: LidarChannel) -> xr.DataArray | float:
    """Transmitted energy of each shot where the returns hold it, else the channel's."""
    transmitted: xr.DataArray | float | None = returns.get(f"transmitted_{name}", channel.transmitted)
    if transmitted is None:
        raise ValueError(
            f"the transmitted energy of the {name} channel is not known; give its column transmitted_{name}, or "
            "LidarChannel(transmitted=…)"
        )
    return transmitted


def net_energy(
    energy: NDArray, quality: NDArray, background: NDArray | float, channel: LidarChannel
) -> tuple[NDArray, NDArray, NDArray]:
    """Energy freed from dead time and background, the live fraction, and the quality with saturation marked."""
    quality = np.array(np.broadcast_to(quality, np.shape(energy)))
    saturated = np.zeros(quality.shape, dtype=bool)
    live = np.ones(quality.shape)
    if channel.saturation is not None:
        saturated |= energy >= channel.saturation
    if channel.dead_time_s:
        live = live_fraction(energy / channel.energy_per_count, channel.dead_time_s, channel.gate_s)
        live = np.where(np.isnan(live), 1.0, live)  # no return, nothing to correct
        saturated |= live < channel.least_live
    quality[saturated] = QUALITY["saturated"]
    with np.errstate(divide="ignore", invalid="ignore"):
        full = energy / live
    return full if channel.background_subtracted else full - background, live, quality


def incidence_of(returns: xr.Dataset, given: Any) -> tuple[xr.DataArray, bool]:
    """Incidence of each shot [degree], and whether it is known."""
    like = returns["range_m"]
    if given is None:
        if "incidence_deg" in returns:
            return returns["incidence_deg"], True
        raise ValueError(
            "the returns hold no incidence_deg [degree]; give incidence_deg=… (0 for a level floor seen straight "
            'down), or incidence_deg="unknown"'
        )
    if isinstance(given, str):
        if given != "unknown":
            raise ValueError(f'incidence_deg must be angles in degrees or "unknown", got {given!r}')
        return xr.zeros_like(like), False
    if isinstance(given, xr.DataArray):
        return given, True
    array = np.asarray(given, dtype=float)
    if array.shape not in ((), like.shape):
        raise ValueError(
            f"incidence_deg must be one angle or one for each of {like.size} shots, got {array.shape}"
        )
    return xr.zeros_like(like) + array, True


def check_units(returns: xr.Dataset, calibration: LidarCalibration) -> None:
    """Refuse energies in another unit than the calibration holds for."""
    for channel in CHANNELS:
        unit = returns[channel].attrs.get("units", "")
        if unit and calibration.units and unit != calibration.units:
            raise ValueError(
                f"the {channel} energies are in {unit!r}, but the calibration holds for {calibration.units!r}; "
                "convert one of them"
            )


def refuse_impossible(range_m: NDArray, incidence: NDArray, transmitted: NDArray, name: str) -> None:
    """Refuse ranges, incidences and transmitted energies that cannot be."""
    if np.any(np.asarray(range_m) <= 0):
        raise ValueError(f"range_m must be positive, got {np.nanmin(range_m):g} m; NaN marks an unknown one")
    angles = np.asarray(incidence)
    if np.any((angles < 0) | (angles >= 90)):
        bad = angles[(angles < 0) | (angles >= 90)].flat[0]
        raise ValueError(
            f"incidence_deg must lie in [0, 90) degrees, got {bad:g}; a signed angle needs its absolute value"
        )
    if np.any(np.asarray(transmitted) <= 0):
        raise ValueError(
            f"transmitted_{name} must be positive, got {np.nanmin(transmitted):g}; NaN marks a shot where it is unknown"
        )


def own_geometry(returns: xr.Dataset, name: str, channel: str, of_shot: xr.DataArray) -> xr.DataArray:
    """The channel's own range or incidence where it has one, else the shot's."""
    own: xr.DataArray | None = returns.get(f"{name}_{channel}")
    return of_shot if own is None else own.fillna(of_shot)
