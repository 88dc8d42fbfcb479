"""Parameters of labelled spectra as distributions over specimens: what a threshold and an ROC curve are made of.

Arrays only. A specimen is one rock or soil; several grain sizes or repeats of it count as one specimen, since they
say little new about how the next rock will look. Each measurement is a Gaussian of its value and sigma, or a point
where there is no noise.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Specimens", "area_interval", "beyond", "bootstrap_weights", "pairwise_order"]


@dataclass(frozen=True, eq=False)
class Specimens:
    """One parameter of one group of spectra.

    Parameters
    ----------
    values : ndarray, shape (sample,)
        The parameter.
    errors : ndarray, shape (3, sample)
        Variance and covariance of the ratio's scaled numerator N and its denominator D, over D²: var N, cov(N, D) and
        var D. Whether p = N/D exceeds a limit t is whether N − t·D > 0, and that is exactly Gaussian, with the
        variance var N − 2t·cov(N, D) + t²·var D; the ratio itself is not.
    specimen : ndarray of int, shape (sample,)
        Which specimen each sample belongs to, 0 … n − 1.
    """

    values: NDArray[np.float64]
    errors: NDArray[np.float64]
    specimen: NDArray[np.intp]

    @classmethod
    def build(cls, values: ArrayLike, errors: ArrayLike, names: ArrayLike) -> Specimens:
        """From samples with the names of their specimens; samples without a value are left out."""
        values, errors = np.asarray(values, dtype=float), np.asarray(errors, dtype=float)
        known = np.isfinite(values) & np.isfinite(errors).all(axis=0)
        _, specimen = np.unique(np.asarray(names, dtype=str)[known], return_inverse=True)
        return cls(values[known], errors[:, known], specimen)

    @property
    def turned(self) -> Specimens:
        """The same with the opposite sign: above becomes below."""
        return Specimens(-self.values, self.errors * np.array([[1], [-1], [1]]), self.specimen)

    @property
    def sigmas(self) -> NDArray[np.float64]:
        """Standard uncertainty of each value, by the law of propagation."""
        return self.sigmas_at(self.values)

    def sigmas_at(self, limits: NDArray) -> NDArray[np.float64]:
        """Standard uncertainty of each sample's distance from limits that broadcast against (…, sample)."""
        of_upper, of_both, of_lower = self.errors
        variance: NDArray[np.float64] = of_upper - 2 * limits * of_both + limits**2 * of_lower
        return np.sqrt(np.maximum(variance, 0))

    def beyond(self, limits: NDArray) -> NDArray[np.float64]:
        """Probability to measure each sample above each limit, shape (sample, limit)."""
        at = np.asarray(limits, dtype=float)[:, None]
        return beyond(self.values - at, self.sigmas_at(at)).T

    @property
    def count(self) -> int:
        """Number of specimens."""
        return int(self.specimen.max()) + 1 if self.specimen.size else 0

    @property
    def mean_matrix(self) -> NDArray[np.float64]:
        """Matrix that averages samples to specimens, shape (specimen, sample)."""
        member = self.specimen == np.arange(self.count)[:, None]
        matrix: NDArray[np.float64] = member / member.sum(axis=1, keepdims=True)
        return matrix


def beyond(distance: NDArray, sigmas: NDArray) -> NDArray[np.float64]:
    """Probability that a measurement lies above a limit; without noise 1 above it, else 0.

    Parameters
    ----------
    distance, sigmas : ndarray, shapes that broadcast
        True value minus limit, and its standard uncertainty.
    """
    from scipy.special import ndtr

    with np.errstate(divide="ignore", invalid="ignore"):
        smooth = ndtr(distance / sigmas)
    share: NDArray[np.float64] = np.where(sigmas > 0, smooth, (distance > 0).astype(float))
    return share


def pairwise_order(wanted: Specimens, unwanted: Specimens) -> NDArray[np.float64]:
    """Probability that each wanted specimen lies above each unwanted one, ties counting half.

    Its mean is the area under the ROC curve: the Mann–Whitney statistic with measurement noise.

    Returns
    -------
    ndarray, shape (wanted specimen, unwanted specimen)
    """
    difference = wanted.values[:, None] - unwanted.values[None, :]
    sigma = np.hypot(wanted.sigmas[:, None], unwanted.sigmas[None, :])
    order = beyond(difference, sigma)
    order = np.where((sigma == 0) & (difference == 0), 0.5, order)
    of_specimens: NDArray[np.float64] = wanted.mean_matrix @ order @ unwanted.mean_matrix.T
    return of_specimens


def bootstrap_weights(count: int, resamples: int, generator: np.random.Generator) -> NDArray[np.float64]:
    """Weights of specimens in bootstrap resamples, shape (resample, specimen); each row sums to one."""
    return generator.multinomial(count, np.full(count, 1 / count), size=resamples) / count


def area_interval(area: float, n_wanted: int, n_unwanted: int) -> tuple[float, float]:
    """95 % interval of an area under the ROC curve that holds for few specimens and for separated groups.

    All areas A with |A − area| ≤ 1.96·√V(A), V the variance of the Mann–Whitney statistic for exponential scores. A
    bootstrap alone is too narrow here: of separated groups it gives [1, 1], however few the specimens.

    References
    ----------
    Newcombe 2006, Stat. Med. 25, 559, doi:10.1002/sim.2324, method 5; variance: Hanley & McNeil 1982, Radiology 143,
    29.

    Examples
    --------
    >>> low, high = area_interval(1.0, 9, 4)
    >>> round(low, 2), high
    (0.67, 1.0)
    """
    A = np.linspace(0, 1, 100_001)
    half = (n_wanted + n_unwanted) / 2 - 1
    variance = A * (1 - A) / (n_wanted * n_unwanted) * (1 + half * ((1 - A) / (2 - A) + A / (1 + A)))
    within = A[np.abs(A - area) <= 1.959964 * np.sqrt(variance) + 1e-12]
    return float(min(within[0], area)), float(max(within[-1], area))
