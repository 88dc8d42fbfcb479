"""How little ice two lasers can see, before they are built."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import listed, non_negative, one_of, open_fraction, positive
from ..detection.hull import LABORATORY_GEOMETRY, HullsByIncidence, mixture_hull
from ..detection.outside import Points, hull_p_values
from ..ice.materials import MaterialChoice, Materials, ice_free_ground
from ..ice.sight import reference_ground
from ..mixing import ICE_DENSITY, ice_albedo, mass_weights, reflectance_from_albedo

__all__ = ["LASER_CAUTION", "View", "least_ice", "pair_of", "place_of"]

#: Stands wherever a laser is planned.
LASER_CAUTION = (
    "Lasers near 1.5 µm and in the red can blind. Eye safety follows IEC 60825-1, local rules and a licensed laser "
    "safety officer; no figure of this tool is a safety assessment."
)

#: Fractions of ice that are tried; between two, the logarithm is interpolated.
_FRACTIONS = np.geomspace(1e-3, 1, 97)
_DRAWS = 2048


def least_ice(
    kind: Literal["areal", "intimate"],
    *,
    ice_free: MaterialChoice = None,
    site: str | None = None,
    red_nm: float = 640.0,
    infrared_nm: float = 1535.0,
    grain_um: float = 50.0,
    relative: float | Sequence[float] = 0.03,
    sigma: float | Sequence[float] = 0.002,
    gain_sigma: float = 0.0,
    incidence_deg: float | None = None,
    false_discovery_rate: float = 0.05,
    prevalence: float = 0.05,
    probability: float = 0.9,
    ground_grain_um: float = 50.0,
    ground_density: float = 3.0,
) -> float:
    """Least ice that is flagged as a candidate with a given probability.

    Parameters
    ----------
    kind : {"areal", "intimate"}
        Ice side by side with the ground within the beam [share of the area], or grain by grain [share of the weight].
    ice_free : optional
        The ground list that shots will be held against, as for `ice_flags`; None: any rock, which hides little ice.
    site : str, optional
        The material of the list that the ice lies on or in; else mature soil, or a middling one.
    red_nm, infrared_nm : float
        Wavelengths of the lasers [nm].
    grain_um : float
        Grain size of the ice [µm].
    relative, sigma : float or (float, float)
        Standard uncertainty of each shot's own, as a fraction of the albedo and in albedo; red and infrared.
    gain_sigma : float
        Uncertainty of the red over infrared gain [fraction].
    incidence_deg : float, optional
        Incidence of the shots [degree]; None: the laboratory's geometry.
    false_discovery_rate, prevalence : float
        Rate to hold, and share of the shots that hold ice. The rarer ice is, the further out a shot must lie.
    probability : float
        Wanted probability that a shot with that much ice is flagged.
    ground_grain_um, ground_density : float
        Grain size [µm] and density [g/cm³] of the ground's grains, for intimate ice.

    Returns
    -------
    float
        Least fraction; NaN where no amount is found.

    Raises
    ------
    ValueError
        If the site is not in the list, or a number is out of its range.

    Notes
    -----
    With prevalence π and power β the rule of Benjamini and Hochberg settles, over many shots, at the p-value cut t of
    t = rate·(πβ + (1 − π)·F(t)); the share F of ice-free shots below the cut is taken as zero, which they are well
    inside the ground list and which finds a little too little where they lie on its edge. The probability is counted
    over 2048 draws of the noise. Constants of ice hold at 266 K; on colder floors the absorption is deeper, narrower.

    References
    ----------
    Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289, doi:10.1111/j.2517-6161.1995.tb02031.x; Genovese & Wasserman
    2002, J. R. Stat. Soc. B 64, 499, doi:10.1111/1467-9868.00347 (where the rule settles).

    Examples
    --------
    >>> round(least_ice("areal", ice_free=["Soil 62231", "Ilmenite HS231.3B"], grain_um=200), 2)
    0.03
    """
    one_of("kind", kind, ("areal", "intimate"))
    lasers = (positive("red_nm", red_nm, "nm"), positive("infrared_nm", infrared_nm, "nm"))
    ground = ice_free_ground(ice_free, lasers)
    return View.of(ground, place_of(ground, site), lasers, incidence_deg).least(
        kind, grain_um, relative, sigma, gain_sigma, false_discovery_rate, prevalence, probability,
        (ground_grain_um, ground_density),
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class View:
    """A ground list as two lasers see it at one geometry, and the site on it."""

    site_albedo: NDArray[np.float64]
    hull: HullsByIncidence
    lasers: tuple[float, float]
    geometry: tuple[float, float]

    @classmethod
    def of(
        cls, ground: Materials, place: int, lasers: tuple[float, float], incidence_deg: float | None
    ) -> View:
        """Build the hull."""
        geometry = LABORATORY_GEOMETRY if incidence_deg is None else (float(incidence_deg),) * 2
        if not 0 <= geometry[0] <= 80:
            raise ValueError(f"incidence_deg must lie between 0 and 80 degrees, got {geometry[0]:g}")
        hull = HullsByIncidence((mixture_hull(ground.albedos, [geometry]),), by_incidence=False)
        return cls(ground.albedos[place], hull, lasers, geometry)

    def least(
        self, kind: str, grain_um: float, relative: Any, sigma: Any, gain_sigma: float, rate: float,
        prevalence: float, probability: float, ground_grains: tuple[float, float],
    ) -> float:  # fmt: skip
        """See `least_ice`."""
        errors = _errors(relative, sigma, gain_sigma)
        cut = (
            open_fraction("the false discovery rate", rate)
            * open_fraction("prevalence", prevalence)
            * open_fraction("probability", probability)
        )
        size = positive("grain_um", grain_um, "µm")
        ice = ice_albedo(np.array(self.lasers), size)
        mixed = _mixed(kind, self.site_albedo, ice, self.geometry, size, ground_grains)
        return _crossing(_share_found(self.hull, mixed, cut, *errors), probability)


def _mixed(
    kind: str,
    ground: NDArray[np.float64],
    ice: NDArray[np.float64],
    geometry: tuple[float, float],
    ice_um: float,
    grains: tuple[float, float],
) -> NDArray[np.float64]:
    """Red and infrared albedo of ground with each of the tried fractions of ice, shape (fraction, 2)."""
    if kind == "areal":
        of_ground, of_ice = (reflectance_from_albedo(w, *geometry) for w in (ground, ice))
        return np.asarray(of_ground + _FRACTIONS[:, None] * (of_ice - of_ground))
    ground_um, density = positive("ground_grain_um", grains[0], "µm"), positive("ground_density", grains[1])
    share = mass_weights(np.stack([_FRACTIONS, 1 - _FRACTIONS]), [ICE_DENSITY, density], [ice_um, ground_um])[
        0
    ]
    return np.asarray(reflectance_from_albedo(ground + share[:, None] * (ice - ground), *geometry))


def _share_found(
    hull: HullsByIncidence,
    mixed: NDArray[np.float64],
    cut: float,
    relative: tuple[float, float],
    sigma: tuple[float, float],
    gain_sigma: float,
) -> NDArray[np.float64]:
    """Share of noisy shots of each mixture whose p-value is at most the cut."""
    scaled = (relative[0], float(np.hypot(relative[1], gain_sigma)))
    spread = np.sqrt((mixed * scaled) ** 2 + np.square(sigma))
    shots = mixed[:, None, :] + spread[:, None, :] * _normal_pairs()
    points = Points.of(
        shots[..., 0], shots[..., 1], *sigma, relative_red=relative[0], relative_infrared=relative[1],
        gain_sigma=gain_sigma,
    )  # fmt: skip
    p = hull_p_values(hull, points, threads=1)[1].reshape(shots.shape[:2])
    return np.asarray((p <= cut).mean(axis=1))


def _normal_pairs() -> NDArray[np.float64]:
    """Pairs of standard normal numbers that fill the plane evenly, always the same."""
    from scipy.special import ndtri
    from scipy.stats import qmc

    return np.asarray(ndtri(qmc.Sobol(2, scramble=True, rng=1).random(_DRAWS)))


def _crossing(found: NDArray[np.float64], probability: float) -> float:
    enough = found >= probability
    if not enough.any():
        return float("nan")
    first = int(np.argmax(enough))
    if first == 0:
        return float(_FRACTIONS[0])
    before, after = found[first - 1], found[first]
    step = (probability - before) / (after - before)
    low, high = np.log(_FRACTIONS[first - 1]), np.log(_FRACTIONS[first])
    return float(np.exp(low + step * (high - low)))


def place_of(ground: Materials, site: str | None) -> int:
    """Place of the site in the ground list."""
    if site is None:
        return reference_ground(ground)
    if site not in ground.names:
        raise ValueError(
            f"the site must be a material of the ground list, {listed(ground.names)}; got {site!r}"
        )
    return ground.names.index(site)


def _errors(
    relative: Any, sigma: Any, gain_sigma: float
) -> tuple[tuple[float, float], tuple[float, float], float]:
    both = pair_of("relative", relative), pair_of("sigma", sigma)
    if any(part >= 1 for part in both[0]):
        raise ValueError(f"relative is a fraction below 1, got {listed(both[0])}; 3 % is 0.03")
    if not all(any(part[i] for part in both) for i in (0, 1)):
        raise ValueError("both channels need some noise; give relative=… or sigma=… above zero")
    return both[0], both[1], non_negative("gain_sigma", gain_sigma)


def pair_of(name: str, value: ArrayLike) -> tuple[float, float]:
    """Red and infrared part of what may be one number for both."""
    try:
        numbers = np.asarray(value, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(
            f"{name} must be a number, or one for red and one for infrared, got {value!r}"
        ) from None
    if numbers.shape not in ((), (2,)):
        raise ValueError(f"{name} must be a number, or one for red and one for infrared, got {value!r}")
    red, infrared = (non_negative(name, part) for part in np.broadcast_to(numbers, 2))
    return red, infrared
