"""Hapke's model as a photometric law: each pixel's single-scattering albedo, seen again at the standard geometry.

The H-functions are those of :mod:`bandratio.mixing`. Arrays only.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import ArrayLike

from .._checks import listed, one_of
from ..bands import TOLERANCE_NM, values_per_band
from ..mixing import chandrasekhar_h
from .angles import Geometry
from .laws import Law, Plane, _check_parameter, _plain

__all__ = ["Hapke", "rough_surface"]

_PER_BAND = ("b", "c", "B0", "h")
_RANGES = {"b": (0.0, 0.99), "c": (-1.0, 10.0), "B0": (0.0, 10.0), "h": (1e-6, 10.0)}


@dataclass(frozen=True)
class Hapke(Law):
    """Hapke's bidirectional reflectance; the single-scattering albedo w is found from each measured value.

    ``REFF = w/4 · μ0e/(μ0·(μ0e + μe)) · [(1 + B(g))·p(g) + H(μ0e)·H(μe) − 1] · S(i, e, g)``, with the opposition effect
    B(g) = B0/(1 + tan(g/2)/h), the two-lobed Henyey–Greenstein phase function p of shape b and backward weight c, and
    macroscopic roughness (μ0e, μe, S). The defaults are isotropic smooth grains without opposition effect.

    Parameters
    ----------
    b, c : float, mapping or sequence
        Shape (0 to below 1) and weight of p(g) [1]: p = (1+c)/2·(1−b²)/(1 − 2b·cos g + b²)^1.5 +
        (1−c)/2·(1−b²)/(1 + 2b·cos g + b²)^1.5; c above zero scatters backward. One number, ``{nm: value}`` or one per
        band.
    B0, h : float, mapping or sequence
        Amplitude and angular width of the opposition effect [1].
    roughness_deg : float
        Mean slope of the roughness that the geometry does not resolve [deg], 0 to 60.
    h_form : {2002, 1981}
        Which approximation of the H-function.

    Raises
    ------
    ValueError
        If a parameter lies outside its range, or p would be negative at some phase angle.

    References
    ----------
    Hapke 2012, Theory of Reflectance and Emittance Spectroscopy, 2nd ed., ch. 6, 8, 9 and 12,
    doi:10.1017/CBO9781139025683; H-function: Hapke 2002, Icarus 157, 523, doi:10.1006/icar.2002.6853.
    (p, B and the roughness functions from memory.)

    Examples
    --------
    >>> law = Hapke(b=0.3, c=0.4)
    >>> reff = law.reflectance_factor(0.4, 0.866, 1.0, 30.0)
    >>> round(float(law.albedo(reff, 0.866, 1.0, 30.0)), 9)
    0.4
    """

    b: Any = 0.0
    c: Any = 0.0
    B0: Any = 0.0
    h: Any = 0.05
    roughness_deg: float = 0.0
    h_form: int = 2002
    name: ClassVar[str] = "hapke"

    def __post_init__(self) -> None:
        for part in _PER_BAND:
            _check_parameter(f"{part} of Hapke's law", getattr(self, part), *_RANGES[part])
        if not 0 <= self.roughness_deg <= 60:
            raise ValueError(f"roughness_deg must lie between 0 and 60°, got {self.roughness_deg:g}°")
        one_of("h_form", str(self.h_form), ("2002", "1981"))
        if not self.per_band and (self.single_scattering(np.linspace(0, 180, 181)) < 0).any():
            raise ValueError(
                f"b = {self.b:g} and c = {self.c:g} make the single-scattering phase function negative; bring c nearer "
                "to between −1 and 1"
            )

    @property
    def per_band(self) -> bool:
        """True where a parameter is given for each band."""
        parts = (getattr(self, part) for part in _PER_BAND)
        return any(isinstance(value, Mapping) or np.ndim(value) > 0 for value in parts)

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[Law]:
        """The law of each of the given bands [nm]."""
        if not self.per_band:
            return [self] * np.size(centres)
        parts: dict[str, Any] = {
            part: values_per_band(part, getattr(self, part), centres, tolerance) for part in _PER_BAND
        }
        return [
            Hapke(
                **{part: float(values[band]) for part, values in parts.items()},
                roughness_deg=self.roughness_deg,
                h_form=self.h_form,
            )
            for band in range(np.size(centres))
        ]

    def single_scattering(self, phase_deg: ArrayLike) -> Plane:
        """Phase function p(g) of a grain, mean 1 over the sphere."""
        cos_g = np.cos(np.deg2rad(np.asarray(phase_deg, dtype=float)))
        b, c = float(self.b), float(self.c)
        back = (1 - b**2) / (1 - 2 * b * cos_g + b**2) ** 1.5
        ahead = (1 - b**2) / (1 + 2 * b * cos_g + b**2) ** 1.5
        return (1 + c) / 2 * back + (1 - c) / 2 * ahead

    def opposition(self, phase_deg: ArrayLike) -> Plane:
        """Opposition effect B(g)."""
        half = np.tan(np.deg2rad(np.minimum(np.asarray(phase_deg, dtype=float), 179.9)) / 2)
        return float(self.B0) / (1 + half / float(self.h))

    def reflectance_factor(
        self, albedo: ArrayLike, mu0: ArrayLike, mu: ArrayLike, phase_deg: ArrayLike
    ) -> Plane:
        """REFF of single-scattering albedo w at cosines of incidence and emission and the phase [deg]."""
        outer, mu0e, mue, single = self._geometry(mu0, mu, phase_deg)
        return self._reflectance(np.asarray(albedo, dtype=float), outer, mu0e, mue, single)

    def albedo(
        self, reflectance_factor: ArrayLike, mu0: ArrayLike, mu: ArrayLike, phase_deg: ArrayLike
    ) -> Plane:
        """Single-scattering albedo w that gives a reflectance factor; NaN where no w between 0 and 1 does."""
        from scipy.optimize.elementwise import find_root

        arrays = (np.asarray(reflectance_factor, dtype=float), *self._geometry(mu0, mu, phase_deg))
        wanted, outer, mu0e, mue, single = np.broadcast_arrays(*arrays)
        brightest = self._reflectance(np.ones_like(wanted), outer, mu0e, mue, single)
        inside = (wanted >= 0) & (wanted <= brightest)
        w = np.full(wanted.shape, np.nan)
        if not inside.any():
            return w

        # in γ = √(1 − w) the slope stays finite at w = 1
        def excess(gamma: Plane, *pixel: Plane) -> Plane:
            value = self._reflectance(1 - gamma**2, *pixel[1:])
            return value - pixel[0]

        pixels = tuple(array[inside] for array in (wanted, outer, mu0e, mue, single))
        found = find_root(
            excess,
            (0.0, 1.0),
            args=pixels,
            tolerances={"xatol": 1e-15, "xrtol": 1e-15, "fatol": 0, "frtol": 0},
        )
        w[inside] = 1 - found.x**2
        return w

    def seen_from(
        self, reflectance_factor: Plane, mu0: Plane, mu: Plane, phase_deg: Plane, target: Geometry
    ) -> tuple[Plane, Plane]:
        """REFF at another geometry of what has this REFF here, and its derivative by the REFF here."""
        w = self.albedo(reflectance_factor, mu0, mu, phase_deg)
        known = np.where(np.isfinite(w), w, 0.0)
        here, there = self._geometry(mu0, mu, phase_deg), self._geometry(target.mu0, target.mu, target.phase)
        # both by γ = √(1 − w), in which their slopes stay finite at w = 1; the step's own length cancels
        step = 1e-4
        gamma = np.clip(np.sqrt(1 - known), step, 1 - step)
        brighter, darker = 1 - (gamma - step) ** 2, 1 - (gamma + step) ** 2
        rise = self._reflectance(brighter, *there) - self._reflectance(darker, *there)
        slope = rise / (self._reflectance(brighter, *here) - self._reflectance(darker, *here))
        seen = self._reflectance(known, *there)
        return np.where(np.isfinite(w), seen, np.nan), np.where(np.isfinite(w), slope, np.nan)

    def disk(self, mu0: Plane, mu: Plane, phase_deg: Plane) -> Plane:
        """Not there: what the disk looks like depends on the albedo."""
        del mu0, mu, phase_deg
        raise ValueError(
            f"Hapke's law has no disk function that holds for every albedo; compare laws among {listed(DISK_LAWS)}"
        )

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        told = {part: _plain(getattr(self, part)) for part in _PER_BAND}
        return {"name": self.name, **told, "roughness_deg": self.roughness_deg, "h_form": self.h_form}

    def _geometry(self, mu0: ArrayLike, mu: ArrayLike, phase_deg: ArrayLike) -> tuple[Plane, ...]:
        """What does not depend on w: the factor before the bracket, effective cosines, (1 + B)·p − 1."""
        mu0, mu = np.asarray(mu0, dtype=float), np.asarray(mu, dtype=float)
        mu0e, mue, shading = rough_surface(mu0, mu, phase_deg, self.roughness_deg)
        single = (1 + self.opposition(phase_deg)) * self.single_scattering(phase_deg) - 1
        return mu0e / mu0 / (mu0e + mue) * shading / 4, mu0e, mue, single

    def _reflectance(self, w: Plane, outer: Plane, mu0e: Plane, mue: Plane, single: Plane) -> Plane:
        H0 = chandrasekhar_h(np.clip(mu0e, 0, 1), w, h_form=self.h_form)
        H = chandrasekhar_h(np.clip(mue, 0, 1), w, h_form=self.h_form)
        return w * outer * (single + H0 * H)


DISK_LAWS = ("lambert", "lommel_seeliger", "lunar_lambert", "minnaert", "akimov")


def rough_surface(
    mu0: ArrayLike, mu: ArrayLike, phase_deg: ArrayLike, roughness_deg: float
) -> tuple[Plane, Plane, Plane]:
    """Effective cosines and shading of a macroscopically rough surface.

    Parameters
    ----------
    mu0, mu : array_like
        Cosines of incidence and emission [1].
    phase_deg : array_like
        Phase angle [deg].
    roughness_deg : float
        Mean slope angle θ̄ [deg]; 0 is a smooth surface.

    Returns
    -------
    mu0e, mue, shading : ndarray
        Effective cosines and the shadowing function S [1].

    References
    ----------
    Hapke 1984, Icarus 59, 41, doi:10.1016/0019-1035(84)90054-X; Hapke 2012, ch. 12 (from memory).

    Examples
    --------
    >>> [float(x) for x in rough_surface(0.5, 0.5, 0.0, 0.0)]
    [0.5, 0.5, 1.0]
    """
    mu0, mu, g = np.broadcast_arrays(
        np.asarray(mu0, dtype=float), np.asarray(mu, dtype=float), np.asarray(phase_deg, dtype=float)
    )
    if roughness_deg < 1e-3:  # as good as smooth, and the exponents below would overflow
        return mu0, mu, np.ones_like(mu0)
    # below 1e-6 a direction counts as along the normal, where the azimuth has no meaning
    sin_i, sin_e = (np.sqrt(np.maximum(1 - x**2, 1e-12)) for x in (mu0, mu))
    cos_azimuth = np.clip((np.cos(np.deg2rad(g)) - mu0 * mu) / (sin_i * sin_e), -1, 1)
    azimuth = np.arccos(cos_azimuth)
    tan_theta = np.tan(np.deg2rad(roughness_deg))
    chi = 1 / np.sqrt(1 + np.pi * tan_theta**2)

    def E1(x: Plane, sin_x: Plane) -> Plane:
        return np.exp(-2 / np.pi / tan_theta * x / sin_x)

    def E2(x: Plane, sin_x: Plane) -> Plane:
        return np.exp(-1 / np.pi / tan_theta**2 * (x / sin_x) ** 2)

    def eta(x: Plane, sin_x: Plane) -> Plane:
        return chi * (x + sin_x * tan_theta * E2(x, sin_x) / (2 - E1(x, sin_x)))

    # the steeper of the two directions decides which shadow hides the other
    steep_is_source = mu0 <= mu
    steep, flat = np.where(steep_is_source, mu0, mu), np.where(steep_is_source, mu, mu0)
    sin_steep, sin_flat = np.where(steep_is_source, sin_i, sin_e), np.where(steep_is_source, sin_e, sin_i)
    half = np.sin(azimuth / 2) ** 2
    below = 2 - E1(steep, sin_steep) - azimuth / np.pi * E1(flat, sin_flat)
    steep_e = chi * (
        steep + sin_steep * tan_theta * (E2(steep, sin_steep) - half * E2(flat, sin_flat)) / below
    )
    flat_e = chi * (
        flat + sin_flat * tan_theta * (cos_azimuth * E2(steep, sin_steep) + half * E2(flat, sin_flat)) / below
    )
    mu0e, mue = np.where(steep_is_source, steep_e, flat_e), np.where(steep_is_source, flat_e, steep_e)
    f = np.exp(-2 * np.tan(np.minimum(azimuth, np.pi - 1e-9) / 2))
    shading = (
        mue / eta(mu, sin_e) * mu0 / eta(mu0, sin_i) * chi / (1 - f + f * chi * flat / eta(flat, sin_flat))
    )
    return mu0e, mue, shading
