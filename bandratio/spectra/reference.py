"""The embedded table of reference spectra: materials of airless bodies, each row with its published source."""

from __future__ import annotations

from functools import lru_cache
from importlib.resources import as_file, files

import xarray as xr
from numpy.typing import ArrayLike

from .._checks import listed
from .averaging import Responses, average_or_refuse
from .library import on_one_grid
from .tables import read_table

__all__ = ["reference_spectra", "without_value"]


def reference_spectra(
    wavelengths: ArrayLike | None = None, fwhm: ArrayLike | None = None, *, responses: Responses | None = None
) -> xr.DataArray:
    """Reference spectra of materials of airless bodies, at the table's own points or at yours.

    The table holds opaques (ilmenite, magnetite, chromite), plagioclases, low- and high-calcium pyroxenes and
    olivines, some at several grain sizes, basalts, a mature highland soil (62231), the highland, mare and average
    Moon, and snow, slush and ice. It holds no volcanic glass and no pyroclastic deposit: thresholds for those must
    come from a library of your own.

    Parameters
    ----------
    wavelengths : array_like, shape (band,), optional
        Band centres [nm]; None gives the table as it is.
    fwhm : array_like, optional
        Full widths at half maximum of Gaussian bands [nm]; None interpolates at the centres.
    responses : path or mapping, optional
        Tabulated response curves, as in :func:`band_average`.

    Returns
    -------
    DataArray, shape (sample, wavelength)
        Reflectance factor [1], with the coordinates ``sample``, ``specimen``, ``group``, ``record``, ``grain_size``,
        ``geometry``, ``source``. NaN where a material has no points at a band, or where they are further apart than
        the band and 70 nm; the attribute ``left_out`` says which.

    Raises
    ------
    ValueError
        If no material of the table has points at a band.

    Notes
    -----
    The laboratory rows are the published spectra interpolated linearly (channels 1–12 nm apart below 2 µm) at every
    10 nm to 1100 nm and 20 nm beyond, and every 10 nm from 1400 to 1600 nm, given to four digits. The soil and the
    lunar means stand at their own published points. Bands of 20 nm through the table differ from bands through the whole
    spectra by 2e-4 in the median and by at most 0.005, on the steepest flanks. The means are equigonal albedos at 6° phase: brighter than at
    the laboratory's 30° by the opposition effect; their colours compare, their levels do so only roughly.

    References
    ----------
    Kokaly et al. 2017, USGS Spectral Library Version 7, doi:10.3133/ds1035. Pieters 1999, New Views of the Moon II,
    abstract 8025. Velikodsky et al. 2011, Icarus 214, 30.

    Examples
    --------
    >>> import bandratio as br
    >>> spectra = br.reference_spectra([640, 1535])
    >>> spectra.sel(sample="Ilmenite HS231.3B").round(4).values
    array([0.0553, 0.0599])
    """
    table = _table().copy(deep=True)
    if wavelengths is None and fwhm is None and responses is None:
        return table
    averaged = average_or_refuse(table, wavelengths, fwhm, responses)
    missing = averaged.isnull()
    nowhere = averaged["wavelength"].values[missing.all("sample").values]
    if nowhere.size:
        known = table["wavelength"].values
        raise ValueError(
            f"the reference table has no points for the band at {listed(nowhere.tolist(), 'nm')}; it reaches from "
            f"{known[0]:g} to {known[-1]:g} nm in steps of 10 to 50 nm"
        )
    averaged.attrs["left_out"] = without_value(averaged)
    return averaged


def without_value(averaged: xr.DataArray) -> str:
    """Which samples have no value, and at which bands: one clause for each list of bands."""
    missing = averaged.isnull().transpose("sample", "wavelength")
    bands = missing["wavelength"].values
    of_bands: dict[tuple[float, ...], list[str]] = {}
    for sample, row in zip(missing["sample"].values, missing.values, strict=True):
        if row.any():
            of_bands.setdefault(tuple(bands[row].tolist()), []).append(str(sample))
    return "; ".join(f"no value at {listed(at, 'nm')} for {listed(names)}" for at, names in of_bands.items())


@lru_cache(maxsize=1)
def _table() -> xr.DataArray:
    with as_file(files("bandratio") / "data" / "reference.csv") as path:
        table = on_one_grid(read_table(path), quantity="reflectance_factor", name="the reference table")
    table.attrs["long_name"] = "reflectance factor"
    return table
