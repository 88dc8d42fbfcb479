"""Compiled loops over points: bounds of the areal fraction of ice, and what is told from an opaque.

Arrays only; imported on use. `starts` and `bins` are as in the loops over hulls.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from ..detection._hull_loop import Bools, Floats, Ints, facing_edge


@njit(cache=True, nogil=True, error_model="numpy")
def true_at_most(measured: float, variance: float, scaled: float, z: float) -> float:
    """Return the largest true value that lies within z sigma of a measured one, its scaled error its own."""
    shrink = max(
        1 - z * math.sqrt(scaled), 0.1
    )  # beyond 90 % of the value in z sigma there is no bound: ten times
    return max(measured + z * math.sqrt(variance), 0.0) / shrink


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"nnan", "nsz", "reassoc"})
def ice_bounds(
    for_lower: Floats, for_upper: Floats, raising: Floats, lowering: Floats
) -> tuple[float, float]:
    """Return the bounds that all edges together give for one ice; written so that it runs in vector registers."""
    low, top = 0.0, 1.0
    for k in range(for_lower.size):
        low = max(low, for_lower[k] * raising[k])
    for k in range(for_upper.size):
        top = min(top, for_upper[k] * lowering[k] if lowering[k] < 0 else 1.0)
    return low, top


@njit(cache=True, nogil=True, error_model="numpy")
def bounds_loop(
    red: Floats, infrared: Floats, var_red: Floats, var_infrared: Floats, covariance: Floats, scaled_red: Floats,
    scaled_infrared: Floats, dropout: Bools, bins: Ints, z: float, starts: Ints, normals: Floats, offsets: Floats,
    facing_starts: Ints, slopes: Floats, intercepts: Floats, knots: Floats, cells: Ints, cell_grid: Floats,
    ice_starts: Ints, raising: Floats, lowering: Floats, lower: Floats, upper: Floats,
) -> None:  # fmt: skip
    """Write the bounds of the areal fraction of ice, each one-sided at z sigma.

    `raising[j, e]` and `lowering[j, e]` are 1/(m·ice + c) of an ice material and an edge where it is positive or
    negative, else 0; the materials of a hull are the rows `ice_starts[bin]` to `ice_starts[bin + 1]`, its edges the
    first columns. The infrared albedo of a dropout is anywhere between 0 and the one given; only edges that face ice
    speak for ice there.
    """
    widest = np.max(starts[1:] - starts[:-1])
    for_lower, for_upper = np.empty(widest), np.empty(widest)
    for i in range(red.size):
        a, b = red[i], infrared[i]
        vc = covariance[i]
        if not (math.isfinite(a) and math.isfinite(b) and math.isfinite(var_red[i] + var_infrared[i] + vc)):
            lower[i] = np.nan
            upper[i] = np.nan
            continue
        hull = bins[i]
        first = starts[hull]
        edges = starts[hull + 1] - first
        # Scaled errors are those of the true albedo, which may be higher than a low reading; the infrared of ground
        # with some ice is at most the hull's.
        highest_red = true_at_most(a, var_red[i], scaled_red[i], z)
        highest_infrared = true_at_most(b, var_infrared[i], scaled_infrared[i], z)
        if facing_starts[hull + 1] > facing_starts[hull]:
            edge = facing_edge(a, hull, knots, cells, cell_grid)
            highest_infrared = min(highest_infrared, max(b, slopes[edge] * a + intercepts[edge]))
        va = var_red[i] + scaled_red[i] * a * a
        va_high = var_red[i] + scaled_red[i] * highest_red * highest_red
        vb = var_infrared[i] + scaled_infrared[i] * highest_infrared * highest_infrared
        for k in range(edges):
            m0, m1 = normals[first + k, 0], normals[first + k, 1]
            others = 2 * m0 * m1 * vc + m1 * m1 * vb
            beyond = m0 * a + m1 * b + offsets[first + k]
            for_lower[k] = beyond - z * math.sqrt(max(m0 * m0 * va + others, 0.0))
            for_upper[k] = beyond - z * math.sqrt(max(m0 * m0 * va_high + others, 0.0))
        if dropout[i]:
            for k in range(edges):
                m1 = normals[first + k, 1]
                if m1 >= 0:
                    for_lower[k] = 0.0
                    for_upper[k] -= m1 * b
        least, most, least_of_any, most_of_any = 1.0, 0.0, 1.0, 0.0
        possible = False
        for j in range(ice_starts[hull], ice_starts[hull + 1]):
            low, top = ice_bounds(
                for_lower[:edges], for_upper[:edges], raising[j, :edges], lowering[j, :edges]
            )
            if low <= top:  # else no fraction of this ice leads there
                possible = True
                least = min(least, low)
                most = max(most, top)
            least_of_any = min(least_of_any, low)
            most_of_any = max(most_of_any, top)
        if not possible:
            least, most = least_of_any, most_of_any
        lower[i] = min(max(least, 0.0), 1.0)
        upper[i] = min(max(most, 0.0), 1.0)


@njit(cache=True, nogil=True, error_model="numpy")
def opaque_loop(
    red: Floats, infrared: Floats, var_red: Floats, var_infrared: Floats, covariance: Floats, scaled_red: Floats,
    scaled_infrared: Floats, dropout: Bools, z_red: float, z_ratio: float, darkest: float, low: float, high: float,
    opaque: Bools,
) -> None:  # fmt: skip
    """Write whether red is surely below `darkest` and Fieller's interval of the ratio overlaps [low, high]."""
    for i in range(red.size):
        a, b = red[i], infrared[i]
        va = var_red[i] + scaled_red[i] * a * a
        vb = var_infrared[i] + scaled_infrared[i] * b * b
        vc = covariance[i]
        opaque[i] = False
        if dropout[i] or not a + z_red * math.sqrt(va) < darkest:  # NaN fails too
            continue
        # the set of ratios is where this parabola in the ratio is not above zero
        square = b * b - z_ratio * z_ratio * vb
        half = a * b - z_ratio * z_ratio * vc
        rest = a * a - z_ratio * z_ratio * va
        at_low = (square * low - 2 * half) * low + rest
        at_high = (square * high - 2 * half) * high + rest
        lowest = min(at_low, at_high)
        if square > 0 and low < half / square < high:
            lowest = min(lowest, rest - half * half / square)
        opaque[i] = lowest <= 0
