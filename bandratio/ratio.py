"""The band ratio: weights, value, gradient and sigma, written to be read.

This is the reference that the compiled loop of :mod:`bandratio.kernel` is tested against.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Self

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from ._checks import listed, require_noise
from .bands import TOLERANCE_NM, nearest_bands

if TYPE_CHECKING:
    from .noise import Noise

__all__ = ["BandRatio", "Weights"]


class Weights(Mapping[float, float]):
    """Weights per wavelength [nm], sorted, immutable and hashable; zero weights are dropped."""

    __slots__ = ("_pairs",)

    def __init__(self, weights: Mapping[float, float], side: str = "weights") -> None:
        pairs = []
        if not isinstance(weights, Mapping):
            raise TypeError(f"{side} must be a mapping {{wavelength in nm: weight}}, got {weights!r}")
        for wavelength, weight in weights.items():
            try:
                pair = float(wavelength), float(weight)
            except (TypeError, ValueError):
                raise TypeError(
                    f"{side} must map numbers to numbers, got {{{wavelength!r}: {weight!r}}}"
                ) from None
            if not (math.isfinite(pair[0]) and pair[0] > 0):
                raise ValueError(f"{side} has the wavelength {pair[0]:g} nm; wavelengths are positive, in nm")
            if not math.isfinite(pair[1]):
                raise ValueError(f"{side} has the weight {pair[1]} at {pair[0]:g} nm; weights must be finite")
            pairs.append(pair)
        self._pairs = tuple(sorted(pair for pair in pairs if pair[1]))

    def __getitem__(self, wavelength: float) -> float:
        return dict(self._pairs)[wavelength]

    def __iter__(self) -> Iterator[float]:
        return (wavelength for wavelength, _ in self._pairs)

    def __len__(self) -> int:
        return len(self._pairs)

    def __hash__(self) -> int:
        return hash(self._pairs)

    def __reduce__(self) -> tuple[type[Weights], tuple[dict[float, float]]]:
        return Weights, (dict(self._pairs),)

    def __repr__(self) -> str:
        return "{" + ", ".join(f"{wavelength:g}: {weight:g}" for wavelength, weight in self._pairs) + "}"


@dataclass(frozen=True)
class BandRatio:
    """A weighted sum of bands over a weighted sum of bands.

    ``p = scale · (n·R + n0) / (d·R + d0)``, with R the reflectances of one pixel.

    Parameters
    ----------
    numerator : mapping of float to float
        Weights n per wavelength [nm].
    denominator : mapping of float to float, optional
        Weights d per wavelength [nm]; none means a denominator of 1.
    numerator_offset, denominator_offset : float
        n0 and d0, in the unit of the reflectances. A pure ratio has neither, and is then free of any
        gain that its bands share.
    scale : float
        Factor, for example 100 for a result in %.
    name : str
        Short name; where it is empty, a name is made of the bands, such as ``r950_r750``.
    units, long_name, source : str
        What the result carries as attributes: its unit, a readable name, the published source.

    Raises
    ------
    ValueError
        If there are no weights at all, the denominator is zero, a wavelength is not positive or a number
        is not finite.

    Examples
    --------
    >>> import bandratio as br
    >>> ratio = br.BandRatio({950: 1}, {750: 1})
    >>> ratio.name
    'r950_r750'
    >>> cube = br.as_cube([0.2, 0.25], [750, 950])
    >>> float(ratio.value(cube))
    1.25
    """

    numerator: Mapping[float, float]
    denominator: Mapping[float, float] | None = None
    numerator_offset: float = 0
    denominator_offset: float = 0
    scale: float = 1
    name: str = ""
    units: str = "1"
    long_name: str = ""
    source: str = ""

    def __post_init__(self) -> None:
        numerator = Weights(self.numerator, "numerator")
        denominator = Weights({} if self.denominator is None else self.denominator, "denominator")
        numbers = {}
        for field in ("numerator_offset", "denominator_offset", "scale"):
            try:
                numbers[field] = float(getattr(self, field))
            except (TypeError, ValueError):
                raise TypeError(f"{field} must be a number, got {getattr(self, field)!r}") from None
            if not math.isfinite(numbers[field]):
                raise ValueError(f"{field} must be finite, got {numbers[field]}")
        if self.denominator is None and numbers["denominator_offset"] == 0:
            numbers["denominator_offset"] = 1.0
        if not numerator and not denominator:
            raise ValueError("a band ratio needs weights: give numerator={wavelength in nm: weight}")
        if not numerator and numbers["numerator_offset"] == 0:
            raise ValueError("the numerator is zero, and every value would be; give it weights or an offset")
        if not denominator and numbers["denominator_offset"] == 0:
            raise ValueError(
                "the denominator is zero: give it weights or an offset, or leave it out for a denominator of 1"
            )
        if numbers["scale"] == 0:
            raise ValueError("scale must not be zero, since every value would be")
        for field in ("name", "units", "long_name", "source"):
            if not isinstance(getattr(self, field), str):
                raise TypeError(f"{field} must be text, got {getattr(self, field)!r}")
        if "/" in self.name or len(self.name.split()) > 1 or self.name != self.name.strip():
            raise ValueError(f"name must hold no slash and no space, got {self.name!r}; use _ between words")
        wavelengths = [*numerator, *denominator]
        if max(wavelengths) < 30:
            raise ValueError(
                f"the wavelengths must be in nm, got {listed(wavelengths)}, which look like µm; multiply by 1000"
            )
        object.__setattr__(self, "numerator", numerator)
        object.__setattr__(self, "denominator", denominator)
        for field, number in numbers.items():
            object.__setattr__(self, field, number)
        if not self.name:
            object.__setattr__(self, "name", self._name_of_bands())

    def _name_of_bands(self) -> str:
        def side(weights: Mapping[float, float], offset: float) -> str:
            text = ""
            for wavelength, weight in weights.items():
                sign = "m" if weight < 0 else "p" if text else ""
                text += sign + ("" if abs(weight) == 1 else f"{abs(weight):g}") + f"r{wavelength:g}"
            if offset:
                sign = "m" if offset < 0 else "p" if text else ""
                text += f"{sign}{abs(offset):g}"
            return text

        assert self.denominator is not None
        lower = side(self.denominator, self.denominator_offset)
        return side(self.numerator, self.numerator_offset) + ("" if lower == "1" else f"_{lower}")

    @property
    def wavelengths(self) -> tuple[float, ...]:
        """Every wavelength that has a weight [nm], ascending."""
        assert self.denominator is not None
        return tuple(sorted({*self.numerator, *self.denominator}))

    @property
    def is_pure(self) -> bool:
        """True where neither side has an offset: a gain shared by the bands then cancels exactly."""
        return self.numerator_offset == 0 and self.denominator_offset == 0

    @property
    def definition(self) -> str:
        """The formula with its wavelengths, e.g. ``R950/R750``."""
        assert self.denominator is not None
        upper = _sum_text(self.numerator, self.numerator_offset)
        lower = _sum_text(self.denominator, self.denominator_offset)
        parts = [f"{self.scale:.6g}·"] if self.scale != 1 else []
        bracket = lower != "1" or bool(parts)
        parts.append(f"({upper})" if bracket and " " in upper else upper)
        if lower != "1":
            parts.append(f"/({lower})" if " " in lower else f"/{lower}")
        return "".join(parts)

    @property
    def readable(self) -> str:
        """The long name, or the formula where there is none."""
        return self.long_name or self.definition

    def describe(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> dict[str, str | float]:
        """Attributes of the value at the given band centres [nm]: names, unit, formula, bands and source."""
        actual = self.at_centres(centres, tolerance)
        told: dict[str, str | float] = {
            "long_name": self.readable,
            "units": self.units,
            "definition": actual.definition,
            "bands": listed(actual.wavelengths, "nm"),
        }
        if self.source:
            told["source"] = self.source
        shoulder = getattr(self, "shoulder", None)
        if shoulder is not None:
            told["shoulder"] = shoulder
        return told

    def weights_for(
        self, centres: ArrayLike, tolerance: float = TOLERANCE_NM
    ) -> tuple[np.ndarray, np.ndarray]:
        """Weights n and d for each of the given bands, zero where a band is not used.

        Parameters
        ----------
        centres : array_like, shape (band,)
            Band centres [nm].
        tolerance : float
            Largest distance between a weight's wavelength and a centre [nm].

        Returns
        -------
        n, d : ndarray, shape (band,)

        Raises
        ------
        ValueError
            If a wavelength has no band within `tolerance`, or two have the same one.
        """
        assert self.denominator is not None
        centres = np.asarray(centres, dtype=float)
        n, d = np.zeros(centres.size), np.zeros(centres.size)
        index = nearest_bands(centres, self.wavelengths, tolerance)
        for wavelength, band in zip(self.wavelengths, index, strict=True):
            n[band] = self.numerator.get(wavelength, 0.0)
            d[band] = self.denominator.get(wavelength, 0.0)
        return n, d

    def at_centres(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> Self:
        """The same ratio with its weights at the actual band centres [nm], under the same name."""
        n, d = self.weights_for(centres, tolerance)
        actual = np.asarray(centres, dtype=float)
        numerator, denominator = (dict(zip(actual[w != 0], w[w != 0], strict=True)) for w in (n, d))
        return replace(self, numerator=numerator, denominator=denominator)

    def value(self, cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
        """Value of the ratio at every pixel.

        Parameters
        ----------
        cube : DataArray
            Reflectance with a `wavelength` dimension [nm] and any others.
        tolerance : float
            Largest distance between a weight's wavelength and a band's centre [nm].

        Returns
        -------
        DataArray of float64, dimensions of `cube` without `wavelength`
            NaN where a band is missing or the denominator is not positive.
        """
        p = self._terms(cube, tolerance)[3].rename(self.name)
        return p.assign_attrs(self.describe(cube["wavelength"].values, tolerance))

    def gradient(self, cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
        """Exact derivative by each band's reflectance, zero for bands that are not used.

        Returns
        -------
        DataArray of float64, dimensions of `cube`
            ``∂p/∂R_j = (scale·n_j − p·d_j) / (d·R + d0)``, in the ratio's unit per reflectance.
        """
        n, d, lower, p = self._terms(cube, tolerance)
        slope = (self.scale * n - p * d) / lower
        used = (n != 0) | (d != 0)
        gradient = slope.where(used, 0.0).transpose(*cube.dims).rename(f"{self.name}_gradient")
        return gradient.assign_attrs(long_name=f"gradient of {self.readable} by reflectance")

    def variances(
        self, cube: xr.DataArray, noise: Noise, *, tolerance: float = TOLERANCE_NM
    ) -> tuple[xr.DataArray, xr.DataArray]:
        """Random and shared variance of the value at every pixel, the two natures apart.

        Parameters
        ----------
        cube : DataArray
            Reflectance with a `wavelength` dimension [nm].
        noise : Noise
            What is known about the errors.

        Returns
        -------
        random, shared : DataArray of float64, dimensions of `cube` without `wavelength`
        """
        require_noise(noise)
        g = self.gradient(cube, tolerance=tolerance)
        R = cube.astype(float)
        used = np.any(self.weights_for(cube["wavelength"].values, tolerance), axis=0)
        band = noise.for_cube(cube, tolerance, used=used)

        g2 = (g**2).isel(wavelength=used)
        random = (g2 * band.random_variance(R).isel(wavelength=used)).sum("wavelength", skipna=False)
        shared = (g2 * band.shared_variance(R).isel(wavelength=used)).sum("wavelength", skipna=False)
        if not self.is_pure:
            along = (g * R).isel(wavelength=used).sum("wavelength", skipna=False)
            shared = shared + (band.common_gain * along) ** 2
            random = random + (band.pixel_gain * along) ** 2
        return random, shared

    def sigma(
        self,
        cube: xr.DataArray,
        noise: Noise | None = None,
        covariance: ArrayLike | None = None,
        *,
        tolerance: float = TOLERANCE_NM,
    ) -> xr.DataArray:
        """Standard uncertainty of the value, by the law of propagation (GUM, JCGM 100:2008, eq. 13).

        Parameters
        ----------
        cube : DataArray
            Reflectance with a `wavelength` dimension [nm].
        noise : Noise, optional
            What is known about the errors.
        covariance : array_like, shape (band, band), optional
            Covariance of the bands' errors, in place of `noise`.

        Returns
        -------
        DataArray of float64, dimensions of `cube` without `wavelength`

        Raises
        ------
        ValueError
            If not exactly one of `noise` and `covariance` is given, or the covariance has another
            shape, is not finite, not symmetric or has a negative eigenvalue.
        """
        if (noise is None) == (covariance is None):
            raise ValueError("give either noise=… or covariance=…, one of the two")
        if noise is not None:
            random, shared = self.variances(cube, noise, tolerance=tolerance)
            return self._sigma_of(random + shared)
        matrix = np.asarray(covariance, dtype=float)
        bands = cube.sizes["wavelength"]
        if matrix.shape != (bands, bands):
            raise ValueError(
                f"covariance must have shape ({bands}, {bands}), one row per band, got {matrix.shape}"
            )
        if not np.isfinite(matrix).all():
            raise ValueError("covariance must be finite; this one has missing or infinite elements")
        # measured by the elements themselves, which are squares of small errors: 1e-8 and less
        alike = np.allclose(matrix, matrix.T, rtol=1e-6, atol=1e-9 * np.abs(matrix).max())
        if not alike or (np.linalg.eigvalsh(matrix) < -1e-9 * np.trace(matrix)).any():
            raise ValueError("covariance must be symmetric and without negative eigenvalues; this one is not")
        g = self.gradient(cube, tolerance=tolerance)
        C = xr.DataArray(matrix, dims=("wavelength", "wavelength_2"))
        g2 = g.drop_vars("wavelength").rename(wavelength="wavelength_2")
        variance = xr.dot(g.drop_vars("wavelength"), C, g2, dim=("wavelength", "wavelength_2"))
        return self._sigma_of(variance.clip(min=0))

    def _sigma_of(self, variance: xr.DataArray) -> xr.DataArray:
        sigma: xr.DataArray = (variance**0.5).rename(f"{self.name}_sigma")
        return sigma.assign_attrs(long_name=f"standard uncertainty of {self.readable}", units=self.units)

    def _terms(
        self, cube: xr.DataArray, tolerance: float
    ) -> tuple[xr.DataArray, xr.DataArray, xr.DataArray, xr.DataArray]:
        if not isinstance(cube, xr.DataArray) or "wavelength" not in cube.coords:
            came = f"one with {list(cube.coords)}" if isinstance(cube, xr.DataArray) else type(cube).__name__
            raise TypeError(
                "a cube must be a DataArray with a wavelength coordinate in nm, as br.as_cube makes one; "
                f"got {came}"
            )
        at = {"wavelength": cube["wavelength"].values}
        n, d = (xr.DataArray(w, at, ("wavelength",)) for w in self.weights_for(at["wavelength"], tolerance))
        used = ((n != 0) | (d != 0)).values
        # where a band is not used, its missing values must not reach the result
        R = cube.astype(float).isel(wavelength=used)
        upper = (n[used] * R).sum("wavelength", skipna=False) + self.numerator_offset
        lower = (d[used] * R).sum("wavelength", skipna=False) + self.denominator_offset
        lower = lower.where(lower > 0)
        p = self.scale * upper / lower
        return n, d, lower, p.where(np.isfinite(p))


def _sum_text(weights: Mapping[float, float], offset: float) -> str:
    text = ""
    for wavelength, weight in weights.items():
        sign = ("−" if weight < 0 else "") if not text else (" − " if weight < 0 else " + ")
        text += sign + ("" if abs(weight) == 1 else f"{abs(weight):.6g}·") + f"R{wavelength:g}"
    if offset or not text:
        sign = ("−" if offset < 0 else "") if not text else (" − " if offset < 0 else " + ")
        text += f"{sign}{abs(offset):.6g}"
    return text
