"""Two wavelengths to a ratio, with an interval that holds at any signal."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import open_fraction
from .fieller import fieller_interval, ratio_and_sigma

__all__ = ["as_labelled", "lidar_ratio"]

_DIMS: dict[int, tuple[str, ...]] = {0: (), 1: ("shot",), 2: ("y", "x")}


def lidar_ratio(
    red: Any,
    infrared: Any,
    sigma_red: Any,
    sigma_infrared: Any,
    *,
    covariance: Any = 0,
    confidence: float = 0.6827,
) -> xr.Dataset:
    """Ratio of red to infrared albedo with Fieller's interval.

    A ratio of two noisy numbers is skewed, and where the infrared return is not told from zero no ± sigma describes
    it. Fieller's interval is the set of ratios that the two returns do not contradict, and holds its confidence at
    any signal: it is open above (``upper`` infinite) where the infrared return is not told from zero.

    Parameters
    ----------
    red, infrared : DataArray or array_like
        Albedos, or return energies in one unit; NaN where missing. Arrays without labels are taken as (shot,) or
        (y, x). Lazy arrays give lazy results.
    sigma_red, sigma_infrared : DataArray or array_like
        Standard uncertainties, in the same unit.
    covariance : DataArray or array_like
        Covariance of the two errors.
    confidence : float
        Confidence of the interval, between 0 and 1; 0.6827 is one sigma.

    Returns
    -------
    Dataset
        ``ratio``: negative albedos count as zero, so it is infinite where the infrared is at most zero;
        ``ratio_sigma``: first order, of use where the infrared is above about five of its sigmas;
        ``lower``, ``upper``: the interval, within [0, ∞).

    Raises
    ------
    ValueError
        If a sigma is negative, the covariance is larger than the sigmas allow, or the confidence is not a fraction.

    References
    ----------
    Fieller 1954, J. R. Stat. Soc. B 16, 175, doi:10.1111/j.2517-6161.1954.tb00159.x.

    Examples
    --------
    >>> ratio = lidar_ratio([0.5, 0.5], [0.25, 0.001], 0.01, 0.01, confidence=0.95)
    >>> ratio["ratio"].values.tolist(), ratio["upper"].values.round(2).tolist()
    ([2.0, 500.0], [2.19, inf])
    """
    from scipy.special import ndtri

    share = open_fraction("confidence", confidence)
    z = float(ndtri((1 + share) / 2))

    def block(a: Any, b: Any, sa: Any, sb: Any, c: Any) -> tuple[NDArray, ...]:
        _refuse_impossible(sa, sb, c)
        return (*ratio_and_sigma(a, b, sa, sb, c), *fieller_interval(a, b, sa, sb, c, z))

    given = [as_labelled(x, red) for x in (red, infrared, sigma_red, sigma_infrared, covariance)]
    results = xr.apply_ufunc(
        block,
        *given,
        output_core_dims=[[], [], [], []],
        dask="parallelized",
        output_dtypes=[float] * 4,
        join="exact",
    )
    ratio, sigma, lower, upper = results
    text = f"Fieller's interval at {share:.4g} confidence"
    ratio.attrs = {
        "long_name": "red over infrared albedo",
        "units": "1",
        "ancillary_variables": "ratio_sigma lower upper",
    }
    sigma.attrs = {"long_name": "standard uncertainty of the ratio, first order", "units": "1"}
    lower.attrs = {"long_name": f"lower end of {text}", "units": "1"}
    upper.attrs = {"long_name": f"upper end of {text}, infinite where open", "units": "1"}
    return xr.Dataset(
        {"ratio": ratio, "ratio_sigma": sigma, "lower": lower, "upper": upper},
        attrs={"Conventions": "CF-1.11", "confidence": share},
    )


def as_labelled(values: Any, beside: Any) -> xr.DataArray:
    """A DataArray of what may be one, an array, or a number; labels as those of `beside` where the shape is."""
    if isinstance(values, xr.DataArray):
        return values
    array = values if hasattr(values, "dask") else np.asarray(values, dtype=float)
    if array.ndim == 0:
        return xr.DataArray(array)
    if isinstance(beside, xr.DataArray):
        if beside.shape != array.shape:
            raise ValueError(
                f"an array of shape {array.shape} does not fit the labelled one of {dict(beside.sizes)}; give a "
                "DataArray, or an array of that shape"
            )
        return beside.copy(data=array, deep=False)
    if array.ndim not in _DIMS:
        raise ValueError(f"wanted arrays (shot,) or (y, x), or labelled ones, got the shape {array.shape}")
    return xr.DataArray(array, dims=_DIMS[array.ndim])


def _refuse_impossible(sa: NDArray, sb: NDArray, c: NDArray) -> None:
    for name, sigma in (("sigma_red", sa), ("sigma_infrared", sb)):
        if np.any(np.asarray(sigma) < 0):
            raise ValueError(f"{name} must not be negative, got {np.nanmin(sigma):g}")
    if np.any(np.abs(c) > np.asarray(sa) * np.asarray(sb) * (1 + 1e-9)):
        raise ValueError(
            "the covariance of red and infrared is larger than sigma_red·sigma_infrared somewhere, which no errors "
            "can have; give a covariance, not a variance or a correlation"
        )
