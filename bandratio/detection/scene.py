"""A threshold from the scene's own values: one quantile of one parameter."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import open_fraction, suggestion
from .threshold import Threshold

__all__ = ["scene_threshold"]

_BINS = 65_536
#: How many values are held in memory at most, of a lazy map.
_HELD = 4_000_000


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
    count, *ends = _count_and_ends(values.data)
    if count == 0:
        raise ValueError(f"{name} has no finite value in these maps; check the cube with check_cube")
    spread = float(np.sqrt(share * (1 - share) / count))
    ranks = [
        int(np.clip(np.ceil(level * (count - 1)), 0, count - 1))
        for level in (share - spread, share, share + spread)
    ]
    low, middle, high = _order_statistics(values.data, ranks, ends)
    shoulder = values.attrs.get("shoulder")
    return Threshold(
        middle,
        sigma=(high - low) / 2,
        origin="scene",
        parameter=name,
        shoulder=None if shoulder is None else float(shoulder),
        quantity=str(values.coords["quantity"].item()) if "quantity" in values.coords else None,
    )


def _of_each_block(values: Any, function: Callable[..., Any], *arguments: Any) -> list[Any]:
    """What a function of an array gives for each block of a lazy array, or for an array in memory: one reading."""
    if not hasattr(values, "dask"):
        return [function(np.asarray(values), *arguments)]
    import dask

    tools: Any = dask
    once = tools.delayed(function)
    return list(tools.compute(*(once(block, *arguments) for block in values.to_delayed().ravel())))


def _finite(block: NDArray) -> NDArray[np.float64]:
    numbers: NDArray[np.float64] = block.astype(float).ravel()
    return numbers[np.isfinite(numbers)]


def _ends_of(block: NDArray) -> tuple[int, float, float]:
    numbers = _finite(block)
    return numbers.size, float(numbers.min(initial=np.inf)), float(numbers.max(initial=-np.inf))


def _counts_of(block: NDArray, edges: NDArray) -> NDArray[np.int64]:
    return np.histogram(_finite(block), bins=edges)[0]


def _kept_of(block: NDArray, ranges: list[tuple[float, float]]) -> NDArray[np.float64]:
    numbers = _finite(block)
    return numbers[np.any([(numbers >= low) & (numbers <= high) for low, high in ranges], axis=0)]


def _equal_to(block: NDArray, wanted: list[float]) -> NDArray[np.int64]:
    numbers = _finite(block)
    return np.array([np.count_nonzero(numbers == value) for value in wanted])


def _count_and_ends(values: Any) -> tuple[int, float, float]:
    """Number of finite values, the smallest and the largest."""
    counts, least, most = zip(*_of_each_block(values, _ends_of), strict=True)
    return sum(counts), min(least), max(most)


def _order_statistics(values: Any, ranks: list[int], ends: list[float]) -> list[float]:
    """Values at the given ranks (0 is the smallest) of the finite ones.

    They are counted into a histogram in one reading, and in a second one only the values of those bins are kept that
    hold a wanted rank. Where these are still crowded, they are divided again first.
    """
    #: for each rank the bin that holds it: its edges, the values in it, and those below it
    bins = [(ends[0], ends[1], np.inf, 0)] * len(ranks)
    while sum(inside for _, _, inside, _ in set(bins)) > _HELD:
        edges = np.unique(
            np.concatenate([np.linspace(low, high, _BINS + 1) for low, high, _, _ in set(bins)])
        )
        narrow = [np.count_nonzero((edges >= low) & (edges <= high)) < 3 for low, high, _, _ in bins]
        if all(narrow):  # one value many times: a bin holds its two edges and nothing between
            at_low = sum(_of_each_block(values, _equal_to, [low for low, _, _, _ in bins]))
            return [
                low if rank - below < count else high
                for rank, count, (low, high, _, below) in zip(ranks, at_low, bins, strict=True)
            ]
        counts = sum(_of_each_block(values, _counts_of, edges))
        bins = [
            each if stop else _bin_of(rank, each, edges, counts)
            for rank, each, stop in zip(ranks, bins, narrow, strict=True)
        ]
    ranges = [(low, high) for low, high, _, _ in set(bins)]
    kept = np.sort(np.concatenate(_of_each_block(values, _kept_of, ranges)))
    found = []
    for rank, (low, high, _, below) in zip(ranks, bins, strict=True):
        own = kept[(kept >= low) & (kept <= high)]
        found.append(float(own[rank - below]))
    return found


def _bin_of(
    rank: int, outer: tuple[float, float, float, int], edges: NDArray, counts: NDArray
) -> tuple[float, float, float, int]:
    """The finer bin within `outer` that holds a rank."""
    low, high, _, below = outer
    first, last = np.searchsorted(edges, low), np.searchsorted(edges, high)
    cumulative = below + np.cumsum(counts[first:last])
    place = int(np.searchsorted(cumulative, rank, side="right"))
    place = min(place, cumulative.size - 1)
    inside = int(counts[first + place])
    return (
        float(edges[first + place]),
        float(edges[first + place + 1]),
        inside,
        int(cumulative[place]) - inside,
    )
