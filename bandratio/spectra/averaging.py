"""Spectra averaged to a user's bands: one answer per sample, judged on that sample's own channels."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Literal, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import listed, positive
from ..bands import wavelength_array
from .response import LARGEST_GAP_NM, Gaussian, Monochromatic, Response, Tabulated, Weights, band_weights

__all__ = ["Responses", "average_or_refuse", "band_average", "effective_wavelength", "responses_of"]

#: Response curves: a CSV file (first column the wavelength [nm], one column per band), or per band name a pair of
#: lists (wavelengths [nm], response).
Responses: TypeAlias = "str | Path | Mapping[str, tuple[ArrayLike, ArrayLike]]"


def band_average(
    spectra: xr.DataArray,
    wavelengths: ArrayLike | None,
    fwhm: ArrayLike | None = None,
    *,
    responses: Responses | None = None,
) -> xr.DataArray:
    """Reflectances that bands would measure, from spectra with finer channels.

    Between its channels a spectrum is taken as straight lines, and the response is integrated exactly over them, so
    a linear spectrum gives exactly its value at the band's effective wavelength. Coverage is judged on each sample's
    own channels, those where it has a value, and never on a grid that several samples share.

    Parameters
    ----------
    spectra : DataArray, dimension `wavelength` [nm] and any others
        Reflectance; NaN where a sample has no channel.
    wavelengths : array_like, shape (band,), or None
        Band centres [nm]; with `responses` they only label the result, and None takes each curve's centroid.
    fwhm : array_like, optional
        Full widths at half maximum of Gaussian bands [nm], one or one per band; each band reaches to 4 sigmas.
        None without `responses`: the value at each centre, by linear interpolation between channels that are at
        most 70 nm apart.
    responses : path or mapping, optional
        Tabulated response curves: a CSV file with the wavelength [nm] in the first column and one column for each
        band, or ``{band: (wavelengths, response)}``.

    Returns
    -------
    DataArray, dimensions of `spectra` with the new `wavelength`
        NaN where a sample's channels do not cover the whole band, or leave a gap under it. Coordinates are kept;
        `fwhm` is put beside `wavelength` where it is known. Lazy spectra give a lazy result.

    Raises
    ------
    ValueError
        If wavelengths do not ascend or look like µm, widths and responses are both given, or a sample's channels are
        wider than a band.

    See Also
    --------
    effective_wavelength : where on the spectrum a band really looks.

    Examples
    --------
    >>> channels = np.arange(400.0, 900.0, 5.0)
    >>> spectra = xr.DataArray(0.1 + 2e-4 * channels, dims="wavelength", coords={"wavelength": channels})
    >>> band_average(spectra, [480, 600], fwhm=20).round(12).values
    array([0.196, 0.22 ])
    """
    bands = responses_of(wavelengths, fwhm, responses)
    return _apply(spectra, bands, wavelengths, fwhm, "mean", on_wide="raise")


def effective_wavelength(
    spectra: xr.DataArray,
    wavelengths: ArrayLike | None,
    fwhm: ArrayLike | None = None,
    *,
    responses: Responses | None = None,
) -> xr.DataArray:
    """Wavelength that a band effectively sees on each spectrum: ∫ λ·S·r dλ / ∫ S·r dλ.

    Its distance from the band's centre is the shift that a spectrum's own colour causes: red spectra move a broad
    band to longer wavelengths.

    Parameters
    ----------
    spectra, wavelengths, fwhm, responses
        As in :func:`band_average`.

    Returns
    -------
    DataArray [nm], dimensions of `spectra` with the new `wavelength`
        NaN where the band average is NaN, or not above zero.

    Raises
    ------
    ValueError
        As :func:`band_average`.

    Examples
    --------
    >>> channels = np.arange(400.0, 900.0, 5.0)
    >>> spectra = xr.DataArray(1e-3 * channels, dims="wavelength", coords={"wavelength": channels})
    >>> effective_wavelength(spectra, [600], fwhm=60).round(3).values
    array([601.081])
    """
    bands = responses_of(wavelengths, fwhm, responses)
    mean = _apply(spectra, bands, wavelengths, fwhm, "mean", on_wide="raise")
    moment = _apply(spectra, bands, wavelengths, fwhm, "moment", on_wide="raise")
    centres = xr.DataArray(
        [band.centre for band in bands], dims="wavelength", coords=mean["wavelength"].coords
    )
    shifted: xr.DataArray = (centres + moment / mean.where(mean > 0)).transpose(*mean.dims)
    shifted.attrs = {"long_name": "effective wavelength", "units": "nm"}
    return shifted.rename("effective_wavelength")


def responses_of(
    wavelengths: ArrayLike | None, fwhm: ArrayLike | None, responses: Responses | None = None
) -> list[Response]:
    """Response curve of every band, from the ways in which a user may describe them.

    Raises
    ------
    ValueError
        If nothing or two things are given, lengths differ, or a curve is not usable.
    """
    if responses is not None:
        if fwhm is not None:
            raise ValueError("give either fwhm=… or responses=…, one of the two")
        curves = _tabulated(responses)
        if wavelengths is not None and np.size(wavelengths) != len(curves):
            raise ValueError(
                f"there are {len(curves)} responses and {np.size(wavelengths)} wavelengths; give as many"
            )
        return list(curves)
    if wavelengths is None:
        raise ValueError("wavelengths may be None only with responses=…; give the band centres in nm")
    centres = wavelength_array(wavelengths)
    if fwhm is None:
        return [Monochromatic(float(centre)) for centre in centres]
    widths = np.atleast_1d(np.asarray(fwhm, dtype=float))
    if widths.ndim != 1 or widths.size not in (1, centres.size):
        raise ValueError(f"fwhm must be one number or one per band ({centres.size}), got {widths.size}")
    return [
        Gaussian(float(centre), positive(f"fwhm at {centre:g} nm", width, "nm"))
        for centre, width in zip(centres, np.broadcast_to(widths, centres.shape), strict=True)
    ]


def _tabulated(responses: Responses) -> list[Tabulated]:
    if isinstance(responses, Mapping):
        if not responses:
            raise ValueError("responses is empty; give {band: (wavelengths in nm, response)}")
        return [
            Tabulated(*_pair(name, pair), name=f"the response {name!r}") for name, pair in responses.items()
        ]
    from .tables import read_columns

    names, columns = read_columns(Path(responses))
    if len(names) < 2:
        raise ValueError(
            f"{responses}: wanted the wavelength [nm] and one column per band, got {listed(names)}"
        )
    curves = []
    for name, values in zip(names[1:], columns[1:], strict=True):
        known = np.isfinite(values)
        curves.append(Tabulated(columns[0][known], values[known], name=f"{responses}: the response {name!r}"))
    return curves


def _pair(name: str, pair: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    try:
        wavelengths, values = pair
        return np.asarray(wavelengths, dtype=float), np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(
            f"the response {name!r} must be a pair (wavelengths in nm, response), got {pair!r}"
        ) from None


def _apply(
    spectra: xr.DataArray,
    bands: Sequence[Response],
    wavelengths: ArrayLike | None,
    fwhm: ArrayLike | None,
    kind: Literal["mean", "moment"],
    on_wide: Literal["raise", "refuse"],
) -> xr.DataArray:
    channels = checked_channels(spectra)
    labels = [band.centre for band in bands] if wavelengths is None else wavelength_array(wavelengths)
    names = _sample_names(spectra)
    averaged: xr.DataArray = xr.apply_ufunc(
        _averages,
        spectra.astype(float),
        kwargs={"channels": channels, "bands": bands, "kind": kind, "names": names, "on_wide": on_wide},
        input_core_dims=[["wavelength"]],
        output_core_dims=[["band"]],
        dask="parallelized",
        dask_gufunc_kwargs={"output_sizes": {"band": len(bands)}, "allow_rechunk": True},
        output_dtypes=[float],
        keep_attrs=True,
    )
    averaged = averaged.rename(band="wavelength").assign_coords(wavelength=np.asarray(labels, dtype=float))
    averaged["wavelength"].attrs = {"units": "nm", "standard_name": "radiation_wavelength"}
    if fwhm is not None:
        averaged = averaged.assign_coords(fwhm=("wavelength", np.array([band.width for band in bands])))
    return averaged.transpose(*spectra.dims)


def checked_channels(spectra: xr.DataArray) -> NDArray[np.float64]:
    """Channels of a DataArray of spectra [nm], refused where they do not ascend."""
    if not isinstance(spectra, xr.DataArray) or "wavelength" not in spectra.coords:
        raise TypeError(
            "spectra must be a DataArray with a wavelength coordinate in nm, as open_library gives one; "
            f"got {type(spectra).__name__}"
        )
    if "wavelength" not in spectra.dims:
        raise ValueError(f"spectra must have a dimension wavelength, got {listed(spectra.dims)}")
    channels = wavelength_array(spectra["wavelength"].values, "the spectra's wavelengths")
    steps = np.diff(channels)
    if (steps == 0).any():
        raise ValueError(
            f"the spectra hold {channels[:-1][steps == 0][0]:g} nm twice; keep one of the two channels"
        )
    if (steps < 0).any():
        raise ValueError("the spectra's wavelengths must ascend; use spectra.sortby('wavelength')")
    return channels


def _sample_names(spectra: xr.DataArray) -> list[str] | None:
    if spectra.dims in (("sample", "wavelength"), ("wavelength", "sample")) and "sample" in spectra.coords:
        return [str(name) for name in spectra["sample"].values]
    return None


def _averages(
    values: NDArray[np.float64],
    *,
    channels: NDArray[np.float64],
    bands: Sequence[Response],
    kind: Literal["mean", "moment"],
    names: list[str] | None,
    on_wide: Literal["raise", "refuse"],
) -> NDArray[np.float64]:
    """Average of spectra, shape (…, channel), in every band: shape (…, band)."""
    flat = values.reshape(-1, values.shape[-1])
    result = np.full((flat.shape[0], len(bands)), np.nan)
    masks, of_mask = np.unique(np.isfinite(flat), axis=0, return_inverse=True)
    for number, mask in enumerate(masks):
        rows = np.flatnonzero(of_mask.ravel() == number)
        own = flat[rows][:, mask]
        for column, band in enumerate(bands):
            weights = band_weights(channels[mask], band)
            if weights is None:
                continue
            allowed = band.width if on_wide == "raise" else max(band.width, LARGEST_GAP_NM)
            if weights.gap > allowed:
                if on_wide == "raise" and weights.spacing > allowed:
                    _refuse_wide_channels(band, weights, names[rows[0]] if names else None)
                continue
            result[rows, column] = own @ getattr(weights, kind)
    return result.reshape(*values.shape[:-1], len(bands))


def _refuse_wide_channels(band: Response, weights: Weights, name: str | None) -> None:
    whose = f"the channels of {name}" if name else "the spectra's channels"
    raise ValueError(
        f"{whose} are {weights.spacing:.3g} nm apart near {band.centre:g} nm, wider than the band ({band.width:.3g} nm); "
        "they cannot tell what it would see: give wider bands, finer spectra, or no fwhm to interpolate"
    )


def average_or_refuse(
    spectra: xr.DataArray, wavelengths: ArrayLike | None, fwhm: ArrayLike | None, responses: Responses | None
) -> xr.DataArray:
    """As `band_average`, and NaN instead of an error where points are too far apart for a band.

    Straight lines are drawn between points up to 70 nm apart, also under a narrower band: for smooth spectra whose
    points were not measured one by one with narrow channels, such as the reference table.
    """
    bands = responses_of(wavelengths, fwhm, responses)
    return _apply(spectra, bands, wavelengths, fwhm, "mean", on_wide="refuse")
