"""Disk functions D(i, e, g): how brightness changes with the slope of the surface.

A radiance factor (I/F) is A·f(g)·D, with A what the surface is made of and f the phase function. Arrays only.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, TypeAlias

import numpy as np
from numpy.typing import ArrayLike

from .._checks import suggestion
from ..bands import TOLERANCE_NM, values_per_band
from .angles import Geometry

__all__ = [
    "LAWS",
    "Akimov",
    "Lambert",
    "Law",
    "LommelSeeliger",
    "LunarLambert",
    "Minnaert",
    "Plane",
    "law_of",
]

#: A number or an array of either float precision; numpy's own types would lose the precision in every product.
Plane: TypeAlias = Any

#: L of the lunar-Lambert law as a polynomial of phase [deg]: 1 − 0.019 g + 2.42e-4 g² − 1.46e-6 g³
#: (McEwen 1996, Lunar Planet. Sci. 27, 841; constants from memory). Above 104° it would be negative.
MCEWEN_1996 = (1.0, -0.019, 2.42e-4, -1.46e-6)


class Law:
    """What every law can do. A law of your own needs `name` and `disk`."""

    name: ClassVar[str] = ""
    #: True where the law obeys Helmholtz reciprocity: D/μ0 does not change when source and viewer change places.
    reciprocal: ClassVar[bool] = True

    @property
    def per_band(self) -> bool:
        """True where it is another function in another band."""
        return False

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[Law]:  # noqa: ARG002
        """The law of each of the given bands [nm]."""
        return [self] * np.size(centres)

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D for cosines of incidence and emission [1] and the phase angle [deg]."""
        raise NotImplementedError

    def log_slopes(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> tuple[Plane, Plane]:
        """∂ln D/∂μ0 and ∂ln D/∂μ, here by central differences."""
        mu0, mu, g = (np.asarray(array, dtype=float) for array in (mu0, mu, phase_deg))
        step0, step = 1e-5 * mu0, 1e-5 * mu
        along0 = np.log(self.disk(mu0 + step0, mu, g) / self.disk(mu0 - step0, mu, g)) / (2 * step0)
        along = np.log(self.disk(mu0, mu + step, g) / self.disk(mu0, mu - step, g)) / (2 * step)
        return along0, along

    def at(self, target: Geometry) -> float:
        """D at one geometry."""
        return float(self.disk(np.float64(target.mu0), np.float64(target.mu), np.float64(target.phase)))

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        return {"name": self.name}


@dataclass(frozen=True)
class Lambert(Law):
    """D = μ0: equally bright from every side, the limit of strong multiple scattering.

    Examples
    --------
    >>> float(Lambert().disk(0.5, 1.0, 60.0))
    0.5
    """

    name: ClassVar[str] = "lambert"

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D = μ0."""
        return mu0 + 0 * mu + 0 * phase_deg

    def log_slopes(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> tuple[Plane, Plane]:
        """1/μ0 and 0."""
        del phase_deg
        return 1 / mu0, np.zeros_like(mu)


@dataclass(frozen=True)
class LommelSeeliger(Law):
    """D = 2μ0/(μ0 + μ): dark grains that scatter once.

    References
    ----------
    Hapke 2012, Theory of Reflectance and Emittance Spectroscopy, 2nd ed., ch. 8, doi:10.1017/CBO9781139025683.

    Examples
    --------
    >>> float(LommelSeeliger().disk(0.7, 0.7, 0.0))
    1.0
    """

    name: ClassVar[str] = "lommel_seeliger"

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D = 2μ0/(μ0 + μ)."""
        del phase_deg
        return 2 * mu0 / (mu0 + mu)

    def log_slopes(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> tuple[Plane, Plane]:
        """μ/(μ0(μ0 + μ)) and −1/(μ0 + μ)."""
        del phase_deg
        inverse = 1 / (mu0 + mu)
        return mu / mu0 * inverse, -inverse


@dataclass(frozen=True)
class LunarLambert(Law):
    """D = 2L·μ0/(μ0 + μ) + (1 − L)·μ0: between Lommel–Seeliger (L = 1) and Lambert (L = 0).

    Parameters
    ----------
    L : float, mapping or sequence, optional
        Weight of the Lommel–Seeliger part [1], one number, ``{nm: L}`` or one per band. None: the Moon's, falling with
        phase as 1 − 0.019 g + 2.42e-4 g² − 1.46e-6 g³ (g in degrees), and 0 where that is negative (above 104°).

    Raises
    ------
    ValueError
        If L lies outside 0 to 1.5.

    References
    ----------
    McEwen 1991, Icarus 92, 298, doi:10.1016/0019-1035(91)90053-V; L(g): McEwen 1996, Lunar Planet. Sci. 27, 841
    (constants from memory).

    Examples
    --------
    >>> round(float(LunarLambert().at(Geometry(30, 0, 30))), 4)
    0.9039
    """

    L: Any = None
    name: ClassVar[str] = "lunar_lambert"

    def __post_init__(self) -> None:
        if self.L is not None:
            _check_parameter("L of the lunar-Lambert law", self.L, 0.0, 1.5)

    @property
    def per_band(self) -> bool:
        """True where L is given for each band."""
        return self.L is not None and (isinstance(self.L, Mapping) or np.ndim(self.L) > 0)

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[Law]:
        """The law of each of the given bands [nm]."""
        if not self.per_band:
            return super().for_bands(centres, tolerance)
        return [LunarLambert(float(L)) for L in values_per_band("L", self.L, centres, tolerance)]

    def weight(self, phase_deg: Plane) -> Plane:
        """L at phase angles [deg]."""
        if self.L is not None:
            return float(self.L)
        c0, c1, c2, c3 = MCEWEN_1996
        g = np.asarray(phase_deg)
        L = ((c3 * g + c2) * g + c1) * g + c0
        return np.maximum(L, 0 * L)

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D = 2L·μ0/(μ0 + μ) + (1 − L)·μ0."""
        L = self.weight(phase_deg)
        return mu0 * (2 * L / (mu0 + mu) + (1 - L))

    def log_slopes(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> tuple[Plane, Plane]:
        """The derivatives of ln D."""
        L = self.weight(phase_deg)
        inverse = 1 / (mu0 + mu)
        seeliger = 2 * L * inverse
        along = -seeliger * inverse / (seeliger + (1 - L))
        return 1 / mu0 + along, along

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        return {"name": self.name, "L": "McEwen 1996" if self.L is None else _plain(self.L)}


@dataclass(frozen=True)
class Minnaert(Law):
    """D = μ0^k·μ^(k−1).

    Parameters
    ----------
    k : float, mapping or sequence
        Minnaert's exponent [1], one number, ``{nm: k}`` or one per band. 1 is Lambert, 0.5 limb-neutral.

    Raises
    ------
    ValueError
        If k lies outside 0 to 2.

    References
    ----------
    Minnaert 1941, Astrophys. J. 93, 403, doi:10.1086/144279.

    Examples
    --------
    >>> round(float(Minnaert(0.5).disk(0.5, 0.5, 0.0)), 6)
    1.0
    """

    k: Any = 0.5
    name: ClassVar[str] = "minnaert"

    def __post_init__(self) -> None:
        _check_parameter("k of Minnaert's law", self.k, 0.0, 2.0)

    @property
    def per_band(self) -> bool:
        """True where k is given for each band."""
        return isinstance(self.k, Mapping) or np.ndim(self.k) > 0

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[Law]:
        """The law of each of the given bands [nm]."""
        if not self.per_band:
            return super().for_bands(centres, tolerance)
        return [Minnaert(float(k)) for k in values_per_band("k", self.k, centres, tolerance)]

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D = μ0^k·μ^(k−1), as (μ0·μ)^k/μ."""
        del phase_deg
        return np.exp(float(self.k) * np.log(mu0 * mu)) / mu

    def log_slopes(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> tuple[Plane, Plane]:
        """k/μ0 and (k − 1)/μ."""
        del phase_deg
        return float(self.k) / mu0, (float(self.k) - 1) / mu

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        return {"name": self.name, "k": _plain(self.k)}


@dataclass(frozen=True)
class Akimov(Law):
    """D = cos(g/2)·cos(π/(π − g)·(γ − g/2))·(cos β)^(g/(π − g))/cos γ, without parameters.

    β and γ are photometric latitude and longitude: μ0 = cos β·cos(γ − g), μ = cos β·cos γ. It holds for an extremely
    rough (fractal) surface; at zero phase the disk is uniform.

    References
    ----------
    Shkuratov et al. 2011, Planet. Space Sci. 59, 1326, doi:10.1016/j.pss.2011.06.011.

    Examples
    --------
    >>> round(float(Akimov().disk(0.6, 0.6, 0.0)), 6)
    1.0
    """

    name: ClassVar[str] = "akimov"

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """D of the parameter-free form, 1 at zero phase."""
        g = np.deg2rad(np.asarray(phase_deg, dtype=float))
        mu0, mu = np.asarray(mu0, dtype=float), np.asarray(mu, dtype=float)
        # tan γ = (μ0/μ − cos g)/sin g; where g vanishes D is 1 whatever γ is, so any small g serves there
        g = np.maximum(g, 1e-6)
        longitude = np.arctan2(mu0 / mu - np.cos(g), np.sin(g))
        longitude = np.clip(longitude, g - np.pi / 2, np.pi / 2)
        cos_longitude = np.cos(longitude)
        cos_latitude = np.minimum(mu / cos_longitude, 1.0)
        stretched = np.cos(np.pi / (np.pi - g) * (longitude - g / 2))
        return np.cos(g / 2) * stretched * cos_latitude ** (g / (np.pi - g)) / cos_longitude


#: The laws that need no parameter of the user's, by name; Minnaert's k is 0.5 unless given.
LAWS: dict[str, type[Law]] = {
    law.name: law for law in (Lambert, LommelSeeliger, LunarLambert, Minnaert, Akimov)
}


def law_of(law: str | Law) -> Law:
    """The law behind a name, or the law itself.

    Raises
    ------
    ValueError, TypeError
        If the name is unknown, or it is neither a name nor a law.

    Examples
    --------
    >>> law_of("minnaert")
    Minnaert(k=0.5)
    """
    if isinstance(law, Law):
        return law
    if isinstance(law, type) and issubclass(law, Law):
        return law()
    if not isinstance(law, str):
        raise TypeError(f"law must be a name or a law such as Minnaert(k=0.6), got {law!r}")
    if law not in LAWS:
        raise ValueError(f"unknown photometric law {law!r}{suggestion(law, LAWS)}")
    return LAWS[law]()


def _check_parameter(name: str, value: Any, least: float, most: float) -> None:
    values = list(value.values()) if isinstance(value, Mapping) else value
    try:
        array = np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be a number or one per band, got {value!r}") from None
    if array.size == 0 or not ((array >= least) & (array <= most)).all():
        raise ValueError(f"{name} must lie between {least:g} and {most:g}, got {value!r}")


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {f"{nm:g}": float(number) for nm, number in value.items()}
    return float(value) if np.ndim(value) == 0 else [float(number) for number in value]
