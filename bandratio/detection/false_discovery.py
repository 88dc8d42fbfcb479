"""False discovery rate: which p-values count as a discovery, decided exactly without sorting them all.

A p-value p of rank i among m is rejected where some p' ≥ p of rank i' has (p'·m/i')·c ≤ rate, with c = 1 for
independent or positively dependent p-values (Benjamini & Hochberg) and c = Σ 1/i for any dependence (Benjamini &
Yekutieli). So one number decides: the largest p' that meets it. It is found from counts. The bits of a
positive float, read as an integer, grow with it, so the upper bits number bins of equal relative width that reach
down to the smallest float and to zero. Whole bins are settled by their edges; only the values of bins that the line
p = rate·i/(m·c) crosses are looked at one by one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from typing import Any, Literal, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import one_of, open_fraction
from .false_discovery_kernel import ABOVE_ONE, BINS, SHIFT, count_blocks, gather

__all__ = ["AdjustedTable", "adjusted", "adjusted_table", "false_discovery_cut"]

Dependence: TypeAlias = Literal["positive", "any"]
Blocks: TypeAlias = Callable[[], Iterator[NDArray[np.float64]]]

_HELD = 4_000_000  # values held at once: 32 MB
_FINER = 16  # bits by which a crowded bin is divided again
_EXACT_HARMONIC = 1_000_000  # up to here Σ 1/i is summed term by term


def false_discovery_cut(
    p_values: ArrayLike | Callable[[], Iterable[ArrayLike]] | Any,
    rate: float,
    dependence: Dependence = "positive",
) -> float:
    """Largest p-value that counts as a discovery at a given false discovery rate.

    ``p_values <= cut`` are the discoveries: the same decisions as Benjamini and Hochberg's (Benjamini and Yekutieli's)
    step-up rule on the sorted p-values, found by counting, in memory that does not grow with their number.

    Parameters
    ----------
    p_values : array_like, dask array, DataArray, or a callable that gives a fresh iterable of arrays
        P-values in [0, 1], of any shape; NaN is left out and not counted. A callable or a lazy array is passed
        over once, and again only where more than four million p-values are at most `rate`.
    rate : float
        False discovery rate to hold, between 0 and 1.
    dependence : {"positive", "any"}
        ``positive``: independent p-values or such that depend positively on each other (Benjamini & Hochberg).
        ``any``: whatever the dependence (Benjamini & Yekutieli), at the price of power.

    Returns
    -------
    float
        The largest p-value rejected; -1.0 where none is.

    Raises
    ------
    ValueError
        If a p-value is outside [0, 1], the rate is not between 0 and 1, or a second pass gives other values.
    TypeError
        If `p_values` is an iterator, which can be passed over once only.

    References
    ----------
    Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289, doi:10.1111/j.2517-6161.1995.tb02031.x.
    Benjamini & Yekutieli 2001, Ann. Stat. 29, 1165, doi:10.1214/aos/1013699998.

    Examples
    --------
    >>> false_discovery_cut([0.001, 0.04, 0.8, 0.012, float("nan")], 0.05)
    0.012
    """
    limit = open_fraction("the false discovery rate", rate)
    one_of("dependence", dependence, ("positive", "any"))
    blocks = _as_blocks(p_values)
    counts, total, kept = _tally(blocks, limit)
    if total == 0:
        return -1.0
    search = _Search(
        blocks if kept is None else lambda: iter((kept,)), limit, total, _harmonic(total, dependence)
    )
    found = search.within(0, SHIFT, counts, 0)
    return -1.0 if found is None else found


def adjusted(p_values: ArrayLike, dependence: Dependence = "positive") -> NDArray[np.float64]:
    """Adjusted p-values (q-values): the least false discovery rate at which each one would be a discovery.

    Parameters
    ----------
    p_values : array_like
        P-values in [0, 1], of any shape; NaN stays NaN and is not counted.
    dependence : {"positive", "any"}
        As for `false_discovery_cut`.

    Returns
    -------
    ndarray, shape of `p_values`
        Exact; they are sorted, so for arrays in memory. See `adjusted_table` for more than fits.

    Raises
    ------
    ValueError
        If a p-value is outside [0, 1].

    References
    ----------
    Yekutieli & Benjamini 1999, J. Stat. Plan. Inference 82, 171, doi:10.1016/S0378-3758(99)00041-5.

    Examples
    --------
    >>> adjusted([0.01, 0.04, 0.03]).round(6).tolist()
    [0.03, 0.04, 0.04]
    """
    one_of("dependence", dependence, ("positive", "any"))
    p = np.asarray(p_values, dtype=np.float64)
    present = np.isfinite(p)
    _refuse_outside(p[~present & ~np.isnan(p)])
    values = p[present]
    _refuse_outside(values)
    order = np.argsort(values)
    ranks = np.arange(1, values.size + 1)
    q = values[order] * (values.size / ranks) * _harmonic(values.size, dependence)
    q = np.minimum(np.minimum.accumulate(q[::-1])[::-1], 1.0)
    result = np.full(p.shape, np.nan)
    back = np.empty_like(q)
    back[order] = q
    result[present] = back
    return result


class AdjustedTable:
    """Adjusted p-values of any number of points, looked up in a table of fixed size.

    Called with p-values it gives their adjusted ones, at most 0.2 % too large and never too small. Made by
    `adjusted_table`.

    Parameters
    ----------
    steps : ndarray, shape (bin,)
        Adjusted value of each bin of p.
    total : int
        Number of p-values that it rests on.
    """

    def __init__(self, steps: NDArray[np.float64], total: int) -> None:
        self.steps = steps
        self.total = total

    def __call__(self, p_values: ArrayLike) -> NDArray[np.float64]:
        """Adjusted p-values, NaN where p is."""
        p = np.ascontiguousarray(p_values, dtype=np.float64)
        present = (p >= 0) & (p <= 1)
        _refuse_outside(p[~present & ~np.isnan(p)])
        safe = np.where(present, p, 0.0) + 0.0  # -0.0 becomes 0.0
        return np.where(present, self.steps[safe.view(np.int64) >> SHIFT], np.nan)


def adjusted_table(
    p_values: ArrayLike | Callable[[], Iterable[ArrayLike]] | Any, dependence: Dependence = "positive"
) -> AdjustedTable:
    """Table of adjusted p-values from one streamed pass, for more points than can be sorted in memory.

    Parameters
    ----------
    p_values, dependence
        As for `false_discovery_cut`.

    Returns
    -------
    AdjustedTable
        A callable from p-values to adjusted ones; 4 MB however many points it rests on.

    Examples
    --------
    >>> table = adjusted_table([0.01, 0.04, 0.03])
    >>> bool(np.all(table([0.01, 0.04, 0.03]) >= adjusted([0.01, 0.04, 0.03])))
    True
    """
    one_of("dependence", dependence, ("positive", "any"))
    counts, total, _ = _tally(_as_blocks(p_values), 1.0, keep=False)
    ranks = np.cumsum(counts)
    _, top = _edges(0, SHIFT, np.arange(BINS))
    with np.errstate(divide="ignore"):
        q = np.where(counts > 0, top * (total / ranks) * _harmonic(total, dependence), 1.0)
    return AdjustedTable(np.minimum(np.minimum.accumulate(q[::-1])[::-1], 1.0), total)


class _Search:
    """Looks for the largest rejected p-value, from the top bin down, dividing only what is not settled."""

    def __init__(self, blocks: Blocks, rate: float, total: int, harmonic: float) -> None:
        self.blocks = blocks
        self.rate = rate
        self.total = total
        self.harmonic = harmonic

    def _rejected(self, p: NDArray[np.float64], rank: NDArray[np.int64]) -> NDArray[np.bool_]:
        rejected: NDArray[np.bool_] = p * (self.total / rank) * self.harmonic <= self.rate
        return rejected

    def within(self, first: int, shift: int, counts: NDArray[np.int64], below: int) -> float | None:
        """Largest rejected value of the bins from key `first` on, each 2^shift keys wide; None where there is none.

        `below` values lie below the first bin.
        """
        bins = np.flatnonzero(counts)
        inside = counts[bins]
        rank = below + np.cumsum(inside)
        low, top = _edges(first, shift, bins)
        possible = self._rejected(low, rank)
        certain = np.flatnonzero(possible & self._rejected(top, rank))
        start = certain[-1] if certain.size else 0
        waiting = [int(i) for i in np.flatnonzero(possible) if i >= start]
        while waiting:
            index = waiting.pop()
            if shift == 0:  # one value, and it is rejected
                return float(low[index])
            if inside[index] > _HELD:
                found = self._divided(
                    first + (int(bins[index]) << shift), shift, int(rank[index] - inside[index])
                )
            else:
                group, held = [index], int(inside[index])
                while waiting and held + inside[waiting[-1]] <= _HELD:
                    group.append(waiting.pop())
                    held += int(inside[group[-1]])
                group.reverse()
                found = self._one_by_one(first, shift, bins[group], inside[group], rank[group])
            if found is not None:
                return found
        return None

    def _divided(self, first: int, shift: int, below: int) -> float | None:
        finer = max(shift - _FINER, 0)
        counts = np.zeros(1 << (shift - finer), dtype=np.int64)
        nothing = np.empty(0)
        for block in self.blocks():
            count_blocks(block, block.view(np.int64), self.rate, first, finer, counts, nothing, 0)
        return self.within(first, finer, counts, below)

    def _one_by_one(
        self,
        first: int,
        shift: int,
        bins: NDArray[np.int64],
        inside: NDArray[np.int64],
        rank: NDArray[np.int64],
    ) -> float | None:
        wanted = np.zeros(int(bins[-1]) + 1, dtype=np.bool_)
        wanted[bins] = True
        values = np.empty(int(inside.sum()))
        filled = 0
        for block in self.blocks():
            filled = gather(block, block.view(np.int64), first, shift, wanted, values, filled)
        if filled != values.size:
            raise ValueError(
                "p_values gave other values at the second pass than at the first; give a callable that repeats "
                "itself, or the p-values in memory"
            )
        values.sort()
        ranks = np.repeat(rank - np.cumsum(inside), inside) + np.arange(1, values.size + 1)
        rejected = np.flatnonzero(self._rejected(values, ranks))
        return float(values[rejected[-1]]) if rejected.size else None


def _edges(
    first: int, shift: int, bins: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Smallest and largest float of each bin."""
    low = first + (bins.astype(np.int64) << shift)
    return low.view(np.float64), (low + ((1 << shift) - 1)).view(np.float64)


def _tally(
    blocks: Blocks, limit: float, keep: bool = True
) -> tuple[NDArray[np.int64], int, NDArray[np.float64] | None]:
    """Counts per bin of the values up to `limit`, the number of all, and those values where they are few."""
    counts = np.zeros(BINS, dtype=np.int64)
    kept = np.empty(_HELD if keep else 0)
    total, filled = 0, 0
    for block in blocks():
        seen, filled = count_blocks(block, block.view(np.int64), limit, 0, SHIFT, counts, kept, filled)
        if seen == ABOVE_ONE:
            _refuse_outside(block)
        total += seen
    return counts, total, kept[:filled] if keep and filled <= kept.size else None


def _refuse_outside(p: NDArray[np.float64]) -> None:
    outside = p[(p < 0) | (p > 1)]
    if outside.size:
        raise ValueError(
            f"p-values must lie in [0, 1] (NaN: left out), got {outside.flat[0]:g}; give probabilities, "
            "not sigmas or percentages"
        )


def _harmonic(total: int, dependence: str) -> float:
    """Benjamini and Yekutieli's penalty Σ 1/i, 1 for positive dependence."""
    if dependence == "positive" or total == 0:
        return 1.0
    if total <= _EXACT_HARMONIC:
        return float(np.sum(1 / np.arange(1, total + 1)))
    from scipy.special import digamma

    return float(digamma(total + 1) + np.euler_gamma)


def _as_blocks(p_values: Any) -> Blocks:
    if callable(p_values) and not hasattr(p_values, "dtype"):
        return lambda: (_plain(block) for block in p_values())
    if isinstance(p_values, Iterator):
        raise TypeError(
            "p_values is an iterator, which can be passed over once only; give a callable that makes a fresh one, "
            "or the array"
        )
    lazy = getattr(p_values, "data", p_values)
    if hasattr(lazy, "dask"):
        return lambda: _computed(lazy)
    array = np.asarray(p_values)
    return lambda: _slices(array)


def _slices(array: NDArray, length: int = 1 << 20) -> Iterator[NDArray[np.float64]]:
    if array.dtype == np.float64 and array.flags.c_contiguous:
        yield array.reshape(-1)
        return
    flat = array.reshape(-1)
    for start in range(0, flat.size, length):
        yield _plain(flat[start : start + length])


def _computed(lazy: Any, at_once: int = 4) -> Iterator[NDArray[np.float64]]:
    """Blocks of a dask array, a few at a time."""
    import dask

    blocks = lazy.to_delayed().ravel()
    for start in range(0, blocks.size, at_once):
        for block in dask.compute(*blocks[start : start + at_once]):  # type: ignore[attr-defined,no-untyped-call]
            yield _plain(block)


def _plain(block: Any) -> NDArray[np.float64]:
    return np.ascontiguousarray(block, dtype=np.float64).reshape(-1)
