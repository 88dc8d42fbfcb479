"""One laboratory spectrum as a reader hands it over, before several are put on one grid."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..bands import wavelength_array

__all__ = ["Spectrum"]

#: A reflectance above this is taken for a percentage that nobody divided by 100.
_NO_FRACTION = 2.0


@dataclass
class Spectrum:
    """Reflectances of one sample at its own channels.

    Parameters
    ----------
    name : str
        Name of the sample.
    wavelengths : ndarray, shape (channel,)
        [nm]; a descending list is turned round.
    reflectance : ndarray, shape (channel,)
        As a fraction; missing marks and negative values become NaN.
    where : str
        File (and line) that it came from, for messages.
    specimen, group, record, grain_size, geometry, source, quantity : str
        What is known about it.
    deviation : ndarray, optional
        Standard deviation of the reflectance, as published.
    """

    name: str
    wavelengths: NDArray[np.float64]
    reflectance: NDArray[np.float64]
    where: str
    specimen: str = ""
    group: str = ""
    record: str = ""
    grain_size: str = ""
    geometry: str = ""
    source: str = ""
    quantity: str = ""
    deviation: NDArray[np.float64] | None = field(default=None, repr=False)

    def __post_init__(self) -> None:
        self.wavelengths = wavelength_array(self.wavelengths, f"{self.where}: wavelengths of {self.name!r}")
        values = np.array(self.reflectance, dtype=float)
        if values.shape != self.wavelengths.shape:
            raise ValueError(
                f"{self.where}: {self.name!r} has {values.size} values for {self.wavelengths.size} channels"
            )
        values[~np.isfinite(values) | (values < 0)] = np.nan
        if not np.isfinite(values).any():
            raise ValueError(f"{self.where}: {self.name!r} has no value that is finite and not negative")
        if np.nanmax(values) > _NO_FRACTION:
            raise ValueError(
                f"{self.where}: reflectance of {self.name!r} must be a fraction, got values up to "
                f"{np.nanmax(values):g}, which look like percent or scaled integers; divide them first"
            )
        self.reflectance = values
        if self.wavelengths.size > 1 and self.wavelengths[0] > self.wavelengths[-1]:
            self._turn_round()
        steps = np.diff(self.wavelengths)
        if (steps <= 0).any():
            at = int(np.flatnonzero(steps <= 0)[0])
            raise ValueError(
                f"{self.where}: the wavelengths of {self.name!r} must run in one direction, each once; got "
                f"{self.wavelengths[at]:g} nm and then {self.wavelengths[at + 1]:g} nm"
            )
        self.specimen = self.specimen or self.name

    def _turn_round(self) -> None:
        self.wavelengths, self.reflectance = self.wavelengths[::-1], self.reflectance[::-1]
        if self.deviation is not None:
            self.deviation = self.deviation[::-1]

    def texts(self) -> dict[str, Any]:
        """The coordinates of a library, in their order."""
        names = ("specimen", "group", "record", "grain_size", "geometry", "source")
        return {name: getattr(self, name) for name in names}
