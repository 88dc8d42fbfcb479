"""How well band ratios tell two groups of specimens apart, judged only on specimens that were not looked at.

Arrays only. A spectrum is the logarithm of its reflectances: a band ratio is then a contrast, a weighted sum whose
weights add up to zero, so brightness and any gain that all bands share drop out. The best contrast of a set of bands
is Fisher's linear discriminant in that space. It is trained without one wanted and one unwanted specimen and asked
which of the two is the wanted one; the share of right answers over all such pairs is the cross-validated area under
the ROC curve.

References
----------
Fisher 1936, Ann. Eugenics 7, 179, doi:10.1111/j.1469-1809.1936.tb02137.x (discriminant). Airola et al. 2011, Comput.
Stat. Data Anal. 55, 1828, doi:10.1016/j.csda.2010.11.018 (leaving pairs out gives an area without bias).
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "Groups",
    "Pairs",
    "best_contrast",
    "best_ratio_orders",
    "contrast_orders",
    "pairs_left_out",
    "ratio_orders",
    "right_order",
    "specimen_moments",
    "with_ridge",
]

#: Part of the contrasts' mean variance that is added to each band's, so that few specimens give stable weights
#: (common practice, no source).
_RIDGE = 0.02
#: Subsets that are handled at once: keeps a block of matrices in the cache.
_BLOCK = 2048


@dataclass(frozen=True, eq=False)
class Groups:
    """Spectra of two groups at a set of bands.

    Parameters
    ----------
    logs : (wanted, unwanted), each ndarray, shape (sample, band)
        Natural logarithm of the reflectances.
    variances : likewise
        Variance of each logarithm by the noise.
    specimens : (wanted, unwanted), each ndarray of int, shape (sample,)
        0 … n − 1: which specimen a sample belongs to.
    """

    logs: tuple[NDArray[np.float64], NDArray[np.float64]]
    variances: tuple[NDArray[np.float64], NDArray[np.float64]]
    specimens: tuple[NDArray[np.intp], NDArray[np.intp]]

    @property
    def counts(self) -> tuple[int, int]:
        """Numbers of specimens."""
        return int(self.specimens[0].max()) + 1, int(self.specimens[1].max()) + 1

    def weights(self, group: int) -> NDArray[np.float64]:
        """Weight of each sample within its specimen: they add up to one in each."""
        _, inverse, sizes = np.unique(self.specimens[group], return_inverse=True, return_counts=True)
        return 1.0 / sizes[inverse]


@dataclass(frozen=True, eq=False)
class Pairs:
    """Pairs of specimens that are left out one after the other: indices of the wanted and of the unwanted one."""

    wanted: NDArray[np.intp]
    unwanted: NDArray[np.intp]


def pairs_left_out(counts: tuple[int, int], largest: int, seed: int = 20250117) -> Pairs:
    """All pairs of a wanted and an unwanted specimen, or a drawn part in which each takes part about equally often.

    Parameters
    ----------
    counts : (int, int)
        Numbers of specimens.
    largest : int
        How many pairs at most.
    """
    n, m = counts
    if n * m <= largest:
        first, second = np.divmod(np.arange(n * m), m)
        return Pairs(first, second)
    generator = np.random.default_rng(seed)
    rounds = -(-largest // max(n, m))
    drawn: set[tuple[int, int]] = set()
    for _ in range(rounds):
        long, short = generator.permutation(max(n, m)), generator.permutation(min(n, m))
        both = zip(long, np.resize(short, long.size), strict=True)
        drawn |= {(int(a), int(b)) if n >= m else (int(b), int(a)) for a, b in both}
    chosen = np.array(sorted(drawn))
    return Pairs(chosen[:, 0], chosen[:, 1])


def contrast_orders(
    groups: Groups, subsets: NDArray[np.intp], pairs: Pairs, threads: int = 1
) -> NDArray[np.float64]:
    """Probability that the best contrast of each subset of bands puts a pair that it never saw in the right order.

    Parameters
    ----------
    groups : Groups
        At all candidate bands.
    subsets : ndarray of int, shape (subset, k)
        Bands of each subset, two or more.
    pairs : Pairs
        What is left out.
    threads : int
        How many threads share the pairs.

    Returns
    -------
    ndarray, shape (subset, pair)
        Their mean over pairs is the cross-validated area under the ROC curve.
    """
    moments = [specimen_moments(groups, group) for group in (0, 1)]
    result = np.empty((subsets.shape[0], pairs.wanted.size))

    def run(number: int) -> None:
        left_out = int(pairs.wanted[number]), int(pairs.unwanted[number])
        delta, spread = _training(groups, moments, left_out)
        tested = [groups.specimens[g] == left_out[g] for g in (0, 1)]
        a, b = (groups.logs[g][tested[g]] for g in (0, 1))
        va, vb = (groups.variances[g][tested[g]] for g in (0, 1))
        difference = (a[:, None] - b[None]).reshape(-1, a.shape[1])
        variance = (va[:, None] + vb[None]).reshape(-1, a.shape[1])
        for start in range(0, subsets.shape[0], _BLOCK):
            block = subsets[start : start + _BLOCK]
            w = best_contrast(delta[block], spread[block[:, :, None], block[:, None, :]])
            d = np.einsum("qk,pqk->pq", w, difference[:, block])
            v = np.einsum("qk,pqk->pq", w**2, variance[:, block])
            result[start : start + _BLOCK, number] = right_order(d, v).mean(axis=0)

    with ThreadPoolExecutor(max(threads, 1)) as pool:
        list(pool.map(run, range(pairs.wanted.size)))
    return result


def specimen_moments(groups: Groups, group: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Each specimen's mean and its mean outer product with the noise's variance on the diagonal."""
    x, weights = groups.logs[group], groups.weights(group)
    count, bands = groups.counts[group], x.shape[1]
    mean, outer = np.zeros((count, bands)), np.zeros((count, bands, bands))
    np.add.at(mean, groups.specimens[group], weights[:, None] * x)
    products = x[:, :, None] * x[:, None, :] + groups.variances[group][:, :, None] * np.eye(bands)
    np.add.at(outer, groups.specimens[group], weights[:, None, None] * products)
    return mean, outer


def _training(
    groups: Groups, moments: list[tuple[NDArray, NDArray]], left_out: tuple[int, int]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Difference of the groups' means and their pooled covariance, without the two specimens left out."""
    means, covariances, degrees = [], [], []
    for group in (0, 1):
        mean, outer = moments[group]
        kept = groups.counts[group] - 1
        of_group = (mean.sum(axis=0) - mean[left_out[group]]) / kept
        second = (outer.sum(axis=0) - outer[left_out[group]]) / kept
        means.append(of_group)
        covariances.append(second - np.outer(of_group, of_group))
        degrees.append(kept)
    pooled = (degrees[0] * covariances[0] + degrees[1] * covariances[1]) / sum(degrees)
    return means[0] - means[1], with_ridge(pooled)


def with_ridge(pooled: NDArray) -> NDArray[np.float64]:
    """Covariances, shape (…, band, band), with a part of the contrasts' mean variance added to each band's."""
    bands = pooled.shape[-1]
    contrast_variance = np.trace(pooled, axis1=-2, axis2=-1) / bands - pooled.mean(axis=(-2, -1))
    ridge = _RIDGE * np.maximum(contrast_variance, 0.0) + 1e-12
    added: NDArray[np.float64] = pooled + ridge[..., None, None] * np.eye(bands)
    return added


def best_contrast(delta: NDArray, spread: NDArray) -> NDArray[np.float64]:
    """Weights that maximise (w·δ)²/(w'Σw) among those that add up to zero.

    ``w = Σ⁻¹δ − (1'Σ⁻¹δ / 1'Σ⁻¹1)·Σ⁻¹1``, for many subsets at once: δ of shape (…, k), Σ (…, k, k).
    """
    right = np.stack([delta, np.ones_like(delta)], axis=-1)
    solved = np.linalg.solve(spread, right)
    of_delta, of_one = solved[..., 0], solved[..., 1]
    along = of_delta.sum(axis=-1, keepdims=True) / of_one.sum(axis=-1, keepdims=True)
    weights: NDArray[np.float64] = of_delta - along * of_one
    return weights


def right_order(difference: NDArray, variance: NDArray) -> NDArray[np.float64]:
    """Φ(difference/σ): probability that noise leaves the order as it is; a tie counts half."""
    from scipy.special import ndtr

    sigma = np.sqrt(variance)
    with np.errstate(divide="ignore", invalid="ignore"):
        smooth = ndtr(difference / sigma)
    sharp = 0.5 * (np.sign(difference) + 1)
    right: NDArray[np.float64] = np.where(sigma > 1e-12, smooth, sharp)
    return right


def ratio_orders(groups: Groups) -> tuple[list[tuple[int, int]], NDArray[np.float64]]:
    """Probability that each ratio of two bands is higher for a wanted than for an unwanted specimen.

    Returns
    -------
    ratios : list of (int, int)
        Numerator and denominator of every pair of bands.
    orders : ndarray, shape (ratio, wanted specimen, unwanted specimen)
    """
    bands = groups.logs[0].shape[1]
    ratios = list(combinations(range(bands), 2))
    average = [
        (groups.specimens[g] == np.arange(groups.counts[g])[:, None]) * groups.weights(g)[None]
        for g in (0, 1)
    ]
    orders = np.empty((len(ratios), *groups.counts))
    for number, (p, q) in enumerate(ratios):
        a, b = (x[:, p] - x[:, q] for x in groups.logs)
        va, vb = (v[:, p] + v[:, q] for v in groups.variances)
        right = right_order(a[:, None] - b[None, :], va[:, None] + vb[None, :])
        orders[number] = average[0] @ right @ average[1].T
    return ratios, orders


def best_ratio_orders(
    ratios: list[tuple[int, int]], orders: NDArray[np.float64], subsets: NDArray[np.intp], pairs: Pairs
) -> tuple[NDArray[np.float64], NDArray[np.intp]]:
    """As `contrast_orders`, for the one ratio of two bands that is best among the specimens not left out.

    Returns
    -------
    right : ndarray, shape (subset, pair)
        Probability of the right order.
    best : ndarray of int, shape (subset,)
        The ratio that is best among all specimens, as an index into `ratios`.
    """
    place = {pair: number for number, pair in enumerate(ratios)}
    inside = np.array([[place[pair] for pair in combinations(sorted(map(int, s)), 2)] for s in subsets])
    _, n, m = orders.shape
    total, rows, columns = orders.sum(axis=(1, 2)), orders.sum(axis=2), orders.sum(axis=1)
    right = np.empty((subsets.shape[0], pairs.wanted.size))
    every = np.arange(subsets.shape[0])
    for number, (i, j) in enumerate(zip(pairs.wanted, pairs.unwanted, strict=True)):
        left = orders[:, i, j]
        trained = (total - rows[:, i] - columns[:, j] + left) / ((n - 1) * (m - 1))
        tested = np.where(trained >= 0.5, left, 1 - left)
        chosen = inside[every, np.argmax(np.abs(trained - 0.5)[inside], axis=1)]
        right[:, number] = tested[chosen]
    strength = np.abs(total / (n * m) - 0.5)
    best: NDArray[np.intp] = inside[every, np.argmax(strength[inside], axis=1)]
    return right, best
