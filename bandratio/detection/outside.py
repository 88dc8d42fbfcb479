"""How far outside the ice-free hull points lie, and with what probability ice-free ground would lie there.

The largest of many distances is too easily large: each facing edge is one more chance. With Ψ the angle between the
first and the last facing normal, after whitening by the point's covariance, the probability that a standard normal
vector sticks out by more than d in some direction of the fan is Φ(−d) + Ψ/(2π)·exp(−d²/2), however many edges there
are: a valid p-value for every point of every convex hull.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, fields
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .hull import HullsByIncidence

__all__ = ["Points", "fan_p_value", "hull_p_values", "outer_p_values", "over_blocks"]

Floats: TypeAlias = NDArray[np.float64]

#: Points in a block: small enough for the caches, large enough to hide the calls.
BLOCK = 1 << 16


def fan_p_value(outside_sigma: ArrayLike, fan_angle: ArrayLike) -> NDArray[np.float64]:
    """P-value of lying d sigma outside a convex set, the greatest distance over a fan of directions.

    Parameters
    ----------
    outside_sigma : array_like
        d, the greatest distance in sigma.
    fan_angle : array_like, broadcastable
        Ψ, angle between the outermost directions that were tried [radian], 0 to 2π; over all directions (2π) there
        are no ends, and p is exp(−d²/2).

    Returns
    -------
    ndarray, broadcast shape
        Φ(−d) + Ψ/(2π)·exp(−d²/2) for d > 0, else 1.

    Raises
    ------
    ValueError
        If an angle lies outside 0 to 2π.

    References
    ----------
    The two-dimensional case of the tube formula: Naiman 1986, Ann. Stat. 14, 896, doi:10.1214/aos/1176350046.

    Examples
    --------
    >>> fan_p_value([0, 2, 2], [1, 0, 1]).round(4).tolist()
    [1.0, 0.0228, 0.0443]
    """
    from ._hull_loop import fan_loop

    given = [np.asarray(values, dtype=float) for values in (outside_sigma, fan_angle)]
    d, angle = _flattened(given)
    wrong = (angle < 0) | (angle > 2 * np.pi * (1 + 1e-12))
    if wrong.any():
        raise ValueError(f"fan_angle must lie between 0 and 2π radian, got {angle[wrong][0]:g}")
    p = np.empty(d.size)
    fan_loop(d, angle, p)
    whole = (angle >= 2 * np.pi) & (d > 0)
    return np.where(whole, np.exp(-(d**2) / 2), p).reshape(
        np.broadcast_shapes(*(each.shape for each in given))
    )


@dataclass(frozen=True)
class Points:
    """Points of the plane with their errors: one-dimensional arrays of one length.

    Parameters
    ----------
    red, infrared : ndarray, shape (point,)
        Albedos; NaN is missing.
    var_red, var_infrared, covariance : ndarray, shape (point,)
        Variances and covariance that do not depend on the albedo.
    scaled_red, scaled_infrared : ndarray, shape (point,)
        Variances as a fraction of the albedo squared, taken at the null point.
    incidence_deg : ndarray, shape (point,)
        Incidence [degree]; NaN is unknown.
    dropout : ndarray of bool, shape (point,)
        Whether the infrared albedo is only known to lie between 0 and the one given.
    """

    red: NDArray[np.float64]
    infrared: NDArray[np.float64]
    var_red: NDArray[np.float64]
    var_infrared: NDArray[np.float64]
    covariance: NDArray[np.float64]
    scaled_red: NDArray[np.float64]
    scaled_infrared: NDArray[np.float64]
    incidence_deg: NDArray[np.float64]
    dropout: NDArray[np.bool_]

    @classmethod
    def of(
        cls,
        red: ArrayLike,
        infrared: ArrayLike,
        sigma_red: ArrayLike,
        sigma_infrared: ArrayLike,
        *,
        covariance: ArrayLike = 0.0,
        relative_red: ArrayLike = 0.0,
        relative_infrared: ArrayLike = 0.0,
        gain_sigma: ArrayLike = 0.0,
        incidence_deg: ArrayLike = np.nan,
        infrared_limit: ArrayLike = np.nan,
    ) -> Points:
        """Check and prepare points; the arrays broadcast against each other and are flattened.

        `gain_sigma` is the fraction by which the gain of red against infrared is uncertain, the same for all points;
        an infrared albedo that is missing or below `infrared_limit` enters as the limit.

        Raises
        ------
        ValueError
            If an error is negative, or a covariance larger than the two sigmas (with their relative parts) allow.
        """
        arrays = [
            np.asarray(value, dtype=float)
            for value in (
                red, infrared, sigma_red, sigma_infrared, covariance, relative_red, relative_infrared,
                gain_sigma, incidence_deg, infrared_limit,
            )
        ]  # fmt: skip
        a, b, s_a, s_b, cov, r_a, r_b, gain, incidence, limit = _flattened(arrays)
        named = (
            ("sigma_red", s_a), ("sigma_infrared", s_b), ("relative_red", r_a), ("relative_infrared", r_b),
            ("gain_sigma", gain), ("infrared_limit", limit),
        )  # fmt: skip
        for name, values in named:
            if (values < 0).any():
                raise ValueError(f"{name} must be zero or above, got {values[values < 0][0]:g}")
            if np.isinf(values).any():
                raise ValueError(f"{name} must be finite; mark what is missing as NaN")
        if cov.any():
            _check_covariance(cov, np.hypot(s_a, r_a * a), np.hypot(s_b, r_b * b))
        dropout = (np.isnan(b) | (b < limit)) & ~np.isnan(limit)
        return cls(
            a, np.where(dropout, limit, b), s_a**2, s_b**2, cov, r_a**2,
            r_b**2 + gain**2, incidence, dropout,
        )  # fmt: skip

    def __len__(self) -> int:
        return self.red.size

    def part(self, first: int, last: int) -> Points:
        """The points from `first` up to `last`, without a copy."""
        return Points(*(getattr(self, item.name)[first:last] for item in fields(self)))

    def measured(self) -> tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats]:
        """Albedos and errors in the order in which the compiled loops take them."""
        return (
            self.red, self.infrared, self.var_red, self.var_infrared, self.covariance, self.scaled_red,
            self.scaled_infrared,
        )  # fmt: skip


def _check_covariance(covariance: Floats, sigma_red: Floats, sigma_infrared: Floats) -> None:
    beyond = np.abs(covariance) - sigma_red * sigma_infrared * (1 + 1e-6)
    if (beyond > 0).any():
        at = int(np.nanargmax(beyond))
        raise ValueError(
            f"covariance must not exceed what the two sigmas allow, got {covariance[at]:g} for sigmas of "
            f"{sigma_red[at]:g} and {sigma_infrared[at]:g}"
        )


def _flattened(arrays: list[Floats]) -> list[Floats]:
    """Arrays of one length, one-dimensional and writeable: one kind for the compiled loops."""
    shape = np.broadcast_shapes(*(array.shape for array in arrays))
    full = [array if array.shape == shape else np.broadcast_to(array, shape).copy() for array in arrays]
    return [np.require(array.reshape(-1), requirements=["C", "W"]) for array in full]


def over_blocks(work: Callable[[int, int], Any], size: int, threads: int | None = None) -> None:
    """Call `work(first, last)` for blocks of points, on every core unless told otherwise."""
    spans: Iterator[tuple[int, int]] = ((first, min(first + BLOCK, size)) for first in range(0, size, BLOCK))
    threads = len(os.sched_getaffinity(0)) if threads is None else threads
    if threads == 1 or size <= BLOCK:
        for first, last in spans:
            work(first, last)
        return
    with ThreadPoolExecutor(threads) as pool:
        for done in [pool.submit(work, first, last) for first, last in spans]:
            done.result()


def hull_p_values(
    hulls: HullsByIncidence, points: Points, *, threads: int | None = None
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Distance outside the edges that face ice, and its p-value, for each point.

    Errors that scale with the albedo are taken at the null point: the measured red and the infrared albedo that the
    hull has there. At a low measured infrared they would be too small exactly where it matters.

    Parameters
    ----------
    hulls : HullsByIncidence
        What ice-free ground can be.
    points : Points
        Albedos and errors.
    threads : int, optional
        None: every core.

    Returns
    -------
    outside_sigma : ndarray, shape (point,)
        d in sigma, 0 inside; NaN where an albedo is missing.
    p_value : ndarray, shape (point,)
        Probability that ice-free ground at the border of the hull lies as far outside; 1 inside.

    References
    ----------
    Naiman 1986, Ann. Stat. 14, 896, doi:10.1214/aos/1176350046.

    Examples
    --------
    >>> from bandratio.detection.hull import HullsByIncidence, ratio_half_plane
    >>> hulls = HullsByIncidence((ratio_half_plane(1.0),), by_incidence=False)
    >>> d, p = hull_p_values(hulls, Points.of([0.3, 0.2], [0.2, 0.3], 0.03, 0.04))
    >>> d.round(3).tolist(), p.round(4).tolist()
    ([2.0, 0.0], [0.0228, 1.0])
    """
    from ._hull_loop import facing_loop

    packed = hulls.packed
    outside, p = np.empty(len(points)), np.empty(len(points))

    def work(first: int, last: int) -> None:
        block = points.part(first, last)
        facing_loop(
            *block.measured(), hulls.bins(block.incidence_deg), packed.facing_starts, packed.slopes,
            packed.intercepts, packed.knots, packed.cells, packed.cell_grid, outside[first:last], p[first:last],
        )  # fmt: skip

    over_blocks(work, len(points), threads)
    return outside, p


def outer_p_values(
    hulls: HullsByIncidence, points: Points, *, threads: int | None = None
) -> NDArray[np.float64]:
    """P-value of lying outside a hull in any direction, exp(−d²/2): what no listed material can be.

    Parameters
    ----------
    hulls : HullsByIncidence
        What the listed ground and ice can be.
    points : Points
        Albedos and errors; a dropout counts as outside only if it is so at every infrared albedo below the limit.
    threads : int, optional
        None: every core.

    Returns
    -------
    ndarray, shape (point,)
        1 inside; NaN where an albedo is missing.
    """
    from ._hull_loop import outer_loop

    packed = hulls.packed
    p = np.empty(len(points))

    def work(first: int, last: int) -> None:
        block = points.part(first, last)
        outer_loop(
            *block.measured(), block.dropout, hulls.bins(block.incidence_deg), packed.starts, packed.normals,
            packed.offsets, packed.corners, packed.lower_starts, packed.lower_chain, packed.upper_starts,
            packed.upper_chain, p[first:last],
        )  # fmt: skip

    over_blocks(work, len(points), threads)
    return p
