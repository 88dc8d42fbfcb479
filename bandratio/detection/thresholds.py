"""Thresholds from labelled spectra: where to cut a parameter, or two together, at a chosen false alarm rate."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed, open_fraction, require_noise
from ..bands import TOLERANCE_NM
from ..catalogue import resolve, shoulder_of
from ..cube import require_cube
from ..noise import Noise
from ..ratio import BandRatio
from .labelled import labelled_groups, parameters_of
from .separation import Separation
from .specimens import Specimens, area_interval, bootstrap_weights, pairwise_order
from .threshold import Threshold

__all__ = ["thresholds"]

_RESAMPLES = 2000
_SEED = 20250117
#: Below this many specimens in a group the result says that they are few (common practice, no source).
_FEW_SPECIMENS = 8
_GRID = 2001
_PAIR_GRID = 121


def thresholds(
    spectra: xr.DataArray,
    names: str | BandRatio | Sequence[str | BandRatio] | Mapping[str, BandRatio],
    wanted: str | Iterable[str],
    unwanted: str | Iterable[str],
    *,
    noise: Noise | None = None,
    false_alarm_rate: float = 0.01,
    tolerance: float = TOLERANCE_NM,
) -> dict[str, Threshold]:
    """Thresholds that separate wanted from unwanted spectra at a chosen false alarm rate.

    Parameters
    ----------
    spectra : DataArray, dimensions sample and wavelength [nm]
        Labelled spectra at the cube's own bands (see :func:`bandratio.band_average`), with the coordinate
        ``specimen`` where several samples are one rock.
    names : one or two parameters
        Names of the catalogue or `BandRatio` objects. Two are used together: beyond both thresholds.
    wanted, unwanted : str or list of str
        Groups, samples or specimens.
    noise : Noise, optional
        Of the cube that the thresholds are for; it widens both groups. None: spectra without errors.
    false_alarm_rate : float
        Share of the unwanted that may lie beyond.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    dict of str to Threshold
        Origin ``laboratory``. Its sigma is the bootstrap's standard deviation over specimens, and its ``separation``
        holds direction, ROC curve, area with interval, numbers of specimens, and findings: what to know before
        relying on it. With two parameters both hold the pair's.

    Raises
    ------
    ValueError
        If a group is unknown or has fewer than two specimens, the groups share samples, more than two parameters are
        given, or a band is missing.

    Notes
    -----
    The false alarm rate is the mean over specimens of the probability to measure a value beyond the threshold:
    specimens count alike however many samples they have, and nothing is assumed about how specimens scatter. So with
    n unwanted specimens no rate below 1/n can be seen, which the findings say. For a pair the probability to be
    beyond both is bounded for any correlation of their errors: at most the smaller of the two for the unwanted, at
    least p1 + p2 − 1 for the wanted.

    A ratio of noisy numbers is not Gaussian, but whether it exceeds a threshold t is the sign of a linear combination of
    the bands, numerator minus t times denominator, which is: the rates are exact for Gaussian noise.

    The direction (wanted above, or below) is the one in which the area exceeds one half.

    References
    ----------
    Hanley & McNeil 1982, Radiology 143, 29, doi:10.1148/radiology.143.1.7063747 (area as the probability of the right
    order). Berger 1982, Technometrics 24, 295 (both conditions; from memory).

    Examples
    --------
    >>> import bandratio as br
    >>> spectra = br.reference_spectra([480, 600, 700, 750, 830])
    >>> found = br.thresholds(spectra, "mafic_depth", ["olivine", "low-calcium pyroxene"], "plagioclase",
    ...                       noise=br.Noise(relative=0.01), false_alarm_rate=0.05)
    >>> threshold = found["mafic_depth"]
    >>> threshold.separation.direction, threshold.separation.n_unwanted
    ('above', 4)
    """
    rate = open_fraction("false_alarm_rate", false_alarm_rate)
    cube = require_cube(spectra)
    require_noise(noise)
    ratios, _ = resolve(_as_list(names), cube["wavelength"].values, tolerance=tolerance)
    if len(ratios) > 2:
        raise ValueError(
            f"thresholds takes one parameter, or two that are used together, got {listed(ratios)}; call it once for "
            "each"
        )
    first, second = labelled_groups(spectra, wanted, unwanted)
    groups = [parameters_of(ratios, cube.isel(sample=chosen), noise, tolerance) for chosen in (first, second)]
    cuts = [_oriented(name, groups[0][name], groups[1][name]) for name in ratios]
    found, separation = _one(cuts[0], rate) if len(cuts) == 1 else _pair(cuts, rate)
    quantity = str(spectra.coords["quantity"].item()) if "quantity" in spectra.coords else None
    return {
        name: Threshold(
            value,
            sigma=sigma,
            origin="laboratory",
            parameter=name,
            shoulder=shoulder_of(ratio),
            quantity=quantity,
            separation=each,
        )
        for (name, ratio), (value, sigma), each in zip(ratios.items(), found, separation, strict=True)
    }


def _as_list(
    names: str | BandRatio | Sequence[str | BandRatio] | Mapping[str, BandRatio],
) -> Sequence[str | BandRatio] | dict[str, BandRatio]:
    if isinstance(names, (str, BandRatio)):
        return [names]
    return dict(names) if isinstance(names, Mapping) else list(names)


@dataclass(frozen=True, eq=False)
class _Cut:
    """One parameter of both groups, turned so that the wanted lie above."""

    name: str
    sign: int
    wanted: Specimens
    unwanted: Specimens
    order: NDArray[np.float64]


def _oriented(name: str, wanted: Specimens, unwanted: Specimens) -> _Cut:
    order = pairwise_order(wanted, unwanted)
    if order.mean() >= 0.5:
        return _Cut(name, 1, wanted, unwanted, order)
    return _Cut(name, -1, wanted.turned, unwanted.turned, 1 - order)


def _limits(cut: _Cut, points: int) -> NDArray[np.float64]:
    """Candidate thresholds, from below all measurements to above them, the unwanted values among them."""
    both = [cut.wanted, cut.unwanted]
    reach = max(6 * float(each.sigmas.max()) for each in both)
    low = min(float(each.values.min()) for each in both) - reach
    high = max(float(each.values.max()) for each in both) + reach
    margin = 1e-6 * max(high - low, 1e-12)
    line = np.linspace(low - margin, high + margin, points)
    steps = np.sort(cut.unwanted.values)[-points // 2 :]
    return np.unique(np.concatenate([line, steps]))


def _specimen_rates(group: Specimens, limits: NDArray) -> NDArray[np.float64]:
    """Share of each specimen beyond each limit, shape (specimen, limit)."""
    return group.mean_matrix @ group.beyond(limits)


def _one(cut: _Cut, rate: float) -> tuple[list[tuple[float, float]], list[Separation]]:
    limits = _limits(cut, _GRID)
    false, found = (_specimen_rates(group, limits) for group in (cut.unwanted, cut.wanted))
    at = int(np.argmax(false.mean(axis=0) <= rate))
    value = _crossing(limits, false.mean(axis=0), rate, at, smooth=bool((cut.unwanted.sigmas > 0).all()))
    generator = np.random.default_rng(_SEED)
    weights = [bootstrap_weights(each.count, _RESAMPLES, generator) for each in (cut.wanted, cut.unwanted)]
    areas = np.einsum("bi,ij,bj->b", weights[0], cut.order, weights[1])
    drawn = limits[np.argmax(weights[1] @ false <= rate, axis=1)]
    detection, alarms = (
        float((group.mean_matrix @ group.beyond(np.array([value]))).mean())
        for group in (cut.wanted, cut.unwanted)
    )
    separation = _separation(
        cut.sign,
        areas,
        float(cut.order.mean()),
        cut.sign * drawn,
        (detection, alarms),
        (cut.wanted.count, cut.unwanted.count),
        np.stack([false.mean(axis=0), found.mean(axis=0)])[:, ::-1],
        rate,
    )
    return [(cut.sign * value, float(drawn.std()))], [separation]


def _crossing(limits: NDArray, rates: NDArray, rate: float, at: int, *, smooth: bool) -> float:
    """Where falling rates reach `rate`: between two limits for smooth curves, else at the step."""
    if not smooth or at == 0:
        return float(limits[at])
    above, below = rates[at - 1], rates[at]
    return float(limits[at - 1] + (limits[at] - limits[at - 1]) * (above - rate) / (above - below))


def _pair(cuts: list[_Cut], rate: float) -> tuple[list[tuple[float, float]], list[Separation]]:
    """Two thresholds together: the pair that finds most of the wanted at the false alarm rate."""
    counts = cuts[0].wanted.count, cuts[0].unwanted.count
    points = _PAIR_GRID if sum(counts) <= 200 else _PAIR_GRID // 2
    limits = [_limits(cut, points) for cut in cuts]
    shape = limits[0].size, limits[1].size
    found = _beyond_both([cut.wanted for cut in cuts], limits, lambda p, q: np.maximum(p + q - 1, 0))
    false = _beyond_both([cut.unwanted for cut in cuts], limits, np.minimum)

    def best(of_found: NDArray, of_false: NDArray) -> NDArray[np.intp]:
        # among equally good pairs the tighter: the one with fewer false alarms
        place: NDArray[np.intp] = np.argmax(
            np.where(of_false <= rate, of_found - 1e-9 * of_false, -1.0), axis=-1
        )
        return place

    generator = np.random.default_rng(_SEED)
    resamples = _RESAMPLES // 10
    weights = [bootstrap_weights(count, resamples, generator) for count in counts]
    drawn = best(weights[0] @ found, weights[1] @ false)
    chosen = int(best(found.mean(axis=0), false.mean(axis=0)))
    places = np.unravel_index(chosen, shape)
    drawn_places = np.unravel_index(drawn, shape)
    curve = _envelope(false.mean(axis=0), found.mean(axis=0))
    areas = np.array([_area(_envelope(u @ false, w @ found)) for w, u in zip(*weights, strict=True)])
    alone = [_one(cut, rate)[1][0].detection_rate for cut in cuts]
    thresholds_found, separations = [], []
    for index, cut in enumerate(cuts):
        value = float(limits[index][places[index]])
        spread = limits[index][drawn_places[index]]
        thresholds_found.append((cut.sign * value, float(spread.std())))
        extra: tuple[str, ...] = ()
        other = cuts[1 - index].name
        detection = float(found.mean(axis=0)[chosen])
        if alone[1 - index] >= detection - 0.005:
            extra = (f"{cut.name} adds nothing here: {other} alone finds as many at this false alarm rate",)
        separations.append(
            _separation(
                cut.sign,
                areas,
                _area(curve),
                cut.sign * spread,
                (detection, float(false.mean(axis=0)[chosen])),
                counts,
                curve,
                rate,
                extra,
            )
        )
    return thresholds_found, separations


def _beyond_both(
    groups: list[Specimens], limits: list[NDArray], bound: Callable[[NDArray, NDArray], NDArray]
) -> NDArray[np.float64]:
    """Bound of each specimen's share beyond both limits, shape (specimen, pair of limits).

    At least p + q − 1 (for the wanted) and at most min(p, q) (for the unwanted), whatever the correlation of the
    two errors.
    """
    shares = [group.beyond(limit) for group, limit in zip(groups, limits, strict=True)]
    of_specimen = np.zeros((groups[0].count, limits[0].size * limits[1].size))
    for sample, specimen in enumerate(groups[0].specimen):
        both = bound(shares[0][sample][:, None], shares[1][sample][None, :])
        of_specimen[specimen] += both.ravel() * groups[0].mean_matrix[specimen, sample]
    return of_specimen


def _envelope(false: NDArray, found: NDArray) -> NDArray[np.float64]:
    """Best detection rate at each false alarm rate, from (0, …) to (1, 1)."""
    order = np.lexsort((found, false))
    best = np.maximum.accumulate(found[order])
    return np.stack([np.concatenate([[0.0], false[order], [1.0]]), np.concatenate([[0.0], best, [1.0]])])


def _area(curve: NDArray) -> float:
    return float(np.trapezoid(curve[1], curve[0]))


def _separation(
    sign: int,
    areas: NDArray,
    area: float,
    drawn: NDArray,
    rates: tuple[float, float],
    counts: tuple[int, int],
    curve: NDArray,
    rate: float,
    extra: tuple[str, ...] = (),
) -> Separation:
    low, high = (float(limit) for limit in np.quantile(areas, [0.025, 0.975]))
    few_low, few_high = area_interval(area, *counts)
    low, high = min(low, few_low), min(max(high, few_high), 1.0)
    interval = float(np.quantile(drawn, 0.025)), float(np.quantile(drawn, 0.975))
    return Separation(
        direction="above" if sign > 0 else "below",
        area=area,
        area_interval=(low, high),
        value_interval=interval,
        detection_rate=rates[0],
        false_alarm_rate=rates[1],
        n_wanted=counts[0],
        n_unwanted=counts[1],
        curve=curve,
        findings=tuple(_findings(rates[0], low, counts, rate)) + extra,
    )


def _findings(detection: float, low: float, counts: tuple[int, int], rate: float) -> list[str]:
    found = []
    if detection < 0.95:
        found.append(f"the groups overlap: at this threshold {detection:.0%} of the wanted are found")
    if low <= 0.5:
        found.append("the groups are not told apart: an area of 0.5, a coin, is within the interval")
    for title, count in zip(("wanted", "unwanted"), counts, strict=True):
        if count < _FEW_SPECIMENS:
            found.append(f"too few specimens: {count} {title}; another rock may well lie elsewhere")
    if counts[1] * rate < 1:
        found.append(
            f"{counts[1]} unwanted specimens cannot show a false alarm rate of {rate:g}: the least they can show is "
            f"{1 / counts[1]:.2g}"
        )
    return found
