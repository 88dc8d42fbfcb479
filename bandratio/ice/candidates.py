"""The best spots: candidates in order, kept apart by a distance."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import non_negative, one_of
from .decision import FLAG_MEANINGS

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["rank_candidates"]

#: What candidates may be ordered by, and whether the largest is the best.
_ORDERS = {
    "fraction_lower": True, "fraction_upper": True, "outside_sigma": True, "ratio": True,
    "p_value": False, "q_value": False,
}  # fmt: skip
_HELD = 200_000  # candidates held at once, where they need not be kept apart


def rank_candidates(
    flags: xr.Dataset, n: int = 20, by: str = "fraction_lower", *, min_separation: float | None = None
) -> pd.DataFrame:
    """The best candidates of a scene, first the best.

    Parameters
    ----------
    flags : Dataset
        As from `ice_flags`, over `shot` or (y, x). Lazy flags are streamed.
    n : int
        Number of candidates wanted, at most.
    by : {"fraction_lower", "outside_sigma", "q_value", "p_value", "fraction_upper", "ratio"}
        What they are ordered by. Ties go to the larger `outside_sigma`, which still tells apart what floating point
        gives the same p-value, zero; then to the first in the scene.
    min_separation : float, optional
        Least distance between two of the list [unit of x and y]: a candidate nearer to a better one is passed over,
        so that the list holds spots, and not the neighbours of one.

    Returns
    -------
    DataFrame
        One row for each, index `rank` from 1: positions and every other coordinate, place in the array, and what the
        flags say of it.

    Raises
    ------
    ValueError, TypeError
        If these are no flags, the order is unknown, n is not positive, or there are no positions to keep apart.

    Notes
    -----
    A candidate is an indicator to follow up, never proof of ice.

    Examples
    --------
    >>> import bandratio as br
    >>> flags = br.ice_flags([0.30, 0.16, 0.5], [0.1, 0.27, 0.1], 0.002, 0.002, ice_free=["Soil 62231", "Ilmenite HS231.3B"])
    >>> rank_candidates(flags)["shot"].tolist()
    [2, 0]
    """
    if not isinstance(flags, xr.Dataset) or [name for name in (*_ORDERS, "flag") if name not in flags]:
        came = list(map(str, flags.data_vars)) if isinstance(flags, xr.Dataset) else type(flags).__name__
        raise TypeError(f"flags must be the Dataset that ice_flags gives, got {came}")
    one_of("by", by, _ORDERS)
    if isinstance(n, bool) or not isinstance(n, int | np.integer) or n < 1:
        raise ValueError(f"n must be a whole number above zero, got {n!r}")
    distance = None if min_separation is None else non_negative("min_separation", min_separation)
    if distance is not None and [name for name in ("x", "y") if name not in flags.coords]:
        raise ValueError(
            "the flags have no positions x and y, which min_separation needs; give the arrays coordinates, or leave it out"
        )
    import pandas as pd

    best = pd.DataFrame()
    for part in _candidates(flags):
        best = part if best.empty else pd.concat([best, part], ignore_index=True)
        if distance is None and len(best) > _HELD:
            best = _ordered(best, by).head(n)
    if best.empty:
        columns = [*map(str, flags.dims), *_ORDERS]
        return pd.DataFrame(columns=columns, index=pd.RangeIndex(1, 1, name="rank"))
    best = _ordered(best, by)
    if distance:
        best = best.iloc[_apart(best[["x", "y"]].to_numpy(dtype=float), distance, int(n))]
    best = best.head(n).reset_index(drop=True)
    best.index = pd.RangeIndex(1, len(best) + 1, name="rank")
    return best


def _ordered(candidates: pd.DataFrame, by: str) -> pd.DataFrame:
    keys = dict.fromkeys([by, "outside_sigma"])
    return candidates.sort_values(
        list(keys), ascending=[not _ORDERS[key] for key in keys], kind="stable", na_position="last"
    )


def _candidates(flags: xr.Dataset) -> Iterator[pd.DataFrame]:
    """Rows of the candidates, a block of the scene at a time."""
    import pandas as pd

    for where in _block_slices(flags):
        block = flags[[*_ORDERS, "flag"]].isel(where).compute()
        chosen = np.nonzero(block["flag"].to_numpy() == FLAG_MEANINGS.index("ice_candidate"))
        if not chosen[0].size:
            continue
        dims = block["flag"].dims
        points = {dim: xr.DataArray(index, dims="point") for dim, index in zip(dims, chosen, strict=True)}
        table = block[[*_ORDERS]].isel(points)
        rows: dict[str, Any] = {
            f"{dim}_index" if dim in flags.coords else str(dim): index.to_numpy() + (where[dim].start or 0)
            for dim, index in points.items()
        }
        for name, values in (*table.coords.items(), *table.data_vars.items()):
            if values.dims == ("point",):
                rows[str(name)] = values.to_numpy()
        yield pd.DataFrame(rows)


def _block_slices(flags: xr.Dataset) -> Iterator[dict[Any, slice]]:
    dims = flags["flag"].dims
    chunks = flags["flag"].chunks or tuple((flags.sizes[dim],) for dim in dims)
    edges = [np.concatenate([[0], np.cumsum(lengths)]) for lengths in chunks]
    for place in np.ndindex(*(len(lengths) for lengths in chunks)):
        yield {
            dim: slice(int(edges[k][i]), int(edges[k][i + 1]))
            for k, (dim, i) in enumerate(zip(dims, place, strict=True))
        }


def _apart(positions: NDArray[np.float64], distance: float, n: int) -> list[int]:
    """Places of the first n that lie at least `distance` from every earlier one of them."""
    free = np.isfinite(positions).all(axis=1)
    kept: list[int] = []
    while len(kept) < n and free.any():
        kept.append(int(np.argmax(free)))
        free &= np.linalg.norm(positions - positions[kept[-1]], axis=1) >= distance
        free[kept[-1]] = False
    return kept
