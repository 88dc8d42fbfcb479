"""Choosing samples of a library by what they are called."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import suggestion

__all__ = ["chosen_samples"]

_KEYS = ("group", "sample", "specimen")


def chosen_samples(spectra: xr.DataArray, wanted: str | Iterable[str]) -> NDArray[np.bool_]:
    """Which samples belong to named groups, samples or specimens.

    Parameters
    ----------
    spectra : DataArray with a dimension `sample`
        Its coordinates ``group``, ``sample`` and ``specimen`` are searched, in this order.
    wanted : str or iterable of str
        Names, in upper or lower case; or an array of bool, shape (sample,), which is handed back.

    Returns
    -------
    ndarray of bool, shape (sample,)

    Raises
    ------
    ValueError
        If a name is unknown (the nearest ones are suggested), or nothing is named.

    Examples
    --------
    >>> import bandratio as br
    >>> int(chosen_samples(br.reference_spectra(), ["plagioclase", "Soil 62231"]).sum())
    5
    """
    if "sample" not in spectra.dims:
        raise ValueError(f"spectra must have a dimension sample, got {', '.join(map(str, spectra.dims))}")
    if not isinstance(wanted, str) and np.asarray(wanted).dtype == bool:
        mask = np.asarray(wanted)
        if mask.shape != (spectra.sizes["sample"],):
            raise ValueError(
                f"a choice of samples must have {spectra.sizes['sample']} values, got {mask.shape}"
            )
        return mask
    names = [wanted] if isinstance(wanted, str) else list(wanted)
    if not names:
        raise ValueError("name at least one group or sample")
    columns = {
        key: np.array([str(text).lower() for text in spectra[key].values])
        for key in _KEYS
        if key in spectra.coords
    }
    mask = np.zeros(spectra.sizes["sample"], dtype=bool)
    for name in names:
        found = [column == str(name).lower() for column in columns.values()]
        hit = next((each for each in found if each.any()), None)
        if hit is None:
            known = dict.fromkeys(str(text) for key in columns for text in spectra[key].values if str(text))
            raise ValueError(f"no group or sample is called {name!r}{suggestion(str(name), known)}")
        mask |= hit
    return mask
