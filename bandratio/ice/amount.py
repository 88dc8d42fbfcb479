"""How much ice, as one number with its interval: only where the ground and the ice are both named."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import non_negative, one_of, open_fraction, positive
from ..detection.hull import STEEPEST_DEG
from ..detection.outside import Points
from ..mixing import ICE_DENSITY, mass_weights, reflectance_from_albedo
from .flags import INFRARED_NM, RED_NM, laser_wavelength
from .materials import MaterialChoice, Materials, ice_free_ground, ice_materials
from .scene import Scene

__all__ = ["ice_fraction"]

_NODES = 513
_STEP_DEG = 0.25
_NAMES = {
    "fraction": "best fraction of ice",
    "fraction_lower": "lower end of the fraction's interval",
    "fraction_upper": "upper end of the fraction's interval",
    "misfit_sigma": "distance from the named mixture in standard deviations",
}
#: Beyond this distance from the mixing curve the named ground and ice do not lead there [sigma].
_MISFIT = 4.0


def ice_fraction(
    red: ArrayLike | xr.DataArray,
    infrared: ArrayLike | xr.DataArray,
    sigma_red: ArrayLike | xr.DataArray,
    sigma_infrared: ArrayLike | xr.DataArray,
    *,
    ground: MaterialChoice,
    ice: MaterialChoice,
    mixture: str = "areal",
    ice_grain_um: float | None = None,
    ground_grain_um: float | None = None,
    ground_density: float = 3.0,
    covariance: ArrayLike | xr.DataArray = 0.0,
    relative_red: ArrayLike | xr.DataArray = 0.0,
    relative_infrared: ArrayLike | xr.DataArray = 0.0,
    gain_sigma: float = 0.0,
    opposition_ratio: float = 1.0,
    incidence_deg: ArrayLike | xr.DataArray | None = None,
    red_nm: float | None = None,
    infrared_nm: float | None = None,
    confidence: float = 0.95,
) -> xr.Dataset:
    """Fraction of one named ice on one named ground, with its interval.

    Parameters
    ----------
    red, infrared, sigma_red, sigma_infrared : array_like or DataArray, any shape
        Albedos and their standard uncertainties, as for `ice_flags`; numpy or dask.
    ground, ice
        One material each, named or given by its albedos as for `ice_flags`, e.g. ``"Soil 62231"`` and
        ``"frost 50 µm"``.
    mixture : {"areal", "intimate"}
        Side by side: the fraction is one of area. Grain by grain: the fraction is one of mass.
    ice_grain_um, ground_grain_um : float
        Grain diameters of an intimate mixture [µm]; that of a named frost is known.
    ground_density : float
        Density of the ground's grains [g/cm³] (3.0: common practice, no source).
    covariance, relative_red, relative_infrared, gain_sigma, opposition_ratio, incidence_deg, red_nm, infrared_nm
        As for `ice_flags`; scaled errors are taken on the mixing curve. Unknown incidence (NaN) gives NaN.
    confidence : float
        Of the interval, two-sided.

    Returns
    -------
    Dataset, shape of `red`
        ``fraction``, ``fraction_lower``, ``fraction_upper`` [1], and ``misfit_sigma``, how far the albedos lie from
        every mixture of the two [sigma]; beyond 4 the named materials do not lead there and the fraction is NaN.

    Raises
    ------
    ValueError
        If ground or ice are not one material each, or a grain size is missing.

    Notes
    -----
    The interval is all fractions whose χ² is at most z² above the least. It holds for the named materials: another
    grain size of the ice gives another fraction. The constants of frost hold at 266 K; colder ice absorbs more deeply
    and in a narrower band near 1.5 µm.

    Examples
    --------
    >>> amount = ice_fraction(0.2174, 0.2648, 0.004, 0.005, ground={"soil": (0.1617, 0.2691)}, ice="frost 50 µm",
    ...                       mixture="intimate", ground_grain_um=50, red_nm=650)
    >>> [round(float(amount[name]), 2) for name in ("fraction_lower", "fraction", "fraction_upper")]
    [0.09, 0.1, 0.12]
    """
    one_of("mixture", mixture, ("areal", "intimate"))
    level = open_fraction("confidence", confidence)
    wavelengths = (
        laser_wavelength("red", red, red_nm, RED_NM),
        laser_wavelength("infrared", infrared, infrared_nm, INFRARED_NM),
    )
    if ground is None or ice is None:
        raise ValueError(
            "a fraction needs one named ground=… and one named ice=…; for bounds without see ice_flags"
        )
    pair = _one("ground", ice_free_ground(ground, wavelengths)), _one("ice", ice_materials(ice, wavelengths))
    weights = _weights(mixture, pair[1], ice_grain_um, ground_grain_um, ground_density)
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
        },
        gain_sigma=non_negative("gain_sigma", gain_sigma),
        opposition_ratio=positive("opposition_ratio", opposition_ratio),
    )
    curves = _curves(*pair, weights, by_incidence=incidence_deg is not None)
    from scipy.special import ndtri

    z = float(ndtri((1 + level) / 2))

    def fitted(points: Points) -> tuple[NDArray, ...]:
        from ._amount_loop import amount_loop

        best, lower, upper, away = (np.empty(len(points)) for _ in range(4))
        amount_loop(*points.measured(), _which(points, len(curves)), curves, z, best, lower, upper, away)
        for values in (best, lower, upper):
            values[away > _MISFIT] = np.nan
        return best, lower, upper, away

    results = scene.mapped(fitted, tuple(_NAMES), dict.fromkeys(_NAMES, np.float32))
    amount = xr.Dataset(
        {
            name: scene.labelled(values, {"long_name": _NAMES[name], "units": "1"})
            for name, values in results.items()
        }
    )
    amount.attrs = {
        "Conventions": "CF-1.11",
        "ground": pair[0].names[0],
        "ice": pair[1].names[0],
        "mixture": f"{mixture}: the fraction is one of {'area' if mixture == 'areal' else 'mass'}",
        "confidence": level,
        "red_nm": wavelengths[0],
        "infrared_nm": wavelengths[1],
    }
    return amount


def _one(name: str, materials: Materials) -> Materials:
    if len(materials.names) != 1:
        raise ValueError(
            f"a fraction needs one {name}, got {len(materials.names)}: {', '.join(materials.names[:4])}; "
            "for bounds over several see ice_flags"
        )
    return materials


def _weights(
    mixture: str,
    ice: Materials,
    ice_grain_um: float | None,
    ground_grain_um: float | None,
    ground_density: float,
) -> NDArray[np.float64] | None:
    """Weights of the albedos for each fraction of mass, shape (2, node): ice, ground; None for an areal mixture."""
    if mixture == "areal":
        return None
    words = ice.names[0].split()
    if ice_grain_um is None and words[0] == "frost":
        ice_grain_um = float(words[1])
    if ice_grain_um is None or ground_grain_um is None:
        raise ValueError(
            "a fraction of mass needs both grain sizes; give ground_grain_um=… and ice_grain_um=… (or a named frost)"
        )
    mass = np.linspace(0, 1, _NODES)
    return mass_weights(
        np.stack([mass, 1 - mass]),
        [ICE_DENSITY, positive("ground_density", ground_density, "g/cm³")],
        [positive("ice_grain_um", ice_grain_um, "µm"), positive("ground_grain_um", ground_grain_um, "µm")],
    )


def _curves(
    ground: Materials, ice: Materials, weights: NDArray[np.float64] | None, *, by_incidence: bool
) -> NDArray[np.float64]:
    """Albedos from no ice to pure ice, shape (bin of incidence, node, 2)."""
    middles: list[Any] = [None]
    if by_incidence:
        middles = (np.arange(0, STEEPEST_DEG, _STEP_DEG) + _STEP_DEG / 2).tolist()
    curves = []
    for angle in middles:
        if weights is None:
            share = np.linspace(0, 1, _NODES)[:, None]
            curves.append((1 - share) * ground.reflectance(angle) + share * ice.reflectance(angle))
        else:
            mixed = weights.T @ np.vstack([ice.albedos, ground.albedos])
            geometry = (30.0, 0.0) if angle is None else (angle, angle)
            curves.append(reflectance_from_albedo(mixed, *geometry))
    return np.array(curves)


def _which(points: Points, curves: int) -> NDArray[np.int32]:
    if curves == 1:
        return np.zeros(len(points), dtype=np.int32)
    incidence = points.incidence_deg
    if ((incidence < 0) | (incidence > STEEPEST_DEG)).any():
        raise ValueError(f"incidence_deg must lie between 0 and {STEEPEST_DEG:g} degrees")
    index = np.minimum(incidence / _STEP_DEG, curves - 1)
    return np.where(np.isnan(index), -1, index).astype(np.int32)
