"""The error model's parts: how they are given, spelled out for a cube, told, and refused."""

import json
import math

import numpy as np
import pandas as pd
import pytest
import xarray as xr

import bandratio as br

CUBE = br.as_cube(np.full((3, 2, 2), 0.2), [480, 600, 700])


def random_of(noise, cube=CUBE):
    return noise.for_cube(cube).random


@pytest.mark.parametrize(
    "given",
    [
        [0.1, 0.2, 0.3],
        np.array([0.1, 0.2, 0.3]),
        {480: 0.1, 600: 0.2, 700: 0.3, 950: 0.9},
        {481.5: 0.1, 598: 0.2, 700: 0.3},
        pd.Series([0.3, 0.2, 0.1], index=[700, 600, 480]),
        xr.DataArray([0.3, 0.2, 0.1], {"wavelength": [700.0, 600.0, 480.0]}, "wavelength"),
    ],
)
def test_ways_to_give_one_value_a_band(given):
    np.testing.assert_array_equal(random_of(br.Noise(random=given)), [0.1, 0.2, 0.3])


def test_a_number_is_for_all_bands():
    np.testing.assert_array_equal(random_of(br.Noise(random=0.5)), [0.5] * 3)
    np.testing.assert_array_equal(random_of(br.Noise(random=xr.DataArray(0.5))), [0.5] * 3)


def test_order_of_arguments():
    noise = br.Noise(1e-3, 2e-3, 3e-3, 4e-3, 5e-3)
    assert (noise.random, noise.relative, noise.band_gain, noise.band_offset, noise.common_gain) == (
        1e-3, 2e-3, 3e-3, 4e-3, 5e-3,
    )  # fmt: skip
    with pytest.raises(TypeError):
        br.Noise(1e-3, 2e-3, 3e-3, 4e-3, 5e-3, 6e-3)


@pytest.mark.parametrize("dims", [("y", "x"), ("wavelength", "y", "x"), ("x",)])
def test_random_as_a_map(dims):
    sizes = {"wavelength": 3, "y": 2, "x": 2}
    values = np.arange(1, 1 + math.prod(sizes[d] for d in dims)).reshape([sizes[d] for d in dims]) / 1000
    random = xr.DataArray(values, dims=dims)
    if "wavelength" in dims:
        random = random.assign_coords(wavelength=[480.0, 600.0, 700.0])
    maps = br.parameters(CUBE, br.Noise(random=random), ["reflectance_700"])
    expected = (
        random.sel(wavelength=700) if "wavelength" in dims else random.broadcast_like(maps.reflectance_700)
    )
    np.testing.assert_allclose(maps.reflectance_700_sigma, expected)
    ratio = br.named_ratio("reflectance_700", [480, 600, 700])
    sigma = ratio.sigma(CUBE, br.Noise(random=random)).broadcast_like(maps.reflectance_700)
    np.testing.assert_allclose(sigma, maps.reflectance_700_sigma)


def test_from_csv(tmp_path):
    table = tmp_path / "noise.csv"
    table.write_text(
        "# a calibration's figures\nwavelength,random,shot,relative,band_gain,band_offset,common_gain\n"
        "480,0.001,0.01,0.02,0.005,0.0002,0.05\n600,0.002,0.01,0.02,0.006,0.0003,0.05\n"
        "700, 0.003, 0.01, 0.02, 0.007, 0.0004, 0.05\n"
    )
    band = br.Noise.from_csv(table).for_cube(CUBE)
    np.testing.assert_array_equal(band.random, [0.001, 0.002, 0.003])
    np.testing.assert_array_equal(band.band_gain, [0.005, 0.006, 0.007])
    np.testing.assert_array_equal(band.band_offset, [0.0002, 0.0003, 0.0004])
    assert (band.shot == 0.01).all()
    assert band.common_gain == 0.05


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "wanted a column wavelength"),
        ("nm,random\n480,0.1\n", "wanted a column wavelength"),
        ("wavelength,random\n", "no rows below the header"),
        ("wavelength,randm\n480,0.1\n", "unknown column 'randm'; did you mean random"),
        ("wavelength,random\n480,0.1,0.2\n", "line 2: wanted 2 values, got 3"),
        ("wavelength,random\n480,low\n", "line 2: random must be a number, got 'low'"),
        ("wavelength,random\n480,0.1\n480,0.1\n", "the same wavelength stands in two rows"),
        ("wavelength,common_gain\n480,0.1\n600,0.2\n", "common_gain is one value for all bands"),
        ("wavelength,random\n480,-0.1\n", "noise.csv: random at 480 nm must be zero or above"),
    ],
)
def test_bad_tables(tmp_path, text, message):
    table = tmp_path / "noise.csv"
    table.write_text(text)
    with pytest.raises(ValueError, match=message):
        br.Noise.from_csv(table)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"random": -0.1}, "random must be zero or above"),
        ({"random": math.nan}, "random must be zero or above"),
        ({"shot": math.inf}, "shot must be zero or above and finite"),
        ({"random": "low"}, "random must be a number"),
        ({"random": [0.1, -0.2]}, "random, value 2, must be zero or above"),
        ({"random": {480: -0.1}}, "random at 480 nm must be zero or above"),
        ({"random": {}}, "random is an empty mapping"),
        ({"random": {"red": 0.1}}, "random must map wavelengths"),
        ({"relative": 3}, r"relative is a fraction below 1, got 3; 3 % is 0.03"),
        ({"band_gain": {480: 2}}, r"band_gain is a fraction below 1, got 2; 2 % is 0.02"),
        ({"common_gain": 5}, "common_gain is a fraction below 1"),
        ({"common_gain": [0.1, 0.2]}, "common_gain must be a number"),
        ({"random": np.ones((2, 2))}, r"random has shape \(2, 2\); give one value per band, or for a map"),
        ({"relative": xr.DataArray(np.ones((2, 2)), dims=("y", "x"))}, "only random may be a map"),
        (
            {"random": xr.DataArray([0.1, 0.2], {"wavelength": [480.0, 480.0]}, "wavelength")},
            "two values for one",
        ),
        ({"random": xr.DataArray([0.1], dims="wavelength")}, "random has no wavelength coordinate"),
        ({"random": xr.DataArray([[-0.1]], dims=("y", "x"))}, "must not be negative, got a map"),
        ({"shared_within": np.array([0.5])}, "shared_within must be integer labels"),
    ],
)
def test_bad_values(options, message):
    with pytest.raises((ValueError, TypeError), match=message):
        br.Noise(**options)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"random": [0.1, 0.2]}, "random has 2 values, but the cube has 3 bands"),
        (
            {"shared_within": np.zeros((5, 5), int)},
            r"shared_within has the shape \(5, 5\), and the cube's pixels \(2, 2\)",
        ),
        (
            {"band_gain": {480: 0.1, 600: 0.2}},
            r"band_gain has values at 480, 600 nm, but the cube's bands are",
        ),
        (
            {"random": xr.DataArray(np.ones((5, 5)), dims=("y", "x"))},
            "random is a map of .* which does not fit",
        ),
        ({"random": xr.DataArray(np.ones(2), dims="sample")}, "random is a map of .* which does not fit"),
    ],
)
def test_noise_that_does_not_fit_the_cube(options, message):
    with pytest.raises(ValueError, match=message):
        br.parameters(CUBE, br.Noise(**options))


def test_describe_tells_what_was_given():
    noise = br.Noise(random=[0.1, 0.2], band_gain=0.01, common_gain=0.05, shared_within=np.zeros((2, 2), int))
    assert json.loads(noise.describe()) == {
        "random": [0.1, 0.2], "band_gain": 0.01, "common_gain": 0.05, "shared_within": "labels",
    }  # fmt: skip
    assert br.Noise().describe() == "{}"


def test_a_map_of_random_must_lie_where_the_cube_lies():
    """The compiled loop goes by position and the readable path by coordinates: both must mean the same pixel."""
    rng = np.random.default_rng(4)
    cube = br.as_cube(rng.uniform(0.1, 0.5, (1, 3, 4)), [700]).assign_coords(
        y=[30.0, 20, 10], x=[0.0, 10, 20, 30]
    )
    level = br.BandRatio({700: 1}, name="level")
    random = xr.DataArray(rng.uniform(0.001, 0.01, (3, 4)), dims=("y", "x"))
    for placed in (random, random.assign_coords(y=[30.0000001, 20, 10])):
        noise = br.Noise(random=placed)
        np.testing.assert_allclose(br.parameters(cube, noise, [level]).level_sigma, random)
        np.testing.assert_allclose(level.sigma(cube, noise), random)
    upside_down = br.Noise(random=random.assign_coords(y=[10.0, 20, 30]))
    with pytest.raises(
        ValueError, match="random is a map whose y coordinates are not the cube's; reindex it"
    ):
        br.parameters(cube, upside_down, [level])
    samples = br.as_cube([[0.1, 0.2]], [700]).assign_coords(sample=["a", "b"])
    named = xr.DataArray([0.01, 0.02], {"sample": ["b", "a"]}, ("sample",))
    with pytest.raises(ValueError, match="random is a map whose sample coordinates are not the cube's"):
        level.sigma(samples, br.Noise(random=named))


@pytest.mark.parametrize("lazy", [False, True])
@pytest.mark.parametrize("dims", [(), ("y",), ("x",), ("x", "y")])
def test_a_pixel_gain_may_have_some_of_the_dimensions(dims, lazy):
    cube = br.as_cube(np.full((1, 3, 3), 0.5), [700])
    gain = xr.DataArray(np.random.default_rng(5).uniform(0, 0.1, (3,) * len(dims)), dims=dims)
    cube = cube.assign_coords(pixel_gain=gain)
    level = br.BandRatio({700: 1}, name="level")
    maps = br.parameters(cube.chunk(y=2) if lazy else cube, br.Noise(), [level])
    expected = (0.5 * gain).broadcast_like(cube[0]).transpose("y", "x")
    np.testing.assert_allclose(maps.level_sigma, expected)
    np.testing.assert_allclose(level.sigma(cube, br.Noise()), expected)


def test_a_pixel_gain_has_no_wavelength():
    cube = br.as_cube([0.1, 0.2], [600, 700]).assign_coords(pixel_gain=("wavelength", [0.1, 0.2]))
    with pytest.raises(ValueError, match="pixel_gain is common to the bands of a pixel"):
        br.parameters(cube, br.Noise())


def test_a_column_given_twice(tmp_path):
    path = tmp_path / "noise.csv"
    path.write_text("wavelength,random,random\n480,0.1,0.2\n")
    with pytest.raises(ValueError, match="a column stands twice in wavelength, random, random"):
        br.Noise.from_csv(path)


def test_only_the_bands_that_are_used_need_a_value():
    noise = br.Noise(random={600: 0.001, 700: 0.002})
    maps = br.parameters(CUBE, noise, ["red_slope"])
    assert float(maps.red_slope_sigma[0, 0]) > 0
    ratio = br.named_ratio("red_slope", [480, 600, 700])
    np.testing.assert_allclose(ratio.sigma(CUBE, noise), maps.red_slope_sigma)
    with pytest.raises(ValueError, match="random has values at 600, 700 nm"):
        br.parameters(CUBE, noise, ["uv_vis_slope"])


def test_a_small_tolerance_for_bands_leaves_the_noise_its_own():
    noise = br.Noise(random={485: 0.001, 605: 0.001, 705: 0.001})
    assert float(br.parameters(CUBE, noise, ["red_slope"], tolerance=1).red_slope_sigma[0, 0]) > 0
    with pytest.raises(TypeError, match="tolerance must be a number"):
        br.parameters(CUBE, noise, tolerance="wide")


def test_a_table_that_is_no_text(tmp_path):
    table = tmp_path / "noise.csv"
    table.write_bytes("wavelength,random\n480,0.1 # \xb5m\n".encode("latin-1"))
    with pytest.raises(ValueError, match=r"noise.csv is no text in UTF-8"):
        br.Noise.from_csv(table)


@pytest.mark.parametrize(
    "call",
    [
        lambda noise: br.parameters(CUBE, noise, geometry={"incidence": 30, "emission": 0, "phase": 30}),
        lambda noise: br.iron_oxide(CUBE, noise),
        lambda noise: br.titanium_oxide(CUBE, noise),
        lambda noise: br.optical_maturity(CUBE, noise),
        lambda noise: br.material_table([600, 700], noise=noise),
        lambda noise: br.BandRatio({600: 1}, {480: 1}).sigma(CUBE, noise),
        lambda noise: br.thresholds(
            br.reference_spectra([600, 700]), "red_slope", "olivine", "basalt", noise=noise
        ),
    ],
)
def test_a_number_is_no_noise(call):
    with pytest.raises(
        TypeError, match=r"noise must be a br.Noise or None, got float; br.Noise\(random=0.01\)"
    ):
        call(0.01)
    # a second position taken for another argument, as in iron_oxide(cube, "wilcox2005")
    with pytest.raises(TypeError, match=r"noise must be a br.Noise or None, got str$"):
        call("wilcox2005")
