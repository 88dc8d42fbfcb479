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
    scratch = np.empty((7, _BLOCK), out.dtype)
    mu0, mu, cos_g, factor, least, most, variance = (
        scratch[0], scratch[1], scratch[2], scratch[3], scratch[4], scratch[5], scratch[6],
    )  # fmt: skip
    for start in range(0, incidence.size, _BLOCK):
        m = min(_BLOCK, incidence.size - start)
        stop = start + m
        i, e, g = incidence[start:stop], emission[start:stop], phase[start:stop]
        marks = flag[to + start : to + stop]
        _cosine(i, mu0)
        _cosine(e, mu)
        for p in range(m):
            # the last that applies wins, as in Correction.flags
            mark = 0
            if not (
                (g[p] <= i[p] + e[p] + slack)
                & (g[p] >= abs(i[p] - e[p]) - slack)
                & (i[p] >= zero)
                & (e[p] >= zero)
            ):
                mark = 5
            if e[p] > largest_e:
                mark = 4
            if i[p] > largest_i:
                mark = 3
            marks[p] = mark
        if shadow.size:
            for p in range(m):
                if shadow[start + p]:
                    marks[p] = 2
        for p in range(m):
            if not (np.isfinite(i[p]) & np.isfinite(e[p]) & np.isfinite(g[p])):
                marks[p] = 1
        for band in range(max(values.shape[0], brightness.shape[0])):
            if band == 0 or not (L[band] == L[band - 1]).all():
                _factor(L[band], at_target[band], g, mu0, mu, factor)
                for p in range(m):
                    # per_mu0 is 0 for radiance factors, whose factor stays as it is
                    by = one if per_mu0 == zero else mu0[p] * per_mu0
                    factor[p] = factor[p] * by if marks[p] == 0 else kind(np.nan)
            if band < brightness.shape[0]:
                multiplied = brightness[band, to + start : to + stop]
                for p in range(m):
                    multiplied[p] = factor[p]
            if band >= values.shape[0]:
                continue
            row, written = (
                values[band, offset + start : offset + stop],
                out[band, to + start : to + stop],
            )
            for p in range(m):
                written[p] = row[p] * factor[p]
        if numbers[4] == 0:
            continue
        _cosine(g, cos_g)
        variance[:] = zero
        if slope_sigma.size > 1 or slope_sigma[0] > 0:
            _slope_variance(L, g, mu0, mu, cos_g, per_mu0, variance)
            if slope_sigma.size == 1:
                sigma = kind(slope_sigma[0])
                for p in range(m):
                    variance[p] *= sigma * sigma
            else:
                for p in range(m):
                    variance[p] *= kind(slope_sigma[start + p]) ** 2
        for law in range(spread.shape[0]):
            _factor(spread[law], spread_at_target[law], g, mu0, mu, factor)
            for p in range(m):
                least[p] = factor[p] if law == 0 else min(least[p], factor[p])
                most[p] = factor[p] if law == 0 else max(most[p], factor[p])
        if spread.shape[0]:
            # the first law of the spread is the one that was chosen
            _factor(spread[0], spread_at_target[0], g, mu0, mu, factor)
            for p in range(m):
                width = (most[p] - least[p]) / factor[p]
                variance[p] += width * width / kind(12)
        written = gain[to + start : to + stop]
        for p in range(m):
            written[p] = np.sqrt(variance[p]) if marks[p] == 0 else kind(np.nan)


@njit(**_OPTIONS)
def _slope_variance(L, phase, mu0, mu, cos_g, per_mu0, variance):  # type: ignore[no-untyped-def]
    """Variance of ln R for a slope error of 1 radian along either axis; the slopes are the mean over the bands."""
    kind = variance.dtype.type
    one, two, zero = kind(1), kind(2), kind(0)
    alike = True
    for band in range(1, L.shape[0]):
        alike &= (L[band] == L[0]).all()
    bands = 1 if alike else L.shape[0]
    # ∂ln D/∂μ is collected in `variance`
    for band in range(bands):
        c0, c1, c2, c3 = kind(L[band, 0]), kind(L[band, 1]), kind(L[band, 2]), kind(L[band, 3])
        for p in range(phase.size):
            g = kind(phase[p])
            weight = max(c0 + g * (c1 + g * (c2 + g * c3)), zero)
            inverse = one / (mu0[p] + mu[p])
            seeliger = two * weight * inverse
            variance[p] -= seeliger * inverse / (seeliger + (one - weight))
    share, own = one / kind(bands), one if per_mu0 == zero else zero
    for p in range(phase.size):
        x0, x = mu0[p], mu[p]
        b = variance[p] * share
        a = b + own / x0
        across = a * a * (one - x0 * x0) + b * b * (one - x * x) + two * a * b * (cos_g[p] - x0 * x)
        variance[p] = max(across, zero)


@njit(**_OPTIONS)
def _factor(L, at_target, phase, mu0, mu, factor):  # type: ignore[no-untyped-def]
    """D at the standard geometry over D here."""
    kind = factor.dtype.type
    c0, c1, c2, c3, target = kind(L[0]), kind(L[1]), kind(L[2]), kind(L[3]), kind(at_target)
    one, two, zero = kind(1), kind(2), kind(0)
    for p in range(phase.size):
        g = kind(phase[p])
        weight = max(c0 + g * (c1 + g * (c2 + g * c3)), zero)
        factor[p] = target / (mu0[p] * (two * weight / (mu0[p] + mu[p]) + (one - weight)))


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
