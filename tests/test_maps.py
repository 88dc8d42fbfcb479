"""The main call: what the maps carry, and whether a sigma is what it says, by simulation."""

import subprocess
import sys

import dask.array as da
import numpy as np
import pytest
import rioxarray  # noqa: F401 (its accessor is used)
import xarray as xr

import bandratio as br
from bandratio import catalogue

from .reference.soil_62231 import REFLECTANCE

WAVELENGTHS = [415.0, 480.0, 600.0, 700.0, 750.0, 830.0, 950.0, 1000.0]
SOIL = np.array([REFLECTANCE[nm] for nm in WAVELENGTHS])
TRIALS = 40_000


def simulated_errors(rng, noise, true, trials):
    """Measured values by the error model's own words: gains and offsets drawn once a trial, the rest per pixel."""
    z = rng.standard_normal
    measured = true * (1 + noise.common_gain * z(trials)) * (1 + noise.band_gain * z((true.shape[0], trials)))
    measured = measured + noise.band_offset * z((true.shape[0], trials))
    spread = np.sqrt(noise.random**2 + noise.shot**2 * true + (noise.relative * true) ** 2)
    return measured + spread * z((true.shape[0], trials))


@pytest.mark.parametrize("signal_to_noise", [20, 100])
def test_two_thirds_of_simulated_values_lie_within_one_sigma(signal_to_noise):
    """Coverage of ±1 sigma, 68.3 % for a Gaussian; the standard error of the share is 0.23 %."""
    # five parts of like size in each band, which together are 1/signal_to_noise of the soil's 0.17
    part = 0.17 / signal_to_noise / np.sqrt(5)
    noise = br.Noise(
        random=part, relative=part / 0.17, band_gain=part / 0.17, band_offset=part, shot=part / np.sqrt(0.17),
        common_gain=0.05,
    )  # fmt: skip
    rng = np.random.default_rng(20 + signal_to_noise)
    measured = simulated_errors(rng, noise, SOIL[:, None], TRIALS)
    truth = br.parameters(br.as_cube(SOIL, WAVELENGTHS), noise)
    values = br.parameters(br.as_cube(measured, WAVELENGTHS))
    assert set(catalogue.names()) == set(values.data_vars)
    for name in catalogue.names():
        # the sigma at the true value: what the error model promises there
        within = np.abs(values[name] - truth[name]) <= truth[f"{name}_sigma"]
        assert float(within.mean()) == pytest.approx(0.683, abs=0.01), name


def test_random_and_shared_parts_are_what_averages_and_what_stays():
    """The spread of a scene's mean is the shared part alone, where the pixels are many."""
    noise = br.Noise(random=0.002, band_gain=0.01, band_offset=0.001, common_gain=0.02)
    true = SOIL[:, None]
    pixels, scenes = 400, 3000
    rng = np.random.default_rng(5)
    z = rng.standard_normal
    gain = 1 + 0.01 * z((8, scenes, 1))
    base = true[:, :, None] * gain * (1 + 0.02 * z((1, scenes, 1))) + 0.001 * z((8, scenes, 1))
    measured = base + 0.002 * z((8, scenes, pixels))
    values = br.parameters(
        br.as_cube(
            measured,
            WAVELENGTHS,
        ).rename(y="scene", x="pixel"),
        names=["red_slope", "reflectance_700"],
    )
    expected = br.parameters(br.as_cube(SOIL, WAVELENGTHS), noise, parts=True)
    for name in values.data_vars:
        inside = float(values[name].std("pixel", ddof=1).mean())
        between = float(values[name].mean("pixel").std("scene", ddof=1))
        random, shared = float(expected[f"{name}_sigma_random"]), float(expected[f"{name}_sigma_shared"])
        assert inside == pytest.approx(random, rel=0.03)
        assert between == pytest.approx(np.hypot(shared, random / np.sqrt(pixels)), rel=0.06)
        assert float(expected[f"{name}_sigma"]) == pytest.approx(np.hypot(random, shared), rel=1e-12)


def test_a_pure_ratio_knows_no_common_gain():
    maps = br.parameters(br.as_cube(SOIL.astype("f4"), WAVELENGTHS), br.Noise(common_gain=0.3))
    for name in catalogue.names():
        sigma = float(maps[f"{name}_sigma"])
        assert (sigma > 0) if name == "reflectance_700" else (sigma == 0), name


def test_what_the_maps_carry():
    cube = br.as_cube(
        np.broadcast_to(SOIL[:, None, None], (8, 3, 4)).astype("f4"),
        WAVELENGTHS,
        20,
        quantity="reflectance_factor",
    ).assign_coords(y=[3.0, 2.0, 1.0], x=[0.0, 1, 2, 3], spatial_ref=0)
    maps = br.parameters(cube, br.Noise(random=0.001), parts=True)
    assert maps.attrs["Conventions"] == "CF-1.11"
    assert maps.attrs["bandratio_version"] == br.__version__
    assert maps.attrs["noise"] == '{"random": 0.001}'
    assert maps.attrs["wavelengths"] == "415, 480, 600, 700, 750, 830, 950, 1000 nm"
    assert maps.attrs["left_out"] == ""
    assert set(maps.coords) == {"y", "x", "spatial_ref", "quantity"}
    red = maps.red_slope
    assert red.dims == ("y", "x")
    assert red.dtype == np.float32
    assert red.attrs["units"] == "% per 100 nm"
    assert red.attrs["bands"] == "600, 700 nm"
    assert red.attrs["definition"] == "200·(−R600 + R700)/(R600 + R700)"
    assert red.attrs["ancillary_variables"].split() == [
        "red_slope_sigma", "red_slope_sigma_random", "red_slope_sigma_shared",
    ]  # fmt: skip
    assert maps.red_slope_sigma.attrs == {
        "long_name": "standard uncertainty of spectral slope 600 to 700 nm", "units": "% per 100 nm",
    }  # fmt: skip
    assert "ancillary_variables" not in br.parameters(cube).red_slope.attrs
    assert br.parameters(cube).attrs["noise"] == "none given"


@pytest.mark.parametrize("dims", [(), ("sample",), ("y", "x"), ("image", "y", "x")])
def test_one_spectrum_or_many_the_same_call(dims):
    shape = (8, *(2 + i for i in range(len(dims))))
    cube = xr.DataArray(
        np.broadcast_to(SOIL.reshape(8, *[1] * len(dims)), shape),
        {"wavelength": WAVELENGTHS},
        ("wavelength", *dims),
    )
    maps = br.parameters(cube, br.Noise(random=0.001))
    assert maps.red_slope.dims == dims
    np.testing.assert_allclose(maps.red_slope, float(br.red_slope(br.as_cube(SOIL, WAVELENGTHS))))


def test_lazy_in_lazy_out_touches_no_pixel_before_it_is_asked():
    def refuse(block):
        raise AssertionError("a pixel was computed")

    pixels = da.zeros((8, 100, 100), chunks=(8, 50, 50), dtype="f4").map_blocks(
        refuse, dtype="f4", meta=np.empty((0, 0, 0), "f4")
    )
    maps = br.parameters(br.as_cube(pixels, WAVELENGTHS), br.Noise(random=0.001))
    assert maps.red_slope.chunks == ((50, 50), (50, 50))
    with pytest.raises(AssertionError, match="a pixel was computed"):
        maps.red_slope.compute()


def test_a_lazy_random_map_goes_with_a_cube_in_memory():
    random = xr.DataArray(da.full((3, 4), 0.01, chunks=2), dims=("y", "x"))
    cube = br.as_cube(np.full((1, 3, 4), 0.2), [700])
    np.testing.assert_allclose(
        br.parameters(cube, br.Noise(random=random)).reflectance_700_sigma.compute(), 0.01
    )


def test_import_is_light():
    """What the package loads on import, and on its main call: no library that the call does not need.

    (numba loads a part of scipy by itself, and xarray looks for dask.)
    """
    heavy = (
        "numba",
        "rasterio",
        "distributed",
        "matplotlib",
        "bokeh",
        "geopandas",
        "zarr",
        "spectral",
        "xarray",
    )
    code = (
        "import sys, bandratio as br; "
        f"heavy = {heavy!r}; "
        "print([name for name in heavy if name in sys.modules]); "
        "br.parameters(br.as_cube([0.1, 0.2], [600, 700])); "
        "print([name for name in heavy if name in sys.modules])"
    )
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    at_import, after_call = (eval(line) for line in answer.stdout.splitlines())
    assert at_import == []
    assert set(after_call) == {"numba", "xarray"}


def test_every_public_name_is_there_and_documented():
    for name in br.__all__:
        assert getattr(br, name).__doc__, name


@pytest.mark.parametrize("name", ["red_slope", "red_slope_sigma"])
def test_a_coordinate_may_not_be_called_like_a_map(name):
    """As a dimension it would take the place of the sigma without a word."""
    cube = br.as_cube(np.full((2, 3), 0.2), [600, 700])
    for clashing in (cube.assign_coords({name: 1.0}), cube.rename(sample=name)):
        with pytest.raises(ValueError, match=f"'{name}' is the name of one of the cube's coordinates; give"):
            br.parameters(clashing, br.Noise(random=0.1))
    assert "red_slope" in br.parameters(cube.assign_coords(red_slope_sigma=1.0))


def test_a_map_projection_under_another_name_stays_with_every_map():
    cube = br.as_cube(np.full((2, 3, 4), 0.2, "f4"), [600, 700]).rio.write_crs(
        "+proj=eqc +R=1100000 +units=m", grid_mapping_name="body"
    )
    maps = br.parameters(cube, br.Noise(random=0.001))
    assert all(variable.encoding["grid_mapping"] == "body" for variable in maps.data_vars.values())
    assert maps.red_slope.rio.crs == cube.rio.crs


def test_long_lists_of_bands_are_told_in_short():
    cube = br.as_cube(np.full(100, 0.2), np.arange(900, 1900, 10))
    with pytest.raises(ValueError, match=r"900, 910, .*, 990, …, 1890 nm \(100 in all\)"):
        br.red_slope(cube)
