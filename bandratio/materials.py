"""What the parameters say about materials: every parameter for every laboratory spectrum, at a user's own bands."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from ._checks import require_noise
from .bands import TOLERANCE_NM
from .maps import parameters
from .noise import Noise
from .ratio import BandRatio
from .spectra import Responses, band_average, chosen_samples, reference_spectra, without_value

__all__ = ["material_table"]


def material_table(
    wavelengths: ArrayLike | None,
    fwhm: ArrayLike | None = None,
    noise: Noise | None = None,
    *,
    responses: Responses | None = None,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | str | BandRatio | None = None,
    materials: str | Iterable[str] | None = None,
    spectra: xr.DataArray | None = None,
    tolerance: float = TOLERANCE_NM,
) -> xr.Dataset:
    """Every parameter for every reference material, with sigma for one pixel of the user's own noise.

    Parameters
    ----------
    wavelengths : array_like, shape (band,), or None
        Band centres [nm]; None only with `responses`.
    fwhm : array_like, optional
        Full widths at half maximum of Gaussian bands [nm]; None takes the spectra at the centres.
    noise : Noise, optional
        Of the user's cube. Its `random` must not be a map.
    responses : path or mapping, optional
        Tabulated response curves, as in :func:`bandratio.band_average`.
    names : parameters, optional
        As in :func:`bandratio.parameters`; None gives every parameter that the bands allow.
    materials : str or list of str, optional
        Groups, samples or specimens; None gives all.
    spectra : DataArray, optional
        A library of the user's own (see :func:`bandratio.open_library`) in place of the reference table.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    Dataset over `sample`
        ``<name>`` and, with noise, ``<name>_sigma``, with the spectra's coordinates. ``.to_dataframe()`` makes a
        plain table of it.

    Raises
    ------
    ValueError
        If a material is unknown (the nearest names are suggested), or the bands allow no parameter.

    Examples
    --------
    >>> import bandratio as br
    >>> table = br.material_table([480, 600, 700, 830], noise=br.Noise(relative=0.01))
    >>> soil = table.sel(sample="Soil 62231")
    >>> print(f"{float(soil.red_slope):.1f} ± {float(soil.red_slope_sigma):.1f} {table.red_slope.units}")
    11.2 ± 1.4 % per 100 nm
    """
    require_noise(noise)
    if wavelengths is None and responses is None:
        raise ValueError("give the band centres in nm, or responses=…")
    if spectra is None:
        averaged = reference_spectra(wavelengths, fwhm, responses=responses)
    else:
        averaged = band_average(spectra, wavelengths, fwhm, responses=responses)
    if materials is not None:
        averaged = averaged.isel(sample=np.flatnonzero(chosen_samples(averaged, materials)))
    if noise is not None and (noise.random_is_map or noise.shared_within is not None):
        raise ValueError(
            "a table of materials has no pixels: give noise without maps and without shared_within"
        )
    table = parameters(averaged, noise, names, tolerance=tolerance)
    table.attrs["materials_left_out"] = without_value(averaged)
    return table
