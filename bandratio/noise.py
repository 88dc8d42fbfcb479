"""What is known about the errors of a cube: parts that average away over pixels, and parts that do not."""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from dataclasses import KW_ONLY, dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from ._checks import listed, non_negative, suggestion
from .bands import TOLERANCE_NM, nearest_band, values_per_band

__all__ = ["BandNoise", "Noise", "PerBand", "brightness_factor_of"]

#: A number for all bands, {nm: value}, a DataArray on wavelength, or a list of the cube's length.
PerBand: TypeAlias = "float | Mapping[float, float] | xr.DataArray | ArrayLike"

_PER_BAND = ("random", "relative", "band_gain", "band_offset", "shot")
_FRACTIONS = ("relative", "band_gain", "common_gain")


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
    `common_gain` it cancels in a pure ratio, and like `random` it averages away.

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
        for part in _PER_BAND:
            object.__setattr__(self, part, _checked(part, getattr(self, part)))
        common = non_negative("common_gain", self.common_gain)
        object.__setattr__(self, "common_gain", _fraction("common_gain", common))
        if self.shared_within is not None:
            object.__setattr__(self, "shared_within", _labels(self.shared_within))

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
        path = Path(path)
        known = ("wavelength", *_PER_BAND, "common_gain")
        with path.open(newline="", encoding="utf-8-sig") as stream:
            lines = [line for line in stream if line.strip() and not line.startswith("#")]
        rows = list(csv.reader(lines, skipinitialspace=True))
        header = [name.strip() for name in rows[0]] if rows else []
        if "wavelength" not in header:
            raise ValueError(f"{path}: wanted a column wavelength [nm], got {listed(header)}")
        for name in header:
            if name not in known:
                raise ValueError(f"{path}: unknown column {name!r}{suggestion(name, known)}")
        if len(set(header)) != len(header):
            raise ValueError(f"{path}: a column stands twice in {listed(header)}")
        if len(rows) < 2:
            raise ValueError(f"{path}: no rows below the header; wanted one row per band")
        columns: dict[str, list[float]] = {name: [] for name in header}
        for number, row in enumerate(rows[1:], start=2):
            if len(row) != len(header):
                raise ValueError(f"{path}, row {number}: wanted {len(header)} values, got {len(row)}")
            for name, text in zip(header, row, strict=True):
                try:
                    columns[name].append(float(text))
                except ValueError:
                    raise ValueError(f"{path}, row {number}: {name} must be a number, got {text!r}") from None
        wavelength = columns.pop("wavelength")
        if len(set(wavelength)) != len(wavelength):
            raise ValueError(f"{path}: the same wavelength stands in two rows")
        common = set(columns.pop("common_gain", [0.0]))
        if len(common) > 1:
            raise ValueError(f"{path}: common_gain is one value for all bands, got {listed(sorted(common))}")
        try:
            parts: dict[str, Any] = {
                name: dict(zip(wavelength, values, strict=True)) for name, values in columns.items()
            }
            return cls(**parts, common_gain=common.pop())
        except ValueError as error:
            raise ValueError(f"{path}: {error}") from None

    def for_cube(self, cube: xr.DataArray, tolerance: float = TOLERANCE_NM) -> BandNoise:
        """Every part spelled out for the bands of a cube.

        Parameters
        ----------
        cube : DataArray
            Reflectance with a `wavelength` dimension [nm]; its coordinates `pixel_gain` and `brightness_factor` are
            taken along, where there are any.
        tolerance : float
            Largest distance between a band's centre and the wavelength of a value [nm].

        Raises
        ------
        ValueError
            If a list's length is not the cube's number of bands, a band has no value, or a map of `random`
            does not fit the cube.
        """
        centres = np.asarray(cube["wavelength"].values, dtype=float)
        parts = {
            part: _for_bands(part, getattr(self, part), centres, tolerance)
            for part in _PER_BAND
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


def _checked(part: str, value: Any) -> Any:
    if isinstance(value, xr.DataArray):
        extra = set(value.dims) - {"wavelength"}
        if extra and part != "random":
            raise ValueError(f"{part} is one value per band; only random may be a map, got {value.dims}")
        if "wavelength" in value.dims and "wavelength" not in value.coords:
            raise ValueError(f"{part} has no wavelength coordinate; give it one in nm")
        if not extra and value.ndim == 0:
            return _checked(part, value.item())
        if not extra:
            _checked(part, dict(zip(value["wavelength"].values.tolist(), value.values.tolist(), strict=True)))
        elif value.chunks is None and (value.values < 0).any():
            raise ValueError(f"{part} must not be negative, got a map that is in places")
        return value
    if isinstance(value, Mapping):
        if not value:
            raise ValueError(f"{part} is an empty mapping; give {{wavelength in nm: value}}")
        checked = {}
        for key, item in value.items():
            try:
                wavelength = float(key)
            except (TypeError, ValueError):
                raise TypeError(f"{part} must map wavelengths in nm to values, got the key {key!r}") from None
            checked[wavelength] = _fraction(part, non_negative(f"{part} at {wavelength:g} nm", item))
        return checked
    if isinstance(value, str):
        raise TypeError(f"{part} must be a number or one value per band, got {value!r}")
    array = np.asarray(value)
    if array.ndim == 0:
        return _fraction(part, non_negative(part, value))
    if array.ndim > 1:
        raise ValueError(
            f"{part} has shape {array.shape}; give one value per band, or for a map of random a DataArray with "
            "the cube's dimensions"
        )
    numbers = np.array(
        [_fraction(part, non_negative(f"{part}, value {i + 1},", x)) for i, x in enumerate(array)]
    )
    numbers.setflags(write=False)
    return numbers


def _fraction(part: str, value: float) -> float:
    if part in _FRACTIONS and value >= 1:
        raise ValueError(f"{part} is a fraction below 1, got {value:g}; {value:g} % is {value / 100:g}")
    return value


def _labels(labels: Any) -> xr.DataArray | NDArray:
    array = labels if isinstance(labels, xr.DataArray) else np.asarray(labels)
    if not np.issubdtype(array.dtype, np.integer):
        raise TypeError(f"shared_within must be integer labels, one per pixel, got {array.dtype}")
    return array


def _for_bands(part: str, value: Any, centres: NDArray, tolerance: float) -> xr.DataArray:
    if isinstance(value, xr.DataArray):
        value = dict(zip(value["wavelength"].values.tolist(), value.values.tolist(), strict=True))
    array = values_per_band(part, value, centres, tolerance)
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
