"""FeO, TiO2 and maturity: published constants on the returned soil, and sigma through both ratios' covariance."""

import dask.array as da
import GTC
import numpy as np
import pytest
import xarray as xr

import bandratio as br

from .reference.soil_62231 import REFLECTANCE as SOIL

BANDS = [415, 750, 950]
NOISE = br.Noise(
    random=0.002,
    relative=0.004,
    shot=0.003,
    band_gain={415: 0.01, 750: 0.006, 950: 0.008},
    band_offset=0.001,
    common_gain=0.03,
)


def soil(dtype=float):
    return br.as_cube(np.array([SOIL[band] for band in BANDS], dtype=dtype), BANDS)


#: Lunar Sourcebook 1991 (from memory): the returned soil 62231 has 5.0–5.7 wt% FeO and is mature.
RETURNED_FEO = (5.0, 5.7)


def test_the_returned_soil_within_the_methods_scatter():
    for method in ("lucey2000", "wilcox2005"):
        found = br.iron_oxide(soil(), method=method)
        low, high = RETURNED_FEO
        scatter = found.feo_method_scatter.item()
        assert low - scatter <= found.feo.item() <= high + scatter


def test_values_of_the_published_formulas():
    """Lucey, Blewett & Jolliff 2000; Lucey et al. 2000; Wilcox et al. 2005, evaluated by hand on the soil's figures."""
    assert br.iron_oxide(soil()).feo.item() == pytest.approx(5.97, abs=0.005)
    assert br.titanium_oxide(soil()).tio2.item() == pytest.approx(1.12, abs=0.005)
    assert br.optical_maturity(soil()).omat.item() == pytest.approx(0.136, abs=0.0005)
    # 57.46 − 137.97·(0.17715·0.983432 + 1.094552·0.181276)
    assert br.iron_oxide(soil(), method="wilcox2005").feo.item() == pytest.approx(6.05, abs=0.01)


def formula(name, R):
    """The same formulas on GTC's uncertain numbers: an independent road to the sigma."""
    u = R[750]
    v = R[415 if name == "tio2" else 950] / u
    if name == "feo":
        return 17.427 * -GTC.atan((v - 1.19) / (u - 0.08)) - 7.565
    if name == "wilcox":
        return -137.97 * (u * np.sin(1.3885) + v * np.cos(1.3885)) + 57.46
    if name == "tio2":
        return 3.708 * GTC.pow(GTC.atan((v - 0.42) / u), 5.979)
    return GTC.sqrt((u - 0.08) ** 2 + (v - 1.19) ** 2)


@pytest.mark.parametrize("name", ["feo", "wilcox", "tio2", "omat"])
@pytest.mark.parametrize("seed", range(4))
def test_sigma_agrees_with_gtc_under_every_part_of_the_noise(name, seed):
    generator = np.random.default_rng(seed)
    R = {
        750: generator.uniform(0.12, 0.25),
    }
    R[950] = R[750] * generator.uniform(1.0, 1.12)
    R[415] = R[750] * generator.uniform(0.5, 0.7)
    common = GTC.ureal(1.0, 0.03)
    gains = {415: 0.01, 750: 0.006, 950: 0.008}
    uncertain = {
        band: value * common * GTC.ureal(1, gains[band]) * GTC.ureal(1, 0.004)
        + GTC.ureal(0, 0.002)
        + GTC.ureal(0, 0.001)
        + GTC.ureal(0, 0.003 * np.sqrt(value))
        for band, value in R.items()
    }
    expected = formula(name, uncertain)
    cube = br.as_cube(np.array([R[band] for band in BANDS]), BANDS)
    found = {
        "feo": lambda: br.iron_oxide(cube, NOISE),
        "wilcox": lambda: br.iron_oxide(cube, NOISE, "wilcox2005"),
        "tio2": lambda: br.titanium_oxide(cube, NOISE),
        "omat": lambda: br.optical_maturity(cube, NOISE),
    }[name]()
    key = "feo" if name == "wilcox" else name
    assert found[key].item() == pytest.approx(GTC.value(expected), rel=1e-12)
    assert found[f"{key}_sigma"].item() == pytest.approx(GTC.uncertainty(expected), rel=1e-9)


def test_sigma_is_the_spread_of_repeated_measurements():
    generator = np.random.default_rng(21)
    true = soil()
    noise = br.Noise(random=0.001, band_gain=0.004, common_gain=0.01)
    n = 20_000
    gains = (1 + 0.004 * generator.normal(size=(3, n))) * (1 + 0.01 * generator.normal(size=n))
    measured = true.values[:, None] * gains + 0.001 * generator.normal(size=(3, n))
    for function, key in ((br.iron_oxide, "feo"), (br.titanium_oxide, "tio2"), (br.optical_maturity, "omat")):
        spread = function(br.as_cube(measured, BANDS))[key].std().item()
        sigma = function(true, noise)[f"{key}_sigma"].item()
        assert spread == pytest.approx(sigma, rel=0.04)


def test_lazy_cubes_stay_lazy_and_give_the_same():
    generator = np.random.default_rng(2)
    values = generator.uniform(0.1, 0.3, (3, 12, 9)).astype(np.float32)
    values[1, 2, 3] = np.nan
    eager = br.as_cube(values, BANDS)
    lazy = eager.copy(data=da.from_array(values, chunks=(3, 5, 4)))
    for function, key in ((br.iron_oxide, "feo"), (br.titanium_oxide, "tio2"), (br.optical_maturity, "omat")):
        one, other = function(eager, NOISE), function(lazy, NOISE)
        assert other[key].chunks is not None
        assert one[key].dtype == np.float32
        xr.testing.assert_allclose(one, other.compute())
        assert np.isnan(one[key].values[2, 3])


def test_reasons_are_counted_and_flagged():
    #                 good     dark    missing  too red   beyond latitude
    cube = br.as_cube(
        np.array(
            [[0.11, 0.11, 0.11, 0.05, 0.11], [0.18, 0.07, 0.18, 0.18, 0.18], [0.2, 0.08, np.nan, 0.2, 0.2]]
        ),
        BANDS,
    ).assign_coords(latitude=("sample", [0.0, 10, -20, 69, -80]))
    iron = br.iron_oxide(cube)
    assert iron.feo_reason.values.tolist() == [0, 2, 1, 0, 4]
    assert dict(zip(iron.reason.values.tolist(), iron.feo_reason_count.values.tolist(), strict=True)) == {
        "valid": 2, "missing": 1, "below_origin": 1, "out_of_range": 0, "beyond_latitude": 1,
    }  # fmt: skip
    assert np.isnan(iron.feo.values).tolist() == [False, True, True, False, True]
    assert iron.feo_reason.attrs["flag_meanings"].split()[2] == "below_origin"
    titanium = br.titanium_oxide(cube)
    assert titanium.tio2_reason.values.tolist() == [0, 3, 0, 2, 4]  # R415/R750 of 0.05/0.18 lies below 0.42
    assert (iron.feo_reason_count.sum() == cube.sizes["sample"]).item()


def test_a_dark_red_pixel_is_out_of_range_not_a_number():
    cube = br.as_cube(np.array([0.081, 0.05]), [750, 950])
    assert br.iron_oxide(cube).feo_reason.item() in (0, 3)
    bright = br.as_cube(np.array([0.9, 0.9]), [750, 950])
    assert np.isnan(br.iron_oxide(bright).feo.item())
    assert br.iron_oxide(bright).feo_reason.item() == 3


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (
            lambda: br.iron_oxide(br.as_cube([0.1, 0.2], [750, 830])),
            ValueError,
            r"no band within 15 nm of 950 nm",
        ),
        (
            lambda: br.titanium_oxide(br.as_cube([0.1, 0.2], [750, 950])),
            ValueError,
            r"no band within 15 nm of 415 nm",
        ),
        (
            lambda: br.iron_oxide(soil(), method="lucey1995"),
            ValueError,
            r"method must be one of lucey2000, wilcox2005",
        ),
        (
            lambda: br.iron_oxide(soil(), method_scatter=-1),
            ValueError,
            r"method_scatter must be zero or above",
        ),
        (lambda: br.iron_oxide(soil().to_dataset()), TypeError, r"a cube must be a DataArray"),
        (
            lambda: br.iron_oxide(soil().assign_coords(quantity="radiance_factor")),
            ValueError,
            r"calibrated on the reflectance factor.*the cube holds radiance_factor; convert",
        ),
    ],
)
def test_bad_input(call, error, message):
    with pytest.raises(error, match=message):
        call()


def test_a_gain_error_that_all_bands_of_a_pixel_share_is_in_sigma():
    """What normalisation leaves behind: it moves R750 alone, the ratio keeps."""
    step, gain = 1e-6, 0.05
    up, down = (br.iron_oxide(soil() * (1 + sign * step)).feo.item() for sign in (1, -1))
    found = br.iron_oxide(soil().assign_coords(pixel_gain=gain), br.Noise(random=1e-9))
    assert found.feo_sigma.item() == pytest.approx(abs(up - down) / (2 * step) * gain, rel=1e-4)
