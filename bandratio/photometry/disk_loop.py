"""The compiled loop for the laws that mix Lambert's and Lommel and Seeliger's: one pass over memory. Arrays only.

D = μ0·(2L/(μ0 + μ) + 1 − L), with L a cubic in phase, never negative. The formulas are those of
:mod:`bandratio.photometry.correction`, which holds the readable reference.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

__all__ = ["mixed_law_loop"]

#: Pixels at a time: the scratch rows stay in the first-level cache.
_BLOCK = 512
_OPTIONS: dict[str, Any] = {"cache": True, "nogil": True, "error_model": "numpy", "fastmath": {"contract"}}


@njit(**_OPTIONS)
def mixed_law_loop(  # type: ignore[no-untyped-def]
    values, incidence, emission, phase, shadow, L, at_target, spread, spread_at_target, slope_sigma, numbers,
    out, gain, brightness, flag, offset, to,
):  # fmt: skip
    """Normalised values, relative sigma of the correction, flags, and what the values were multiplied by.

    Parameters
    ----------
    incidence, emission, phase : ndarray, shape (pixel,)
        Angles [deg].
    shadow : ndarray of uint8, shape (pixel,) or (0,)
        Cast shadow; empty: none.
    L, spread : ndarray, shape (band, 4) and (law, 4)
        Coefficients of L(g), of the law in each band and of the laws that bound the truth (none: no spread).
    at_target, spread_at_target : ndarray, shape (band,) and (law,)
        D of each at the standard geometry.
    slope_sigma : ndarray, shape (1,) or (pixel,)
        Slope error [radian].
    numbers : ndarray, shape (5,)
        1/μ0 of the standard geometry where the quantity is divided by μ0, else 0; largest incidence and emission, and
        slack of the angles [deg]; 1 where the sigma is wanted, else 0.
    values, out, gain, flag : ndarray, shape (band, all pixels), the same, (all pixels,) and (all pixels,)
        Reflectances from pixel `offset` on, and where to write them normalised, sigma and flags, from pixel `to` on; no
        bands: the values are not wanted.
    brightness : ndarray, shape (0, 1 or band, all pixels)
        Where to write the factors: not at all, of the first band, or of each.
    """
    kind = out.dtype.type
    zero, one = kind(0), kind(1)
    per_mu0, largest_i, largest_e, slack = (
        kind(numbers[0]),
        kind(numbers[1]),
        kind(numbers[2]),
        kind(numbers[3]),
    )
    bands = max(values.shape[0], brightness.shape[0])
    repeats = np.zeros(L.shape[0], np.bool_)
    for band in range(1, L.shape[0]):
        repeats[band] = (L[band] == L[band - 1]).all()
    chosen_first = spread.shape[0] > 0 and repeats[1:].all() and (spread[0] == L[0]).all()
    scratch = np.empty((10, _BLOCK), out.dtype)
    mu0, mu, cos_g, factor, least = scratch[0], scratch[1], scratch[2], scratch[3], scratch[4]
    # 1/μ0, 1/(μ0 + μ) and 1/(2L/(μ0 + μ) + 1 − L): three divisions serve everything
    by_mu0, by_sum, shape, most, variance = scratch[5], scratch[6], scratch[7], scratch[8], scratch[9]
    for start in range(0, incidence.size, _BLOCK):
        m = min(_BLOCK, incidence.size - start)
        stop = start + m
        i, e, g = incidence[start:stop], emission[start:stop], phase[start:stop]
        marks = flag[to + start : to + stop]
        _cosine(i, mu0)
        _cosine(e, mu)
        for p in range(m):
            by_mu0[p] = one / mu0[p]
            by_sum[p] = one / (mu0[p] + mu[p])
        for p in range(m):
            # the last that applies wins, as in Correction.flags
            possible = (g[p] <= i[p] + e[p] + slack) & (g[p] >= abs(i[p] - e[p]) - slack)
            mark = 0 if possible & (i[p] >= zero) & (e[p] >= zero) else 5
            mark = 4 if e[p] > largest_e else mark
            marks[p] = 3 if i[p] > largest_i else mark
        if shadow.size:
            for p in range(m):
                marks[p] = 2 if shadow[start + p] else marks[p]
        for p in range(m):
            # a sum is finite where its parts are
            marks[p] = marks[p] if np.isfinite(i[p] + e[p] + g[p]) else 1
        for band in range(bands):
            if not repeats[band]:
                _shape(L[band], g, mu0, mu, by_sum, shape)
                target = kind(at_target[band])
                if per_mu0 == zero:
                    for p in range(m):
                        factor[p] = target * by_mu0[p] * shape[p] if marks[p] == 0 else kind(np.nan)
                else:
                    # D/μ0, in which μ0 itself cancels
                    for p in range(m):
                        factor[p] = target * per_mu0 * shape[p] if marks[p] == 0 else kind(np.nan)
            if band < brightness.shape[0]:
                multiplied = brightness[band, to + start : to + stop]
                for p in range(m):
                    multiplied[p] = factor[p]
            if band >= values.shape[0]:
                continue
            row, written = values[band, offset + start : offset + stop], out[band, to + start : to + stop]
            for p in range(m):
                written[p] = row[p] * factor[p]
        if numbers[4] == 0:
            continue
        variance[:m] = zero
        if slope_sigma.size > 1 or slope_sigma[0] > 0:
            _cosine(g, cos_g)
            _slope_variance(L, repeats, g, mu0, mu, cos_g, by_mu0, by_sum, shape, per_mu0, variance)
            if slope_sigma.size == 1:
                sigma = kind(slope_sigma[0])
                for p in range(m):
                    variance[p] *= sigma * sigma
            else:
                for p in range(m):
                    variance[p] *= kind(slope_sigma[start + p]) ** 2
        for law in range(spread.shape[0]):
            if law > 0 or not chosen_first:
                _shape(spread[law], g, mu0, mu, by_sum, shape)
            target = kind(spread_at_target[law])
            if law == 0:
                # the first law of the spread is the one that was chosen
                for p in range(m):
                    factor[p] = least[p] = most[p] = target * by_mu0[p] * shape[p]
            else:
                for p in range(m):
                    other = target * by_mu0[p] * shape[p]
                    least[p] = min(least[p], other)
                    most[p] = max(most[p], other)
        if spread.shape[0]:
            twelfth = kind(1 / 12)
            for p in range(m):
                width = (most[p] - least[p]) / factor[p]
                variance[p] += width * width * twelfth
        written = gain[to + start : to + stop]
        for p in range(m):
            written[p] = np.sqrt(variance[p]) if marks[p] == 0 else kind(np.nan)


@njit(**_OPTIONS)
def _shape(L, phase, mu0, mu, by_sum, shape):  # type: ignore[no-untyped-def]
    """1/(2L/(μ0 + μ) + 1 − L), so that D is μ0 over it."""
    kind = shape.dtype.type
    c0, c1, c2, c3 = kind(L[0]), kind(L[1]), kind(L[2]), kind(L[3])
    one, two, zero = kind(1), kind(2), kind(0)
    constant = L[1] == 0 and L[2] == 0 and L[3] == 0
    if constant and L[0] == 0:
        for p in range(phase.size):
            shape[p] = one
    elif constant and L[0] == 1:
        half = kind(0.5)
        for p in range(phase.size):
            shape[p] = half * (mu0[p] + mu[p])
    else:
        for p in range(phase.size):
            g = kind(phase[p])
            weight = max(c0 + g * (c1 + g * (c2 + g * c3)), zero)
            shape[p] = one / (two * weight * by_sum[p] + (one - weight))


@njit(**_OPTIONS)
def _slope_variance(  # type: ignore[no-untyped-def]
    L, repeats, phase, mu0, mu, cos_g, by_mu0, by_sum, shape, per_mu0, variance
):
    """Variance of ln R for a slope error of 1 radian along either axis; the slopes are the mean over the bands."""
    kind = variance.dtype.type
    one, two, zero = kind(1), kind(2), kind(0)
    alike = repeats[1:].all()
    bands = 1 if alike else L.shape[0]
    # ∂ln D/∂μ is collected in `variance`
    for band in range(bands):
        if not alike:
            _shape(L[band], phase, mu0, mu, by_sum, shape)
        c0, c1, c2, c3 = kind(L[band, 0]), kind(L[band, 1]), kind(L[band, 2]), kind(L[band, 3])
        for p in range(phase.size):
            g = kind(phase[p])
            weight = max(c0 + g * (c1 + g * (c2 + g * c3)), zero)
            variance[p] -= two * weight * by_sum[p] * by_sum[p] * shape[p]
    share, own = one / kind(bands), one if per_mu0 == zero else zero
    for p in range(phase.size):
        x0, x = mu0[p], mu[p]
        b = variance[p] * share
        a = b + own * by_mu0[p]
        across = a * a * (one - x0 * x0) + b * b * (one - x * x) + two * a * b * (cos_g[p] - x0 * x)
        variance[p] = max(across, zero)


@njit(**_OPTIONS)
def _cosine(degrees, cosine):  # type: ignore[no-untyped-def]
    """Cosine of degrees. In single precision by Taylor's series about 90°, exact to rounding from 0 to 180°.

    A call of the library's cosine for each pixel would take longer than all the rest, since compilers do not turn
    it into vector instructions.
    """
    if cosine.itemsize == 8:
        for p in range(degrees.size):
            cosine[p] = math.cos(degrees[p] * (math.pi / 180))
        return
    kind = cosine.dtype.type
    unit, right, one = kind(math.pi / 180), kind(90), kind(1)
    c3, c5, c7 = kind(-1 / 6), kind(1 / 120), kind(-1 / 5040)
    c9, c11, c13 = kind(1 / 362880), kind(-1 / 39916800), kind(1 / 6227020800)
    for p in range(degrees.size):
        y = (right - kind(degrees[p])) * unit
        q = y * y
        cosine[p] = y * (one + q * (c3 + q * (c5 + q * (c7 + q * (c9 + q * (c11 + q * c13))))))
