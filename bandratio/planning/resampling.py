"""How much a cross-validated area would change with other specimens: training and test drawn anew. Arrays only.

To draw only the tested pairs anew would be too kind: the pairs share their training specimens, and another set of
specimens trains another contrast. So each bootstrap sample of specimens is trained and tested whole, with all copies of
a specimen left out together.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from .separability import Groups, Pairs, best_contrast, right_order, specimen_moments, with_ridge

__all__ = ["centred_interval", "multiplicities", "resampled_areas"]


def multiplicities(counts: tuple[int, int], resamples: int, seed: int = 20250117) -> tuple[NDArray, NDArray]:
    """How often each specimen is in each bootstrap sample, for both groups: shape (resample, specimen)."""
    generator = np.random.default_rng(seed)
    first, second = (
        generator.multinomial(count, np.full(count, 1 / count), size=resamples).astype(float)
        for count in counts
    )
    return first, second


def resampled_areas(
    groups: Groups, subsets: NDArray[np.intp], pairs: Pairs, drawn: tuple[NDArray, NDArray], threads: int = 1
) -> NDArray[np.float64]:
    """Cross-validated area of each subset of bands in each bootstrap sample of specimens.

    Parameters
    ----------
    groups : Groups
        At all candidate bands.
    subsets : ndarray of int, shape (subset, k)
        Bands of each subset.
    pairs : Pairs
        Pairs of specimens that are left out one after the other, each with the product of its multiplicities.
    drawn : (wanted, unwanted), ndarray of float, shape (resample, specimen)
        Multiplicities of the specimens.
    threads : int
        How many threads share the pairs.

    Returns
    -------
    ndarray, shape (resample, subset)
        NaN where a sample holds no pair with specimens left to train on.
    """
    moments = [specimen_moments(groups, group) for group in (0, 1)]
    sums = [
        (m @ mean, np.einsum("bs,skl->bkl", m, outer))
        for m, (mean, outer) in zip(drawn, moments, strict=True)
    ]

    def run(number: int) -> tuple[NDArray, NDArray]:
        left_out = int(pairs.wanted[number]), int(pairs.unwanted[number])
        means: list[NDArray] = []
        pooled: NDArray = np.zeros((1, 1, 1))
        degrees: NDArray = np.zeros(1)
        weight = np.ones(drawn[0].shape[0])
        for g in (0, 1):
            copies = drawn[g][:, left_out[g]]
            kept = drawn[g].sum(axis=1) - copies
            weight *= copies * (kept > 0)
            share = np.maximum(kept, 1)[:, None]
            mean = (sums[g][0] - copies[:, None] * moments[g][0][left_out[g]]) / share
            second = (sums[g][1] - copies[:, None, None] * moments[g][1][left_out[g]]) / share[..., None]
            means.append(mean)
            pooled = pooled + kept[:, None, None] * (second - mean[:, :, None] * mean[:, None, :])
            degrees = degrees + kept
        some = weight > 0
        right = np.zeros((weight.size, subsets.shape[0]))
        if some.any():
            spread = with_ridge(pooled[some] / np.maximum(degrees, 1)[some, None, None])
            delta = (means[0] - means[1])[some]
            w = best_contrast(delta[:, subsets], spread[:, subsets[:, :, None], subsets[:, None, :]])
            tested = [groups.specimens[g] == left_out[g] for g in (0, 1)]
            a, b = (groups.logs[g][tested[g]] for g in (0, 1))
            va, vb = (groups.variances[g][tested[g]] for g in (0, 1))
            difference = (a[:, None] - b[None]).reshape(-1, a.shape[1])[:, subsets]
            variance = (va[:, None] + vb[None]).reshape(-1, a.shape[1])[:, subsets]
            d = np.einsum("bqk,pqk->pbq", w, difference)
            v = np.einsum("bqk,pqk->pbq", w**2, variance)
            right[some] = right_order(d, v).mean(axis=0)
        return weight[:, None] * right, weight

    with ThreadPoolExecutor(max(threads, 1)) as pool:
        parts = list(pool.map(run, range(pairs.wanted.size)))
    total = sum(weight for _, weight in parts)
    summed = sum(part for part, _ in parts)
    area: NDArray[np.float64] = (
        np.where(total > 0, 1.0, np.nan)[:, None] * summed / np.maximum(total, 1)[:, None]
    )
    return area


def centred_interval(estimate: float, drawn: NDArray, tail: float) -> tuple[float, float]:
    """Interval about an estimate with the spread of its bootstrap.

    A bootstrap sample holds fewer distinct specimens to train on than the whole, so its areas are a little low: their
    spread is used, not their level.
    """
    around = drawn[np.isfinite(drawn)]
    low, high = np.quantile(around - around.mean(), [tail, 1 - tail])
    return estimate + float(low), estimate + float(high)
