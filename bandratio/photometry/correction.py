"""The arithmetic of normalising one block of pixels. Arrays only.

A block is a few ten thousand pixels, so that every intermediate plane stays in the processor's cache.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .angles import Geometry, cosine
from .hapke import Hapke
from .laws import Lambert, Law, LommelSeeliger, LunarLambert, Plane
from .phase import PhaseFunction

__all__ = ["REASONS", "Correction"]

#: Why a pixel is masked, by the number in the flag plane; 0 is used.
REASONS = (
    "used",
    "no_geometry",
    "cast_shadow",
    "sun_too_low",
    "view_too_oblique",
    "impossible_angles",
    "outside_phase_function",
    "brighter_than_law",
)
#: How far rounded angles may miss |i − e| ≤ g ≤ i + e [deg] (common practice, no source).
SLACK_DEG = 0.5
_MIDDLING_ALBEDO = 0.3
_MIXED = (Lambert, LommelSeeliger, LunarLambert)


@dataclass(frozen=True)
class Correction:
    """What to do to every pixel: everything spelled out for the bands of one cube.

    Parameters
    ----------
    laws : tuple of Law
        One for each band.
    phase_functions : tuple of PhaseFunction or None
        One for each band; None where brightness is not taken to fall with phase.
    target : Geometry
        The standard geometry [deg].
    per_mu0 : bool
        True for quantities that are divided by μ0 (reflectance factor, BRDF).
    per_reff : float
        The quantity per reflectance factor (or, with `per_mu0` false, per radiance factor) [1 or 1/sr].
    slope_sigma_deg : float
        Standard error of the surface's slope along any one direction [deg]; may be a plane at the call.
    spread : tuple of Law
        Laws whose factors span what the truth may be, the chosen one first (Hapke's has no disk function and is not
        among them).
    least_mu0, least_mu : float
        Cosines below which a pixel is masked [1].
    """

    laws: tuple[Law, ...]
    phase_functions: tuple[PhaseFunction, ...] | None
    target: Geometry
    per_mu0: bool
    per_reff: float
    slope_sigma_deg: float
    spread: tuple[Law, ...]
    least_mu0: float
    least_mu: float

    @property
    def mixed_only(self) -> bool:
        """True where all laws mix Lambert's and Lommel and Seeliger's, which the compiled loop does fastest."""
        laws = (*self.laws, *self.spread)
        return self.phase_functions is None and all(isinstance(law, _MIXED) for law in laws)

    @property
    def bands_alike(self) -> bool:
        """True where every band of a pixel is multiplied by the same factor."""
        functions = self.phase_functions or ()
        return len(set(self.laws)) <= 1 and len(set(functions)) <= 1 and not isinstance(self.laws[0], Hapke)

    @property
    def has_sigma(self) -> bool:
        """True where the correction itself is uncertain."""
        return self.slope_sigma_deg > 0 or bool(self.spread)

    def flags(
        self, incidence: NDArray, emission: NDArray, phase: NDArray, shadow: NDArray | None = None
    ) -> NDArray[np.int8]:
        """Why each pixel is masked (index into `REASONS`), from angles [deg]."""
        flag = np.zeros(incidence.shape, dtype=np.int8)
        with np.errstate(invalid="ignore"):
            if self.phase_functions is not None:
                defined = np.ones(incidence.shape, dtype=bool)
                for function in dict.fromkeys(self.phase_functions):
                    defined &= function.value(phase) > 0
                flag[~defined] = 6
            total, difference = incidence + emission, np.abs(incidence - emission)
            possible = (phase <= total + SLACK_DEG) & (phase >= difference - SLACK_DEG)
            possible &= (incidence >= 0) & (emission >= 0)
            flag[~possible] = 5
            # comparing angles saves the cosines: μ falls steadily from 0 to 180°
            flag[emission > math.degrees(math.acos(self.least_mu))] = 4
            flag[incidence > math.degrees(math.acos(self.least_mu0))] = 3
            if shadow is not None:
                flag[shadow.astype(bool)] = 2
            flag[~np.isfinite(total + phase)] = 1
        return flag

    def apply(
        self,
        values: NDArray,
        incidence: NDArray,
        emission: NDArray,
        phase: NDArray,
        flag: NDArray,
        out: NDArray,
        brightness: NDArray,
    ) -> None:
        """Write the normalised values of one block, NaN where the flag is not 0, and what they were multiplied by.

        Parameters
        ----------
        values : ndarray, shape (band, …)
            Reflectances of the quantity that was agreed on.
        incidence, emission, phase : ndarray, shape (…)
            Angles [deg].
        flag : ndarray of int8, shape (…)
            As `flags` gives it; pixels that turn out brighter than the law allows are marked here.
        out : ndarray, shape (band, …)
            Where to write; without bands, only the factors are written.
        brightness : ndarray, shape (0, 1 or band, …)
            Where to write by how much R at the standard geometry grows with R here [1], which is their ratio where the
            law is linear: not at all, of the first band, or of each.
        """
        with np.errstate(all="ignore"):
            mu0, mu = cosine(incidence), cosine(emission)
            previous: Law | None = None
            factor: NDArray = mu0
            for band, law in enumerate(self.laws):
                if band >= max(len(out), len(brightness)):
                    break
                if isinstance(law, Hapke):
                    out[band], slope = self._hapke(law, values[band], mu0, mu, phase, flag)
                    if band < len(brightness):
                        brightness[band] = slope
                    continue
                if law is not previous:
                    factor = self._factor(law, mu0, mu, phase)
                    np.copyto(factor, np.nan, where=flag != 0)
                    previous = law
                whole = factor
                if self.phase_functions is not None:
                    function = self.phase_functions[band]
                    whole = factor * (function.value(np.array(self.target.phase)) / function.value(phase))
                if band < len(out):
                    np.multiply(values[band], whole, out=out[band])
                if band < len(brightness):
                    brightness[band] = whole

    def sigma(
        self,
        incidence: NDArray,
        emission: NDArray,
        phase: NDArray,
        flag: NDArray,
        slope_sigma_deg: NDArray | None = None,
    ) -> NDArray:
        """Relative standard uncertainty of the correction, common to all bands of a pixel [1].

        A slope error turns the normal by a small angle of standard deviation σ along either of two axes across it. The
        phase angle stays, μ0 and μ change by the components of the sun's and the viewer's direction along the turn, so
        var ln R = σ²·(a²(1 − μ0²) + b²(1 − μ²) + 2ab(cos g − μ0·μ)), with a and b the derivatives of the correction's
        logarithm by μ0 and μ. What the laws differ by is taken as a rectangular distribution between the smallest and
        the largest factor (GUM, JCGM 100:2008, 4.3.7): variance (largest − smallest)²/12, relative to the factor used.
        """
        with np.errstate(all="ignore"):
            mu0, mu = cosine(incidence), cosine(emission)
            variance = np.zeros_like(mu0)
            sigma_deg = self.slope_sigma_deg if slope_sigma_deg is None else slope_sigma_deg
            if self.slope_sigma_deg > 0:
                a, b = self._log_slopes(mu0, mu, phase)
                if self.per_mu0:
                    a = a - 1 / mu0
                across = (
                    a * a * (1 - mu0 * mu0) + b * b * (1 - mu * mu) + 2 * a * b * (cosine(phase) - mu0 * mu)
                )
                variance += np.square(np.deg2rad(sigma_deg)) * np.maximum(across, 0)
            if self.spread:
                used = least = most = self._disk_factor(self.spread[0], mu0, mu, phase)
                for law in self.spread[1:]:
                    factor = self._disk_factor(law, mu0, mu, phase)
                    least, most = np.minimum(least, factor), np.maximum(most, factor)
                variance += np.square((most - least) / used) / 12
            sigma: NDArray = np.sqrt(variance)
        np.copyto(sigma, np.nan, where=flag != 0)
        return sigma

    def _disk_factor(self, law: Law, mu0: NDArray, mu: NDArray, phase: NDArray) -> Plane:
        return mu0.dtype.type(law.at(self.target)) / law.disk(mu0, mu, phase)

    def _factor(self, law: Law, mu0: NDArray, mu: NDArray, phase: NDArray) -> Plane:
        """R at the standard geometry over R here, without the phase function."""
        factor = self._disk_factor(law, mu0, mu, phase)
        if self.per_mu0:
            factor *= mu0 * mu0.dtype.type(1 / self.target.mu0)
        return factor.astype(mu0.dtype, copy=False)

    def _log_slopes(self, mu0: NDArray, mu: NDArray, phase: NDArray) -> tuple[NDArray, NDArray]:
        """∂ln D/∂μ0 and ∂ln D/∂μ, where the law differs from band to band their mean over the bands."""
        distinct = list(dict.fromkeys(self.laws))
        slopes = [
            self._hapke_slopes(law, mu0, mu, phase)
            if isinstance(law, Hapke)
            else law.log_slopes(mu0, mu, phase)
            for law in distinct
        ]
        if len(slopes) == 1:
            return slopes[0]
        return (
            np.mean([a for a, _ in slopes], axis=0).astype(mu0.dtype),
            np.mean([b for _, b in slopes], axis=0).astype(mu0.dtype),
        )

    def _hapke_slopes(self, law: Hapke, mu0: NDArray, mu: NDArray, phase: NDArray) -> tuple[NDArray, NDArray]:
        """Derivatives of ln(I/F) at a middling albedo; how they change with w is far below the slope error itself."""
        step = 1e-5
        g = np.asarray(phase, dtype=float)

        def log(x0: Plane, x: Plane) -> Plane:
            return np.log(x0 * law.reflectance_factor(_MIDDLING_ALBEDO, x0, x, g))

        x0, x = np.clip(mu0.astype(float), 0.01, 1 - step), np.clip(mu.astype(float), 0.01, 1 - step)
        a = (log(x0 + step, x) - log(x0 - step, x)) / (2 * step)
        b = (log(x0, x + step) - log(x0, x - step)) / (2 * step)
        return a.astype(mu0.dtype), b.astype(mu0.dtype)

    def _hapke(
        self, law: Hapke, values: NDArray, mu0: NDArray, mu: NDArray, phase: NDArray, flag: NDArray
    ) -> tuple[NDArray, NDArray]:
        """Values at the standard geometry, and their derivative by the values here."""
        used = flag == 0
        result = np.full((2, *values.shape), np.nan, dtype=values.dtype)
        # the quantity as a reflectance factor, and back at the standard geometry
        here = values[used] / self.per_reff
        there, geometry = self.per_reff, 1.0
        if not self.per_mu0:
            here = here / mu0[used]
            there, geometry = self.per_reff * self.target.mu0, self.target.mu0 / mu0[used]
        seen, slope = law.seen_from(here, mu0[used], mu[used], phase[used], self.target)
        result[0][used], result[1][used] = seen * there, slope * geometry
        beyond = np.zeros(values.shape, dtype=bool)
        beyond[used] = np.isfinite(here) & ~np.isfinite(seen)
        flag[beyond] = 7
        return result[0], result[1]
