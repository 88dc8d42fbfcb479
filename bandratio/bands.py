"""Which band is meant by a nominal wavelength. Arrays only; labels are put on elsewhere."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ._checks import listed, non_negative

__all__ = [
    "TOLERANCE_NM",
    "BandNotFoundError",
    "nearest_band",
    "nearest_bands",
    "values_per_band",
    "wavelength_array",
]

#: How far a band's centre may lie from the nominal wavelength [nm] (common practice, no source).
TOLERANCE_NM = 15.0


class BandNotFoundError(ValueError):
    """No band lies near enough to a wanted wavelength."""


def wavelength_array(wavelengths: ArrayLike, name: str = "wavelengths") -> NDArray[np.float64]:
    """Band centres as a 1-D array of float [nm], checked.

    Raises
    ------
    ValueError
        If they are not one-dimensional, not finite, not positive, or look like micrometres.
    """
    try:
        centres = np.asarray(wavelengths, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be numbers in nm, got {wavelengths!r}") from None
    if centres.ndim != 1 or centres.size == 0:
        raise ValueError(f"{name} must be a list of one number per band in nm, got shape {centres.shape}")
    if not np.isfinite(centres).all():
        raise ValueError(f"{name} must be finite, got {listed(centres.tolist(), 'nm')}")
    if (centres <= 0).any():
        raise ValueError(f"{name} must be positive, got {listed(centres.tolist(), 'nm')}")
    if (centres < 30).all():
        raise ValueError(
            f"{name} must be in nm, got {listed(centres.tolist())}, which look like µm; multiply by 1000"
        )
    return centres


def nearest_band(centres: Sequence[float] | NDArray, wanted: float, tolerance: float = TOLERANCE_NM) -> int:
    """Index of the band nearest to a nominal wavelength.

    Parameters
    ----------
    centres : sequence of float, shape (band,)
        Band centres [nm].
    wanted : float
        Nominal wavelength [nm].
    tolerance : float
        Largest distance that is accepted [nm].

    Returns
    -------
    int
        Index into `centres`. The shorter wavelength wins a draw.

    Raises
    ------
    BandNotFoundError
        If no centre lies within `tolerance`.

    Examples
    --------
    >>> nearest_band([480, 601.2, 700, 830], 600)
    1
    """
    non_negative("tolerance", tolerance, "nm")
    array = np.asarray(centres, dtype=float)
    distance = np.abs(array - wanted)
    candidates = np.flatnonzero(distance == np.nanmin(distance)) if array.size else np.array([], dtype=int)
    if candidates.size == 0 or not distance[candidates[0]] <= tolerance:
        raise BandNotFoundError(
            f"no band within {tolerance:g} nm of {wanted:g} nm; the bands are {listed(array.tolist(), 'nm')}; "
            "give tolerance=… or other wavelengths"
        )
    return int(candidates[np.argmin(array[candidates])])


def nearest_bands(
    centres: Sequence[float] | NDArray, wanted: Sequence[float], tolerance: float = TOLERANCE_NM
) -> list[int]:
    """Index of the band nearest to each nominal wavelength; two may not share one band.

    Raises
    ------
    BandNotFoundError
        If a wavelength has no band within `tolerance`, or two would be served by the same band.
    """
    found = [nearest_band(centres, wavelength, tolerance) for wavelength in wanted]
    for position, index in enumerate(found):
        first = found.index(index)
        if first != position:
            raise BandNotFoundError(
                f"the band at {centres[index]:g} nm would serve for both {wanted[first]:g} and "
                f"{wanted[position]:g} nm; give a smaller tolerance=… or other wavelengths"
            )
    return found


def values_per_band(
    name: str,
    value: Any,
    centres: ArrayLike,
    tolerance: float = TOLERANCE_NM,
    *,
    needed: NDArray[np.bool_] | None = None,
) -> NDArray[np.float64]:
    """One value for each band, from a number for all, ``{nm: value}`` or a list as long as the bands.

    Parameters
    ----------
    name : str
        What it is, for the messages.
    value : number, mapping or sequence
        The value or values.
    centres : array_like, shape (band,)
        Band centres [nm].
    tolerance : float
        Largest distance between a band's centre and the wavelength of a value [nm].
    needed : ndarray of bool, shape (band,), optional
        Bands that must have a value; the others are NaN where they have none. None: all.

    Returns
    -------
    ndarray, shape (band,)

    Raises
    ------
    ValueError
        If a list has another length, or a needed band has no value near enough.

    Examples
    --------
    >>> values_per_band("k", {480: 0.6, 700: 0.7}, [481, 700])
    array([0.6, 0.7])
    """
    bands = np.asarray(centres, dtype=float)
    if isinstance(value, Mapping):
        given = np.array(list(value), dtype=float)
        numbers = list(value.values())
        found = np.full(bands.size, np.nan)
        try:
            for band, centre in enumerate(bands):
                if needed is None or needed[band] or np.abs(given - centre).min() <= tolerance:
                    found[band] = numbers[nearest_band(given, centre, tolerance)]
            return found
        except BandNotFoundError:
            raise BandNotFoundError(
                f"{name} has values at {listed(given.tolist(), 'nm')}, but the cube's bands are "
                f"{listed(bands.tolist(), 'nm')}; give one within {tolerance:g} nm of every band"
            ) from None
    if np.ndim(value) == 0:
        return np.full(bands.size, float(value))
    if len(value) != bands.size:
        raise ValueError(f"{name} has {len(value)} values, but the cube has {bands.size} bands")
    return np.asarray(value, dtype=float)
