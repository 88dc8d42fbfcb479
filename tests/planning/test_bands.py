"""Planning for bands: honest under chance, finds what is there, agrees with a plain loop."""

from itertools import combinations

import numpy as np
import pytest
import xarray as xr
from scipy.stats import norm

import bandratio as br
from bandratio.planning.labelled import groups_at
from bandratio.planning.resampling import resampled_areas
from bandratio.planning.separability import (
    Groups,
    best_ratio_orders,
    contrast_orders,
    pairs_left_out,
    ratio_orders,
)

CHANNELS = np.arange(400.0, 1001.0, 10.0)
CENTRES = [450.0, 500.0, 550.0, 600.0, 650.0, 700.0, 750.0, 800.0]


def rocks(generator, n, m, *, shift=0.0, at=700.0, spread=0.05, repeats=1):
    """Two groups of rocks with smooth random colours; the wanted ones have an absorption at one wavelength."""
    count = (n + m) * repeats
    specimen = np.repeat(np.arange(n + m), repeats)
    level = np.exp(generator.normal(0, 0.3, n + m))[specimen]
    tilt = generator.normal(0, spread, n + m)[specimen]
    bumps = generator.normal(0, spread, (n + m, 6))[specimen]
    x = (CHANNELS - 700) / 300
    shape = sum(bumps[:, [k]] * np.cos((k + 1) * np.pi * x) for k in range(6))
    wanted = specimen < n
    dip = shift * wanted[:, None] * np.exp(-(((CHANNELS - at) / 25) ** 2))
    values = (
        0.2
        * level[:, None]
        * np.exp(tilt[:, None] * x + shape - dip + generator.normal(0, 1e-4, (count, x.size)))
    )
    return xr.DataArray(
        values,
        dims=("sample", "wavelength"),
        coords={
            "sample": [f"s{i}" for i in range(count)],
            "wavelength": CHANNELS,
            "group": ("sample", np.where(wanted, "wanted", "unwanted")),
            "specimen": ("sample", [f"r{i}" for i in specimen]),
        },
    )


# ---- the array core


def plain_right(groups, subset, i, j):
    """One subset and one left-out pair, written once more as plain loops: Fisher's contrast, then the test."""
    means, scatter, degrees = [], np.zeros((len(subset), len(subset))), []
    for group, left in enumerate((i, j)):
        x, v = groups.logs[group][:, subset], groups.variances[group][:, subset]
        specimens = [s for s in range(groups.counts[group]) if s != left]
        centre = np.mean([x[groups.specimens[group] == s].mean(axis=0) for s in specimens], axis=0)
        total = np.zeros_like(scatter)
        for s in specimens:
            own = groups.specimens[group] == s
            total += np.mean(
                [np.outer(a - centre, a - centre) + np.diag(b) for a, b in zip(x[own], v[own], strict=True)],
                axis=0,
            )
        scatter += total
        degrees.append(len(specimens))
        means.append(centre)
    pooled = scatter / sum(degrees)
    # the ridge is taken from all bands, so that subsets are treated alike
    return means[0] - means[1], pooled


def test_contrasts_agree_with_plain_loops():
    generator = np.random.default_rng(0)
    spectra = rocks(generator, 5, 6, shift=0.1, repeats=2)
    logs = np.log(br.band_average(spectra, CENTRES[:4]).values)
    wanted = (spectra.group == "wanted").values
    groups = Groups(
        (logs[wanted], logs[~wanted]),
        tuple(generator.uniform(1e-4, 4e-4, (n, 4)) for n in (wanted.sum(), (~wanted).sum())),
        (np.repeat(np.arange(5), 2), np.repeat(np.arange(6), 2)),
    )
    pairs = pairs_left_out(groups.counts, 1000)
    assert pairs.wanted.size == 30
    subsets = np.array(list(combinations(range(4), 3)))
    found = contrast_orders(groups, subsets, pairs)
    for row, subset in enumerate(subsets):
        for column in (0, 7, 29):
            i, j = int(pairs.wanted[column]), int(pairs.unwanted[column])
            _, whole = plain_right(groups, list(range(4)), i, j)
            ridge = 0.02 * (np.trace(whole) / 4 - whole.mean()) + 1e-12
            delta, pooled = plain_right(groups, list(subset), i, j)
            inverse = np.linalg.inv(pooled + ridge * np.eye(3))
            w = inverse @ delta - (inverse @ delta).sum() / inverse.sum() * inverse @ np.ones(3)
            assert w.sum() == pytest.approx(0, abs=1e-9 * np.abs(w).sum())
            rights = []
            for a in np.flatnonzero(groups.specimens[0] == i):
                for b in np.flatnonzero(groups.specimens[1] == j):
                    d = (groups.logs[0][a] - groups.logs[1][b])[subset]
                    v = (groups.variances[0][a] + groups.variances[1][b])[subset]
                    rights.append(norm.cdf(w @ d / np.sqrt(w**2 @ v)))
            assert found[row, column] == pytest.approx(np.mean(rights), rel=1e-7)


def test_brightness_and_common_gains_drop_out():
    generator = np.random.default_rng(1)
    spectra = rocks(generator, 8, 8, shift=0.1)
    scaled = spectra * xr.DataArray(np.exp(generator.normal(0, 1, 16)), dims="sample")
    sets = {"a": (CENTRES[:3], None, None), "b": (CENTRES[3:7], None, None)}
    one, other = (br.compare_filter_sets(sets, s, "wanted", "unwanted") for s in (spectra, scaled))
    np.testing.assert_allclose(one.areas.area, other.areas.area, atol=1e-9)


def test_the_best_single_ratio_is_chosen_without_the_pair_that_it_is_tried_on():
    generator = np.random.default_rng(2)
    logs = tuple(generator.normal(0, 1, (n, 5)) for n in (5, 6))
    groups = Groups(logs, (np.zeros((5, 5)), np.zeros((6, 5))), (np.arange(5), np.arange(6)))
    ratios, orders = ratio_orders(groups)
    pairs = pairs_left_out(groups.counts, 100)
    right, best = best_ratio_orders(ratios, orders, np.array([[0, 2, 4]]), pairs)
    for column, (i, j) in enumerate(zip(pairs.wanted, pairs.unwanted, strict=True)):
        areas = {}
        for p, q in combinations([0, 2, 4], 2):
            a, b = (np.delete(x[:, p] - x[:, q], left) for x, left in zip(logs, (i, j), strict=True))
            areas[p, q] = (a[:, None] > b).mean()
        p, q = max(areas, key=lambda pair: abs(areas[pair] - 0.5))
        higher = logs[0][i, p] - logs[0][i, q] > logs[1][j, p] - logs[1][j, q]
        assert right[0, column] == (higher if areas[p, q] >= 0.5 else not higher)
    assert ratios[int(best[0])] in list(combinations([0, 2, 4], 2))


def test_drawn_pairs_use_every_specimen_about_equally():
    pairs = pairs_left_out((30, 40), 150)
    assert (
        len(set(zip(pairs.wanted.tolist(), pairs.unwanted.tolist(), strict=True))) == pairs.wanted.size >= 150
    )
    for indices, count in ((pairs.wanted, 30), (pairs.unwanted, 40)):
        uses = np.bincount(indices, minlength=count)
        assert uses.min() >= 2
        assert uses.max() <= 8


# ---- honest under chance


def test_chance_gives_an_area_of_one_half_for_small_and_large_sets():
    """Groups that do not differ: a set of eight bands must not win over one of two by fitting noise."""
    generator = np.random.default_rng(3)
    areas = np.empty((60, 2))
    for scene in areas:
        cube = br.band_average(rocks(generator, 10, 10), CENTRES)
        groups = groups_at(cube, None, np.arange(10), np.arange(10, 20))
        pairs = pairs_left_out(groups.counts, 100)
        scene[:] = [contrast_orders(groups, np.array([bands]), pairs).mean() for bands in ([0, 4], range(8))]
    for column in range(2):
        error = areas[:, column].std() / np.sqrt(60)
        assert abs(areas[:, column].mean() - 0.5) < 3.5 * error
        assert error < 0.03


def test_sets_that_are_alike_are_seldom_told_apart():
    """Both see nothing, so any verdict is false. Drawing only the tested pairs anew gave one in five."""
    generator = np.random.default_rng(20)
    sets = {"a": ([600.0, 640.0, 700.0], None, None), "b": ([600.0, 660.0, 700.0], None, None)}
    false = sum(
        br.compare_filter_sets(sets, rocks(generator, 8, 8), "wanted", "unwanted").differences.verdict[0]
        != "not told apart"
        for _ in range(40)
    )
    assert false <= 40 * (0.05 + 3.5 * np.sqrt(0.05 * 0.95 / 40))


def test_paired_differences_find_the_better_set_and_no_false_one():
    generator = np.random.default_rng(4)
    spectra = rocks(generator, 25, 25, shift=0.35)
    sets = {
        "sees it": ([600.0, 700.0, 800.0], 20, br.Noise(relative=0.005)),
        "does not": ([450.0, 500.0, 550.0], 20, br.Noise(relative=0.005)),
        "sees it too": ([650.0, 700.0, 750.0], 20, br.Noise(relative=0.005)),
    }
    found = br.compare_filter_sets(sets, spectra, "wanted", "unwanted")
    assert any("of 625 pairs of specimens were tried" in finding for finding in found.findings)
    verdicts = {(row["first"], row["second"]): row["verdict"] for _, row in found.differences.iterrows()}
    assert verdicts["sees it", "does not"] == "sees it is better"
    assert verdicts["does not", "sees it too"] == "sees it too is better"
    assert found.areas.area["sees it"] > 0.9
    assert found.areas.lower["does not"] < 0.5 < found.areas.upper["does not"]
    difference = found.areas.area["sees it"] - found.areas.area["does not"]
    assert found.differences.difference[0] == pytest.approx(difference)


def test_more_noise_gives_a_smaller_area():
    spectra = rocks(np.random.default_rng(5), 15, 15, shift=0.1)
    sets = {
        f"{level}": ([600.0, 700.0, 800.0], None, br.Noise(relative=level)) for level in (0.001, 0.03, 0.3)
    }
    area = br.compare_filter_sets(sets, spectra, "wanted", "unwanted").areas.area.to_numpy()
    assert area[0] > area[1] > area[2]
    assert area[2] < 0.65


def test_differences_hold_together():
    spectra = rocks(np.random.default_rng(6), 12, 12)
    sets = {str(i): (CENTRES[i : i + 3], None, None) for i in range(4)}
    found = br.compare_filter_sets(sets, spectra, "wanted", "unwanted")
    assert len(found.differences) == 6
    assert not any("pairs of specimens were tried" in finding for finding in found.findings)
    assert (found.differences.lower <= found.differences.difference).all()
    assert (found.differences.difference <= found.differences.upper).all()


def test_drawing_each_specimen_once_is_the_cross_validation_itself():
    generator = np.random.default_rng(21)
    spectra = rocks(generator, 6, 5, shift=0.1)
    logs = np.log(br.band_average(spectra, CENTRES[:5]).values)
    variances = generator.uniform(1e-5, 1e-4, logs.shape)
    groups = Groups((logs[:6], logs[6:]), (variances[:6], variances[6:]), (np.arange(6), np.arange(5)))
    pairs = pairs_left_out(groups.counts, 100)
    subsets = np.array(list(combinations(range(5), 3)))
    once = (np.ones((1, 6)), np.ones((1, 5)))
    expected = contrast_orders(groups, subsets, pairs).mean(axis=1)
    np.testing.assert_allclose(resampled_areas(groups, subsets, pairs, once)[0], expected, rtol=1e-8)
    # copies of a specimen leave together: none of a group that is one specimen alone can be tried
    alone = (np.array([[6.0, 0, 0, 0, 0, 0]]), np.ones((1, 5)))
    assert np.isnan(resampled_areas(groups, subsets, pairs, alone)).all()


# ---- ranking


def test_the_band_that_matters_is_in_every_good_subset():
    spectra = rocks(np.random.default_rng(7), 20, 20, shift=0.15, at=700)
    ranking = br.rank_bands(CENTRES, 3, spectra, "wanted", "unwanted", noise=br.Noise(relative=0.003))
    assert len(ranking.subsets) == 56
    assert all(700.0 in bands for bands in ranking.subsets.bands[:10])
    assert not ranking.bands.redundant[700.0]
    assert ranking.bands.area_with[700.0] > ranking.bands.area_without[700.0] + 0.1
    assert "700" in ranking.subsets.best_ratio[1]
    assert ranking.subsets.area.is_monotonic_decreasing
    assert ranking.subsets.as_good_as_best[1]


def test_ranking_is_comparing():
    """A subset has the same area, whether it is ranked or compared by name."""
    spectra = rocks(np.random.default_rng(8), 9, 9, shift=0.1)
    noise = br.Noise(relative=0.01)
    ranking = br.rank_bands(CENTRES[:5], 3, spectra, "wanted", "unwanted", noise=noise)
    named = {str(bands): (bands, None, noise) for bands in ranking.subsets.bands[:3]}
    compared = br.compare_filter_sets(named, spectra, "wanted", "unwanted")
    # the ridge is taken from the candidates there, from the set itself here
    np.testing.assert_allclose(compared.areas.area, ranking.subsets.area[:3], atol=0.02)


def test_the_best_of_many_is_said_to_be_too_good():
    generator = np.random.default_rng(9)
    spectra = rocks(generator, 10, 10)
    ranking = br.rank_bands(CENTRES, 3, spectra, "wanted", "unwanted")
    assert ranking.subsets.area[1] > 0.55  # by chance alone
    assert ranking.optimism > 0.03
    assert "too good" in ranking.findings[0]
    assert "this rests on 10 wanted specimens (10 spectra) and 10 unwanted" in " ".join(ranking.findings)


def test_two_copies_of_a_band_are_redundant():
    spectra = rocks(np.random.default_rng(10), 20, 20, shift=0.15, at=700)
    candidates = [500.0, 600.0, 699.0, 701.0, 800.0]
    ranking = br.rank_bands(candidates, 2, spectra, "wanted", "unwanted", noise=br.Noise(relative=0.01))
    assert ranking.bands.redundant[699.0]
    assert ranking.bands.stand_in[699.0] == 701.0
    assert ranking.bands.redundant[701.0]


def test_bands_that_must_be_kept():
    spectra = rocks(np.random.default_rng(11), 8, 8, shift=0.1)
    ranking = br.rank_bands(CENTRES, 4, spectra, "wanted", "unwanted", keep=[450.0, 700.0])
    assert len(ranking.subsets) == 15
    assert all({450.0, 700.0} <= set(bands) for bands in ranking.subsets.bands)


def test_laboratory_spectra_put_the_absorption_first(lab):
    library = br.open_library(lab / "usgs_splib07a")
    mafic = ["olivine", "hypersthene", "bronzite", "enstatite", "pigeonite", "augite", "diopside", "basalt"]
    plagioclase = ["anorthite", "bytownite", "labradorite"]
    sets = {
        "flank": ([750, 830], 20, br.Noise(relative=0.01)),
        "centre": ([750, 950], 20, br.Noise(relative=0.01)),
    }
    found = br.compare_filter_sets(sets, library, mafic, plagioclase)
    assert found.areas.area["centre"] > found.areas.area["flank"]


# ---- bad input

SPECTRA = rocks(np.random.default_rng(12), 5, 5, shift=0.1)
SETS = {"a": ([500, 600], None, None), "b": ([600, 700], None, None)}


@pytest.mark.parametrize(
    ("sets", "error", "message"),
    [
        ({"a": ([500, 600],)}, ValueError, r"two filter sets or more to compare, got a"),
        ({**SETS, "c": ([500],)}, ValueError, r"c: a band ratio needs two bands or more, got 1"),
        (
            {**SETS, "c": [500, 600, 700, 800]},
            TypeError,
            r"filter set 'c' must be \(wavelengths, fwhm, noise\)",
        ),
        (
            {**SETS, "c": ([500, 600], None, 0.01)},
            TypeError,
            r"c: noise must be a br.Noise or None, got float",
        ),
        ({**SETS, "c": ([500, 2000], 20, None)}, ValueError, r"c: no spectrum covers the band at 2000 nm"),
        ({**SETS, "c": ([0.5, 0.6], None, None)}, ValueError, r"c: wavelengths must be in nm.*µm"),
        (
            {**SETS, "c": ([500, 600], 2, None)},
            ValueError,
            r"c: the channels of s0 are 10 nm apart near 500 nm",
        ),
        (
            {**SETS, "c": ([500, 600], None, br.Noise(random=[0.1, 0.1, 0.1]))},
            ValueError,
            r"random has 3 values",
        ),
    ],
)
def test_bad_sets(sets, error, message):
    with pytest.raises(error, match=message):
        br.compare_filter_sets(sets, SPECTRA, "wanted", "unwanted")


@pytest.mark.parametrize(
    ("arguments", "options", "message"),
    [
        ((CENTRES, 1), {}, r"size must be a number of bands from 2 to the 8 candidates, got 1"),
        ((CENTRES, 9), {}, r"from 2 to the 8 candidates, got 9"),
        ((CENTRES, 2.5), {}, r"got 2.5"),
        (([500, 500, 600], 2), {}, r"a candidate band stands twice"),
        ((CENTRES, 2), {"keep": [450, 500, 550]}, r"keep names 3 bands, more than the 2 of a subset"),
        ((CENTRES, 3), {"keep": [455]}, r"keep: 455 nm is no candidate"),
        ((np.linspace(450, 900, 40), 8), {}, r"8 of 40 bands are 76904685 subsets, more than 60000"),
    ],
)
def test_bad_rankings(arguments, options, message):
    with pytest.raises(ValueError, match=message):
        br.rank_bands(*arguments, SPECTRA, "wanted", "unwanted", **options)


def test_too_few_specimens():
    few = SPECTRA.isel(sample=[0, 1, 5, 6, 7])
    with pytest.raises(ValueError, match="2 wanted specimens have a value in every band; three or more"):
        br.compare_filter_sets(SETS, few, "wanted", "unwanted")
