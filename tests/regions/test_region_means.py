"""Means over regions against brute force: the same region measured thousands of times."""

import re

import dask.array as da
import numpy as np
import pytest
import rioxarray  # noqa: F401 (it adds .rio)
import xarray as xr

import bandratio as br

BANDS = [600, 700, 830]
NAMES = ["red_slope", "reflectance_700", "mafic_depth"]


def ground(shape=(12, 14), seed=0):
    rng = np.random.default_rng(seed)
    R = rng.uniform(0.08, 0.2, shape)
    return np.stack([R * rng.uniform(0.85, 0.95, shape), R, R * rng.uniform(0.9, 1.1, shape)])


def two_regions(shape=(12, 14)):
    labels = np.zeros(shape, dtype=int)
    labels[1:5, 1:6] = 1
    labels[6:11, 4:13] = 2
    return labels


MOSAIC = np.where(np.arange(14) < 7, 0, 1) * np.ones((12, 1), dtype=int)

NOISES = {
    "random": {"random": 0.004, "shot": 0.005, "relative": 0.01},
    "gains": {"band_gain": 0.02, "common_gain": 0.05},
    "offset": {"band_offset": 0.003},
    "all": {"random": {600: 0.002, 700: 0.004, 830: 0.003}, "band_gain": 0.01, "band_offset": 0.002, "common_gain": 0.03},
    "mosaic": {"random": 0.002, "band_gain": 0.02, "band_offset": 0.002, "common_gain": 0.03, "shared_within": MOSAIC},
}  # fmt: skip


def measured(cube, parts, draws, rng, area=1):
    """Many measurements of one scene, shape (draw, band, y, x), by the error model's own words."""
    of_bands = {
        name: np.broadcast_to(list(value.values()) if isinstance(value, dict) else value, 3)[:, None, None]
        for name, value in parts.items()
        if name not in ("shared_within", "common_gain")
    }
    labels = parts.get("shared_within", np.zeros(cube.shape[1:], dtype=int))
    groups = labels.max() + 1
    zero = np.zeros((3, 1, 1))
    random, shot, relative, gain, offset = (
        of_bands.get(name, zero) for name in ("random", "shot", "relative", "band_gain", "band_offset")
    )
    each = rng.standard_normal((draws, *cube.shape))
    if area > 1:  # neighbours in a row share one random error
        each = np.repeat(each[..., ::area], area, axis=-1)[..., : cube.shape[-1]]
    result = cube + each * np.sqrt(random**2 + shot**2 * cube + (relative * cube) ** 2)
    shared = rng.standard_normal((2, draws, 3, groups))[..., labels]
    common = parts.get("common_gain", 0) * rng.standard_normal((draws, 1, groups))[..., labels]
    return result + cube * (gain * shared[0] + common) + offset * shared[1]


def brute_force(draws, labels, regions):
    """Parameters of each region of each measurement, from the sums of its pixels: shape (name, draw, region)."""
    sums = np.stack([draws[..., labels == region].mean(axis=-1) for region in regions], axis=-1)
    R600, R700, R830 = sums[:, 0], sums[:, 1], sums[:, 2]
    slope = 100 * 100 * 2 * (R700 - R600) / (100 * (R700 + R600))
    return np.stack([slope, R700, 1 - R830 / R700])


@pytest.mark.parametrize("which", NOISES)
def test_sigmas_and_the_difference_of_two_regions(which):
    cube, labels, parts = ground(), two_regions(), NOISES[which]
    draws = 6000
    values = brute_force(measured(cube, parts, draws, np.random.default_rng(1)), labels, [1, 2])
    means = br.region_means(br.as_cube(cube, BANDS), br.Noise(**parts), labels, NAMES)
    for name, of_name in zip(NAMES, values, strict=True):
        sigma = of_name.std(axis=0)
        if sigma.max() < 1e-12:  # a common gain and nothing else leaves a pure ratio alone
            np.testing.assert_allclose(means[f"{name}_sigma"], 0, atol=1e-12)
            continue
        # a standard deviation from n draws is known to 1/√(2n): five of those, and 2 % for what is not linear
        bound = 5 / np.sqrt(2 * draws) + 0.02
        np.testing.assert_allclose(means[f"{name}_sigma"], sigma, rtol=bound)
        covariance = means[f"{name}_covariance"].values
        found = np.sqrt(covariance[0, 0] + covariance[1, 1] - 2 * covariance[0, 1])
        np.testing.assert_allclose(found, np.diff(of_name, axis=1).std(), rtol=bound, atol=0.02 * sigma.max())


def test_the_difference_is_better_known_than_the_regions():
    parts = {"random": 0.001, "band_gain": 0.02}
    means = br.region_means(br.as_cube(ground(), BANDS), br.Noise(**parts), two_regions(), ["red_slope"])
    covariance = means["red_slope_covariance"].values
    difference = covariance[0, 0] + covariance[1, 1] - 2 * covariance[0, 1]
    assert difference < 0.2 * covariance[0, 0]


def test_ratio_of_sums_and_spread():
    cube, labels = ground(), two_regions()
    means = br.region_means(br.as_cube(cube, BANDS), None, labels, NAMES)
    expected = brute_force(cube[None], labels, [1, 2])[:, 0]
    for name, of_name in zip(NAMES, expected, strict=True):
        np.testing.assert_allclose(means[name], of_name, rtol=1e-12)
        pixels = br.parameters(br.as_cube(cube, BANDS), names=[name])[name].values
        np.testing.assert_allclose(
            means[f"{name}_spread"], [pixels[labels == r].std(ddof=1) for r in (1, 2)], rtol=1e-9
        )
    assert "red_slope_sigma" not in means
    assert means.n_pixels.values.tolist() == [20, 45]


def test_correlation_area_of_resampled_images():
    cube, labels = ground((12, 24)), np.ones((12, 24), dtype=int)
    draws = 6000
    values = brute_force(
        measured(cube, {"random": 0.004}, draws, np.random.default_rng(2), area=4), labels, [1]
    )
    means = br.region_means(
        br.as_cube(cube, BANDS), br.Noise(random=0.004), labels, NAMES, correlation_area=4
    )
    for name, of_name in zip(NAMES, values, strict=True):
        # pixels that share an error are not alike in reflectance, which makes the area a rule for means: 10 %
        np.testing.assert_allclose(means[f"{name}_sigma"], of_name.std(axis=0), rtol=0.1)
    lone = np.zeros((12, 24), dtype=int)
    lone[0, 0] = 1
    one = br.region_means(br.as_cube(cube, BANDS), br.Noise(random=0.004), lone, NAMES, correlation_area=4)
    assert float(one.reflectance_700_sigma[0]) == pytest.approx(0.004)


def test_one_pixel_is_what_the_maps_say():
    cube = br.as_cube(ground(), BANDS)
    noise = br.Noise(random=0.002, shot=0.003, band_gain=0.01, band_offset=0.001, common_gain=0.05)
    maps = br.parameters(cube, noise, NAMES, parts=True)
    labels = np.arange(1, 169).reshape(12, 14)
    means = br.region_means(cube, noise, labels, NAMES)
    for name in NAMES:
        for part in ("", "_sigma", "_sigma_random", "_sigma_shared"):
            np.testing.assert_allclose(means[name + part], maps[name + part].values.ravel(), rtol=1e-9)


def test_map_of_random_noise():
    cube = br.as_cube(ground(), BANDS)
    of_pixel = xr.DataArray(np.random.default_rng(3).uniform(0.001, 0.01, (12, 14)), dims=("y", "x"))
    means = br.region_means(cube, br.Noise(random=of_pixel), two_regions(), ["reflectance_700"])
    inside = of_pixel.values[two_regions() == 2]
    assert float(means.reflectance_700_sigma[1]) == pytest.approx(np.sqrt((inside**2).sum()) / inside.size)


def test_lazy_cubes_in_stripes():
    values = ground((40, 30))
    values[1, 3:9, 2:5] = np.nan
    cube = br.as_cube(values, BANDS)
    labels = np.zeros((40, 30), dtype=int)
    labels[2:33, 1:20], labels[34:, 22:] = 7, 9
    mosaic = np.where(np.arange(40)[:, None] < 17, 3, 5) * np.ones((1, 30), dtype=int)
    noise = br.Noise(random=0.002, band_gain=0.01, band_offset=0.001, common_gain=0.02, shared_within=mosaic)
    lazy = cube.chunk({"y": 11, "x": 13})
    assert isinstance(lazy.data, da.Array)
    one, other = (br.region_means(each, noise, labels, NAMES) for each in (cube, lazy))
    xr.testing.assert_allclose(one, other, rtol=1e-9)
    assert one.region.values.tolist() == [7, 9]
    assert one.n_pixels.values.tolist() == [31 * 19 - 18, 48]


def polygons(shapes, **columns):
    geopandas = pytest.importorskip("geopandas")
    return geopandas.GeoDataFrame(columns, geometry=shapes)


def test_polygons_hold_the_pixels_whose_centre_is_inside():
    shapely = pytest.importorskip("shapely")
    y, x = 1000 - 10.0 * np.arange(12), 500 + 10.0 * np.arange(14)
    cube = br.as_cube(xr.DataArray(ground(), dims=("wavelength", "y", "x"), coords={"y": y, "x": x}), BANDS)
    shapes = [shapely.box(508, 955, 552, 992), shapely.Point(560, 940).buffer(41.0)]
    means = br.region_means(cube, br.Noise(random=0.001), polygons(shapes, name=["floor", "rim"]), NAMES)
    assert means.region.values.tolist() == ["floor", "rim"]
    for place, shape in enumerate(shapes):
        inside = np.array([[shape.contains(shapely.Point(a, b)) for a in x] for b in y])
        assert int(means.n_pixels[place]) == inside.sum()
        assert float(means.reflectance_700[place]) == pytest.approx(float(cube[1].values[inside].mean()))


def test_overlapping_polygons_share_their_random_errors():
    shapely = pytest.importorskip("shapely")
    values = ground()
    shapes = [shapely.box(-0.5, -0.5, 7.5, 7.5), shapely.box(4.5, 3.5, 11.5, 10.5)]
    means = br.region_means(br.as_cube(values, BANDS), br.Noise(random=0.004), polygons(shapes), NAMES)
    draws = measured(values, {"random": 0.004}, 8000, np.random.default_rng(5))
    first, second = (draws[:, 1, r, c].reshape(8000, -1).mean(axis=1) for r, c in ((slice(0, 8), slice(0, 8)), (slice(4, 11), slice(5, 12))))  # fmt: skip
    found = means.reflectance_700_covariance.values[0, 1]
    assert found == pytest.approx(0.004**2 * 12 / (64 * 49), rel=1e-9)
    assert found == pytest.approx(np.cov(first, second)[0, 1], abs=5 * 0.004**2 / np.sqrt(64 * 49 * 8000))


def test_files_of_polygons_and_labels(tmp_path):
    shapely = pytest.importorskip("shapely")
    cube = br.as_cube(xr.DataArray(ground(), dims=("wavelength", "y", "x"), coords={"y": np.arange(12.0), "x": np.arange(14.0)}), BANDS)  # fmt: skip
    crs = "+proj=stere +lat_0=-90 +R=1737400 +units=m +no_defs"
    cube = cube.rio.write_crs(crs)
    frame = polygons([shapely.box(0.5, 0.5, 5.5, 4.5)], name=["floor"]).set_crs(crs)
    frame.to_file(tmp_path / "floor.gpkg")
    means = br.region_means(cube, None, tmp_path / "floor.gpkg", ["red_slope"])
    assert int(means.n_pixels[0]) == 20
    degrees = frame.to_crs("+proj=longlat +R=1737400 +no_defs")
    assert int(br.region_means(cube, None, degrees, ["red_slope"]).n_pixels[0]) == 20
    labels = xr.DataArray(two_regions().astype(np.int32), dims=("y", "x"), coords={"y": cube.y, "x": cube.x})
    labels.rio.write_crs(crs).rio.to_raster(tmp_path / "labels.tif")
    assert br.region_means(
        cube, None, str(tmp_path / "labels.tif"), ["red_slope"]
    ).n_pixels.values.tolist() == [20, 45]


def test_spectra_are_regions_too():
    spectra = br.reference_spectra(BANDS)
    _, labels = np.unique(spectra["group"].values, return_inverse=True)
    means = br.region_means(spectra, br.Noise(relative=0.01), labels + 1, ["reflectance_700"])
    assert means.sizes["region"] == labels.max() + 1


def _cube():
    return br.as_cube(ground(), BANDS)


def _boxes(**options):
    import shapely

    return polygons([shapely.box(0, 0, 5, 5)]).set_crs(**options)


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: br.region_means(_cube().values, None, two_regions()), TypeError, "br.as_cube makes one"),
        (lambda: br.region_means(_cube(), 0.01, two_regions()), TypeError, "noise must be a br.Noise or None"),
        (lambda: br.region_means(_cube(), None, two_regions() * 1.0), TypeError, "integer labels (0: no region)"),
        (lambda: br.region_means(_cube(), None, two_regions()[1:]), ValueError, "the labels have the shape (11, 14)"),
        (lambda: br.region_means(_cube(), None, two_regions() * 0), ValueError, "numbered from 1, 0 is none"),
        (
            lambda: br.region_means(_cube(), None, xr.DataArray(two_regions(), dims=("row", "col"))),
            ValueError,
            "the labels have dimensions ('row', 'col')",
        ),
        (lambda: br.region_means(_cube(), None, "nowhere.gpkg"), FileNotFoundError, "no such file of regions"),
        (lambda: br.region_means(_cube(), None, __file__), ValueError, "polygons (.gpkg, .geojson"),
        (lambda: br.region_means(_cube(), None, two_regions(), correlation_area=0.5), ValueError, "1 or more, got 0.5"),
        (lambda: br.region_means(_cube(), None, two_regions(), ["red_slop"]), ValueError, "did you mean red_slope"),
        (
            lambda: br.region_means(_cube(), br.Noise(shared_within=np.zeros((3, 3), int)), two_regions()),
            ValueError,
            "shared_within has the shape (3, 3)",
        ),
        (lambda: br.region_means(_cube(), None, _boxes(crs="EPSG:4326")), ValueError, "and the cube has none"),
        (
            lambda: br.region_means(_cube().rio.write_crs("EPSG:4326"), None, polygons([None]).iloc[:0]),
            ValueError,
            "there is no polygon in regions",
        ),
        (
            lambda: br.region_means(_cube().rio.write_crs("EPSG:4326"), None, polygons([None])),
            ValueError,
            "give polygons.set_crs(cube.rio.crs)",
        ),
        (lambda: br.region_means(_cube(), None, polygons([None])), ValueError, "no pixel's centre lies in any"),
        (
            lambda: br.region_means(_cube().isel(y=0), None, polygons([None])),
            ValueError,
            "polygons need an image",
        ),
        (
            lambda: br.region_means(
                _cube().assign_coords(y=np.arange(12.0) ** 2, x=np.arange(14.0)), None,
                polygons([__import__("shapely").box(0, 0, 5, 5)]),
            ),
            ValueError,
            "y is not evenly spaced",
        ),
    ],
)  # fmt: skip
def test_bad_input(call, error, message):
    pytest.importorskip("geopandas")
    with pytest.raises(error, match=re.escape(message)):
        call()
