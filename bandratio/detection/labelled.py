"""Labelled spectra: which samples belong to a group, to which specimen, and what a ratio is in each."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed
from ..noise import Noise
from ..ratio import BandRatio
from ..spectra import chosen_samples
from .specimens import Specimens

__all__ = ["form_errors", "labelled_groups", "parameters_of", "specimen_names"]


def labelled_groups(
    spectra: xr.DataArray, wanted: str | Iterable[str], unwanted: str | Iterable[str]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Indices of the wanted and of the unwanted samples.

    Raises
    ------
    ValueError
        If a name is unknown, a group has fewer than two specimens, or a specimen is in both.
    """
    masks = [chosen_samples(spectra, group) for group in (wanted, unwanted)]
    names = specimen_names(spectra)
    shared = np.intersect1d(names[masks[0]], names[masks[1]])
    if shared.size:
        raise ValueError(
            f"wanted and unwanted share {listed(shared.tolist()[:5])}; a specimen belongs to one of them"
        )
    for title, mask in zip(("wanted", "unwanted"), masks, strict=True):
        count = np.unique(names[mask]).size
        if count < 2:
            raise ValueError(
                f"the {title} group holds {int(mask.sum())} samples of {count} specimen; two specimens or more are "
                "needed, since grain sizes of one rock say nothing of how rocks differ"
            )
    return np.flatnonzero(masks[0]), np.flatnonzero(masks[1])


def specimen_names(spectra: xr.DataArray) -> NDArray:
    """Name of each sample's specimen; without that coordinate every sample is its own."""
    key = "specimen" if "specimen" in spectra.coords else "sample"
    names = spectra[key].values if key in spectra.coords else np.arange(spectra.sizes["sample"])
    return np.array([str(name) for name in names])


def parameters_of(
    ratios: Mapping[str, BandRatio], cube: xr.DataArray, noise: Noise | None, tolerance: float
) -> dict[str, Specimens]:
    """Each ratio of the samples of one group, with the errors of its numerator and denominator.

    Samples that lack one of the ratios are left out of all.

    Raises
    ------
    ValueError
        If fewer than two specimens have a value.
    """
    names = specimen_names(cube)
    values = {name: ratio.value(cube, tolerance=tolerance).values for name, ratio in ratios.items()}
    for name, each in values.items():
        count = np.unique(names[np.isfinite(each)]).size
        if count < 2:
            raise ValueError(
                f"{name} has a value for {count} specimen of a group; the others have no channels at its bands, or "
                "their denominator is not positive"
            )
    # two parameters are judged on the same samples
    whole = np.all([np.isfinite(each) for each in values.values()], axis=0)
    if np.unique(names[whole]).size < 2:
        raise ValueError(
            f"{listed(values)} have values for different specimens, and fewer than two of a group have both"
        )
    return {
        name: Specimens.build(
            np.where(whole, values[name], np.nan), form_errors(ratio, cube, noise, tolerance), names
        )
        for name, ratio in ratios.items()
    }


def form_errors(
    ratio: BandRatio, cube: xr.DataArray, noise: Noise | None, tolerance: float
) -> NDArray[np.float64]:
    """Variances and covariance of the ratio's scaled numerator N and denominator D, over D²: shape (3, sample)."""
    n, d = ratio.weights_for(cube["wavelength"].values, tolerance)
    n, used = n * ratio.scale, (n != 0) | (d != 0)
    R = cube.transpose("wavelength", "sample").astype(float)
    if noise is None:
        return np.zeros((3, R.sizes["sample"]))
    band = noise.for_cube(cube, tolerance)
    variance = (band.random_variance(R) + band.shared_variance(R)).transpose(*R.dims).values[used]
    R, n, d = R.values[used], n[used], d[used]
    errors = np.stack([w @ variance for w in (n * n, n * d, d * d)])
    if not ratio.is_pure:  # in a pure ratio a gain of all bands moves N and D alike
        upper, lower = n @ R, d @ R
        gains = np.asarray(band.common_gain**2 + band.pixel_gain**2)
        errors += gains * np.stack([upper**2, upper * lower, lower**2])
    scaled: NDArray[np.float64] = errors / (d @ R + ratio.denominator_offset) ** 2
    return scaled
