"""Receiver constants from shots at a target of known reflectance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import non_negative, positive
from .calibration import CHANNELS, LidarCalibration, LidarChannel
from .equation import albedo_per_energy
from .returns import QUALITY, require_returns
from .shots import check_units, incidence_of, net_energy, own_geometry, transmitted_of

__all__ = ["calibrate_lidar"]


def calibrate_lidar(
    returns: xr.Dataset,
    reflectance: Sequence[float],
    *,
    reflectance_sigma: Sequence[float] = (0.0, 0.0),
    reflectance_correlation: float = 0.0,
    common_sigma: float = 0.0,
    instrument: LidarCalibration | None = None,
    incidence_deg: Any = None,
) -> LidarCalibration:
    """Receiver constants of both channels from shots at a reference target, with their uncertainties.

    The constant is the ratio of sums K = Σ E / Σ s with s = E_t ρ cos i / R², which for counts is the maximum
    likelihood, whatever the shots' ranges. Its random uncertainty is the scatter of the shots about it, widened by
    Student's t so that K ± sigma holds the true constant in 68.3 % of calibrations however few the shots.

    Parameters
    ----------
    returns : Dataset, in memory
        Shots at the target, as from `as_returns` or `open_returns`.
    reflectance : (float, float)
        The target's reflectance factor at zero phase, red and infrared.
    reflectance_sigma : (float, float)
        Standard uncertainties of the two [reflectance].
    reflectance_correlation : float
        Correlation of these two errors.
    common_sigma : float
        Error of the target set-up that is one for both channels and all shots, as of its distance or its tilt
        [fraction of the constant]. It cancels in the ratio.
    instrument : LidarCalibration, optional
        What else is known about the channels (background, dead time, limits, noise); its constants are replaced.
        Without it the returns must hold the transmitted energies.
    incidence_deg : float, array_like or None
        As for `albedo_from_returns`.

    Returns
    -------
    LidarCalibration
        Constants, sigmas and their correlation; all else as in `instrument`.

    Raises
    ------
    ValueError
        If there are fewer than two shots, one is a dropout or saturated, or a reflectance is not positive.

    References
    ----------
    Cochran 1977, Sampling Techniques, 3rd ed., section 2.11 (variance of a ratio of sums).

    Examples
    --------
    >>> import bandratio as br
    >>> target = br.as_returns(
    ...     [101.0, 99.0, 100.0], [52.0, 49.0, 49.0], range_m=[10.0] * 3, incidence_deg=[0.0] * 3,
    ...     transmitted_red=[1e3] * 3, transmitted_infrared=[1e3] * 3)
    >>> calibration = br.calibrate_lidar(target, (0.99, 0.98), reflectance_sigma=(0.01, 0.01))
    >>> round(calibration.red.constant, 3), round(calibration.red.constant_sigma, 3)
    (10.101, 0.128)
    """
    require_returns(returns)
    known = _pair("reflectance", reflectance)
    sigma = _pair("reflectance_sigma", reflectance_sigma)
    if not -1 <= reflectance_correlation <= 1:
        raise ValueError(f"reflectance_correlation must lie in [-1, 1], got {reflectance_correlation:g}")
    non_negative("common_sigma", common_sigma)
    if "range_m" not in returns:
        raise ValueError("the returns hold no range_m [m], the distance of the target; add it")
    blank = LidarChannel(constant=1.0)
    instrument = instrument or LidarCalibration(red=blank, infrared=blank)
    check_units(returns, instrument)
    incidence, _ = incidence_of(returns, incidence_deg)
    constants, residuals, relative = [], [], []
    for position, name in enumerate(CHANNELS):
        rho = positive(f"the target's {name} reflectance", known[position])
        relative.append(non_negative(f"reflectance_sigma of {name}", sigma[position]) / rho)
        energy, per_constant = _energies(name, returns, incidence, getattr(instrument, name))
        expected = per_constant * rho
        constant = energy.sum() / expected.sum()
        if not constant > 0:
            raise ValueError(
                f"the {name} energies at the target sum to {energy.sum():g}; they must be positive"
            )
        constants.append(constant)
        residuals.append((energy - constant * expected) / energy.sum())
    count = residuals[0].size
    covariance = np.array(residuals) @ np.array(residuals).T * count / (count - 1) * _student(count) ** 2
    covariance += np.outer(relative, relative) * [[1, reflectance_correlation], [reflectance_correlation, 1]]
    covariance += common_sigma**2
    fractions = np.sqrt(np.diag(covariance))
    product = fractions[0] * fractions[1]
    channels = {
        name: replace(
            getattr(instrument, name),
            constant=float(constants[i]),
            constant_sigma=float(constants[i] * fractions[i]),
        )
        for i, name in enumerate(CHANNELS)
    }
    return replace(
        instrument,
        **channels,
        correlation=float(np.clip(covariance[0, 1] / product, -1, 1)) if product > 0 else 0.0,
        units=instrument.units or returns["red"].attrs.get("units", ""),
        source=instrument.source or f"{count} shots at a target of reflectance {known[0]:g}, {known[1]:g}",
    )


def _energies(
    name: str, returns: xr.Dataset, incidence: xr.DataArray, channel: LidarChannel
) -> tuple[NDArray, NDArray]:
    """Net energies, and E_t cos i / R² of each shot."""
    background = returns.get(f"background_{name}", channel.background)
    net, _, quality = net_energy(
        returns[name].values, returns[f"{name}_quality"].values, np.asarray(background, dtype=float), channel
    )
    bad = {word: int((quality == value).sum()) for word, value in QUALITY.items() if word != "good"}
    for word in ("dropout", "saturated"):
        if bad[word]:
            raise ValueError(
                f"{bad[word]} of {net.size} {name} shots at the target are {word}; leaving them out would bias the "
                "constant: use a target, or an attenuation, at which none is"
            )
    if bad["missing"]:
        raise ValueError(
            f"{bad['missing']} of {net.size} {name} shots at the target are missing; drop those shots in both "
            "channels first"
        )
    if net.size < 2:
        raise ValueError(f"a calibration needs two shots or more at the target, got {net.size}")
    transmitted = transmitted_of(name, returns, channel)
    distance = own_geometry(returns, "range_m", name, returns["range_m"])
    tilt = own_geometry(returns, "incidence_deg", name, incidence)
    factor = albedo_per_energy(distance.values, tilt.values, np.asarray(transmitted), 1.0)
    if not np.isfinite(factor).all() or (factor <= 0).any():
        raise ValueError(
            "range, incidence and transmitted energy of every shot at the target must be known and positive"
        )
    return net, 1 / factor


def _student(count: int) -> float:
    """Half-width of Student's t interval that holds as much as one sigma of a normal one."""
    from scipy.special import ndtr, stdtrit

    return float(stdtrit(count - 1, ndtr(1.0)))


def _pair(name: str, values: Sequence[float]) -> tuple[float, float]:
    numbers = np.asarray(values, dtype=float)
    if numbers.shape != (2,) or not np.isfinite(numbers).all():
        raise ValueError(f"{name} must be two numbers, red and infrared, got {values!r}")
    return float(numbers[0]), float(numbers[1])
