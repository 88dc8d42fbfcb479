"""Percentiles of maps of any size in one pass: counts in fixed bins, which add up whatever the order of blocks.

A bin holds the float32 numbers that share sign, exponent and the first nine bits of the mantissa, so that its
width is at most 1/512 of its value: the bound on a percentile's error, for any distribution and any size. (The
idea of a relative error that holds for every quantile is that of Masson, Rim & Lee 2019, Proc. VLDB Endow. 12,
2195, doi:10.14778/3352063.3352135; taking bits in place of a logarithm makes the counting cheap.)
"""

from __future__ import annotations

import threading
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["RELATIVE_ERROR", "BinCounts"]

_BINS = 1 << (32 - 14)
_kept = threading.local()
#: Largest relative error of a percentile.
RELATIVE_ERROR = 1 / 512


@dataclass
class BinCounts:
    """How many values fell into each bin, and how many were missing.

    Parameters
    ----------
    bins, counts : ndarray of uint32, shape (filled bin,)
        The bins that hold something, in ascending order, and what they hold.
    missing : int
        How many values were NaN or infinite.

    Examples
    --------
    >>> counts = BinCounts.of(np.linspace(0, 1, 100_001, dtype=np.float32))
    >>> round(counts.percentiles([50])[0], 2)
    0.5
    """

    bins: NDArray
    counts: NDArray
    missing: int = 0

    @classmethod
    def of(cls, values: NDArray) -> BinCounts:
        """Counts of an array of any shape; NaN and infinity are missing."""
        bits = np.ascontiguousarray(values, dtype=np.float32).reshape(-1).view(np.uint32)
        # the table is kept for the thread's next array: fresh memory costs as much as the counting
        if not hasattr(_kept, "table"):
            _kept.table = np.zeros(_BINS, np.uint32)
        missing = _count(bits, _kept.table)
        filled = np.count_nonzero(_kept.table)
        bins, counts = np.empty(filled, np.uint32), np.empty(filled, np.uint32)
        _take(_kept.table, bins, counts)
        return cls(bins, counts, int(missing))

    @classmethod
    def total(cls, parts: Iterable[BinCounts]) -> BinCounts:
        """Counts of all blocks together."""
        table, missing = np.zeros(_BINS, np.int64), 0
        for part in parts:
            table[part.bins] += part.counts
            missing += part.missing
        bins = np.flatnonzero(table)
        return cls(bins, table[bins], missing)

    @property
    def valid(self) -> int:
        """Number of values that were not missing."""
        return int(self.counts.sum())

    def percentiles(self, percents: Sequence[float]) -> list[float]:
        """Percentiles, each within `RELATIVE_ERROR` of an order statistic; NaN where all is missing."""
        total = self.valid
        if total == 0:
            return [float("nan")] * len(percents)
        reached = np.cumsum(self.counts, dtype=np.int64)
        found = []
        for percent in percents:
            rank = percent / 100 * (total - 1)
            k = int(np.searchsorted(reached, rank, side="right"))
            low, high = _edges(int(self.bins[k]))
            within = (rank - (reached[k] - int(self.counts[k])) + 0.5) / int(self.counts[k])
            found.append(float(low + (high - low) * min(max(within, 0.0), 1.0)))
        return found


def _edges(k: int) -> tuple[float, float]:
    """Smallest and largest number of a bin."""
    ends = np.array([k << 14, ((k + 1) << 14) - 1], dtype=np.uint32)
    top = np.uint32(1 << 31)
    bits = np.where(ends & top, ends ^ top, ~ends)
    low, high = bits.astype(np.uint32).view(np.float32)
    return float(low), float(high)


@njit(cache=True, nogil=True)
def _count(bits, table):  # type: ignore[no-untyped-def]
    """Count into a table; how many values were missing."""
    missing = 0
    for i in range(bits.size):
        b = bits[i]
        if (b & np.uint32(0x7FFFFFFF)) >= np.uint32(0x7F800000):
            missing += 1
            continue
        # negative numbers come before positive ones, the largest magnitude first
        ordered = ~b if b >> np.uint32(31) else b | np.uint32(0x80000000)
        table[ordered >> np.uint32(14)] += np.uint32(1)
    return missing


@njit(cache=True, nogil=True)
def _take(table, bins, counts):  # type: ignore[no-untyped-def]
    """Move what a table holds into the two lists, and leave it empty."""
    at = 0
    for k in range(table.size):
        if table[k]:
            bins[at] = k
            counts[at] = table[k]
            table[k] = 0
            at += 1
