"""Compiled loop: where on a mixing curve a point lies, with its interval. Arrays only; imported on use."""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@njit(cache=True, nogil=True, error_model="numpy")
def misfit(
    place: float, curve: Floats, a: float, b: float, va: float, vb: float, vc: float, ra: float, rb: float
) -> float:
    """Return χ² of a point against the curve at a place from 0 to 1, scaled errors taken on the curve."""
    last = curve.shape[0] - 1
    at = min(max(place, 0.0), 1.0) * last
    k = min(int(at), last - 1)
    t = at - k
    red = (1 - t) * curve[k, 0] + t * curve[k + 1, 0]
    infrared = (1 - t) * curve[k, 1] + t * curve[k + 1, 1]
    va, vb = va + ra * red * red, vb + rb * infrared * infrared
    da, db = a - red, b - infrared
    chi: float = (vb * da * da - 2 * vc * da * db + va * db * db) / (va * vb - vc * vc)
    return chi


@njit(cache=True, nogil=True, error_model="numpy")
def crossing(
    inside: float, outside: float, target: float, curve: Floats,
    a: float, b: float, va: float, vb: float, vc: float, ra: float, rb: float,
) -> float:  # fmt: skip
    """Return where χ² reaches the target between a place inside the interval and one outside."""
    for _ in range(50):
        middle = (inside + outside) / 2
        if misfit(middle, curve, a, b, va, vb, vc, ra, rb) <= target:
            inside = middle
        else:
            outside = middle
    return inside


@njit(cache=True, nogil=True, error_model="numpy")
def amount_loop(
    red: Floats, infrared: Floats, var_red: Floats, var_infrared: Floats, covariance: Floats,
    scaled_red: Floats, scaled_infrared: Floats, which: NDArray[np.integer], curves: Floats, z: float,
    best: Floats, lower: Floats, upper: Floats, away: Floats,
) -> None:  # fmt: skip
    """Write the place of the least χ², the outermost places where it is at most z² more, and its root."""
    golden = (math.sqrt(5.0) - 1) / 2
    nodes = curves.shape[1]
    for i in range(red.size):
        a, b, vc = red[i], infrared[i], covariance[i]
        va, vb, ra, rb = var_red[i], var_infrared[i], scaled_red[i], scaled_infrared[i]
        best[i] = lower[i] = upper[i] = away[i] = np.nan
        if which[i] < 0 or not math.isfinite(a + b + va + vb + vc + ra + rb):
            continue
        curve = curves[which[i]]
        least, nearest = np.inf, 0
        for k in range(nodes):
            chi = misfit(k / (nodes - 1), curve, a, b, va, vb, vc, ra, rb)
            if chi < least:
                least, nearest = chi, k
        low = max(nearest - 1, 0) / (nodes - 1)
        high = min(nearest + 1, nodes - 1) / (nodes - 1)
        for _ in range(60):
            left, right = high - golden * (high - low), low + golden * (high - low)
            if misfit(left, curve, a, b, va, vb, vc, ra, rb) <= misfit(
                right, curve, a, b, va, vb, vc, ra, rb
            ):
                high = right
            else:
                low = left
        place = (low + high) / 2
        chi = misfit(place, curve, a, b, va, vb, vc, ra, rb)
        if chi > least:  # the end of the curve
            place, chi = nearest / (nodes - 1), least
        target = chi + z * z
        first, last = -1, nodes
        for k in range(nodes):
            if misfit(k / (nodes - 1), curve, a, b, va, vb, vc, ra, rb) <= target:
                first = k if first < 0 else first
                last = k
        low_in, high_in = place, place
        if first >= 0:
            low_in, high_in = min(place, first / (nodes - 1)), max(place, last / (nodes - 1))
        below = (math.ceil(low_in * (nodes - 1) - 1e-9) - 1) / (nodes - 1)
        above = (math.floor(high_in * (nodes - 1) + 1e-9) + 1) / (nodes - 1)
        best[i], away[i] = place, math.sqrt(chi)
        lower[i] = 0.0 if below < 0 else crossing(low_in, below, target, curve, a, b, va, vb, vc, ra, rb)
        upper[i] = 1.0 if above > 1 else crossing(high_in, above, target, curve, a, b, va, vb, vc, ra, rb)
