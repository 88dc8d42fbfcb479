"""Mixtures of materials: side by side within the beam (areal), or grain by grain (intimate)."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import listed
from .hapke import reflectance_from_albedo, single_scattering_albedo

__all__ = ["areal_mixture", "intimate_mixture", "mass_weights"]


def areal_mixture(reflectances: ArrayLike, fractions: ArrayLike) -> NDArray[np.float64]:
    """Reflectance of materials side by side: the mean weighted by their share of the area.

    Parameters
    ----------
    reflectances : array_like, shape (material, …)
        Reflectance of each material, e.g. (material, wavelength).
    fractions : array_like, shape (material,) or (material, …)
        Share of the area of each; they must sum to one. Further dimensions make many mixtures at once and
        are put before those of the spectra.

    Returns
    -------
    ndarray, shape (mixtures …, spectrum …)

    Raises
    ------
    ValueError
        If the fractions do not fit the materials, are negative, or do not sum to one.

    Examples
    --------
    >>> areal_mixture([[0.16, 0.27], [0.06, 0.06]], [0.5, 0.5]).round(3).tolist()
    [0.11, 0.165]
    """
    spectra = np.asarray(reflectances, dtype=float)
    weights = _weights(fractions, spectra, "fractions")
    total = weights.sum(axis=0)
    if np.any(np.abs(total - 1) > 1e-6):
        worst = total.flat[int(np.argmax(np.abs(total - 1)))]
        raise ValueError(f"fractions must sum to 1, got {worst:g}; divide them by their sum")
    return np.tensordot(np.moveaxis(weights, 0, -1), spectra, axes=1)


def intimate_mixture(
    reflectances: ArrayLike,
    weights: ArrayLike,
    incidence_deg: float = 30.0,
    emission_deg: float = 0.0,
    *,
    h_form: int = 2002,
) -> NDArray[np.float64]:
    """Reflectance of materials mixed grain by grain: the mean is taken in single-scattering albedo.

    Parameters
    ----------
    reflectances : array_like, shape (material, …)
        Reflectance factor of each pure material at this geometry.
    weights : array_like, shape (material,) or (material, …)
        Weights of the albedos, relative; from mass fractions by `mass_weights`.
    incidence_deg, emission_deg : float
        Geometry of the reflectances and of the result [degree].
    h_form : {2002, 1981}
        See `chandrasekhar_h`.

    Returns
    -------
    ndarray, shape (mixtures …, spectrum …)

    Raises
    ------
    ValueError
        If the weights do not fit the materials, are negative or all zero, or a reflectance cannot be reached.

    References
    ----------
    Hapke 1981, J. Geophys. Res. 86, 3039, doi:10.1029/JB086iB04p03039.

    Examples
    --------
    >>> intimate_mixture([[0.16, 0.27], [0.06, 0.06]], [0.5, 0.5]).round(3).tolist()  # darker than the areal mean
    [0.101, 0.13]
    """
    spectra = np.asarray(reflectances, dtype=float)
    shares = _weights(weights, spectra, "weights")
    total = shares.sum(axis=0)
    if np.any(total <= 0):
        raise ValueError("weights must not all be zero; give at least one material a weight above zero")
    albedo = single_scattering_albedo(spectra, incidence_deg, emission_deg, h_form=h_form)
    mixed = np.tensordot(np.moveaxis(shares / total, 0, -1), albedo, axes=1)
    return reflectance_from_albedo(mixed, incidence_deg, emission_deg, h_form=h_form)


def mass_weights(
    mass_fractions: ArrayLike, densities: ArrayLike, grain_sizes_um: ArrayLike
) -> NDArray[np.float64]:
    """Weights of the single-scattering albedos in an intimate mixture: M/(ρ·D), made to sum to one.

    Parameters
    ----------
    mass_fractions : array_like, shape (material,) or (material, …)
        Mass fraction of each material, relative.
    densities : array_like, shape (material,)
        Density of the grains [g/cm³].
    grain_sizes_um : array_like, shape (material,)
        Grain diameter [µm].

    Returns
    -------
    ndarray, shape of `mass_fractions`

    Raises
    ------
    ValueError
        If lengths differ, a fraction is negative, or a density or grain size is not above zero.

    Examples
    --------
    >>> mass_weights([0.1, 0.9], [0.917, 3.0], [50, 50]).round(3).tolist()
    [0.267, 0.733]
    """
    mass = np.asarray(mass_fractions, dtype=float)
    density, size = np.asarray(densities, dtype=float), np.asarray(grain_sizes_um, dtype=float)
    if mass.ndim == 0 or density.shape != mass.shape[:1] or size.shape != mass.shape[:1]:
        raise ValueError(
            f"one density and one grain size for each of the materials are needed, got {density.size} and "
            f"{size.size} for mass fractions of shape {mass.shape}"
        )
    if np.any(~(mass >= 0)):
        raise ValueError(f"mass fractions must be zero or above, got {listed(mass.ravel()[:4].tolist())}")
    if np.any(~(density > 0)) or np.any(~(size > 0)):
        raise ValueError("densities [g/cm³] and grain sizes [µm] must be above zero")
    weight: NDArray[np.float64] = mass / (density * size).reshape(-1, *(1,) * (mass.ndim - 1))
    total = weight.sum(axis=0)
    if np.any(total <= 0):
        raise ValueError("mass fractions must not all be zero")
    weight /= total
    return weight


def _weights(values: ArrayLike, spectra: NDArray[np.float64], name: str) -> NDArray[np.float64]:
    weights = np.asarray(values, dtype=float)
    if weights.ndim == 0 or spectra.ndim == 0 or weights.shape[0] != spectra.shape[0]:
        raise ValueError(
            f"one of {name} for each material is needed, got shape {weights.shape} for reflectances of shape "
            f"{spectra.shape}"
        )
    if np.any(~(weights >= 0)):
        raise ValueError(f"{name} must be zero or above, got {listed(weights.ravel()[:4].tolist())}")
    return weights
