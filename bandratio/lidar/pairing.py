"""Shots of two lasers that are not the same pulses, paired by position. Arrays only."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["pair_shots"]


def pair_shots(
    first: ArrayLike, second: ArrayLike, radius: float
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]:
    """One-to-one pairs of two sets of positions, nearest pairs first.

    Parameters
    ----------
    first : array_like, shape (n, dimension)
        Positions of the one set; NaN is never paired.
    second : array_like, shape (m, dimension)
        Positions of the other, in the same unit.
    radius : float
        Largest distance within a pair.

    Returns
    -------
    index_first, index_second : ndarray of int, shape (pair,)
        The pairs, in order of `index_first`. The nearest two positions are a pair, then the nearest two of what is
        left, and so on: no position is in two pairs, and no two positions without a partner lie within the radius.
    distance : ndarray, shape (pair,)

    Examples
    --------
    >>> pair_shots([[0.0, 0.0], [10.0, 0.0]], [[10.5, 0.0], [9.0, 0.0], [50.0, 0.0]], 2.0)
    (array([1]), array([0]), array([0.5]))
    """
    from scipy.spatial import KDTree

    a, b = np.asarray(first, dtype=float), np.asarray(second, dtype=float)
    free_a = np.flatnonzero(np.isfinite(a).all(axis=1))
    free_b = np.flatnonzero(np.isfinite(b).all(axis=1))
    pairs: list[tuple[NDArray, NDArray, NDArray]] = []
    while free_a.size and free_b.size:
        # two positions that are each other's nearest are a pair however the others are paired
        near_b, nearest_b = KDTree(b[free_b]).query(
            a[free_a], distance_upper_bound=radius * (1 + 1e-9) + 1e-100
        )
        within = near_b <= radius
        free_a, near_b, nearest_b = free_a[within], near_b[within], nearest_b[within]
        if not free_a.size:
            break
        _, nearest_a = KDTree(a[free_a]).query(b[free_b])
        mutual = nearest_a[nearest_b] == np.arange(free_a.size)
        if not mutual.any():  # a ring of equal distances: any of its shortest will do
            mutual[np.argmin(near_b)] = True
        pairs.append((free_a[mutual], free_b[nearest_b[mutual]], near_b[mutual]))
        free_b = np.delete(free_b, nearest_b[mutual])
        free_a = free_a[~mutual]
    if not pairs:
        nothing = np.empty(0, dtype=np.intp)
        return nothing, nothing, np.empty(0)
    index_a, index_b, distance = (np.concatenate(part) for part in zip(*pairs, strict=True))
    order = np.argsort(index_a)
    return index_a[order], index_b[order], distance[order]
