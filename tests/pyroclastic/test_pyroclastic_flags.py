"""Flags against the formula, the plain comparison, and what must not change them."""

import json
import re

import dask.array as da
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import false_discovery_control, norm

import bandratio as br
from bandratio.pyroclastic.cancellation import BRIGHTNESS, SLOPE, KnownNoise

BANDS = [480, 600, 700, 830]


def scene(shape=(40, 50), seed=0, noise_sigma=0.001):
    """Soil with a bright flat patch and a dark one."""
    rng = np.random.default_rng(seed)
    R = rng.normal(0.12, 0.01, shape)
    S = rng.normal(11, 1, shape)
    R[:6, :6], S[:6, :6] = 0.2, 4.0
    R[-6:, -6:] = 0.05
    R1 = R * (1 - S / 200) / (1 + S / 200)
    cube = np.stack([0.8 * R1, R1, R, 1.05 * R])
    return br.as_cube(
        cube + rng.normal(scale=noise_sigma, size=cube.shape), BANDS, quantity="reflectance_factor"
    )


def formula(maps, t1, t2, sign=1, part="_sigma"):
    """Intersection and union as in Berger 1982, Technometrics 24, 295, with scipy's normal distribution."""
    bright = norm.cdf(sign * (t1 - maps[BRIGHTNESS].values) / maps[BRIGHTNESS + part].values)
    flat = norm.cdf((maps[SLOPE].values - t2) / maps[SLOPE + part].values)
    return np.maximum(bright, flat)


def test_formula_and_false_discovery_rule():
    maps = br.parameters(scene().astype(np.float64), br.Noise(random=0.001))
    flags = br.pyroclastic_flags(maps, brighter_than=0.17, flatter_than=7.0)
    p = formula(maps, 0.17, 7.0)
    np.testing.assert_allclose(flags.p_bright, p, rtol=1e-9, atol=1e-300)
    found = false_discovery_control(p.ravel()).reshape(p.shape) <= 0.05  # scipy's Benjamini–Hochberg
    np.testing.assert_array_equal(flags.flag == 3, found)
    assert found[:6, :6].mean() > 0.7
    assert not found[6:, 6:].any()
    rejected = p >= 0.95  # at least one of the conditions is rejected at 95 %
    np.testing.assert_array_equal(flags.flag == 1, rejected & ~found)
    np.testing.assert_array_equal(flags.flag == 2, ~rejected & ~found)


def test_dark_rule_finds_the_dark_patch_only():
    maps = br.parameters(scene(), br.Noise(random=0.001))
    flags = br.pyroclastic_flags(maps, darker_than=0.07)
    dark = flags.flag.values == 4
    assert dark[-6:, -6:].all()
    assert dark.sum() == 36
    assert list(flags.data_vars) == ["p_dark", "flag"]
    np.testing.assert_allclose(
        flags.p_dark, norm.cdf((maps[BRIGHTNESS] - np.float32(0.07)) / 0.001), rtol=1e-3, atol=1e-12
    )


def test_both_kinds_share_one_promise():
    """Two rules are twice as many tests: the cut is that of all p-values together."""
    maps = br.parameters(scene().astype(np.float64), br.Noise(random=0.001))
    flags = br.pyroclastic_flags(maps, brighter_than=0.17, darker_than=0.08, flatter_than=7)
    both = np.concatenate([flags.p_bright.values.ravel(), flags.p_dark.values.ravel()])
    passed = false_discovery_control(both) <= 0.05
    assert flags.attrs["largest_p_value"] == both[passed].max()


@given(
    st.integers(0, 10_000),
    st.sampled_from([np.float32, np.float64]),
    st.sampled_from([None, br.Noise()]),
    st.floats(0.05, 0.2),
)
def test_without_errors_it_is_the_plain_comparison(seed, dtype, noise, limit):
    """Exactly, pixels that equal the threshold included, and said so where there is no sigma."""
    cube = scene((8, 9), seed).astype(dtype)
    cube[2, 3, 3] = limit
    cube[1, 5, 5] = np.nan
    maps = br.parameters(cube, noise)
    flags = br.pyroclastic_flags(maps, brighter_than=limit, darker_than=limit * 0.9, flatter_than=10.0)
    flat = maps[SLOPE] < 10.0
    bright = (maps[BRIGHTNESS] > limit) & flat
    dark = (maps[BRIGHTNESS] < limit * 0.9) & flat
    expected = xr.where(maps[SLOPE].isnull(), 0, xr.where(bright, 3, xr.where(dark, 4, 1)))
    np.testing.assert_array_equal(flags.flag, expected)
    told = json.loads(flags.attrs["thresholds"])["brighter_than"]["errors"]
    assert told == ("whole sigma" if noise else "no sigma in the maps: a plain comparison")


def test_threshold_sigma_counts():
    maps = br.parameters(scene().astype(np.float64), br.Noise(random=0.001))
    flags = br.pyroclastic_flags(maps, brighter_than=br.Threshold(0.17, sigma=0.003))
    sigma = np.hypot(maps[BRIGHTNESS + "_sigma"], 0.003)
    np.testing.assert_allclose(
        flags.p_bright, norm.cdf((0.17 - maps[BRIGHTNESS]) / sigma), rtol=1e-9, atol=1e-300
    )


def test_gain_counts_against_the_laboratory_and_cancels_against_the_scene():
    maps = br.parameters(
        scene().astype(np.float64), br.Noise(random=0.001, band_gain=0.02, common_gain=0.05), parts=True
    )
    laboratory = [
        br.Threshold(0.17, origin="laboratory", parameter=BRIGHTNESS, quantity="reflectance_factor"),
        br.Threshold(7.0, origin="laboratory", parameter=SLOPE, quantity="reflectance_factor"),
    ]
    flags = br.pyroclastic_flags(maps, brighter_than=laboratory[0], flatter_than=laboratory[1])
    np.testing.assert_allclose(flags.p_bright, formula(maps, 0.17, 7.0), rtol=1e-9, atol=1e-300)
    of_scene = [br.Threshold(t.value, origin="scene", parameter=t.parameter) for t in laboratory]
    flags = br.pyroclastic_flags(maps, brighter_than=of_scene[0], flatter_than=of_scene[1])
    np.testing.assert_allclose(
        flags.p_bright, formula(maps, 0.17, 7.0, part="_sigma_random"), rtol=1e-9, atol=1e-300
    )
    assert "cancel" in json.loads(flags.attrs["thresholds"])["flatter_than"]["errors"]


def test_offset_and_mosaic_do_not_cancel():
    cube = scene().astype(np.float64)
    limit = br.Threshold(7.0, origin="scene", parameter=SLOPE)
    bright = br.Threshold(0.17, origin="scene", parameter=BRIGHTNESS)
    plain = br.Noise(random=0.001)
    labels = np.zeros(cube.shape[1:], dtype=int)
    labels[:, 25:] = 1
    p = {}
    for name, noise in {
        "random": plain,
        "offset": br.Noise(random=0.001, band_offset=0.002),
        "gain": br.Noise(random=0.001, band_gain=0.01),
        "mosaic": br.Noise(random=0.001, band_gain=0.01, shared_within=labels),
    }.items():
        maps = br.parameters(cube, noise, parts=True)
        p[name] = br.pyroclastic_flags(maps, brighter_than=bright, flatter_than=limit).p_bright.values[:6, :6]
    np.testing.assert_allclose(p["gain"], p["random"], rtol=1e-9)
    assert (p["offset"] > p["random"]).all()
    assert (p["mosaic"] > p["gain"]).all()


def test_parts_of_a_known_noise_are_those_of_the_ratio():
    """What is read back from the maps equals what the readable reference computes from the bands."""
    cube = scene((5, 6)).astype(np.float64)
    noise = br.Noise(
        random={600: 0.001, 700: 0.002}, band_gain=[0.01, 0.02, 0.03, 0.04], band_offset={480: 9e-4, 600: 1e-3, 700: 2e-3, 830: 1e-3},
        shared_within=np.zeros((5, 6), int),
    )  # fmt: skip
    noise_of_two = br.Noise(
        band_gain={480: 0.01, 600: 0.02, 700: 0.03, 830: 0.04}, band_offset=noise.band_offset
    )
    maps = br.parameters(
        cube,
        br.Noise(
            random=0.001,
            band_gain=noise.band_gain,
            band_offset=noise.band_offset,
            shared_within=noise.shared_within,
        ),
        parts=True,
    )
    known = KnownNoise.of(maps)
    for name in (BRIGHTNESS, SLOPE):
        _, shared = br.named_ratio(name, BANDS).variances(cube, noise_of_two)
        found = known.not_cancelling(name, maps[BRIGHTNESS].values, maps[SLOPE].values)
        np.testing.assert_allclose(found, shared, rtol=1e-9)
    alone = br.parameters(cube, br.Noise(band_offset=0.002))
    _, shared = br.named_ratio(SLOPE, BANDS).variances(cube, br.Noise(band_offset=0.002))
    found = KnownNoise.of(alone).not_cancelling(SLOPE, alone[BRIGHTNESS].values, alone[SLOPE].values)
    np.testing.assert_allclose(found, shared, rtol=1e-9)


def test_errors_that_grow_are_taken_at_the_limit_for_dark_pixels():
    """A pixel at the limit whose gain error pulls it down to m has exactly p = Φ((m − t)/(gain·t))."""
    R = np.linspace(0.03, 0.2, 50)
    cube = br.as_cube(np.stack([0.9 * R, R]), [600, 700])
    maps = br.parameters(cube, br.Noise(common_gain=0.1))
    flags = br.pyroclastic_flags(maps, darker_than=0.1)
    below = R < 0.1
    np.testing.assert_allclose(flags.p_dark[below], norm.cdf((R[below] - 0.1) / 0.01), rtol=1e-6)
    shot = br.pyroclastic_flags(br.parameters(cube, br.Noise(shot=0.01)), darker_than=0.1)
    np.testing.assert_allclose(
        shot.p_dark[below], norm.cdf((R[below] - 0.1) / (0.01 * 0.1**0.5)), rtol=1e-6, atol=1e-300
    )


def test_noise_that_was_scaled_with_the_cube_is_not_made_smaller():
    """Offsets of a rescaled cube are taken whole, and dark pixels at the limit's brightness."""
    cube = scene().astype(np.float64)
    noise = br.Noise(random=0.001, band_offset=0.001)
    scaled = cube.assign_coords(brightness_factor=(("y", "x"), np.full(cube.shape[1:], 1.5)))
    maps = br.parameters(scaled, noise, parts=True)
    slope = br.Threshold(7.0, origin="scene", parameter=SLOPE)
    flags = br.pyroclastic_flags(maps, brighter_than=0.17, flatter_than=slope)
    shared = maps[SLOPE + "_sigma_shared"].values
    near = np.argsort(np.abs(maps[SLOPE].values - 7.0), axis=None)[:50]
    sigma = np.hypot(maps[SLOPE + "_sigma"], np.sqrt((shared.ravel()[near] ** 2).mean()))
    p = np.maximum(
        norm.cdf((0.17 - maps[BRIGHTNESS]) / maps[BRIGHTNESS + "_sigma"]),
        norm.cdf((maps[SLOPE] - 7.0) / sigma),
    )
    np.testing.assert_allclose(flags.p_bright, p, rtol=1e-9, atol=1e-300)
    dark = br.pyroclastic_flags(maps, darker_than=0.07)
    R = maps[BRIGHTNESS].values
    held = maps[BRIGHTNESS + "_sigma"].values * np.maximum(0.07 / R, 1)
    np.testing.assert_allclose(dark.p_dark, norm.cdf((R - 0.07) / held), rtol=1e-9, atol=1e-300)


def test_lazy_flags_equal_those_in_memory():
    cube = scene((60, 70))
    noise = br.Noise(random=0.001, band_offset=0.001)
    limits = {"brighter_than": 0.17, "darker_than": 0.08, "flatter_than": br.Threshold(9, origin="scene")}
    flags = br.pyroclastic_flags(br.parameters(cube, noise, parts=True), **limits)
    lazy = br.pyroclastic_flags(br.parameters(cube.chunk({"y": 25, "x": 30}), noise, parts=True), **limits)
    assert isinstance(lazy.flag.data, da.Array)
    assert lazy.flag.dtype == np.int8
    xr.testing.assert_allclose(flags, lazy.compute())
    np.testing.assert_array_equal(flags.flag, lazy.flag)


def test_spectra_work_as_images_do():
    maps = br.parameters(br.reference_spectra(BANDS), br.Noise(relative=0.01))
    flags = br.pyroclastic_flags(maps, darker_than=0.08)
    opaque = flags.flag.values[maps["group"].values == "opaque"]
    assert (opaque == 4).any()


def test_result_carries_what_was_used():
    maps = br.parameters(scene(), br.Noise(random=0.001))
    flags = br.pyroclastic_flags(maps, brighter_than=0.17, false_discovery_rate=0.01)
    assert flags.attrs["false_discovery_rate"] == 0.01
    assert "never proof" in flags.attrs["caution"]
    assert json.loads(flags.attrs["noise"]) == {"random": 0.001}
    told = json.loads(flags.attrs["thresholds"])["brighter_than"]
    assert (told["value"], told["origin"]) == (0.17, "absolute")
    assert flags.flag.attrs["flag_meanings"].split() == [
        "no_data", "background", "undecided", "bright_candidate", "dark_candidate"
    ]  # fmt: skip
    assert str(flags.coords["quantity"].values) == "reflectance_factor"


def _maps():
    return br.parameters(scene((8, 9)), br.Noise(random=0.001))


@pytest.mark.parametrize(
    ("limits", "error", "message"),
    [
        ({}, ValueError, "no limit is given; give brighter_than=… or darker_than=…"),
        ({"flatter_than": 7}, ValueError, "flatter_than alone marks no kind of deposit"),
        (
            {"brighter_than": "0.2"},
            TypeError,
            "brighter_than: a threshold of reflectance_700 must be a number",
        ),
        ({"brighter_than": True}, TypeError, "must be a number or a Threshold, got True"),
        (
            {"darker_than": float("nan")},
            ValueError,
            "darker_than: a threshold's value must be finite, got nan",
        ),
        ({"brighter_than": float("inf")}, ValueError, "must be finite, got inf"),
        ({"brighter_than": [0.1, 0.2]}, TypeError, "must be a number or a Threshold"),
        ({"brighter_than": 0.1, "darker_than": 0.15}, ValueError, "must lie below brighter_than"),
        (
            {"brighter_than": 0.1, "false_discovery_rate": 5},
            ValueError,
            "between 0 and 1, both excluded, got 5",
        ),
        ({"brighter_than": 0.1, "false_discovery_rate": 0}, ValueError, "between 0 and 1"),
        ({"brighter_than": 0.1, "false_discovery_rate": "few"}, TypeError, "a number between 0 and 1"),
        ({"brighter_than": br.Threshold(7, parameter=SLOPE)}, ValueError, "was given for reflectance_700"),
        (
            {"brighter_than": br.Threshold(0.1, origin="laboratory", quantity="radiance_factor")},
            ValueError,
            "holds for radiance_factor, and the maps hold reflectance_factor",
        ),
        (
            {"brighter_than": br.Threshold(0.1, origin="laboratory")},
            ValueError,
            "does not say which reflectance quantity",
        ),
    ],
)
def test_bad_limits(limits, error, message):
    with pytest.raises(error, match=re.escape(message)):
        br.pyroclastic_flags(_maps(), **limits)


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        (lambda maps: maps[BRIGHTNESS], TypeError, "maps must be a Dataset"),
        (lambda maps: maps.drop_vars(BRIGHTNESS), ValueError, "brighter_than needs reflectance_700"),
        (lambda maps: maps.drop_vars(SLOPE), ValueError, "flatter_than needs red_slope"),
        (
            lambda maps: maps.drop_vars(SLOPE).assign({SLOPE: maps[SLOPE].isel(y=0)}),
            ValueError,
            "both must be on one grid",
        ),
        (
            lambda maps: maps.drop_vars("quantity"),
            ValueError,
            "the maps do not say which quantity they hold",
        ),
    ],
)
def test_bad_maps(change, error, message):
    limit = br.Threshold(0.1, origin="laboratory", quantity="reflectance_factor")
    with pytest.raises(error, match=re.escape(message)):
        br.pyroclastic_flags(change(_maps()), brighter_than=limit, flatter_than=7)
