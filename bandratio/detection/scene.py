"""A threshold from the scene's own values: one quantile of one parameter."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from .._checks import open_fraction, suggestion
from .threshold import Threshold

__all__ = ["scene_threshold"]

_BINS = 4096


def scene_threshold(maps: xr.Dataset, name: str, quantile: float) -> Threshold:
    """Quantile of a parameter over the scene, as a threshold of origin ``scene``.

    Against such a threshold a calibration gain that the whole scene shares cancels, since it moves the threshold
    and the pixels alike. The price: some pixels always lie above a scene's own 95 % quantile, interesting or not.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters``; lazy maps are streamed block by block and never held whole.
    name : str
        The parameter.
    quantile : float
        Share of the pixels below the threshold, between 0 and 1.

    Returns
    -------
    Threshold
        The value is exact for maps in memory and for lazy ones (the order statistic just above the quantile). Sigma
        is the sampling error of a quantile of n independent pixels, half the distance between the quantiles at
        q ± √(q(1 − q)/n): for pixels that resemble their neighbours it is too small.

    Raises
    ------
    ValueError
        If the parameter is not in the maps, has no finite value, or the quantile is not between 0 and 1.

    References
    ----------
    David & Nagaraja 2003, Order Statistics, 3rd ed., section 7.1 (distribution-free interval of a quantile),
    doi:10.1002/0471722162.

    Examples
    --------
    >>> maps = xr.Dataset({"red_slope": ("x", np.arange(1001.0))})
    >>> scene_threshold(maps, "red_slope", 0.95).value
    950.0
    """
    if not isinstance(maps, xr.Dataset):
        raise TypeError(f"maps must be a Dataset of parameters, got {type(maps).__name__}")
    parameters = [str(key) for key in maps.data_vars if "_sigma" not in str(key)]
    if name not in maps:
        raise ValueError(f"the maps hold no {name!r}{suggestion(name, parameters)}")
    share = open_fraction("quantile", quantile)
    values = maps[name]
    count = int(values.notnull().sum())
    if count == 0:
        raise ValueError(f"{name} has no finite value in these maps; check the cube with check_cube")
    spread = float(np.sqrt(share * (1 - share) / count))
    ranks = [
        int(np.clip(np.ceil(level * (count - 1)), 0, count - 1))
        for level in (share - spread, share, share + spread)
    ]
    low, middle, high = _order_statistics(values.data, ranks)
    shoulder = values.attrs.get("shoulder")
    return Threshold(
        middle,
        sigma=(high - low) / 2,
        origin="scene",
        parameter=name,
        shoulder=None if shoulder is None else float(shoulder),
        quantity=str(values.coords["quantity"].item()) if "quantity" in values.coords else None,
    )


def _order_statistics(values: Any, ranks: list[int]) -> list[float]:
    """Values at the given ranks (0 is the smallest) of the finite ones; lazy arrays are streamed.

    A lazy array is counted into a histogram, then only the values of the bins that hold a wanted rank are kept;
    where one of those bins is still crowded it is divided again.
    """
    if not hasattr(values, "dask"):
        finite = np.asarray(values, dtype=float)
        finite = finite[np.isfinite(finite)]
        found = np.partition(finite, sorted(set(ranks)))
        return [float(found[rank]) for rank in ranks]
    return [_lazy_order_statistic(values, rank) for rank in ranks]


def _lazy_order_statistic(values: Any, rank: int, held: int = 1_000_000) -> float:
    import dask.array as da

    histogram: Any = da.histogram
    blocks = values.ravel().astype(float)
    finite = da.where(da.isfinite(blocks), blocks, np.nan)
    low, high = (float(edge) for edge in da.stack([da.nanmin(finite), da.nanmax(finite)]).compute())
    below = 0
    while True:
        edges = np.linspace(low, high, _BINS + 1)
        if low == high or not (np.diff(edges) > 0).all():
            return low
        counts = histogram(blocks[da.isfinite(blocks)], bins=edges)[0].compute()
        cumulative = below + np.cumsum(counts)
        chosen = int(np.searchsorted(cumulative, rank, side="right"))
        inside, below = int(counts[chosen]), int(cumulative[chosen] - counts[chosen])
        low, high = float(edges[chosen]), float(edges[chosen + 1])
        if inside <= held:
            last = chosen == _BINS - 1
            kept = blocks[(blocks >= low) & ((blocks <= high) if last else (blocks < high))].compute()
            return float(np.partition(kept, rank - below)[rank - below])
