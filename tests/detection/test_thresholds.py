"""Thresholds from labelled spectra: areas against scikit-learn, rates by simulation, intervals over specimens."""

import numpy as np
import pytest
import xarray as xr
from sklearn.metrics import roc_auc_score

import bandratio as br
from bandratio.detection.labelled import form_errors
from bandratio.detection.specimens import Specimens, area_interval, pairwise_order

RATIO = br.BandRatio({600: 1}, {500: 1}, name="colour")


def labelled(wanted, unwanted, specimens=None):
    """Spectra whose ratio R600/R500 is the given number; every sample a specimen unless said otherwise."""
    values = np.concatenate([wanted, unwanted])
    names = np.array([f"s{i}" for i in range(values.size)])
    return xr.DataArray(
        np.stack([np.full(values.size, 0.2), 0.2 * values], axis=1),
        dims=("sample", "wavelength"),
        coords={
            "sample": names,
            "wavelength": [500.0, 600.0],
            "group": ("sample", ["wanted"] * len(wanted) + ["unwanted"] * len(unwanted)),
            "specimen": ("sample", names if specimens is None else np.asarray(specimens)),
            "quantity": "reflectance_factor",
        },
    )


def threshold_of(spectra, **options):
    return br.thresholds(spectra, RATIO, "wanted", "unwanted", **options)["colour"]


# ---- the area


@pytest.mark.parametrize("seed", range(5))
def test_area_agrees_with_scikit_learn(seed):
    generator = np.random.default_rng(seed)
    wanted, unwanted = generator.normal(1.2, 0.2, 17), generator.normal(1.0, 0.2, 23)
    wanted[:3] = unwanted[:3]  # ties
    separation = threshold_of(labelled(wanted, unwanted)).separation
    expected = roc_auc_score([1] * 17 + [0] * 23, np.concatenate([wanted, unwanted]))
    assert separation.area == pytest.approx(max(expected, 1 - expected), abs=1e-12)


def test_area_with_specimens_agrees_with_weighted_scikit_learn():
    generator = np.random.default_rng(11)
    wanted, unwanted = generator.normal(1.2, 0.2, 12), generator.normal(1.0, 0.2, 9)
    specimens = [0, 0, 0, 1, 2, 2, 3, 4, 5, 5, 5, 5, *(10, 10, 11, 12, 12, 12, 13, 14, 15)]
    separation = threshold_of(labelled(wanted, unwanted, specimens)).separation
    counts = {name: specimens.count(name) for name in specimens}
    expected = roc_auc_score(
        [1] * 12 + [0] * 9,
        np.concatenate([wanted, unwanted]),
        sample_weight=[1 / counts[n] for n in specimens],
    )
    assert separation.area == pytest.approx(max(expected, 1 - expected), abs=1e-12)
    assert (separation.n_wanted, separation.n_unwanted) == (6, 6)


def test_area_with_noise_is_the_probability_of_the_right_order():
    generator = np.random.default_rng(5)
    values = [generator.normal(1.2, 0.1, 6), generator.normal(1.0, 0.1, 7)]
    sigmas = [generator.uniform(0.05, 0.2, 6), generator.uniform(0.05, 0.2, 7)]
    groups = [
        Specimens.build(v, np.stack([s**2, 0 * s, 0 * s]), np.arange(v.size).astype(str))
        for v, s in zip(values, sigmas, strict=True)
    ]
    drawn = [v + s * generator.normal(size=(200_000, v.size)) for v, s in zip(values, sigmas, strict=True)]
    simulated = np.mean([(drawn[0][:, [i]] > drawn[1]).mean() for i in range(6)])
    assert pairwise_order(*groups).mean() == pytest.approx(simulated, abs=0.002)


def test_the_curve_encloses_the_area():
    generator = np.random.default_rng(6)
    spectra = labelled(generator.normal(1.1, 0.1, 30), generator.normal(1.0, 0.1, 30))
    separation = threshold_of(spectra, noise=br.Noise(relative=0.02)).separation
    false, found = separation.curve
    assert (np.diff(false) >= 0).all()
    assert (np.diff(found) >= 0).all()
    assert np.trapezoid(found, false) == pytest.approx(separation.area, abs=1e-4)


# ---- the threshold


@pytest.mark.parametrize("rate", [0.01, 0.05, 0.2])
@pytest.mark.parametrize("side", [1, -1])
def test_the_false_alarm_rate_is_kept_when_the_unwanted_are_measured(rate, side):
    generator = np.random.default_rng(7)
    unwanted, wanted = 1 + 0.05 * generator.normal(size=25), 1 + side * 0.4 + 0.05 * generator.normal(size=25)
    noise = br.Noise(relative=0.03)
    threshold = threshold_of(labelled(wanted, unwanted), noise=noise, false_alarm_rate=rate)
    assert threshold.separation.direction == ("above" if side > 0 else "below")
    n = 40_000
    measured = (unwanted * (1 + 0.03 * generator.normal(size=(n, 25)))) / (
        1 + 0.03 * generator.normal(size=(n, 25))
    )
    beyond = (side * (measured - threshold.value) > 0).mean()
    assert beyond == pytest.approx(rate, rel=0.04)
    assert threshold.separation.false_alarm_rate == pytest.approx(rate, rel=1e-3)


def test_sigma_of_every_form_is_that_of_the_law_of_propagation():
    spectra = br.reference_spectra([480, 600, 700, 750, 830])
    noise = br.Noise(
        random=0.002, shot=0.003, relative=0.01, band_gain=0.02, band_offset=0.001, common_gain=0.05
    )
    lopsided = br.BandRatio({600: 2, 700: -1}, {750: 1, 830: 0.5}, 0.05, 0.02, scale=3, name="lopsided")
    for ratio in (br.named_ratio("red_slope", [600, 700]), br.BandRatio({700: 1}), lopsided):
        names = spectra.sample.values
        known = Specimens.build(ratio.value(spectra), form_errors(ratio, spectra, noise, 15), names)
        expected = ratio.sigma(spectra, noise).values
        np.testing.assert_allclose(known.sigmas, expected[np.isfinite(expected)], rtol=1e-9)


def test_without_noise_the_threshold_is_an_unwanted_value():
    unwanted, wanted = np.linspace(1.0, 1.2, 21), np.linspace(1.15, 1.5, 21)
    threshold = threshold_of(labelled(wanted, unwanted), false_alarm_rate=0.1)
    assert (unwanted > threshold.value + 1e-12).sum() == 2  # 2 of 21 are at most 10 %
    assert np.isclose(unwanted, threshold.value).any()
    assert threshold.separation.detection_rate == pytest.approx((wanted > threshold.value).mean())


def test_grain_sizes_of_one_rock_do_not_narrow_the_interval():
    generator = np.random.default_rng(8)
    rocks = generator.normal(1.0, 0.1, 6)
    wanted = generator.normal(1.5, 0.1, 6)
    alone = threshold_of(labelled(wanted, rocks), noise=br.Noise(relative=0.01))
    repeated = labelled(wanted, np.repeat(rocks, 10), [*range(6), *np.repeat(np.arange(10, 16), 10)])
    with_repeats = threshold_of(repeated, noise=br.Noise(relative=0.01))
    assert with_repeats.separation.n_unwanted == 6
    assert with_repeats.value == pytest.approx(alone.value, abs=1e-3)
    assert with_repeats.sigma == pytest.approx(alone.sigma, rel=0.15)
    taken_as_rocks = threshold_of(labelled(wanted, np.repeat(rocks, 10)), noise=br.Noise(relative=0.01))
    assert taken_as_rocks.sigma < 0.7 * alone.sigma


def test_sigma_is_the_spread_over_new_sets_of_specimens():
    generator = np.random.default_rng(9)
    found = [
        threshold_of(
            labelled(generator.normal(1.6, 0.05, 6), generator.normal(1.0, 0.1, 40)),
            noise=br.Noise(relative=0.02),
            false_alarm_rate=0.2,
        )
        for _ in range(25)
    ]
    spread = np.std([each.value for each in found])
    assert np.mean([each.sigma for each in found]) == pytest.approx(spread, rel=0.4)
    covered = np.mean(
        [
            low <= np.mean([f.value for f in found]) <= high
            for low, high in (f.separation.value_interval for f in found)
        ]
    )
    assert covered > 0.8


# ---- two together


def test_two_parameters_together():
    """Bright and flat: each alone is shared with some of the unwanted, both are not."""
    generator = np.random.default_rng(10)
    spectra = br.reference_spectra([480, 600, 700]).isel(sample=slice(0, 36))
    level = np.concatenate([np.full(12, 0.4), np.full(12, 0.4), np.full(12, 0.1)]) * generator.normal(
        1, 0.02, 36
    )
    slope = np.concatenate([np.full(12, 1.02), np.full(12, 1.15), np.full(12, 1.02)]) * generator.normal(
        1, 0.004, 36
    )
    spectra = spectra.copy(data=np.stack([level / 1.2, level / slope, level], axis=1))
    spectra = spectra.assign_coords(
        group=("sample", ["flat bright"] * 12 + ["bright"] * 12 + ["dark"] * 12),
        specimen=("sample", [f"r{i}" for i in range(36)]),
    )
    noise = br.Noise(relative=0.005)
    both = br.thresholds(
        spectra,
        ["reflectance_700", "red_slope"],
        "flat bright",
        ["bright", "dark"],
        noise=noise,
        false_alarm_rate=0.05,
    )
    assert both["reflectance_700"].separation.direction == "above"
    assert both["red_slope"].separation.direction == "below"
    assert 0.1 < both["reflectance_700"].value < 0.4
    separation = both["red_slope"].separation
    assert separation.detection_rate > 0.9
    assert separation.false_alarm_rate <= 0.05
    for name in both:
        alone = br.thresholds(
            spectra, name, "flat bright", ["bright", "dark"], noise=noise, false_alarm_rate=0.05
        )[name]
        assert alone.separation.detection_rate < 0.5
        assert alone.separation.area < separation.area


def test_a_second_parameter_that_adds_nothing_is_named():
    spectra = br.reference_spectra([480, 600, 700, 750, 830, 950])
    both = br.thresholds(
        spectra,
        ["r950_r750", "red_slope"],
        ["olivine", "low-calcium pyroxene"],
        "plagioclase",
        false_alarm_rate=0.3,
    )
    assert any(
        "adds nothing here: r950_r750 alone" in finding for finding in both["red_slope"].separation.findings
    )


# ---- what is said plainly


def test_overlap_and_few_specimens_are_said():
    generator = np.random.default_rng(12)
    separation = threshold_of(labelled(np.linspace(0.9, 1.1, 5), generator.normal(1.0, 0.1, 30))).separation
    text = "; ".join(separation.findings)
    assert "the groups overlap" in text
    assert "not told apart" in text
    assert "too few specimens: 5 wanted" in text
    assert "30 unwanted specimens cannot show a false alarm rate of 0.01" in text


def test_nothing_is_said_where_nothing_is_wrong():
    spectra = labelled(np.linspace(2, 2.2, 30), np.linspace(1, 1.2, 200))
    assert threshold_of(spectra, noise=br.Noise(relative=0.001)).separation.findings == ()


def test_separated_groups_of_few_specimens_do_not_get_an_area_of_one_for_certain():
    low, high = threshold_of(labelled([2.0, 2.1, 2.2, 2.3], [1.0, 1.1, 1.2])).separation.area_interval
    assert low < 0.65
    assert high == 1


@pytest.mark.parametrize(("n", "m", "shift"), [(5, 4, 2.0), (10, 10, 1.0), (20, 6, 0.3)])
def test_the_areas_interval_covers_the_true_area(n, m, shift):
    from scipy.stats import norm

    generator = np.random.default_rng(13)
    true = norm.cdf(shift / np.sqrt(2))
    covered = 0
    for _ in range(300):
        difference = generator.normal(shift, 1, n)[:, None] - generator.normal(0, 1, m)
        low, high = area_interval(float((difference > 0).mean()), n, m)
        covered += low <= true <= high
    assert covered / 300 > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / 300)


# ---- laboratory truth


def test_olivine_and_low_calcium_pyroxene_against_plagioclase(lab):
    """1 − R830/R750 of mafic samples 0.08–0.65, of plagioclase at most 0.02 (USGS splib07a, the folder's values.csv)."""
    library = br.open_library(lab / "usgs_splib07a")
    spectra = br.band_average(library, [600, 750, 830])
    mafic = ["olivine", "hypersthene", "bronzite", "enstatite"]
    plagioclase = ["anorthite", "bytownite", "labradorite"]
    threshold = br.thresholds(spectra, "mafic_depth", mafic, plagioclase)["mafic_depth"]
    assert threshold.separation.area == 1
    assert threshold.value == pytest.approx(0.02, abs=0.005)
    assert threshold.shoulder == 750
    assert threshold.quantity == "reflectance_factor"


@pytest.mark.parametrize(
    ("name", "bands", "share"),
    [
        ("mafic_depth", [600, 750, 830], 0.89),
        ("mafic_depth", [600, 700, 830], 0.89),
        ("mafic_depth_continuum", [600, 750, 830], 0.82),
        ("r950_r750", [750, 950], 0.96),
    ],
)
def test_how_often_a_mafic_sample_is_ranked_above_a_plagioclase(lab, name, bands, share):
    """Shares of pairs on the folder's values.csv, 4 plagioclases against 21 mafic samples, each sample by itself."""
    library = br.open_library(lab / "values.csv")
    spectra = br.band_average(library, bands)
    kinds = np.array([str(sample).split()[0] for sample in library.sample.values])
    mafic = np.isin(
        kinds,
        ["Olivine", "Hypersthene", "Bronzite", "Enstatite", "Pigeonite", "Augite", "Diopside", "Basalt"],
    )
    plagioclase = np.isin(kinds, ["Anorthite", "Bytownite", "Labradorite"])
    assert (mafic.sum(), plagioclase.sum()) == (21, 4)
    threshold = br.thresholds(spectra, name, mafic, plagioclase)[name]
    assert threshold.separation.area == pytest.approx(share, abs=0.006)


def test_the_shoulder_follows_the_bands():
    spectra = br.reference_spectra([600, 700, 830])
    threshold = br.thresholds(spectra, "mafic_depth", "olivine", "plagioclase")["mafic_depth"]
    assert threshold.shoulder == 700
    maps = br.parameters(br.reference_spectra([600, 750, 830]), names=["mafic_depth"])
    with pytest.raises(ValueError, match="made with a shoulder at 700 nm"):
        threshold.check_map(maps["mafic_depth"])
    threshold.check_map(br.parameters(spectra, names=["mafic_depth"])["mafic_depth"])


# ---- bad input

TABLE = br.reference_spectra([480, 600, 700, 750, 830])


@pytest.mark.parametrize(
    ("names", "wanted", "unwanted", "options", "message"),
    [
        (
            "mafic_depth",
            "olivine",
            "plagioclase",
            {"false_alarm_rate": 5},
            r"false_alarm_rate must lie between 0 and 1",
        ),
        (
            "mafic_depth",
            "olivin",
            "plagioclase",
            {},
            r"no group or sample is called 'olivin'; did you mean olivine",
        ),
        (
            "mafic_depth",
            "olivine",
            "mare",
            {},
            r"unwanted group holds 1 samples of 1 specimen; two specimens or more",
        ),
        (
            "mafic_depth",
            "PYX02",
            "plagioclase",
            {},
            r"wanted group holds 5 samples of 1 specimen.*grain sizes of one rock",
        ),
        ("mafic_depth", "olivine", ["olivine", "opaque"], {}, r"wanted and unwanted share"),
        (
            "mafic_deth",
            "olivine",
            "plagioclase",
            {},
            r"unknown parameter 'mafic_deth'; did you mean mafic_depth",
        ),
        ("r950_r750", "olivine", "plagioclase", {}, r"no band within 15 nm of 950 nm"),
        (
            ["mafic_depth", "red_slope", "uv_vis_slope"],
            "olivine",
            "plagioclase",
            {},
            r"takes one parameter, or two that are used together, got mafic_depth, red_slope, uv_vis_slope",
        ),
        ([], "olivine", "plagioclase", {}, r"names is empty"),
    ],
)
def test_bad_input(names, wanted, unwanted, options, message):
    with pytest.raises(ValueError, match=message):
        br.thresholds(TABLE, names, wanted, unwanted, **options)


def test_a_parameter_that_a_group_does_not_have():
    spectra = TABLE.where(TABLE.group != "plagioclase")
    with pytest.raises(ValueError, match="mafic_depth has a value for 0 specimen of a group"):
        br.thresholds(spectra, "mafic_depth", "olivine", "plagioclase")


def test_two_parameters_are_judged_on_the_same_samples():
    """A sample that lacks one band must not shift the other parameter's values against it."""
    names, groups = ["r950_r750", "red_slope"], ("olivine", "plagioclase")
    spectra = br.reference_spectra([600, 700, 750, 950])
    holed = spectra.where(~((spectra.sample == "Olivine GDS70.a Fo89 165 µm") & (spectra.wavelength == 700)))
    without = spectra.isel(sample=spectra.sample.values != "Olivine GDS70.a Fo89 165 µm")
    one, other = (
        br.thresholds(each, names, *groups, noise=br.Noise(relative=0.01), false_alarm_rate=0.1)
        for each in (holed, without)
    )
    assert one == other
    apart = spectra.where(
        ~((spectra.group == "plagioclase") & (spectra.wavelength == 700) & (spectra.specimen != "HS17"))
    ).where(~((spectra.specimen == "HS17") & (spectra.wavelength == 950)))
    with pytest.raises(ValueError, match="red_slope has a value for 1 specimen of a group"):
        br.thresholds(apart, names, *groups)
    crossed = spectra.where(
        ~((spectra.wavelength == 700) & spectra.specimen.isin(["HS17", "HS105"]))
        & ~((spectra.wavelength == 950) & spectra.specimen.isin(["GDS28", "HS349"]))
    )
    with pytest.raises(ValueError, match="r950_r750, red_slope have values for different specimens"):
        br.thresholds(crossed, names, *groups)
