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
#: Pixels per block of the loop.
_BLOCK = 1024
#: Columns of a condition's settings: see `p_values`.
SETTINGS = ("sign", "limit", "variance", "per_reflectance", "per_square", "in_proportion")


def p_values(
    values: list[NDArray],
    sigmas: list[NDArray | None],
    kept: list[NDArray | None],
    settings: NDArray[np.float64],
    out: NDArray[np.float64],
) -> None:
    """P-value of "every condition holds" for each pixel, by intersection and union (Berger 1982).

    Parameters
    ----------
    values : list of one or two ndarrays of one dtype, shape (pixel,)
        One parameter for each condition; missing is NaN.
    sigmas : list of ndarray or None, shape (pixel,)
        Its standard uncertainty; None: the comparison is exact.
    kept : list of ndarray or None, shape (pixel,)
        Variance to be added for each pixel.
    settings : ndarray, shape (condition, 6)
        ``sign``: +1 for above, −1 for below; ``limit``: the threshold; ``variance``: the same for all pixels;
        ``per_reflectance`` and ``per_square``: growth of the variance from the measured value up to the limit,
        per R and per R²; ``in_proportion``: 1 where sigma is taken to grow in proportion to the reflectance.
    out : ndarray, shape (pixel,)
        Gets ``Φ(−min z)``; with a variance of zero 0 where all conditions hold strictly, else 1. NaN where a value or
        a sigma is missing.
    """
    nothing = np.empty(0, dtype=values[0].dtype)
    columns: list[NDArray] = []
    for place in (0, 1):
        for arrays in (values, sigmas, kept):
            array = arrays[place] if place < len(arrays) else None
            columns.append(nothing if array is None else array)
    compiled: Any = _loop
    compiled(*columns, settings[0], settings[-1], out)


@njit(cache=True, nogil=True, error_model="numpy")
def _loop(  # type: ignore[no-untyped-def]
    first, first_sigma, first_kept, second, second_sigma, second_kept, first_setting, second_setting, out
):
    # a block's scores stay in the first-level cache; without branches the compiler makes vectors of them
    z, variance = np.empty(_BLOCK), np.empty(_BLOCK)
    two = second.size > 0
    for start in range(0, out.size, _BLOCK):
        here = slice(start, min(start + _BLOCK, out.size))
        scores = out[here]
        _score(first[here], first_sigma[here], first_kept[here], first_setting, variance, scores)
        if two:
            _score(second[here], second_sigma[here], second_kept[here], second_setting, variance, z)
            for i in range(scores.size):
                scores[i] = z[i] if (z[i] < scores[i]) | (z[i] != z[i]) else scores[i]
        for i in range(scores.size):
            score = scores[i]
            if score > -8.3:
                scores[i] = 0.5 * math.erfc(score / math.sqrt(2.0))
            else:
                scores[i] = np.nan if math.isnan(score) else 1.0


@njit(cache=True, nogil=True, error_model="numpy")
def _score(value, sigma, kept, setting, variance, z):  # type: ignore[no-untyped-def]
    """How many sigma each pixel lies beyond its limit; −∞ where it lies at the limit and nothing is uncertain."""
    sign, limit, fixed, per_reflectance, per_square, in_proportion = setting
    for i in range(value.size):
        variance[i] = fixed
    if sigma.size:
        for i in range(value.size):
            variance[i] += float(sigma[i]) * float(sigma[i])
    if kept.size:
        for i in range(value.size):
            variance[i] += kept[i]
    if in_proportion != 0.0 and sigma.size:
        for i in range(value.size):
            held = max(min(float(value[i]), limit), 0.0)
            if sigma[i] > 0.0 and held < limit:
                share = limit / held
                variance[i] += float(sigma[i]) * float(sigma[i]) * (share * share - 1.0)
    elif per_reflectance != 0.0 or per_square != 0.0:
        for i in range(value.size):
            held = max(min(float(value[i]), limit), 0.0)
            variance[i] += per_reflectance * (limit - held) + per_square * (limit * limit - held * held)
    for i in range(value.size):
        beyond = sign * (float(value[i]) - limit)
        score = beyond / math.sqrt(variance[i])
        z[i] = -np.inf if (variance[i] == 0.0) & (beyond == 0.0) else score


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
