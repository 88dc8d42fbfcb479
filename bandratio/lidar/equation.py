"""The lidar equation of a target that fills the beam, and the errors of one return. Arrays only."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["albedo_per_energy", "live_fraction", "return_variance", "sigma_of_likely_count"]


def albedo_per_energy(
    range_m: ArrayLike, incidence_deg: ArrayLike, transmitted: ArrayLike, constant: float
) -> NDArray[np.float64]:
    """Albedo ρ for each unit of return energy: ρ/E_r = R² / (K E_t cos i).

    Parameters
    ----------
    range_m : array_like
        Range R [m].
    incidence_deg : array_like
        Angle i between beam and surface normal [degree].
    transmitted : array_like
        Transmitted energy E_t.
    constant : float
        Receiver constant K = A_r η / π: aperture times efficiency over π [m², times the unit of E_r over that of E_t].

    Returns
    -------
    ndarray
        ρ/E_r, with ρ the reflectance factor at i = e, phase 0 (constant for a Lambert surface).

    References
    ----------
    Wagner et al. 2006, ISPRS J. Photogramm. Remote Sens. 60, 100 (radar equation of a lidar; extended target),
    doi:10.1016/j.isprsjprs.2005.12.001.

    Examples
    --------
    >>> bool(np.isclose(albedo_per_energy(1000.0, 60.0, 2.0, 0.01), 1000**2 / (0.01 * 2 * 0.5)))
    True
    """
    cosine = np.cos(np.radians(np.asarray(incidence_deg, dtype=float)))
    square = np.asarray(range_m, dtype=float) ** 2
    return np.asarray(square / (constant * np.asarray(transmitted, dtype=float) * cosine))


def live_fraction(counts: ArrayLike, dead_time_s: float, gate_s: float) -> NDArray[np.float64]:
    """Share of the gate in which a counter with a non-paralysable dead time could count; at least 0.

    Parameters
    ----------
    counts : array_like
        Measured counts in the gate.
    dead_time_s, gate_s : float
        Dead time after each count, and length of the gate [s]. The true number is counts / live fraction.

    References
    ----------
    Knoll, Radiation Detection and Measurement, 4th ed., eq. 4.23 (from memory).
    """
    return np.maximum(1 - np.asarray(counts, dtype=float) * dead_time_s / gate_s, 0)


def return_variance(
    energy: ArrayLike,
    background: ArrayLike,
    *,
    energy_per_count: float,
    background_sigma: float,
    read_noise: float,
    live: ArrayLike = 1.0,
) -> NDArray[np.float64]:
    """Variance of one return's net energy that is new in each shot.

    Counting: ε²·(n + 1) for n = (E + B)/ε counts of energy ε, the variance of a rate of which n were seen (flat prior):
    it stays above zero where nothing was. To it come the background's own error and read noise.

    Parameters
    ----------
    energy : array_like
        Net energy E, background taken off.
    background : array_like
        Background energy B within the gate.
    energy_per_count : float
        Energy ε for one detected count; 0: no counting noise.
    background_sigma, read_noise : float
        Standard uncertainty of the background taken off, and of the electronics, each shot's own.
    live : array_like
        Live fraction. Of n true counts n·live are seen, with variance n·live³ for a non-paralysable dead time;
        corrected, that is n/live (Knoll, 4th ed., section 4.VII; from memory).
    """
    counted = np.maximum(np.asarray(energy, dtype=float), 0) + background
    counting = energy_per_count * (counted + energy_per_count) if energy_per_count else 0.0 * counted
    return np.asarray(counting / np.asarray(live) + background_sigma**2 + read_noise**2)


def sigma_of_likely_count(sigma: ArrayLike, per_count: ArrayLike, z: float = 5.0) -> NDArray[np.float64]:
    """Sigma that a measured value would have, were its true count so high that the measured one lies z sigmas below.

    For n counts the true mean μ with μ − n = z√μ is μ = n + z²/2 + z√(n + z²/4) (Wilson's score interval, for
    counts). A test of whether a value is too low for a given mean holds down to Φ(−z) with this sigma, and does not
    with the sigma of the measured count.

    Parameters
    ----------
    sigma : array_like
        Sigma at the measured value.
    per_count : array_like
        Value of one count, in the same unit; 0 leaves sigma as it is.
    z : float
        Sigmas.

    References
    ----------
    Wilson 1927, J. Am. Stat. Assoc. 22, 209, doi:10.1080/01621459.1927.10502953.

    Examples
    --------
    >>> sigma_of_likely_count([10.0], [1.0], z=2.0).round(2).tolist()  # of 100 counts: √122.1
    [11.05]
    """
    variance, one = np.square(np.asarray(sigma, dtype=float)), np.asarray(per_count, dtype=float) * z
    return np.asarray(np.sqrt(variance + one**2 / 2 + one * np.sqrt(variance + one**2 / 4)))
