"""Which bands tell materials apart: named filter sets compared, and every subset of candidate bands ranked."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import combinations
from math import comb
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import listed
from ..bands import wavelength_array
from ..noise import Noise
from .labelled import (
    area_limits,
    groups_at,
    of_groups,
    pair_weights,
    ratio_name,
    rests_on,
    seen_groups,
    seen_through,
    with_every_band,
)
from .resampling import centred_interval, multiplicities, resampled_areas
from .separability import best_ratio_orders, contrast_orders, pairs_left_out, ratio_orders

__all__ = ["BandRanking", "FilterComparison", "compare_filter_sets", "rank_bands"]

_RESAMPLES = 1000
#: For the best of many subsets, each of which is trained anew.
_RANKED_RESAMPLES = 150
#: Pairs of specimens that are left out one after the other, at most.
_LARGEST_PAIRS = 150
_LARGEST_SUBSETS = 60_000
#: How many of the best subsets get an interval of their area.
_WITH_INTERVAL = 50
#: Loss of area below which one band may stand for another (common practice, no source).
_SAME_AREA = 0.005


@dataclass(frozen=True, eq=False)
class FilterComparison:
    """What `compare_filter_sets` found.

    Parameters
    ----------
    areas : DataFrame
        A row for each set: number of bands, cross-validated area under the ROC curve with 95 % interval, and the best
        single ratio with its area.
    differences : DataFrame
        A row for each pair of sets: paired difference of the areas with an interval that holds for all pairs
        together, and a verdict.
    findings : tuple of str
        What it rests on, and what to know before relying on it.
    """

    areas: pd.DataFrame
    differences: pd.DataFrame
    findings: tuple[str, ...] = field(default=())


@dataclass(frozen=True, eq=False)
class BandRanking:
    """What `rank_bands` found.

    Parameters
    ----------
    subsets : DataFrame
        Every subset, best first: its bands [nm], cross-validated area under the ROC curve, the best single ratio with
        its area; for the first 50 the interval, and whether it is as good as the best: not told apart from it, or less
        than 0.005 behind.
    bands : DataFrame
        A row for each candidate: the best area with it and without it, and the band that may stand for it.
    optimism : float
        How much the best area is too good because it is the best of many, by the bootstrap.
    findings : tuple of str
        What it rests on, and what to know before relying on it.
    """

    subsets: pd.DataFrame
    bands: pd.DataFrame
    optimism: float
    findings: tuple[str, ...] = field(default=())


def compare_filter_sets(
    sets: Mapping[str, tuple[Any, ...]],
    spectra: xr.DataArray,
    wanted: str | Iterable[str],
    unwanted: str | Iterable[str],
) -> FilterComparison:
    """Compare named sets of bands on the same spectra: which tells the wanted from the unwanted better, and by how much.

    Parameters
    ----------
    sets : mapping of str to (wavelengths, fwhm, noise)
        Band centres [nm], full widths at half maximum [nm] or None, and a `Noise` or None, of each set.
    spectra : DataArray, dimensions sample and wavelength [nm]
        Laboratory spectra with finer channels than the bands, with the coordinates ``group`` and ``specimen``.
    wanted, unwanted : str or list of str
        Groups, samples or specimens.

    Returns
    -------
    FilterComparison

    Raises
    ------
    ValueError
        If there are fewer than two sets, a set has fewer than two bands, a group has fewer than three specimens that
        all sets can see, or a band is not covered.

    Notes
    -----
    Each set is used whole: the best contrast of its log reflectances, a product of band ratios. It is trained without
    one wanted and one unwanted specimen and then has to tell those two apart, through the set's own noise. So a set
    is not favoured for having more bands: bands that only fit the training specimens lose on the others. Gain and
    offset errors of a band count as if new in each specimen, as for a threshold that is carried from one camera to
    another. The sets see the same pairs, and differences are taken pair by pair; their intervals come from a bootstrap
    over specimens, with training and test anew in each sample, and hold together (Bonferroni).

    References
    ----------
    Airola et al. 2011, Comput. Stat. Data Anal. 55, 1828, doi:10.1016/j.csda.2010.11.018.

    Examples
    --------
    >>> import bandratio as br
    >>> sets = {"four": ([480, 600, 700, 830], None, br.Noise(relative=0.01)),
    ...         "five": ([480, 600, 700, 830, 950], None, br.Noise(relative=0.01))}
    >>> found = br.compare_filter_sets(sets, br.reference_spectra(), "olivine", ["plagioclase", "opaque"])
    >>> list(found.areas.index)
    ['four', 'five']
    """
    if len(sets) < 2:
        raise ValueError(f"give two filter sets or more to compare, got {listed(sets)}")
    spectra, is_wanted = of_groups(spectra, wanted, unwanted)
    averaged = {name: seen_through(name, entry, spectra) for name, entry in sets.items()}
    seen = with_every_band(spectra, [cube for cube, _ in averaged.values()])
    first, second = seen_groups(spectra, is_wanted, seen)
    matrices, drawn, rows = {}, {}, []
    for name, (cube, noise) in averaged.items():
        groups = groups_at(cube, noise, first, second)
        pairs = pairs_left_out(groups.counts, _LARGEST_PAIRS)
        whole = np.arange(cube.sizes["wavelength"])[None]
        matrices[name] = contrast_orders(groups, whole, pairs)[0]
        samples = multiplicities(groups.counts, _RESAMPLES)
        drawn[name] = resampled_areas(groups, whole, pairs, samples, threads=_cores())[:, 0]
        ratios, orders = ratio_orders(groups)
        right, best = best_ratio_orders(ratios, orders, whole, pairs)
        rows.append(
            {
                "bands": whole.size,
                "area": matrices[name].mean(),
                "best_ratio": ratio_name(ratios[int(best[0])], cube["wavelength"].to_numpy()),
                "best_ratio_area": right[0].mean(),
            }
        )
    areas = pd.DataFrame(rows, index=pd.Index(list(sets), name="set"))
    limits = [area_limits(drawn[name], areas.area[name], groups.counts) for name in sets]
    areas.insert(2, "lower", [low for low, _ in limits])
    areas.insert(3, "upper", [high for _, high in limits])
    differences = _differences(matrices, drawn)
    return FilterComparison(
        areas, differences, tuple(rests_on(groups.counts, pairs, spectra, is_wanted, seen))
    )


def _differences(matrices: Mapping[str, NDArray], drawn: Mapping[str, NDArray]) -> pd.DataFrame:
    both = list(combinations(matrices, 2))
    tail = 0.05 / 2 / len(both)
    rows = []
    for one, other in both:
        difference = float((matrices[one] - matrices[other]).mean())
        low, high = centred_interval(difference, drawn[one] - drawn[other], tail)
        better = one if low > 0 else other if high < 0 else None
        rows.append(
            {
                "first": one,
                "second": other,
                "difference": difference,
                "lower": low,
                "upper": high,
                "verdict": f"{better} is better" if better else "not told apart",
            }
        )
    return pd.DataFrame(rows)


def rank_bands(
    wavelengths: ArrayLike,
    size: int,
    spectra: xr.DataArray,
    wanted: str | Iterable[str],
    unwanted: str | Iterable[str],
    *,
    fwhm: ArrayLike | None = None,
    noise: Noise | None = None,
    keep: Sequence[float] = (),
) -> BandRanking:
    """Rank every subset of candidate bands by how well its band ratios tell the wanted from the unwanted.

    Parameters
    ----------
    wavelengths : array_like, shape (candidate,)
        Candidate band centres [nm].
    size : int
        Number of bands in a subset, two or more.
    spectra : DataArray, dimensions sample and wavelength [nm]
        Laboratory spectra with finer channels than the bands, with the coordinates ``group`` and ``specimen``.
    wanted, unwanted : str or list of str
        Groups, samples or specimens.
    fwhm : array_like, optional
        Full widths at half maximum [nm], one or one per candidate.
    noise : Noise, optional
        Of the planned camera.
    keep : sequence of float
        Candidates that every subset must contain [nm].

    Returns
    -------
    BandRanking

    Raises
    ------
    ValueError
        If `size` does not fit the candidates, the subsets are too many, a group has fewer than three specimens, or a
        band is not covered.

    Notes
    -----
    As :func:`compare_filter_sets`, for every subset. The best of many subsets looks better than it is: ``optimism``
    estimates by how much (how much the winner of a bootstrap sample loses on the whole), and subsets that are not
    told apart from the best are marked, since among them other reasons may decide.

    References
    ----------
    Airola et al. 2011, Comput. Stat. Data Anal. 55, 1828, doi:10.1016/j.csda.2010.11.018. Efron & Tibshirani 1993, An
    Introduction to the Bootstrap, section 17.6 (optimism).

    Examples
    --------
    >>> import bandratio as br
    >>> ranking = br.rank_bands([480, 600, 700, 750, 830, 950], 3, br.reference_spectra(), "olivine",
    ...                         ["plagioclase", "opaque"], noise=br.Noise(relative=0.01))
    >>> len(ranking.subsets)
    20
    """
    centres = wavelength_array(wavelengths)
    if np.unique(centres).size != centres.size:
        raise ValueError(f"a candidate band stands twice: {listed(centres.tolist(), 'nm')}")
    kept = [_place(float(wavelength), centres) for wavelength in keep]
    subsets = _subsets(centres.size, size, kept)
    spectra, is_wanted = of_groups(spectra, wanted, unwanted)
    cube, noise = seen_through("the candidates", (centres, fwhm, noise), spectra)
    seen = with_every_band(spectra, [cube])
    first, second = seen_groups(spectra, is_wanted, seen)
    groups = groups_at(cube, noise, first, second)
    pairs = pairs_left_out(groups.counts, _LARGEST_PAIRS)
    right = contrast_orders(groups, subsets, pairs, threads=_cores())
    ratios, orders = ratio_orders(groups)
    ratio_right, best = best_ratio_orders(ratios, orders, subsets, pairs)

    area = right.mean(axis=1)
    order = np.lexsort((-ratio_right.mean(axis=1), -area))
    optimism = _optimism(area, pair_weights(groups.counts, pairs, _RESAMPLES // 2) @ right.T)
    leading = order[:_WITH_INTERVAL]
    samples = multiplicities(groups.counts, _RANKED_RESAMPLES)
    drawn = resampled_areas(groups, subsets[leading], pairs, samples, threads=_cores())
    limits = np.full((len(order), 2), np.nan)
    same = []
    for place, number in enumerate(leading):
        limits[place] = area_limits(drawn[:, place], float(area[number]), groups.counts)
        behind = float(area[leading[0]] - area[number])
        low, _ = centred_interval(behind, drawn[:, 0] - drawn[:, place], 0.025)
        same.append(behind < _SAME_AREA or low <= 0)
    table = pd.DataFrame(
        {
            "bands": [tuple(float(centres[band]) for band in subsets[place]) for place in order],
            "area": area[order],
            "lower": limits[:, 0],
            "upper": limits[:, 1],
            "as_good_as_best": pd.array([*same, *[None] * (len(order) - len(same))], dtype="boolean"),
            "best_ratio": [ratio_name(ratios[int(best[place])], centres) for place in order],
            "best_ratio_area": ratio_right.mean(axis=1)[order],
        },
        index=pd.RangeIndex(1, len(order) + 1, name="rank"),
    )
    bands = _band_table(centres, subsets, area, kept)
    findings = [
        f"the best of {len(order)} subsets was chosen on these specimens, which makes its area about {optimism:.3f} too good",
        f"{sum(same)} of the first {len(leading)} subsets are not told apart from the best",
        *rests_on(groups.counts, pairs, spectra, is_wanted, seen),
    ]
    return BandRanking(table, bands, optimism, tuple(findings))


def _optimism(area: NDArray, drawn: NDArray) -> float:
    """How much the winner of a bootstrap sample loses on the whole, on average."""
    winners = drawn.argmax(axis=1)
    return max(float((drawn[np.arange(len(winners)), winners] - area[winners]).mean()), 0.0)


def _place(wavelength: float, centres: NDArray) -> int:
    found = np.flatnonzero(centres == wavelength)
    if not found.size:
        raise ValueError(
            f"keep: {wavelength:g} nm is no candidate; there are {listed(centres.tolist(), 'nm')}"
        )
    return int(found[0])


def _subsets(candidates: int, size: int, kept: list[int]) -> NDArray[np.intp]:
    if not isinstance(size, (int, np.integer)) or not 2 <= size <= candidates:
        raise ValueError(
            f"size must be a number of bands from 2 to the {candidates} candidates, got {size!r}"
        )
    if len(set(kept)) > size:
        raise ValueError(f"keep names {len(set(kept))} bands, more than the {size} of a subset")
    free = [band for band in range(candidates) if band not in kept]
    many = comb(len(free), size - len(set(kept)))
    if many > _LARGEST_SUBSETS:
        raise ValueError(
            f"{size} of {candidates} bands are {many} subsets, more than {_LARGEST_SUBSETS}; give fewer candidates, or "
            "some with keep=…"
        )
    return np.array([sorted([*set(kept), *chosen]) for chosen in combinations(free, size - len(set(kept)))])


def _band_table(centres: NDArray, subsets: NDArray[np.intp], area: NDArray, kept: list[int]) -> pd.DataFrame:
    """For each candidate the best area with and without it, and which other one costs least in its place."""
    place = {tuple(map(int, subset)): number for number, subset in enumerate(subsets)}
    holds = (subsets[:, :, None] == np.arange(centres.size)).any(axis=1)
    rows = []
    for band in range(centres.size):
        with_it, without = holds[:, band], ~holds[:, band]
        best_ones = np.flatnonzero(with_it)[np.argsort(-area[with_it])[:30]]
        costs = {}
        for other in set(range(centres.size)) - {band} if band not in kept else set():
            swapped = [
                (number, place[tuple(sorted({*map(int, subsets[number])} - {band} | {other}))])
                for number in best_ones
                if not holds[number, other]
            ]
            if swapped:
                costs[other] = float(np.mean([area[a] - area[b] for a, b in swapped]))
        nearest = min(costs, key=lambda other: costs[other]) if costs else None
        rows.append(
            {
                "area_with": float(area[with_it].max()) if with_it.any() else np.nan,
                "area_without": float(area[without].max()) if without.any() else np.nan,
                "stand_in": float(centres[nearest]) if nearest is not None else np.nan,
                "stand_in_cost": costs[nearest] if nearest is not None else np.nan,
                "redundant": nearest is not None and costs[nearest] < _SAME_AREA,
            }
        )
    return pd.DataFrame(rows, index=pd.Index(centres, name="wavelength"))


def _cores() -> int:
    from ..kernel import cores

    return cores()
