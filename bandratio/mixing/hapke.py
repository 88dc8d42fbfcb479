"""Reflectance of a particulate surface from the single-scattering albedo of its grains, and back (Hapke).

Isotropic grains, no opposition effect. Angles in degrees, albedos and reflectances as fractions.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import listed

__all__ = [
    "chandrasekhar_h",
    "grain_albedo",
    "reflectance_from_albedo",
    "single_scattering_albedo",
    "white_reflectance",
]

#: Reflectance quantities as multiples of the reflectance factor, given μ0 = cos i
#: (Hapke, Theory of Reflectance and Emittance Spectroscopy, 2nd ed. 2012, ch. 10; from memory).
_PER_REFLECTANCE_FACTOR: dict[str, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = {
    "reflectance_factor": np.ones_like,
    "radiance_factor": lambda mu0: mu0,
    "bidirectional_reflectance": lambda mu0: mu0 / np.pi,
    "brdf": lambda mu0: np.full_like(mu0, 1 / np.pi),
}
_H_FORMS = (1981, 2002)


def chandrasekhar_h(cosine: ArrayLike, albedo: ArrayLike, *, h_form: int = 2002) -> NDArray[np.float64]:
    """Chandrasekhar's H-function for isotropic scatterers, in one of Hapke's two approximations.

    Parameters
    ----------
    cosine : array_like
        x = cos i or cos e, 0 to 1.
    albedo : array_like, broadcastable with `cosine`
        Single-scattering albedo w, 0 to 1.
    h_form : {2002, 1981}
        2002: 1/(1 − w·x·(r0 + (1 − 2·r0·x)/2 · ln((1+x)/x))), within 1 % of the exact solution;
        1981: (1 + 2x)/(1 + 2xγ), within 4.1 %. γ = √(1−w), r0 = (1−γ)/(1+γ).

    Returns
    -------
    ndarray
        H, at least 1.

    Raises
    ------
    ValueError
        If a cosine or an albedo lies outside [0, 1], or the form is unknown.

    References
    ----------
    Hapke 1981, J. Geophys. Res. 86, 3039, doi:10.1029/JB086iB04p03039;
    Hapke 2002, Icarus 157, 523, doi:10.1006/icar.2002.6853.

    Examples
    --------
    >>> round(float(chandrasekhar_h(1.0, 1.0)), 3)
    2.885
    """
    x, w = _within_one("cosine", cosine), _within_one("single-scattering albedo", albedo)
    return 1 / _inverse_h(x, np.sqrt(1 - w), _form(h_form))


def grain_albedo(
    n: ArrayLike, k: ArrayLike, wavelength_nm: ArrayLike, grain_size_um: ArrayLike
) -> NDArray[np.float64]:
    """Single-scattering albedo of a grain from its optical constants (equivalent-slab model).

    Parameters
    ----------
    n, k : array_like
        Real and imaginary refractive index [1].
    wavelength_nm : array_like
        Wavelength [nm].
    grain_size_um : array_like
        Grain diameter [µm].

    Returns
    -------
    ndarray, broadcast shape
        w = S_e + (1−S_e)(1−S_i)Θ/(1−S_i·Θ).

    Raises
    ------
    ValueError
        If n is not above 1, k negative, or a wavelength or grain size not above zero.

    References
    ----------
    Hapke, Theory of Reflectance and Emittance Spectroscopy, 2nd ed. 2012, ch. 5–6, doi:10.1017/CBO9781139025683.

    Examples
    --------
    >>> round(float(grain_albedo(1.291, 4.678e-4, 1535, 100)), 3)  # coarse frost is dark near 1.5 µm
    0.638
    """
    n, k = np.asarray(n, dtype=float), np.asarray(k, dtype=float)
    wavelength, size = np.asarray(wavelength_nm, dtype=float), np.asarray(grain_size_um, dtype=float)
    for name, array, wrong in (
        ("n must be above 1", n, ~(n > 1)),
        ("k must be zero or above", k, ~(k >= 0)),
        ("wavelength_nm must be above zero", wavelength, ~(wavelength > 0)),
        ("grain_size_um must be above zero", size, ~(size > 0)),
    ):
        if np.any(wrong):
            raise ValueError(f"{name}, got {listed(np.atleast_1d(array[wrong])[:3].tolist())}")
    external = ((n - 1) ** 2 + k**2) / ((n + 1) ** 2 + k**2) + 0.05
    internal = 1 - 4 / (n * (n + 1) ** 2)
    mean_path = 2 / 3 * (n**2 - (n**2 - 1) ** 1.5 / n) * size * 1000  # [nm]
    transmitted = np.exp(-4 * np.pi * k * mean_path / wavelength)
    albedo: NDArray[np.float64] = external + (1 - external) * (1 - internal) * transmitted / (
        1 - internal * transmitted
    )
    return albedo


def reflectance_from_albedo(
    albedo: ArrayLike,
    incidence_deg: ArrayLike = 30.0,
    emission_deg: ArrayLike = 0.0,
    *,
    quantity: str = "reflectance_factor",
    h_form: int = 2002,
) -> NDArray[np.float64]:
    """Reflectance of a deep layer of isotropic grains.

    Parameters
    ----------
    albedo : array_like
        Single-scattering albedo w, 0 to 1.
    incidence_deg, emission_deg : array_like, broadcastable with `albedo`
        Angles from the normal [degree]; the default is the laboratory's 30° and 0°. A lidar has both equal.
    quantity : str
        `reflectance_factor` (the default), `radiance_factor`, `bidirectional_reflectance` [1/sr] or
        `brdf` [1/sr].
    h_form : {2002, 1981}
        See `chandrasekhar_h`.

    Returns
    -------
    ndarray, broadcast shape
        (w/4)/(μ0 + μ)·H(μ0)·H(μ) as a reflectance factor, or its multiple.

    Raises
    ------
    ValueError
        If an albedo lies outside [0, 1], an angle outside [0, 90), or the quantity is unknown.

    References
    ----------
    Hapke 2002, Icarus 157, 523, doi:10.1006/icar.2002.6853.

    Examples
    --------
    >>> round(float(reflectance_from_albedo(0.5)), 4)
    0.1035
    """
    w = _within_one("single-scattering albedo", albedo)
    mu0, mu = _cosine("incidence_deg", incidence_deg), _cosine("emission_deg", emission_deg)
    gamma = np.sqrt(1 - w)
    factor = _reflectance_factor(gamma, mu0, mu, _form(h_form))
    return factor * _multiple(quantity, mu0)


def white_reflectance(
    incidence_deg: ArrayLike = 30.0, emission_deg: ArrayLike = 0.0, *, h_form: int = 2002
) -> NDArray[np.float64]:
    """Reflectance factor of grains that absorb nothing (w = 1): the brightest surface of this model.

    Examples
    --------
    >>> round(float(white_reflectance()), 3)
    1.025
    """
    return reflectance_from_albedo(1.0, incidence_deg, emission_deg, h_form=h_form)


def single_scattering_albedo(
    reflectance: ArrayLike,
    incidence_deg: ArrayLike = 30.0,
    emission_deg: ArrayLike = 0.0,
    *,
    quantity: str = "reflectance_factor",
    h_form: int = 2002,
) -> NDArray[np.float64]:
    """Single-scattering albedo that gives a reflectance: the inverse of `reflectance_from_albedo`.

    Parameters
    ----------
    reflectance : array_like
        Reflectance of the `quantity`; NaN stays NaN.
    incidence_deg, emission_deg : array_like, broadcastable
        Angles from the normal [degree].
    quantity, h_form
        As in `reflectance_from_albedo`.

    Returns
    -------
    ndarray, broadcast shape
        w, 0 to 1; there and back agrees to 1e-9.

    Raises
    ------
    ValueError
        If a reflectance is negative or above what grains that absorb nothing reach (`white_reflectance`).

    Examples
    --------
    >>> round(float(single_scattering_albedo(0.1035)), 3)
    0.5
    """
    mu0, mu = _cosine("incidence_deg", incidence_deg), _cosine("emission_deg", emission_deg)
    form = _form(h_form)
    factor = np.asarray(reflectance, dtype=float) / _multiple(quantity, mu0)
    factor, mu0, mu = np.broadcast_arrays(factor, mu0, mu)
    white = _reflectance_factor(np.zeros_like(mu), mu0, mu, form)
    beyond = (factor < 0) | (factor > white)
    if beyond.any():
        raise ValueError(
            f"a reflectance factor of {factor[beyond][0]:g} is outside 0 to {white[beyond][0]:.4g}, what isotropic "
            "grains can reach at this geometry; check the scale, the quantity and the angles"
        )
    gamma = _gamma_1981(factor, mu0, mu)
    if form == 2002:
        gamma = _refined_gamma(gamma, factor, mu0, mu)
    return 1 - gamma**2


def _within_one(name: str, values: ArrayLike) -> NDArray[np.float64]:
    array = np.asarray(values, dtype=float)
    wrong = (array < 0) | (array > 1)
    if np.any(wrong):
        raise ValueError(f"{name} must lie between 0 and 1, got {np.atleast_1d(array[wrong])[0]:g}")
    return array


def _cosine(name: str, degrees: ArrayLike) -> NDArray[np.float64]:
    angle = np.asarray(degrees, dtype=float)
    wrong = (angle < 0) | (angle >= 90)
    if np.any(wrong):
        raise ValueError(
            f"{name} must lie between 0 and 90 degrees, 90 excluded, got {np.atleast_1d(angle[wrong])[0]:g}"
        )
    cosine: NDArray[np.float64] = np.cos(np.radians(angle))
    return cosine


def _form(h_form: int) -> int:
    if h_form not in _H_FORMS:
        raise ValueError(f"h_form must be one of {listed(_H_FORMS)}, got {h_form!r}")
    return h_form


def _multiple(quantity: str, mu0: NDArray[np.float64]) -> NDArray[np.float64]:
    if quantity not in _PER_REFLECTANCE_FACTOR:
        raise ValueError(f"quantity must be one of {listed(_PER_REFLECTANCE_FACTOR)}, got {quantity!r}")
    return _PER_REFLECTANCE_FACTOR[quantity](mu0)


def _log_term(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """ln((1+x)/x), and 0 at x = 0, where it is only ever multiplied by x."""
    positive = np.where(x > 0, x, 1.0)
    return np.where(x > 0, np.log((1 + positive) / positive), 0.0)


def _inverse_h(x: NDArray[np.float64], gamma: NDArray[np.float64], h_form: int) -> NDArray[np.float64]:
    if h_form == 1981:
        return (1 + 2 * x * gamma) / (1 + 2 * x)
    r0 = (1 - gamma) / (1 + gamma)
    return 1 - (1 - gamma**2) * x * (r0 + (1 - 2 * r0 * x) / 2 * _log_term(x))


def _inverse_h_slope(x: NDArray[np.float64], gamma: NDArray[np.float64]) -> NDArray[np.float64]:
    """d(1/H)/dγ of the 2002 form."""
    log_term = _log_term(x)
    r0, r0_slope = (1 - gamma) / (1 + gamma), -2 / (1 + gamma) ** 2
    bracket = r0 + (1 - 2 * r0 * x) / 2 * log_term
    return 2 * gamma * x * bracket - (1 - gamma**2) * x * r0_slope * (1 - x * log_term)


def _reflectance_factor(
    gamma: NDArray[np.float64], mu0: NDArray[np.float64], mu: NDArray[np.float64], h_form: int
) -> NDArray[np.float64]:
    return (
        (1 - gamma**2) / (4 * (mu0 + mu)) / (_inverse_h(mu0, gamma, h_form) * _inverse_h(mu, gamma, h_form))
    )


def _gamma_1981(
    factor: NDArray[np.float64], mu0: NDArray[np.float64], mu: NDArray[np.float64]
) -> NDArray[np.float64]:
    """γ of the 1981 form: the root of (C + 4μ0μR)γ² + 2R(μ0+μ)γ + R − C = 0, C = R of white grains."""
    white = (1 + 2 * mu0) * (1 + 2 * mu) / (4 * (mu0 + mu))
    square, half = white + 4 * mu0 * mu * factor, factor * (mu0 + mu)
    rest = np.minimum(factor - white, 0.0)  # the 2002 form's white may be a little brighter than this one's
    return np.clip((-half + np.sqrt(half**2 - square * rest)) / square, 0.0, 1.0)


def _refined_gamma(
    gamma: NDArray[np.float64], factor: NDArray[np.float64], mu0: NDArray[np.float64], mu: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Newton's method on R(γ), which falls steadily from white grains (γ = 0) to black ones (γ = 1)."""
    for _ in range(50):
        first, second = _inverse_h(mu0, gamma, 2002), _inverse_h(mu, gamma, 2002)
        value = (1 - gamma**2) / (4 * (mu0 + mu)) / (first * second)
        slope = -gamma / (2 * (mu0 + mu)) / (first * second) - value * (
            _inverse_h_slope(mu0, gamma) / first + _inverse_h_slope(mu, gamma) / second
        )
        better = np.clip(gamma - (value - factor) / slope, 0.0, 1.0)
        step = np.abs(better - gamma)
        gamma = better
        if not np.any(step > 1e-14):
            break
    return gamma
