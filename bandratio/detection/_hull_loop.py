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
def facing_edge(red: float, hull: int, knots: Floats, cells: Ints, cell_grid: Floats) -> int:
    """Return the facing edge that lies above all others at this red albedo: by its cell, then corner by corner."""
    # a cell to the left, so that rounding at a cell's end does no harm
    cell = min(max((red - cell_grid[hull, 0]) * cell_grid[hull, 1] - 1, 0.0), cells.shape[1] - 1.0)
    edge = int(cells[hull, int(cell)])
    while red > knots[edge]:
        edge += 1
    return edge


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def facing_loop(
    red: Floats, infrared: Floats, var_red: Floats, var_infrared: Floats, covariance: Floats, scaled_red: Floats,
    scaled_infrared: Floats, bins: Ints, starts: Ints, slopes: Floats, intercepts: Floats, knots: Floats, cells: Ints,
    cell_grid: Floats, outside: Floats, p_value: Floats,
) -> None:  # fmt: skip
    """Write how far outside the edges that face ice each point lies (0 inside), and its p-value.

    `scaled_*` are variances as a fraction squared, taken at the null point: (red, the hull's infrared there).
    """
    for i in range(red.size):
        a, b, va, vb, vc = red[i], infrared[i], var_red[i], var_infrared[i], covariance[i]
        hull = bins[i]
        first, last = starts[hull], starts[hull + 1]
        told = a + b + va + vb + vc
        if told - told != 0 or first == last:  # one of them is missing or infinite, or no edge faces ice
            outside[i] = 0.0 if told - told == 0 else np.nan
            p_value[i] = 1.0 if told - told == 0 else np.nan
            continue
        nearest = facing_edge(a, hull, knots, cells, cell_grid)
        null_infrared = slopes[nearest] * a + intercepts[nearest]
        if b >= null_infrared:
            outside[i] = 0.0
            p_value[i] = 1.0
            continue
        va += scaled_red[i] * a * a
        vb += scaled_infrared[i] * null_infrared * null_infrared
        # The distance in sigma, as a function of the edge's direction, is concave where it is positive: it rises
        # to one greatest value and falls. So walk from the nearest edge both ways; the slack passes rounding.
        # Distances are compared as fractions, squared/variance, without dividing.
        squared, variance = 0.0, 1.0
        for step in (1, -1):
            edge = nearest if step == 1 else nearest - 1
            while first <= edge < last:
                slope = slopes[edge]
                beyond = slope * a + intercepts[edge] - b
                if beyond <= 0:
                    break
                here = slope * slope * va - 2 * slope * vc + vb
                mine, others = beyond * beyond * variance, squared * here
                if mine > others:
                    squared, variance = beyond * beyond, here
                elif mine < others * (1 - 1e-9):
                    break
                edge += step
        greatest = squared / variance
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
def chain_height(red: float, first: int, last: int, chain: Floats) -> float:
    """Return the infrared of a chain of corners, ordered by red, at a red albedo within it."""
    low, high = first, last - 1
    while high - low > 1:
        middle = (low + high) // 2
        if chain[middle, 0] <= red:
            low = middle
        else:
            high = middle
    width = chain[high, 0] - chain[low, 0]
    share = (red - chain[low, 0]) / width if width > 0 else 0.0
    height: float = chain[low, 1] + share * (chain[high, 1] - chain[low, 1])
    return height


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
    lower_starts: Ints,
    lower_chain: Floats,
    upper_starts: Ints,
    upper_chain: Floats,
    p_value: Floats,
) -> None:
    """Write exp(−d²/2), d the distance in sigma outside all edges; of a dropout the largest for any b in [0, b]."""
    for i in range(red.size):
        a, b = red[i], infrared[i]
        vc = covariance[i]
        if not (math.isfinite(a) and math.isfinite(b) and math.isfinite(var_red[i] + var_infrared[i] + vc)):
            p_value[i] = np.nan
            continue
        p_value[i] = 1.0
        hull = bins[i]
        if lower_chain[lower_starts[hull], 0] <= a <= corners[hull, 0]:
            below = chain_height(a, lower_starts[hull], lower_starts[hull + 1], lower_chain)
            above = chain_height(a, upper_starts[hull], upper_starts[hull + 1], upper_chain)
            if below <= b <= above:
                continue
        first, last = starts[hull], starts[hull + 1]
        null_red, null_infrared = null_point(
            a, b, first, last, normals, offsets, corners[hull, 0], corners[hull, 1]
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
