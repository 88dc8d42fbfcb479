"""Compiled loops over points against the edges of a hull. Arrays only; imported on use, since numba is heavy.

Each point has a hull of its own out of several: `bin` says which, and `starts[bin]` to `starts[bin + 1]` are its
edges in the arrays that hold all hulls one after another.
"""

from __future__ import annotations

import math
from typing import TypeAlias

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats: TypeAlias = NDArray[np.float64]
Ints: TypeAlias = NDArray[np.integer]
Bools: TypeAlias = NDArray[np.bool_]

_SQRT_HALF = math.sqrt(0.5)


@njit(cache=True, nogil=True, error_model="numpy")
def fan_loop(outside: Floats, fan_angle: Floats, p_value: Floats) -> None:
    """Write p = Φ(−d) + Ψ/(2π)·exp(−d²/2) for d > 0, else 1."""
    for i in range(outside.size):
        d = outside[i]
        if d > 0:
            p_value[i] = 0.5 * math.erfc(d * _SQRT_HALF) + fan_angle[i] / (2 * math.pi) * math.exp(
                -0.5 * d * d
            )
        elif d <= 0:
            p_value[i] = 1.0
        else:
            p_value[i] = np.nan


@njit(cache=True, nogil=True, error_model="numpy")
def facing_edge(red: float, first: int, last: int, knots: Floats) -> int:
    """Return the facing edge that lies above all others at this red albedo, by bisection over the corners."""
    low, high = first, last - 1
    while low < high:
        middle = (low + high) // 2
        if red > knots[middle]:
            low = middle + 1
        else:
            high = middle
    return low


@njit(cache=True, nogil=True, error_model="numpy")
def facing_loop(
    red: Floats,
    infrared: Floats,
    var_red: Floats,
    var_infrared: Floats,
    covariance: Floats,
    scaled_red: Floats,
    scaled_infrared: Floats,
    bins: Ints,
    starts: Ints,
    slopes: Floats,
    intercepts: Floats,
    knots: Floats,
    outside: Floats,
    p_value: Floats,
) -> None:
    """Write how far outside the edges that face ice each point lies (0 inside), and its p-value.

    `scaled_*` are variances as a fraction squared, taken at the null point: (red, the hull's infrared there).
    """
    for i in range(red.size):
        a, b = red[i], infrared[i]
        first, last = starts[bins[i]], starts[bins[i] + 1]
        vc = covariance[i]
        if not (math.isfinite(a) and math.isfinite(b) and math.isfinite(var_red[i] + var_infrared[i] + vc)):
            outside[i] = np.nan
            p_value[i] = np.nan
            continue
        outside[i] = 0.0
        p_value[i] = 1.0
        if first == last:
            continue
        nearest = facing_edge(a, first, last, knots)
        null_infrared = slopes[nearest] * a + intercepts[nearest]
        if not b < null_infrared:
            continue
        va = var_red[i] + scaled_red[i] * a * a
        vb = var_infrared[i] + scaled_infrared[i] * null_infrared * null_infrared
        # The distance in sigma, as a function of the edge's direction, is concave where it is positive: it rises
        # to one greatest value and falls. So walk from the nearest edge both ways; the slack passes rounding.
        greatest = 0.0
        for step in (1, -1):
            edge = nearest if step == 1 else nearest - 1
            while first <= edge < last:
                slope = slopes[edge]
                beyond = slope * a + intercepts[edge] - b
                if beyond <= 0:
                    break
                distance = beyond * beyond / (slope * slope * va - 2 * slope * vc + vb)
                if distance > greatest:
                    greatest = distance
                elif distance < greatest * (1 - 1e-9):
                    break
                edge += step
        low, high = slopes[first], slopes[last - 1]
        across = math.sqrt(max(va * vb - vc * vc, 0.0)) * (high - low)
        along = low * high * va - (low + high) * vc + vb
        d = math.sqrt(greatest)
        outside[i] = d
        p_value[i] = 0.5 * math.erfc(d * _SQRT_HALF) + math.atan2(across, along) / (2 * math.pi) * math.exp(
            -0.5 * greatest
        )


@njit(cache=True, nogil=True, error_model="numpy")
def whole_distance(
    a: float,
    b: float,
    va: float,
    vb: float,
    vc: float,
    first: int,
    last: int,
    normals: Floats,
    offsets: Floats,
) -> float:
    """Return the greatest distance in sigma beyond any edge (negative inside)."""
    greatest = -np.inf
    for edge in range(first, last):
        m0, m1 = normals[edge, 0], normals[edge, 1]
        beyond = m0 * a + m1 * b + offsets[edge]
        spread = math.sqrt(m0 * m0 * va + 2 * m0 * m1 * vc + m1 * m1 * vb)
        if spread > 0:
            distance = beyond / spread
        elif abs(beyond) <= 1e-9:  # a corner is stored to this accuracy
            distance = 0.0
        else:
            distance = math.copysign(np.inf, beyond)
        greatest = max(greatest, distance)
    return greatest


@njit(cache=True, nogil=True, error_model="numpy")
def null_point(
    a: float, b: float, first: int, last: int, normals: Floats, offsets: Floats, widest: float, tallest: float
) -> tuple[float, float]:
    """Return the point of the hull's border, or the measured one, at which scaled errors are largest."""
    null_red, null_infrared = a, b
    across, up = min(max(a, 0.0), widest), min(max(b, 0.0), tallest)
    for edge in range(first, last):
        m0, m1, c = normals[edge, 0], normals[edge, 1], offsets[edge]
        if m1 < -1e-12:
            null_infrared = max(null_infrared, min((m0 * across + c) / -m1, tallest))
        if m0 < -1e-12:
            null_red = max(null_red, min((m1 * up + c) / -m0, widest))
    return null_red, null_infrared


@njit(cache=True, nogil=True, error_model="numpy")
def outer_loop(
    red: Floats,
    infrared: Floats,
    var_red: Floats,
    var_infrared: Floats,
    covariance: Floats,
    scaled_red: Floats,
    scaled_infrared: Floats,
    dropout: Bools,
    bins: Ints,
    starts: Ints,
    normals: Floats,
    offsets: Floats,
    corners: Floats,
    p_value: Floats,
) -> None:
    """Write exp(−d²/2), d the distance in sigma outside all edges; of a dropout the largest for any b in [0, b]."""
    for i in range(red.size):
        a, b = red[i], infrared[i]
        vc = covariance[i]
        if not (math.isfinite(a) and math.isfinite(b) and math.isfinite(var_red[i] + var_infrared[i] + vc)):
            p_value[i] = np.nan
            continue
        first, last = starts[bins[i]], starts[bins[i] + 1]
        inside = True
        for edge in range(first, last):
            if normals[edge, 0] * a + normals[edge, 1] * b + offsets[edge] > 0:
                inside = False
                break
        p_value[i] = 1.0
        if inside:
            continue
        null_red, null_infrared = null_point(
            a, b, first, last, normals, offsets, corners[bins[i], 0], corners[bins[i], 1]
        )
        va = var_red[i] + scaled_red[i] * null_red * null_red
        vb = var_infrared[i] + scaled_infrared[i] * null_infrared * null_infrared
        d = whole_distance(a, b, va, vb, vc, first, last, normals, offsets)
        if dropout[i] and d > 0:
            low, high = 0.0, b  # the distance is convex in b: its least value by thirds
            for _ in range(60):
                third = (high - low) / 3
                left = whole_distance(a, low + third, va, vb, vc, first, last, normals, offsets)
                right = whole_distance(a, high - third, va, vb, vc, first, last, normals, offsets)
                d = min(d, left, right)
                if left <= right:
                    high -= third
                else:
                    low += third
        if d > 0:
            p_value[i] = math.exp(-0.5 * d * d)


@njit(cache=True, nogil=True, error_model="numpy")
def true_at_most(measured: float, variance: float, scaled: float, z: float) -> float:
    """Return the largest true value that lies within z sigma of a measured one, its scaled error its own."""
    shrink = max(
        1 - z * math.sqrt(scaled), 0.1
    )  # beyond 90 % of the value in z sigma there is no bound: ten times
    return max(measured + z * math.sqrt(variance), 0.0) / shrink


@njit(cache=True, nogil=True, error_model="numpy")
def bounds_loop(
    red: Floats,
    infrared: Floats,
    var_red: Floats,
    var_infrared: Floats,
    covariance: Floats,
    scaled_red: Floats,
    scaled_infrared: Floats,
    dropout: Bools,
    bins: Ints,
    z: float,
    starts: Ints,
    normals: Floats,
    offsets: Floats,
    facing_starts: Ints,
    slopes: Floats,
    intercepts: Floats,
    knots: Floats,
    ice_starts: Ints,
    per_excess: Floats,
    lower: Floats,
    upper: Floats,
) -> None:
    """Write the bounds of the areal fraction of ice, each one-sided at z sigma.

    `per_excess[j, e]` is 1/(m·ice + c) of an ice material and an edge; the materials of a hull are the rows
    `ice_starts[bin]` to `ice_starts[bin + 1]`, its edges the columns 0 to its number of edges. The infrared albedo of
    a dropout is anywhere between 0 and the one given; only edges that face ice speak for ice there.
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
        first, last = starts[bins[i]], starts[bins[i] + 1]
        edges = last - first
        # Scaled errors are those of the true albedo, which may be higher than a low reading; the infrared of ground
        # with some ice is at most the hull's.
        highest_red = true_at_most(a, var_red[i], scaled_red[i], z)
        highest_infrared = true_at_most(b, var_infrared[i], scaled_infrared[i], z)
        if facing_starts[bins[i] + 1] > facing_starts[bins[i]]:
            edge = facing_edge(a, facing_starts[bins[i]], facing_starts[bins[i] + 1], knots)
            highest_infrared = min(highest_infrared, max(b, slopes[edge] * a + intercepts[edge]))
        va = var_red[i] + scaled_red[i] * a * a
        va_high = var_red[i] + scaled_red[i] * highest_red * highest_red
        vb = var_infrared[i] + scaled_infrared[i] * highest_infrared * highest_infrared
        for k in range(edges):
            m0, m1 = normals[first + k, 0], normals[first + k, 1]
            others = 2 * m0 * m1 * vc + m1 * m1 * vb
            beyond = m0 * a + m1 * b + offsets[first + k]
            if dropout[i]:
                beyond -= max(m1 * b, 0.0)  # the infrared between 0 and b that speaks least for either bound
            for_lower[k] = beyond - z * math.sqrt(max(m0 * m0 * va + others, 0.0))
            for_upper[k] = beyond - z * math.sqrt(max(m0 * m0 * va_high + others, 0.0))
        least, most, least_of_any, most_of_any = 1.0, 0.0, 1.0, 0.0
        possible = False
        for j in range(ice_starts[bins[i]], ice_starts[bins[i] + 1]):
            low, top = 0.0, 1.0
            for k in range(edges):
                per = per_excess[j, k]
                if per > 0 and not (dropout[i] and normals[first + k, 1] >= 0):
                    low = max(low, for_lower[k] * per)
                elif per < 0:
                    top = min(top, for_upper[k] * per)
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
    red: Floats,
    infrared: Floats,
    var_red: Floats,
    var_infrared: Floats,
    covariance: Floats,
    scaled_red: Floats,
    scaled_infrared: Floats,
    dropout: Bools,
    z_red: float,
    z_ratio: float,
    darkest: float,
    low: float,
    high: float,
    opaque: Bools,
) -> None:
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
