"""Interval of a ratio of two noisy numbers that holds at any signal: Fieller's. Arrays only."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["fieller_interval", "ratio_and_sigma"]


def ratio_and_sigma(
    a: ArrayLike, b: ArrayLike, sigma_a: ArrayLike, sigma_b: ArrayLike, covariance: ArrayLike = 0
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Ratio a/b of two albedos and its first-order sigma.

    Returns
    -------
    ratio, sigma : ndarray
        An albedo is never negative, so a negative measured one counts as zero: where b ≤ 0 < a the ratio is
        infinite, and where both are at most zero it is NaN. Sigma is infinite or NaN in the same places; it says
        little where b is less than about five of its sigmas (use the interval).
    """
    a, b, sa, sb, c = np.broadcast_arrays(
        *(np.asarray(x, dtype=float) for x in (a, b, sigma_a, sigma_b, covariance))
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.maximum(a, 0) / np.maximum(b, 0)
        variance = sa**2 - 2 * ratio * c + (ratio * sb) ** 2
        sigma = np.sqrt(np.maximum(variance, 0)) / b
    sigma = np.where(np.isinf(ratio), np.inf, sigma)
    return ratio, np.where(np.isnan(ratio), np.nan, sigma)


def fieller_interval(
    a: ArrayLike,
    b: ArrayLike,
    sigma_a: ArrayLike,
    sigma_b: ArrayLike,
    covariance: ArrayLike,
    z: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Smallest interval of ratios θ ≥ 0 that holds all with (a − θb)² ≤ z²(σa² − 2θσab + θ²σb²).

    Parameters
    ----------
    a, b : array_like
        Numerator and denominator.
    sigma_a, sigma_b : array_like
        Their standard uncertainties, in the same units.
    covariance : array_like
        Covariance σab of their errors.
    z : float
        Half-width in sigmas: 1.96 for 95 %.

    Returns
    -------
    lower, upper : ndarray
        Upper is infinite where b is not told from zero; the interval is [0, ∞) where the set is in two pieces of
        positive ratios, or is everything. NaN where an input is.

    References
    ----------
    Fieller 1954, J. R. Stat. Soc. B 16, 175, doi:10.1111/j.2517-6161.1954.tb00159.x.
    """
    a, b, sa, sb, c = (
        x.copy()
        for x in np.broadcast_arrays(
            *(np.asarray(x, dtype=float) for x in (a, b, sigma_a, sigma_b, covariance))
        )
    )
    lower, upper = _set_of_ratios(a, b, sa, sb, c, z)
    # Where no ratio ≥ 0 fits, an albedo lies too far below zero to be one: it counts as zero.
    empty = upper < 0
    if empty.any():
        a[empty], b[empty] = np.maximum(a[empty], 0), np.maximum(b[empty], 0)
        lower[empty], upper[empty] = _set_of_ratios(a[empty], b[empty], sa[empty], sb[empty], c[empty], z)
    return np.maximum(lower, 0), upper


def _set_of_ratios(
    a: NDArray, b: NDArray, sa: NDArray, sb: NDArray, c: NDArray, z: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Lower and upper end; an upper one below zero says that no ratio ≥ 0 fits."""
    # A θ² − 2 B θ + C ≤ 0
    A = b**2 - (z * sb) ** 2
    B = a * b - z**2 * c
    C = a**2 - (z * sa) ** 2
    # B² − AC with the terms that cancel taken out
    discriminant = z**2 * ((a * sb) ** 2 - 2 * a * b * c + (b * sa) ** 2 - z**2 * ((sa * sb) ** 2 - c**2))
    with np.errstate(divide="ignore", invalid="ignore"):
        q = B + np.copysign(np.sqrt(np.maximum(discriminant, 0)), B)
        # q is zero only where B and the discriminant are: both roots are zero
        one, other = np.where(q == 0, 0.0, q / A), np.where(q == 0, 0.0, C / q)
        near, far = np.fmin(one, other), np.fmax(one, other)
        lower, upper = near, far  # A > 0: b is told from zero
        unknown = A < 0  # everything but (near, far), where the roots are real
        pieces = unknown & ((discriminant <= 0) | (near >= 0))  # two of them, or no gap at all
        lower = np.where(unknown, np.where(pieces, 0.0, np.maximum(far, 0)), lower)
        upper = np.where(unknown, np.inf, upper)
        line = A == 0  # −2Bθ + C ≤ 0
        at = C / (2 * B)
        lower = np.where(line, np.where(B > 0, at, 0.0), lower)
        upper = np.where(line, np.where(B < 0, at, np.inf), upper)
        # b = 0 without error: any ratio where a is not told from zero, else an infinite one
        lower = np.where(line & (B == 0) & (C > 0), np.inf, lower)
    missing = np.isnan(A + B + C)
    lower[missing] = np.nan
    upper[missing] = np.nan
    return lower, upper
