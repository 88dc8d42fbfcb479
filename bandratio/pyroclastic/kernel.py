"""Compiled loop: how sure it is that a pixel meets every condition of a rule. Arrays only."""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["SETTINGS", "flags_of", "p_values"]

#: Below this many pixels a second thread costs more than it brings.
_THREAD_PIXELS = 65_536
#: Columns of a condition's settings: see `p_values`.
SETTINGS = ("sign", "limit", "variance", "per_reflectance", "per_square", "in_proportion")


def p_values(
    values: list[NDArray],
    sigmas: list[NDArray | None],
    kept: list[NDArray | None],
    settings: NDArray[np.float64],
    *,
    threads: int = 1,
) -> NDArray[np.float64]:
    """P-value of "every condition holds" for each pixel, by intersection and union (Berger 1982).

    Parameters
    ----------
    values : list of ndarray of one dtype, shape (pixel,)
        One parameter for each condition; missing is NaN.
    sigmas : list of ndarray or None, shape (pixel,)
        Its standard uncertainty; None: the comparison is exact.
    kept : list of ndarray or None, shape (pixel,)
        Variance to be added for each pixel.
    settings : ndarray, shape (condition, 6)
        ``sign``: +1 for above, −1 for below; ``limit``: the threshold; ``variance``: the same for all pixels;
        ``per_reflectance`` and ``per_square``: growth of the variance from the measured value up to the limit,
        per R and per R²; ``in_proportion``: 1 where sigma is taken to grow in proportion to the reflectance.
    threads : int
        How many threads share the pixels.

    Returns
    -------
    ndarray, shape (pixel,)
        ``Φ(−min z)``; with a variance of zero 0 where all conditions hold strictly, else 1. NaN where a value or
        a sigma is missing.
    """
    pixels = values[0].size
    out = np.empty(pixels)
    nothing = np.empty(0, dtype=values[0].dtype)

    def column(arrays: list[NDArray | None], place: int) -> NDArray:
        array = arrays[place] if place < len(arrays) else None
        return nothing if array is None else array

    compiled: Any = _loop

    def run(start: int, stop: int) -> None:
        parts: list[NDArray] = []
        for place in (0, 1):
            value = values[place] if place < len(values) else nothing
            three = value, column(sigmas, place), column(kept, place)
            parts.extend(np.ascontiguousarray(array[start:stop]) for array in three)
        compiled(*parts, settings[0], settings[-1], out[start:stop])

    threads = max(1, min(threads, pixels // _THREAD_PIXELS))
    stretch = max(1, -(-pixels // (4 * threads))) if threads > 1 else max(1, pixels)
    starts = range(0, pixels, stretch)
    if threads == 1:
        for start in starts:
            run(start, start + stretch)
    else:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(lambda start: run(start, start + stretch), starts))
    return out


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _z(value, i, sigma, kept, setting):  # type: ignore[no-untyped-def]
    """How many sigma a pixel lies beyond its limit."""
    measured, sign, limit = float(value[i]), setting[0], setting[1]
    beyond = sign * (measured - limit)
    variance = setting[2]
    if sigma.size:
        variance += float(sigma[i]) * float(sigma[i])
    if kept.size:
        variance += float(kept[i])
    if beyond > 0.0 and measured < limit:
        held = max(measured, 0.0)
        variance += setting[3] * (limit - held) + setting[4] * (limit * limit - held * held)
        if setting[5] != 0.0 and sigma.size and sigma[i] > 0.0:
            share = limit / held
            variance += float(sigma[i]) * float(sigma[i]) * (share * share - 1.0)
    if variance == 0.0:
        return np.inf if beyond > 0.0 else (-np.inf if beyond <= 0.0 else np.nan)
    return beyond / math.sqrt(variance)


@njit(cache=True, nogil=True, error_model="numpy")
def _loop(  # type: ignore[no-untyped-def]
    first, first_sigma, first_kept, second, second_sigma, second_kept, first_setting, second_setting, out
):
    two = second.size > 0
    for i in range(out.size):
        z = _z(first, i, first_sigma, first_kept, first_setting)
        if two:
            other = _z(second, i, second_sigma, second_kept, second_setting)
            if other < z or math.isnan(other):
                z = other
        if z > -8.3:
            out[i] = 0.5 * math.erfc(z / math.sqrt(2.0))
        else:
            out[i] = np.nan if math.isnan(z) else 1.0


def flags_of(
    p: NDArray[np.float64], codes: NDArray[np.int8], cut: float, *, threads: int = 1
) -> NDArray[np.int8]:
    """Flag of each pixel from its p-values.

    Parameters
    ----------
    p : ndarray, shape (rule, pixel)
        One row for each rule.
    codes : ndarray of int8, shape (3 + rule,)
        Codes for missing, background, undecided, and a candidate by each rule.
    cut : float
        Largest p-value that is a discovery; below zero where there is none.
    threads : int
        How many threads share the pixels.
    """
    out = np.empty(p.shape[1], dtype=np.int8)
    pixels = out.size
    threads = max(1, min(threads, pixels // _THREAD_PIXELS))
    stretch = max(1, -(-pixels // threads))
    starts = range(0, pixels, stretch)
    if threads == 1:
        _flag_loop(p, codes, cut, out)
        return out
    with ThreadPoolExecutor(threads) as pool:
        list(
            pool.map(
                lambda start: _flag_loop(
                    p[:, start : start + stretch], codes, cut, out[start : start + stretch]
                ),
                starts,
            )
        )
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def _flag_loop(p, codes, cut, out):  # type: ignore[no-untyped-def]
    rules = p.shape[0]
    for i in range(out.size):
        missing, rejected, best, chosen = False, True, 2.0, 0
        for rule in range(rules):
            value = p[rule, i]
            missing = missing or math.isnan(value)
            # 0.95: one of the rule's conditions is rejected at 95 %
            rejected = rejected and value >= 0.95
            if value < best:
                best, chosen = value, rule
        if missing:
            out[i] = codes[0]
        elif best <= cut:
            out[i] = codes[3 + chosen]
        elif rejected:
            out[i] = codes[1]
        else:
            out[i] = codes[2]
