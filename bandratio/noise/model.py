"""What is known about the errors of a cube: parts that average away over pixels, and parts that do not."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import KW_ONLY, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import non_negative
from ..bands import TOLERANCE_NM, nearest_band, values_per_band
from .table import noise_parts
from .values import PER_BAND, below_one, checked_part, integer_labels

__all__ = ["BandNoise", "Noise", "brightness_factor_of"]


@dataclass(frozen=True, eq=False)
class BandNoise:
    """The parts of a `Noise` for the bands of one cube: DataArrays along `wavelength`.

    `random` may have the cube's other dimensions too. `pixel_gain` has them without `wavelength`, or is zero: the
    cube's own coordinate of that name, a gain error common to the bands of a pixel and new in each pixel, which
    `normalise` puts there. `brightness_factor` f has the pixels' dimensions, with or without `wavelength`, or is one: the
    cube's own coordinate of that name, by which each reflectance was multiplied since it was measured. Where it is
    alike in all pixels, `random`, `shot` and `band_offset` are already those of the cube as it is now, and it is one.
    """

    random: xr.DataArray
    relative: xr.DataArray
    band_gain: xr.DataArray
    band_offset: xr.DataArray
    shot: xr.DataArray
    common_gain: float
    pixel_gain: xr.DataArray | float = 0.0
    brightness_factor: xr.DataArray | float = 1.0

    def random_variance(self, R: xr.DataArray) -> xr.DataArray:
        """Variance of each band's reflectance that is new in every pixel: ``(f·random)² + f·shot²·R + (relative·R)²``.

        Photon noise of the reflectance R/f that was measured, times f², is f·shot²·R; below zero there is none.
        """
        f = self.brightness_factor
        return (f * self.random) ** 2 + f * self.shot**2 * R.clip(min=0) + (self.relative * R) ** 2

    def shared_variance(self, R: xr.DataArray) -> xr.DataArray:
        """Variance of each band's reflectance that all pixels share: ``(band_gain·R)² + (f·band_offset)²``.

        The common gain is not in it: it moves all bands together.
        """
        return (self.band_gain * R) ** 2 + (self.brightness_factor * self.band_offset) ** 2


@dataclass(frozen=True, eq=False)
class Noise:
    """Standard uncertainties of a cube's reflectances, by their nature.

    Errors that are **new in every pixel and band** average away over a region:

    - `random`: read noise, the noise-equivalent reflectance difference (NEΔρ), as one number [reflectance].
    - `shot`: photon (shot) noise, σ² = shot²·R, so `shot` is its sigma at R = 1 [reflectance].
    - `relative`: noise that is a fraction of the value, new in each pixel [1].

    Errors that **all pixels share** do not average away, however large the region:

    - `band_gain`: gain error of each band, independent between bands [1]: what a calibration report calls
      relative or band-to-band radiometric accuracy.
    - `band_offset`: additive error of each band, a dark or stray-light residual [reflectance].
    - `common_gain`: one gain error for all bands, absolute radiometric accuracy [1]. It cancels exactly
      in a pure ratio of bands.

    A third nature comes with the cube, not from here: the error of a photometric normalisation is common to the
    bands of a pixel and new in each pixel. `normalise` leaves it on the cube as the coordinate `pixel_gain` [1]; like
    `common_gain` it cancels in a pure ratio, and like `random` it averages away; where the elevation model is coarser
    than the pixels it does so more slowly, which `region_means` takes as its `correlation_area`.

    All of it is stated **for the cube as it came**, before `normalise` and `convert_quantity`. These multiply each
    reflectance, and with it the errors that are no fraction of it, by a factor f that they leave on the cube as the
    coordinate `brightness_factor` [1]; ``random`` and ``band_offset`` then count f times, ``shot``² f times at the new
    level. Where an error is known at the cube's present level instead, drop that coordinate
    (``cube.drop_vars("brightness_factor")``).

    **The classic mistake** is to enter a calibration report's "relative accuracy" as `relative`. It is one
    unknown number for each band, the same in every pixel: enter it as `band_gain`.

    Parameters
    ----------
    random, relative, band_gain, band_offset : number, mapping, DataArray or sequence
        One number for all bands, ``{wavelength in nm: value}``, a DataArray on `wavelength`, or a list with
        one value for each band of the cube. `random` may also be a map: a DataArray with the cube's other
        dimensions, with or without `wavelength`.
    common_gain : float
        One number [1].
    shot : number, mapping, DataArray or sequence
        As `random`, without a map.
    shared_within : array of int, optional
        Label per pixel: gains and offsets are shared within a label and independent between labels, as for
        the images of a mosaic. None: one group, the whole scene.

    Raises
    ------
    ValueError, TypeError
        If a value is negative, not finite, or a percentage where a fraction is wanted.

    Examples
    --------
    >>> import bandratio as br
    >>> noise = br.Noise(random=0.001, band_gain={480: 0.01, 600: 0.005, 700: 0.005})
    >>> noise.describe()
    '{"random": 0.001, "band_gain": {"480": 0.01, "600": 0.005, "700": 0.005}}'
    """

    random: Any = 0
    relative: Any = 0
    band_gain: Any = 0
    band_offset: Any = 0
    common_gain: Any = 0
    _: KW_ONLY
    shot: Any = 0
    shared_within: Any = None

    def __post_init__(self) -> None:
        for part in PER_BAND:
            object.__setattr__(self, part, checked_part(part, getattr(self, part)))
        common = non_negative("common_gain", self.common_gain)
        object.__setattr__(self, "common_gain", below_one("common_gain", common))
        if self.shared_within is not None:
            object.__setattr__(self, "shared_within", integer_labels(self.shared_within))

    @classmethod
    def from_csv(cls, path: str | Path) -> Noise:
        """Noise from a table: a column `wavelength` [nm], one row per band, and a column for each part.

        The columns are `wavelength`, `random`, `shot`, `relative`, `band_gain`, `band_offset` and
        `common_gain` (one value, the same in every row); those left out are zero.

        Raises
        ------
        ValueError
            With the file and line, where a column is unknown or a value is no number.
        """
        try:
            return cls(**noise_parts(Path(path)))
        except ValueError as error:
            raise ValueError(str(error) if str(error).startswith(str(path)) else f"{path}: {error}") from None

    def for_cube(
        self, cube: xr.DataArray, tolerance: float = TOLERANCE_NM, *, used: NDArray[np.bool_] | None = None
    ) -> BandNoise:
        """Every part spelled out for the bands of a cube.

        Parameters
        ----------
        cube : DataArray
            Reflectance with a `wavelength` dimension [nm]; its coordinates `pixel_gain` and `brightness_factor` are
            taken along, where there are any.
        tolerance : float
            Largest distance between a band's centre and the wavelength of a value [nm]; one below the usual 15 nm,
            which picks among narrow bands, leaves that of the noise as it is.
        used : ndarray of bool, shape (band,), optional
            Bands that must have a value; the others are NaN where they have none. None: all.

        Raises
        ------
        ValueError
            If a list's length is not the cube's number of bands, a band has no value, or a map of `random`
            or `shared_within` does not fit the cube.
        """
        tolerance = max(tolerance, TOLERANCE_NM)
        _require_fitting_labels(self.shared_within, cube)
        centres = np.asarray(cube["wavelength"].values, dtype=float)
        parts = {
            part: _for_bands(part, getattr(self, part), centres, tolerance, used)
            for part in PER_BAND
            if part != "random" or not self.random_is_map
        }
        if self.random_is_map:
            parts["random"] = _map_for_cube(self.random, cube, centres, tolerance)
        gain: xr.DataArray | float = 0.0
        if "pixel_gain" in cube.coords:
            if "wavelength" in cube.coords["pixel_gain"].dims:
                raise ValueError(
                    "the cube's pixel_gain is common to the bands of a pixel; it must not have wavelength"
                )
            gain = cube.coords["pixel_gain"].reset_coords(drop=True)
        factor = self._factor(cube)
        if isinstance(factor, xr.DataArray) and not set(factor.dims) - {"wavelength"}:
            # alike in all pixels: what is known per band stays so
            parts["random"] = factor * parts["random"]
            parts["shot"] = factor**0.5 * parts["shot"]
            parts["band_offset"] = factor * parts["band_offset"]
            factor = 1.0
        return BandNoise(**parts, common_gain=self.common_gain, pixel_gain=gain, brightness_factor=factor)

    def _factor(self, cube: xr.DataArray) -> xr.DataArray | float:
        """The cube's `brightness_factor`, one where no part of this noise depends on it."""
        parts = (self.random, self.shot, self.band_offset)
        if not any(_is_there(part) for part in parts):
            return 1.0
        return brightness_factor_of(cube)

    @property
    def random_is_map(self) -> bool:
        """True where `random` differs from pixel to pixel."""
        return isinstance(self.random, xr.DataArray) and set(self.random.dims) - {"wavelength"} != set()

    def describe(self) -> str:
        """The parts that are not zero, as JSON, for attributes and reports."""
        told: dict[str, Any] = {}
        for part in ("random", "shot", "relative", "band_gain", "band_offset"):
            value = getattr(self, part)
            if isinstance(value, Mapping):
                told[part] = {f"{wavelength:g}": number for wavelength, number in value.items()}
            elif isinstance(value, xr.DataArray) and (part != "random" or not self.random_is_map):
                told[part] = {
                    f"{wavelength:g}": float(number)
                    for wavelength, number in zip(value["wavelength"].values, value.values, strict=True)
                }
            elif isinstance(value, xr.DataArray):
                told[part] = "map"
            elif isinstance(value, np.ndarray):
                told[part] = value.tolist()
            elif value:
                told[part] = value
        if self.common_gain:
            told["common_gain"] = self.common_gain
        if self.shared_within is not None:
            told["shared_within"] = "labels"
        return json.dumps(told)


def brightness_factor_of(cube: xr.DataArray) -> xr.DataArray | float:
    """What a cube's reflectances were multiplied by since they were measured [1]; one where nothing says so."""
    if "brightness_factor" not in cube.coords:
        return 1.0
    factor: xr.DataArray = cube.coords["brightness_factor"].reset_coords(drop=True)
    return factor.transpose("wavelength", ...) if "wavelength" in factor.dims else factor


def _is_there(part: Any) -> bool:
    """False where a part is zero in all bands."""
    if isinstance(part, xr.DataArray):
        return set(part.dims) != {"wavelength"} or bool(part.any())
    return any(part.values()) if isinstance(part, Mapping) else bool(np.any(part))


def _require_fitting_labels(labels: xr.DataArray | NDArray | None, cube: xr.DataArray) -> None:
    if labels is None:
        return
    pixels = tuple(size for dim, size in cube.sizes.items() if dim != "wavelength")
    if isinstance(labels, xr.DataArray):
        fits = all(dim in cube.dims and cube.sizes[dim] == size for dim, size in labels.sizes.items())
    else:
        fits = labels.shape == pixels
    if not fits:
        raise ValueError(
            f"shared_within has the shape {tuple(labels.shape)}, and the cube's pixels {pixels}; give one label for each"
        )


def _for_bands(
    part: str, value: Any, centres: NDArray, tolerance: float, used: NDArray[np.bool_] | None
) -> xr.DataArray:
    if isinstance(value, xr.DataArray):
        value = dict(zip(value["wavelength"].values.tolist(), value.values.tolist(), strict=True))
    array = values_per_band(part, value, centres, tolerance, needed=used)
    return xr.DataArray(array, dims="wavelength", coords={"wavelength": centres})


def _map_for_cube(
    random: xr.DataArray, cube: xr.DataArray, centres: NDArray, tolerance: float
) -> xr.DataArray:
    for dim in random.dims:
        if dim != "wavelength" and (dim not in cube.dims or random.sizes[dim] != cube.sizes[dim]):
            raise ValueError(
                f"random is a map of {dict(random.sizes)}, which does not fit the cube's {dict(cube.sizes)}"
            )
        if dim != "wavelength" and not _same_places(random, cube, str(dim)):
            raise ValueError(
                f"random is a map whose {dim} coordinates are not the cube's; reindex it to the cube, or drop them where "
                "its pixels are the cube's"
            )
    # the places are the same, so the cube's coordinates serve; others would be aligned to them digit by digit
    others = [dim for dim in random.dims if dim != "wavelength" and dim in random.coords]
    random = random.reset_coords(drop=True).drop_vars(others)
    if "wavelength" not in random.dims:
        return random
    given = random["wavelength"].values
    order = [nearest_band(given, centre, tolerance) for centre in centres]
    return random.isel(wavelength=order).assign_coords(wavelength=centres)


def _same_places(random: xr.DataArray, cube: xr.DataArray, dim: str) -> bool:
    if dim not in random.coords or dim not in cube.coords:
        return True
    given, wanted = random[dim].values, cube[dim].values
    if given.dtype.kind not in "fiu" or wanted.dtype.kind not in "fiu":
        return bool(np.array_equal(given, wanted))
    step = float(np.abs(np.diff(wanted.astype(float))).min()) if wanted.size > 1 else 1.0
    return bool((np.abs(given.astype(float) - wanted) <= 0.01 * step).all())
