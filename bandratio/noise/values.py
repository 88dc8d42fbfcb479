"""What may be given for a part of the noise: checked, and left as it was given."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import non_negative

__all__ = ["PER_BAND", "below_one", "checked_part", "integer_labels"]

#: The parts that have one value for each band.
PER_BAND = ("random", "relative", "band_gain", "band_offset", "shot")
_FRACTIONS = ("relative", "band_gain", "common_gain")


def checked_part(part: str, value: Any) -> Any:
    """What was given for a part: a number, a mapping, an array with one value per band, or a DataArray; else an error."""
    if hasattr(value, "index") and hasattr(value, "to_dict"):  # a pandas Series: its index is the wavelengths
        value = value.to_dict()
    if isinstance(value, xr.DataArray):
        extra = set(value.dims) - {"wavelength"}
        if extra and part != "random":
            raise ValueError(f"{part} is one value per band; only random may be a map, got {value.dims}")
        if "wavelength" in value.dims and "wavelength" not in value.coords:
            raise ValueError(f"{part} has no wavelength coordinate; give it one in nm")
        if not extra and value.ndim == 0:
            return checked_part(part, value.item())
        if not extra:
            wavelengths = value["wavelength"].values.tolist()
            if len(set(wavelengths)) < len(wavelengths):
                raise ValueError(f"{part} has two values for one wavelength; give one for each")
            checked_part(part, dict(zip(wavelengths, value.values.tolist(), strict=True)))
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
            checked[wavelength] = below_one(part, non_negative(f"{part} at {wavelength:g} nm", item))
        return checked
    if isinstance(value, str):
        raise TypeError(f"{part} must be a number or one value per band, got {value!r}")
    array = np.asarray(value)
    if array.ndim == 0:
        return below_one(part, non_negative(part, value))
    if array.ndim > 1:
        raise ValueError(
            f"{part} has shape {array.shape}; give one value per band, or for a map of random a DataArray with "
            "the cube's dimensions"
        )
    numbers = np.array(
        [below_one(part, non_negative(f"{part}, value {i + 1},", x)) for i, x in enumerate(array)]
    )
    numbers.setflags(write=False)
    return numbers


def below_one(part: str, value: float) -> float:
    """Return `value`, refused where the part is a fraction and it looks like a percentage."""
    if part in _FRACTIONS and value >= 1:
        raise ValueError(f"{part} is a fraction below 1, got {value:g}; {value:g} % is {value / 100:g}")
    return value


def integer_labels(labels: Any) -> xr.DataArray | NDArray:
    """Labels per pixel, refused where they are no integers."""
    array = labels if isinstance(labels, xr.DataArray) else np.asarray(labels)
    if not np.issubdtype(array.dtype, np.integer):
        raise TypeError(f"shared_within must be integer labels, one per pixel, got {array.dtype}")
    return array
