"""The compiled loop: many band ratios and their standard uncertainties in one pass over memory.

Arrays only. A block of pixels that fits the processor's cache is read once; every ratio, its gradient and its
variance are computed from it before the next block is touched.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from .ratio import BandRatio

__all__ = ["NoiseTable", "RatioTable", "cores", "evaluate"]

#: Pixels per block: the scratch rows of a block stay in the first-level cache.
_BLOCK = 512
#: Below this many pixels a second thread costs more than it brings.
_THREAD_PIXELS = 65_536


@dataclass(frozen=True)
class RatioTable:
    """Weights of several ratios as flat arrays; term t of ratio k runs from first[k] to first[k + 1].

    `band`, `n` and `d` have one entry for each term; `n0`, `d0` and `scale` one for each ratio.
    """

    first: NDArray[np.int64]
    band: NDArray[np.int64]
    n: NDArray[np.float64]
    d: NDArray[np.float64]
    n0: NDArray[np.float64]
    d0: NDArray[np.float64]
    scale: NDArray[np.float64]

    @classmethod
    def build(cls, ratios: Sequence[BandRatio], centres: NDArray, tolerance: float) -> RatioTable:
        """Table for the given band centres [nm]."""
        first, band, n, d = [0], [], [], []
        for ratio in ratios:
            n_row, d_row = ratio.weights_for(centres, tolerance)
            used = np.flatnonzero((n_row != 0) | (d_row != 0))
            band.extend(used.tolist())
            n.extend(n_row[used].tolist())
            d.extend(d_row[used].tolist())
            first.append(len(band))
        return cls(
            np.array(first, dtype=np.int64),
            np.array(band, dtype=np.int64),
            np.array(n, dtype=float),
            np.array(d, dtype=float),
            np.array([ratio.numerator_offset for ratio in ratios], dtype=float),
            np.array([ratio.denominator_offset for ratio in ratios], dtype=float),
            np.array([ratio.scale for ratio in ratios], dtype=float),
        )


@dataclass(frozen=True)
class NoiseTable:
    """Variance of each band as a quadratic of its reflectance, random and shared apart.

    ``random_j = f²·constant + f·linear·max(R, 0) + square·R²``, with f the brightness factor, one unless given;
    ``shared_j`` has no linear part. Columns of `random` and `shared`, each of shape (band, 3), are constant, linear and
    square.
    """

    random: NDArray[np.float64]
    shared: NDArray[np.float64]
    common_gain: float

    @classmethod
    def build(
        cls,
        random: NDArray,
        shot: NDArray,
        relative: NDArray,
        band_gain: NDArray,
        band_offset: NDArray,
        common_gain: float,
    ) -> NoiseTable:
        """Table from the parts of a noise, each of shape (band,)."""
        zero = np.zeros_like(band_gain)
        return cls(
            np.ascontiguousarray(np.stack([random**2, shot**2, relative**2], axis=1), dtype=float),
            np.ascontiguousarray(np.stack([band_offset**2, zero, band_gain**2], axis=1), dtype=float),
            float(common_gain),
        )


def cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def evaluate(
    reflectance: NDArray,
    ratios: RatioTable,
    noise: NoiseTable | None = None,
    *,
    random_map: NDArray | None = None,
    pixel_gain: NDArray | None = None,
    brightness_factor: NDArray | None = None,
    parts: bool = False,
    threads: int = 1,
    out: NDArray | None = None,
    offset: int = 0,
) -> NDArray:
    """Values and standard uncertainties of many ratios.

    Parameters
    ----------
    reflectance : ndarray of float32 or float64, shape (band, pixel)
        Missing is NaN.
    ratios : RatioTable
        The weights.
    noise : NoiseTable, optional
        None: values only.
    random_map : ndarray, shape (1 or band, pixel), optional
        Random noise of each pixel [reflectance], in place of the table's constant.
    pixel_gain : ndarray, shape (pixel,), optional
        Gain error common to the bands of a pixel, new in each pixel [1]; a random part.
    brightness_factor : ndarray, shape (1 or band, pixel), optional
        What each reflectance was multiplied by since it was measured [1]; the constant part of each variance grows
        with its square, the linear one with it.
    parts : bool
        Also give the random and the shared sigma.
    threads : int
        How many threads share the pixels.
    out : ndarray, shape (ratio, 1, 2 or 4, pixel), optional
        Where to write; the planes are value, sigma, and with parts random and shared sigma.
    offset : int
        From which pixel of `out` on.

    Returns
    -------
    ndarray of the dtype of `reflectance`, shape (ratio, 1, 2 or 4, pixel)
        NaN where a band is missing or the denominator is not positive.
    """
    pixels = reflectance.shape[1]
    planes = 1 if noise is None else 4 if parts else 2
    if out is None:
        out = np.empty((ratios.scale.size, planes, pixels), dtype=reflectance.dtype)
    if noise is None:
        noise = NoiseTable(np.zeros((reflectance.shape[0], 3)), np.zeros((reflectance.shape[0], 3)), 0.0)
    has_map = random_map is not None
    per_pixel = np.empty((1, 1), reflectance.dtype) if random_map is None else random_map
    gain = np.empty(0, np.float32) if pixel_gain is None else pixel_gain
    has_factor = brightness_factor is not None
    factor = np.empty((0, 0), reflectance.dtype) if brightness_factor is None else brightness_factor
    fixed = (
        ratios.first, ratios.band, ratios.n, ratios.d, ratios.n0, ratios.d0, ratios.scale,
        noise.random, noise.shared, noise.common_gain,
    )  # fmt: skip

    def run(start: int, stop: int) -> None:
        # a copy of one stretch is cheap, of the whole cube it is not: strided input is copied here
        part = np.ascontiguousarray(reflectance[:, start:stop])
        part_map = np.ascontiguousarray(per_pixel[:, start:stop], dtype=part.dtype) if has_map else per_pixel
        part_gain = np.ascontiguousarray(gain[start:stop], dtype=part.dtype)
        part_factor = np.ascontiguousarray(factor[:, start:stop], dtype=part.dtype) if has_factor else factor
        _loop(part, *fixed, has_map, part_map, part_gain, part_factor, out, offset + start)

    threads = max(1, min(threads, pixels // _THREAD_PIXELS))
    if threads == 1 and reflectance.flags.c_contiguous:
        run(0, pixels)
        return out
    stretch = -(-pixels // (threads * 4)) if threads > 1 else 1 << 18
    stretch = -(-stretch // _BLOCK) * _BLOCK
    starts = range(0, pixels, stretch)
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(lambda start: run(start, min(start + stretch, pixels)), starts))
    return out


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _loop(  # type: ignore[no-untyped-def]
    reflectance,
    first,
    band,
    n,
    d,
    n0,
    d0,
    scale,
    random,
    shared,
    common_gain,
    has_map,
    random_map,
    pixel_gain,
    factor,
    out,
    offset,
):
    bands, pixels = reflectance.shape
    planes = out.shape[1]
    var_random = np.empty((bands, _BLOCK))
    var_shared = np.empty((bands, _BLOCK))
    scratch = np.empty((5, _BLOCK))
    # where one sigma is wanted, the two natures are added here, once for all ratios
    first_natures = random + shared if planes == 2 else random
    for start in range(0, pixels, _BLOCK):
        m = min(_BLOCK, pixels - start)
        stop = start + m
        if planes > 1 and factor.shape[0] == 0:
            _band_variances(reflectance, start, stop, first_natures, var_random)
            if has_map:
                _add_map(random_map, start, stop, var_random)
            if planes == 4:
                _band_variances(reflectance, start, stop, shared, var_shared)
        elif planes > 1:
            _scaled_variances(reflectance, factor, start, stop, first_natures, var_random)
            if has_map:
                _add_scaled_map(random_map, factor, start, stop, var_random)
            if planes == 4:
                _scaled_variances(reflectance, factor, start, stop, shared, var_shared)
        here = slice(offset + start, offset + stop)
        for k in range(scale.size):
            terms = slice(first[k], first[k + 1])
            along = common_gain if n0[k] != 0.0 or d0[k] != 0.0 else 0.0
            gain = pixel_gain[start:stop] if n0[k] != 0.0 or d0[k] != 0.0 else pixel_gain[:0]
            level = not d[terms].any()
            if planes == 2 and first[k + 1] - first[k] <= 3 and (gain.size == 0 or level):
                _short_ratio(
                    reflectance, start, stop, var_random, band[terms], n[terms], d[terms], n0[k], d0[k], scale[k], along,
                    out[k, 0, here], out[k, 1, here],
                )  # fmt: skip
                if gain.size:
                    _add_gain(gain, scale[k] * n0[k] / d0[k], out[k, 0, here], out[k, 1, here])
            else:
                _any_ratio(
                    reflectance, start, stop, var_random, var_shared, band[terms], n[terms], d[terms],
                    n0[k], d0[k], scale[k], along, gain, out[k], offset + start, scratch,
                )  # fmt: skip


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _band_variances(R, start, stop, coefficients, variance):  # type: ignore[no-untyped-def]
    """Quadratic of each band's reflectance; photon noise has none below zero."""
    for j in range(R.shape[0]):
        a, b, c = coefficients[j, 0], coefficients[j, 1], coefficients[j, 2]
        row, to = R[j, start:stop], variance[j]
        if b != 0.0:
            for i in range(row.size):
                x = float(row[i])
                to[i] = a + b * max(x, 0.0) + c * x * x
        else:
            for i in range(row.size):
                x = float(row[i])
                to[i] = a + c * x * x


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _scaled_variances(R, factor, start, stop, coefficients, variance):  # type: ignore[no-untyped-def]
    """As `_band_variances`, where each reflectance was multiplied by a factor since it was measured."""
    for j in range(R.shape[0]):
        a, b, c = coefficients[j, 0], coefficients[j, 1], coefficients[j, 2]
        row, to = R[j, start:stop], variance[j]
        f = factor[j if factor.shape[0] > 1 else 0, start:stop]
        for i in range(row.size):
            x, k = float(row[i]), float(f[i])
            to[i] = k * (k * a + b * max(x, 0.0)) + c * x * x


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _add_scaled_map(random_map, factor, start, stop, variance):  # type: ignore[no-untyped-def]
    for j in range(variance.shape[0]):
        row = random_map[j if random_map.shape[0] > 1 else 0, start:stop]
        f = factor[j if factor.shape[0] > 1 else 0, start:stop]
        to = variance[j]
        for i in range(row.size):
            x = float(row[i]) * float(f[i])
            to[i] += x * x


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _add_map(random_map, start, stop, variance):  # type: ignore[no-untyped-def]
    for j in range(variance.shape[0]):
        row = random_map[j if random_map.shape[0] > 1 else 0, start:stop]
        to = variance[j]
        for i in range(row.size):
            x = float(row[i])
            to[i] += x * x


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _short_ratio(  # type: ignore[no-untyped-def]
    R, start, stop, variance, band, n, d, n0, d0, scale, along, value, sigma
):
    """Up to three terms, value and sigma: everything stays in registers."""
    last = band.size - 1
    j0, j1, j2 = band[0], band[min(1, last)], band[min(2, last)]
    # a term that is not there repeats a band that is used, with the weight zero
    n_0, n_1, n_2 = n[0], n[1] if last > 0 else 0.0, n[2] if last > 1 else 0.0
    d_0, d_1, d_2 = d[0], d[1] if last > 0 else 0.0, d[2] if last > 1 else 0.0
    R0, R1, R2 = R[j0, start:stop], R[j1, start:stop], R[j2, start:stop]
    V0, V1, V2 = variance[j0], variance[j1], variance[j2]
    s_0, s_1, s_2 = scale * n_0, scale * n_1, scale * n_2
    a_p, a_0 = along * d0, along * scale * n0
    largest = np.finfo(value.dtype).max
    for i in range(value.size):
        upper = n0 + n_0 * float(R0[i]) + n_1 * float(R1[i]) + n_2 * float(R2[i])
        lower = d0 + d_0 * float(R0[i]) + d_1 * float(R1[i]) + d_2 * float(R2[i])
        inverse = 1.0 / lower if lower > 0.0 else np.nan
        p = scale * upper * inverse
        g0, g1, g2 = s_0 - p * d_0, s_1 - p * d_1, s_2 - p * d_2
        common = a_p * p - a_0
        total = g0 * g0 * V0[i] + g1 * g1 * V1[i] + g2 * g2 * V2[i] + common * common
        s = np.sqrt(sigma.dtype.type(total)) * sigma.dtype.type(inverse)
        # what does not fit the type of the output is no value either (a nodata value that was never masked)
        value[i] = p if abs(p) <= largest else np.nan
        sigma[i] = s if s <= largest else np.nan


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _add_gain(gain, offset, value, sigma):  # type: ignore[no-untyped-def]
    """Add the gain error of each pixel to the sigma of a ratio without a denominator: Σ g_j R_j is p less its offset."""
    kind = sigma.dtype.type
    constant = kind(offset)
    for i in range(value.size):
        common = kind(gain[i]) * (value[i] - constant)
        sigma[i] = np.sqrt(sigma[i] * sigma[i] + common * common)


@njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})
def _any_ratio(  # type: ignore[no-untyped-def]
    R, start, stop, var_random, var_shared, band, n, d, n0, d0, scale, along, gain, out, to, scratch
):
    """Any number of terms, and the random and shared sigma apart."""
    upper, inverse, p, sum_random, sum_shared = scratch[0], scratch[1], scratch[2], scratch[3], scratch[4]
    m = stop - start
    planes = out.shape[0]
    value, sigma = out[0, to : to + m], out[min(1, planes - 1), to : to + m]
    sigma_random, sigma_shared = out[planes - 2, to : to + m], out[planes - 1, to : to + m]
    for i in range(m):
        upper[i] = n0
        inverse[i] = d0
        sum_random[i] = 0.0
        sum_shared[i] = 0.0
    for t in range(band.size):
        row, nj, dj = R[band[t], start:stop], n[t], d[t]
        for i in range(m):
            x = float(row[i])
            upper[i] += nj * x
            inverse[i] += dj * x
    largest = np.finfo(out.dtype).max
    for i in range(m):
        lower = inverse[i]
        inverse[i] = 1.0 / lower if lower > 0.0 else np.nan
        x = scale * upper[i] * inverse[i]
        p[i] = x if abs(x) <= largest else np.nan
        value[i] = p[i]
    if planes == 1:
        return
    for t in range(band.size):
        nj, dj, V = scale * n[t], d[t], var_random[band[t]]
        for i in range(m):
            g = (nj - p[i] * dj) * inverse[i]
            sum_random[i] += g * g * V[i]
        if planes == 4:
            V = var_shared[band[t]]
            for i in range(m):
                g = (nj - p[i] * dj) * inverse[i]
                sum_shared[i] += g * g * V[i]
    if along != 0.0:
        # Σ g_j R_j = (p·d0 − scale·n0) / (d·R + d0); skipped, not computed, for a pure ratio
        for i in range(m):
            common = along * (p[i] * d0 - scale * n0) * inverse[i]
            sum_shared[i] += common * common
    if gain.size:
        for i in range(m):
            common = gain[i] * (p[i] * d0 - scale * n0) * inverse[i]
            sum_random[i] += common * common
    for i in range(m):
        s = np.sqrt(sum_random[i] + sum_shared[i])
        sigma[i] = s if s <= largest else np.nan
    if planes == 4:
        for i in range(m):
            s = np.sqrt(sum_random[i])
            sigma_random[i] = s if s <= largest else np.nan
            s = np.sqrt(sum_shared[i])
            sigma_shared[i] = s if s <= largest else np.nan
