"""Labelled spectra as the groups that planning works on: seen through bands, specimen by specimen."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed
from ..detection.labelled import labelled_groups, specimen_names
from ..detection.specimens import area_interval, bootstrap_weights
from ..noise import Noise
from ..spectra import band_average
from .resampling import centred_interval
from .separability import Groups, Pairs

__all__ = [
    "area_limits",
    "groups_at",
    "of_groups",
    "pair_weights",
    "ratio_name",
    "rests_on",
    "seen_groups",
    "seen_through",
    "with_every_band",
]

_SEED = 20250117


def of_groups(
    spectra: xr.DataArray, wanted: str | Iterable[str], unwanted: str | Iterable[str]
) -> tuple[xr.DataArray, NDArray[np.bool_]]:
    """Spectra of the two groups alone, and which of them are wanted."""
    first, second = labelled_groups(spectra, wanted, unwanted)
    chosen = np.concatenate([first, second])
    return spectra.isel(sample=chosen), np.arange(chosen.size) < first.size


def seen_through(name: str, entry: Any, spectra: xr.DataArray) -> tuple[xr.DataArray, Noise | None]:
    """Spectra averaged to a filter set, and its noise; the set is checked.

    Raises
    ------
    ValueError, TypeError
        If the set is no (wavelengths, fwhm, noise), has fewer than two bands, or a band that no spectrum covers.
    """
    if not isinstance(entry, (tuple, list)) or not 1 <= len(entry) <= 3:
        raise TypeError(f"the filter set {name!r} must be (wavelengths, fwhm, noise), got {entry!r}")
    wavelengths, fwhm, noise = (*entry, None, None)[:3]
    if np.size(wavelengths) < 2:
        raise ValueError(f"{name}: a band ratio needs two bands or more, got {np.size(wavelengths)}")
    if noise is not None and not isinstance(noise, Noise):
        raise TypeError(f"{name}: noise must be a br.Noise or None, got {type(noise).__name__}")
    if noise is not None and noise.random_is_map:
        raise ValueError(
            f"{name}: laboratory spectra have no pixels; give random as one number or one per band"
        )
    try:
        cube = band_average(spectra, wavelengths, fwhm)
    except (ValueError, TypeError) as error:
        raise type(error)(f"{name}: {error}") from None
    nowhere = cube["wavelength"].values[cube.isnull().all("sample").values]
    if nowhere.size:
        raise ValueError(f"{name}: no spectrum covers the band at {listed(nowhere.tolist(), 'nm')}")
    return cube.where(cube > 0), noise


def with_every_band(spectra: xr.DataArray, cubes: Iterable[xr.DataArray]) -> NDArray[np.bool_]:
    """Which samples have a positive value in every band of every cube."""
    seen = np.ones(spectra.sizes["sample"], dtype=bool)
    for cube in cubes:
        seen &= cube.notnull().all("wavelength").values
    return seen


def seen_groups(
    spectra: xr.DataArray, is_wanted: NDArray[np.bool_], seen: NDArray[np.bool_]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Indices of the wanted and of the unwanted samples that have a value in every band.

    Raises
    ------
    ValueError
        If they are fewer than three specimens.
    """
    names = specimen_names(spectra)
    chosen = np.flatnonzero(is_wanted & seen), np.flatnonzero(~is_wanted & seen)
    for title, each in zip(("wanted", "unwanted"), chosen, strict=True):
        count = np.unique(names[each]).size
        if count < 3:
            raise ValueError(
                f"{count} {title} specimens have a value in every band; three or more are needed, since one is always "
                "left out"
            )
    return chosen


def groups_at(cube: xr.DataArray, noise: Noise | None, first: NDArray, second: NDArray) -> Groups:
    """Log reflectances of two groups, with their variances by the noise."""
    names = specimen_names(cube)
    logs, variances, specimens = [], [], []
    for chosen in (first, second):
        part = cube.isel(sample=chosen).transpose("sample", "wavelength")
        logs.append(np.log(part.values))
        variances.append(_log_variance(part, noise))
        specimens.append(np.unique(names[chosen], return_inverse=True)[1])
    return Groups((logs[0], logs[1]), (variances[0], variances[1]), (specimens[0], specimens[1]))


def _log_variance(cube: xr.DataArray, noise: Noise | None) -> NDArray[np.float64]:
    """Variance of the log reflectances; a gain that all bands share drops out of every ratio."""
    if noise is None:
        return np.zeros(cube.shape)
    band = noise.for_cube(cube)
    relative = (band.random_variance(cube) + band.shared_variance(cube)) / cube**2
    variance: NDArray[np.float64] = relative.transpose(*cube.dims).values
    return variance


def pair_weights(counts: tuple[int, int], pairs: Pairs, resamples: int) -> NDArray[np.float64]:
    """Weights of the left-out pairs in bootstrap samples over specimens, shape (resample, pair)."""
    generator = np.random.default_rng(_SEED)
    first, second = (bootstrap_weights(count, resamples, generator) for count in counts)
    weights = first[:, pairs.wanted] * second[:, pairs.unwanted]
    total = weights.sum(axis=1, keepdims=True)
    share: NDArray[np.float64] = np.where(
        total > 0, weights / np.where(total > 0, total, 1), 1 / weights.shape[1]
    )
    return share


def area_limits(drawn: NDArray, area: float, counts: tuple[int, int]) -> tuple[float, float]:
    """Interval of an area: the bootstrap's, widened to the one that holds for few specimens."""
    low, high = centred_interval(area, drawn, 0.025)
    few_low, few_high = area_interval(float(np.clip(area, 0, 1)), *counts)
    return max(min(low, few_low), 0.0), min(max(high, few_high), 1.0)


def ratio_name(ratio: tuple[int, int], centres: NDArray) -> str:
    """Name of the ratio of two bands, as `BandRatio` makes it."""
    return f"r{centres[ratio[0]]:g}_r{centres[ratio[1]]:g}"


def rests_on(
    counts: tuple[int, int],
    pairs: Pairs,
    spectra: xr.DataArray,
    is_wanted: NDArray[np.bool_],
    seen: NDArray[np.bool_],
) -> list[str]:
    """What a recommendation rests on, in plain sentences."""
    first, second = int((is_wanted & seen).sum()), int((~is_wanted & seen).sum())
    basis = (
        f"this rests on {counts[0]} wanted specimens ({first} spectra) and {counts[1]} unwanted "
        f"({second} spectra) in the laboratory: mixtures, maturity and geometry of a real surface are not in it"
    )
    found = [basis]
    if pairs.wanted.size < counts[0] * counts[1]:
        found.append(
            f"{pairs.wanted.size} of {counts[0] * counts[1]} pairs of specimens were tried, drawn so that each specimen "
            "takes part about equally often"
        )
    left = [str(name) for name in spectra["sample"].values[~seen]] if "sample" in spectra.coords else []
    if left:
        found.append(
            f"left out, since a band is not covered: {listed(left[:8])}{' …' if len(left) > 8 else ''}"
        )
    if min(counts) < 8:
        found.append(
            f"too few specimens: {min(counts)} in the smaller group; another rock may well change the order"
        )
    return found
