"""Which errors count against which threshold: a gain cancels against a threshold from the same scene, others do not.

Maps of two parameters, reflectance R at 700 nm and red slope S, hold the two bands that they were made from:

    s = S/c,  c = 2·10⁴ % nm / (λ2 − λ1)      R2 = R,  R1 = R·(1 − s)/(1 + s)

so every part of a known noise can be written as a variance of R and of S.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..bands import nearest_band, values_per_band
from ..noise import Noise

__all__ = ["BRIGHTNESS", "SLOPE", "KnownNoise"]

BRIGHTNESS, SLOPE = "reflectance_700", "red_slope"

#: Percent, and per 100 nm: the scale of a normalised gradient is this over the distance of its bands [nm].
_GRADIENT_SCALE = 2 * 100 * 100


@dataclass(frozen=True)
class KnownNoise:
    """The parts of a noise at the two bands of the red slope, read back from the maps' attributes.

    Each array holds the shorter band first; units as in `Noise`.

    Parameters
    ----------
    shot, relative, band_gain, band_offset : ndarray, shape (2,)
    common_gain : float
    mosaic : bool
        True where gains and offsets are shared within the images of a mosaic, not by the whole scene.
    scale : float
        c of the slope [% per 100 nm].
    rescaled : bool
        True where the cube's own `brightness_factor` or `pixel_gain` entered the sigmas, which the maps do not hold in
        full: what offsets amount to in a pixel is then not known from here.
    """

    shot: NDArray[np.float64]
    relative: NDArray[np.float64]
    band_gain: NDArray[np.float64]
    band_offset: NDArray[np.float64]
    common_gain: float
    mosaic: bool
    scale: float
    rescaled: bool = False

    @classmethod
    def of(cls, maps: xr.Dataset) -> KnownNoise | None:
        """Read it from maps of ``parameters``; None where they do not say."""
        try:
            told = json.loads(maps.attrs["noise"])
            centres = _numbers(maps.attrs["wavelengths"])
            two = [centres[nearest_band(centres, nominal)] for nominal in (600.0, 700.0)]
            if SLOPE in maps and "bands" in maps[SLOPE].attrs:
                two = _numbers(maps[SLOPE].attrs["bands"])
            elif BRIGHTNESS in maps and "bands" in maps[BRIGHTNESS].attrs:
                two[1] = _numbers(maps[BRIGHTNESS].attrs["bands"])[0]
            if len(two) != 2 or not two[0] < two[1]:
                return None
            parts = {
                part: _at(part, told.get(part, 0), centres, two)
                for part in ("shot", "relative", "band_gain", "band_offset")
            }
        except (KeyError, ValueError, TypeError):
            return None
        return cls(
            **parts,
            common_gain=float(told.get("common_gain", 0)),
            mosaic="shared_within" in told,
            scale=_GRADIENT_SCALE / (two[1] - two[0]),
            rescaled="noise_of_the_cube" in maps.attrs,
        )

    @property
    def has_shared(self) -> bool:
        """True where there is any error that does not average away."""
        return bool(self.common_gain or self.band_gain.any() or self.band_offset.any())

    def not_cancelling(self, parameter: str, R: NDArray, S: NDArray | None) -> NDArray[np.float64]:
        """Shared variance of a parameter that does not cancel against a threshold from the same scene.

        Parameters
        ----------
        parameter : str
            `BRIGHTNESS` or `SLOPE`.
        R, S : ndarray of one shape
            Reflectance at 700 nm and red slope [% per 100 nm]; S is needed for the slope only.

        Returns
        -------
        ndarray
            The offsets' part; in a mosaic the gains' part too.
        """
        R = np.asarray(R, dtype=float)
        if parameter == BRIGHTNESS:
            variance = np.full(R.shape, self.band_offset[1] ** 2)
            if self.mosaic:
                variance += (self.band_gain[1] ** 2 + self.common_gain**2) * R**2
            return variance
        assert S is not None
        s, c = np.asarray(S, dtype=float) / self.scale, self.scale
        # ∂S/∂R1 = −c(1 + s)²/(2R), ∂S/∂R2 = c(1 − s)(1 + s)/(2R)
        with np.errstate(divide="ignore", invalid="ignore"):
            of_offsets = (1 + s) ** 2 * self.band_offset[0] ** 2 + (1 - s) ** 2 * self.band_offset[1] ** 2
            variance = np.where(of_offsets > 0, (c * (1 + s) / (2 * R)) ** 2 * of_offsets, 0.0)
        if self.mosaic:
            # ∂S/∂ln R2 = −∂S/∂ln R1 = c(1 − s²)/2; the common gain cancels in a pure ratio
            variance = variance + (c * (1 - s**2) / 2) ** 2 * (self.band_gain**2).sum()
        return variance

    def growth(self, *, shared: bool) -> tuple[float, float]:
        """Growth of the variance of R with R, and with R²: random noise, and the `shared` gains where they count."""
        square = self.relative[1] ** 2
        if shared:
            square += self.band_gain[1] ** 2 + self.common_gain**2
        return float(self.shot[1] ** 2), float(square)


def _numbers(text: Any) -> list[float]:
    return [float(word) for word in str(text).removesuffix("nm").split(",")]


def _at(part: str, told: Any, centres: list[float], two: list[float]) -> NDArray[np.float64]:
    if isinstance(told, dict):
        told = {float(wavelength): number for wavelength, number in told.items()}
    checked = getattr(Noise(**{part: told}), part)
    per_band = values_per_band(part, checked, centres)
    return np.array([per_band[nearest_band(centres, wavelength)] for wavelength in two])
