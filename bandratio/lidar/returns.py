"""What lidar returns are: the energies of two channels for each shot, and what is known about the shot."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray as xr

from .._checks import listed, one_of, suggestion
from .calibration import CHANNELS

__all__ = ["QUALITY", "SHOT_UNITS", "as_returns", "require_returns"]

#: Values and meanings of a channel's quality flag.
QUALITY = {"good": 0, "dropout": 1, "saturated": 2, "missing": 3}
#: What may be known about a shot besides its energies, with the unit it is kept in.
SHOT_UNITS = {
    "x": "", "y": "", "z": "m", "time": "", "range_m": "m", "incidence_deg": "degree",
    "range_m_infrared": "m", "incidence_deg_infrared": "degree",
    "transmitted_red": "energy", "transmitted_infrared": "energy",
    "background_red": "energy", "background_infrared": "energy",
    "sigma_red": "energy", "sigma_infrared": "energy",
}  # fmt: skip
_NAMES = {
    "x": "x", "y": "y", "z": "elevation", "time": "time", "range_m": "range", "incidence_deg": "incidence",
    "range_m_infrared": "range of the infrared pulse", "incidence_deg_infrared": "incidence of the infrared pulse",
    "transmitted_red": "transmitted energy, red", "transmitted_infrared": "transmitted energy, infrared",
    "background_red": "background energy, red", "background_infrared": "background energy, infrared",
    "sigma_red": "random standard uncertainty of the red energy",
    "sigma_infrared": "random standard uncertainty of the infrared energy",
}  # fmt: skip
_COORDS = ("x", "y", "z", "time")
_ZERO = ("dropout", "missing")


def as_returns(
    red: Any,
    infrared: Any,
    *,
    zero: str | Mapping[str, str] | None = None,
    saturated: float | Mapping[str, Any] | None = None,
    units: str = "",
    crs: Any = None,
    **shot: Any,
) -> xr.Dataset:
    """Put labels on lidar returns: a Dataset over `shot` from two arrays of energies.

    Parameters
    ----------
    red, infrared : array_like, shape (shot,)
        Return energies (or counts); NaN where none is recorded. Lazy arrays stay lazy.
    zero : {"dropout", "missing"}, optional
        What a stored zero means: ``dropout``, the return lay below the receiver's limit; ``missing``, none was
        recorded. A mapping ``{"red": …, "infrared": …}`` says it for each channel. It cannot be guessed, and is asked
        for where there are zeros.
    saturated : float or mapping, optional
        Energy from which on a value is saturated, or ``{"red": …, "infrared": …}`` with an energy or an array of
        bool for each channel.
    units : str
        Unit of the energies.
    crs : any
        Map projection of `x` and `y`, in any form that rasterio takes.
    **shot : array_like, shape (shot,)
        What else is known about each shot: ``x``, ``y`` [unit of the projection], ``z`` [m], ``time``, ``range_m``
        [m], ``incidence_deg`` [degree] (and ``…_infrared`` where that laser's pulse has its own), and for each channel
        ``transmitted_…``, ``background_…``, ``sigma_…`` [unit
        of the energies].

    Returns
    -------
    Dataset
        ``red``, ``infrared``: energies, NaN where there is none or it is saturated; ``red_quality``,
        ``infrared_quality``: flags good, dropout, saturated, missing; and what else was given.

    Raises
    ------
    ValueError, TypeError
        If there are zeros and `zero` is not given, shapes differ, a word is unknown, a range is not positive, or an
        incidence is not in [0, 90) degrees.

    Examples
    --------
    >>> returns = as_returns([12.0, 15.0], [20.0, 0.0], zero="dropout", units="count", incidence_deg=[0.0, 3.0])
    >>> returns["infrared_quality"].values.tolist()
    [0, 1]
    """
    for name in shot:
        if name not in SHOT_UNITS:
            raise TypeError(f"returns have no {name!r}{suggestion(name, SHOT_UNITS)}")
    arrays = {"red": _column("red", red), "infrared": _column("infrared", infrared)}
    length = arrays["red"].shape[0]
    arrays |= {name: _column(name, values) for name, values in shot.items() if values is not None}
    for name, array in arrays.items():
        if array.shape[0] != length:
            raise ValueError(
                f"red has {length} shots, but {name} has {array.shape[0]}; give one value for each shot"
            )
    meaning = _per_channel("zero", zero)
    limit = _per_channel("saturated", saturated)
    variables: dict[str, Any] = {}
    for channel in CHANNELS:
        if meaning[channel] is not None:
            one_of(f"zero of {channel}", meaning[channel], _ZERO)
        flags = limit[channel]
        if flags is not None and np.ndim(flags) > 0:
            flags = _flags(channel, flags, length)
        energy, quality = _judged(channel, arrays[channel], meaning[channel], flags)
        attrs = {
            "long_name": f"return energy, {channel}",
            "units": units,
            "ancillary_variables": f"{channel}_quality",
        }
        variables[channel] = ("shot", energy, attrs)
        variables[f"{channel}_quality"] = ("shot", quality, _quality_attrs(channel))
    coords: dict[str, Any] = {}
    for name, array in arrays.items():
        if name in CHANNELS:
            continue
        _refuse_impossible(name, array)
        unit = units if SHOT_UNITS[name] == "energy" else SHOT_UNITS[name]
        entry = ("shot", array, {"long_name": _NAMES[name], **({"units": unit} if unit else {})})
        (coords if name in _COORDS else variables)[name] = entry
    returns = xr.Dataset(variables, coords, {"Conventions": "CF-1.11"})
    for channel in CHANNELS:
        if meaning[channel] is not None:
            returns[channel].attrs["stored_zero"] = meaning[channel]
    return returns if crs is None else _projected(returns, crs)


def require_returns(returns: xr.Dataset) -> xr.Dataset:
    """Return `returns` where they are lidar returns, else raise with what was wanted."""
    if not isinstance(returns, xr.Dataset):
        raise TypeError(
            f"returns must be a Dataset as from open_returns or as_returns, got {type(returns).__name__}"
        )
    wanted = [name for channel in CHANNELS for name in (channel, f"{channel}_quality")]
    absent = [name for name in wanted if name not in returns]
    if absent:
        raise ValueError(
            f"the returns hold no {listed(absent)}, only {listed(map(str, returns.data_vars))}; open_returns and "
            "as_returns make them, and ask what a stored zero means"
        )
    return returns


def _column(name: str, values: Any) -> Any:
    if isinstance(values, xr.DataArray):
        values = values.data
    array = values if hasattr(values, "dask") else np.asarray(values)
    if array.ndim != 1:
        raise ValueError(f"{name} must have one value for each shot, got the shape {tuple(array.shape)}")
    if name == "time":
        return array
    if array.dtype.kind not in "fiu":
        raise TypeError(f"{name} must be real numbers, got {array.dtype}")
    return array.astype(float, copy=False)


def _per_channel(name: str, given: Any) -> dict[str, Any]:
    if not isinstance(given, Mapping):
        if given is not None and np.ndim(given) > 0:
            raise TypeError(f"{name} must be one value or {{'red': …, 'infrared': …}}, got an array")
        return dict.fromkeys(CHANNELS, given)
    for channel in given:
        one_of(f"a channel of {name}", channel, CHANNELS)
    return {channel: given.get(channel) for channel in CHANNELS}


def _flags(channel: str, flags: Any, length: int) -> Any:
    array = flags.data if isinstance(flags, xr.DataArray) else flags
    array = array if hasattr(array, "dask") else np.asarray(array)
    if array.shape != (length,) or array.dtype.kind not in "bu":
        raise ValueError(
            f"saturated of {channel} must be an energy or one bool for each of {length} shots, got {array.dtype} of "
            f"shape {tuple(array.shape)}"
        )
    return array.astype(bool)


def _judged(channel: str, energy: Any, meaning: str | None, saturated: Any) -> tuple[Any, Any]:
    """Energies with NaN where they are no measurement, and the quality flags."""
    xp: Any = np
    if hasattr(energy, "dask"):
        import dask.array as xp
    zero = energy == 0
    if meaning is None:
        count = int(zero.sum())
        if count:
            raise ValueError(
                f"{channel} holds {count} stored zeros of {energy.shape[0]}, and they may mean two things; give "
                "zero='dropout' (the return lay below the receiver's limit) or zero='missing' (none was recorded)"
            )
    quality = xp.zeros_like(energy, dtype=np.int8)
    quality = xp.where(zero, np.int8(QUALITY[meaning or "missing"]), quality)
    if saturated is not None:
        above = saturated if np.ndim(saturated) else energy >= float(saturated)
        quality = xp.where(above, np.int8(QUALITY["saturated"]), quality)
    quality = xp.where(xp.isfinite(energy), quality, np.int8(QUALITY["missing"]))
    return xp.where(quality == QUALITY["good"], energy, np.nan), quality


def _quality_attrs(channel: str) -> dict[str, Any]:
    return {
        "long_name": f"quality of the {channel} return",
        "flag_values": np.array(list(QUALITY.values()), dtype=np.int8),
        "flag_meanings": " ".join(QUALITY),
    }


def _refuse_impossible(name: str, array: Any) -> None:
    if hasattr(array, "dask"):  # looked at where it is used, in albedo_from_returns
        return
    if name.startswith("range_m") and (bad := array[array <= 0]).size:
        raise ValueError(
            f"{name} must be positive, got {bad[0]:g} m at {bad.size} shots; NaN marks an unknown one"
        )
    if name.startswith("incidence_deg") and (bad := array[(array < 0) | (array >= 90)]).size:
        raise ValueError(
            f"{name} must lie in [0, 90) degrees, got {bad[0]:g} at {bad.size} shots; a scan angle with a sign "
            "needs its absolute value"
        )


def _projected(returns: xr.Dataset, crs: Any) -> xr.Dataset:
    from rasterio.crs import CRS
    from rasterio.errors import CRSError

    try:
        known: Any = CRS.from_user_input(crs)
    except CRSError as error:
        raise ValueError(
            f"crs must be a map projection (EPSG:…, WKT, PROJ text), got {crs!r}: {error}"
        ) from None
    return returns.assign_coords(spatial_ref=xr.DataArray(0, attrs={"crs_wkt": known.to_wkt()}))
