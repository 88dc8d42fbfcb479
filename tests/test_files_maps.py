"""Writing maps and opening them again: everything survives, or nothing is there."""

import numpy as np
import pytest
import rasterio
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

import bandratio as br
from bandratio.files import beside
from bandratio.files.overviews import halved, levels_for
from bandratio.files.quantiles import RELATIVE_ERROR, BinCounts
from bandratio.files.sources import open_raster

CENTRES = [480, 600, 700, 750, 830]
ENDINGS = [".tif", ".zarr", ".nc"]


def a_cube(rows=70, columns=90, *, lazy=False, seed=3):
    values = np.random.default_rng(seed).uniform(0.05, 0.4, (5, rows, columns)).astype(np.float32)
    values[:, 3:9, 4:20] = np.nan
    cube = br.as_cube(values, CENTRES, fwhm=20, quantity="radiance_factor")
    cube = cube.assign_coords(y=4000 - 20.0 * np.arange(rows), x=-1000 + 20.0 * np.arange(columns))
    cube = cube.rio.write_crs("+proj=stere +lat_0=-90 +lon_0=0 +R=1737400 +units=m +no_defs")
    return cube.chunk({"y": 32, "x": 48}) if lazy else cube


@pytest.fixture(autouse=True, scope="module")
def _accessor():
    import rioxarray  # noqa: F401 (puts .rio on xarray)


def some_maps(**options):
    maps = br.parameters(
        a_cube(**options), br.Noise(random=0.002, band_gain=0.01, common_gain=0.05), parts=True
    )
    flag = xr.where(maps.red_slope > 0, 2, xr.where(maps.red_slope.isnull(), 0, 1)).astype(np.int8)
    maps["flag"] = flag.assign_attrs(
        long_name="bright or not",
        flag_values=np.array([0, 1, 2], np.int8),
        flag_meanings="no_data background bright_candidate",
    )
    maps.attrs["input"] = "scene.tif"
    return maps


def assert_same(opened, maps):
    assert set(opened.data_vars) == set(maps.data_vars)
    for name, array in maps.data_vars.items():
        assert opened[name].dtype == array.dtype
        assert opened[name].dims == array.dims
        np.testing.assert_array_equal(opened[name].values, array.values)
        assert set(opened[name].attrs) == set(array.attrs)
        for key, value in array.attrs.items():
            np.testing.assert_array_equal(opened[name].attrs[key], value)
    assert opened.attrs == maps.attrs
    assert set(opened.coords) == set(maps.coords)
    for name, coordinate in maps.coords.items():
        if name != "spatial_ref":
            np.testing.assert_array_equal(opened[name].values, coordinate.values)
    if "spatial_ref" in maps.coords:
        assert opened.rio.crs.to_dict().items() >= {"R": 1737400, "proj": "stere", "lat_0": -90}.items()
        assert (
            opened.rio.crs.to_proj4() == maps.rio.crs.to_proj4() or "lat_ts=-90" in opened.rio.crs.to_proj4()
        )


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("lazy", [False, True])
def test_round_trip(tmp_path, ending, lazy):
    maps = some_maps(lazy=lazy)
    path = br.write_maps(maps, tmp_path / f"maps{ending}")
    assert path == tmp_path / f"maps{ending}"
    assert [file.name for file in tmp_path.iterdir()] == [path.name]
    opened = br.open_maps(path)
    assert all(array.chunks is not None for array in opened.data_vars.values())
    assert_same(opened, maps.compute())
    again = br.write_maps(opened, tmp_path / f"again{ending}")
    assert_same(br.open_maps(again), maps.compute())


@pytest.mark.parametrize("first", ENDINGS)
@pytest.mark.parametrize("second", ENDINGS)
def test_from_one_format_to_another(tmp_path, first, second):
    maps = some_maps()
    opened = br.open_maps(br.write_maps(maps, tmp_path / f"first{first}"))
    assert_same(br.open_maps(br.write_maps(opened, tmp_path / f"second{second}")), maps)


@pytest.mark.parametrize("ending", ENDINGS)
def test_maps_without_place(tmp_path, ending):
    maps = br.parameters(br.as_cube(np.full((2, 4, 5), 0.2, np.float32), [600, 700]))
    opened = br.open_maps(br.write_maps(maps, tmp_path / f"maps{ending}"))
    assert_same(opened, maps)


@pytest.mark.parametrize("ending", [".zarr", ".nc"])
def test_spectra_have_no_rows_and_columns(tmp_path, ending):
    spectra = br.as_cube(np.random.default_rng(0).uniform(0.1, 0.3, (5, 12)), CENTRES)
    spectra = spectra.assign_coords(sample=[f"sample {k}" for k in range(12)])
    maps = br.parameters(spectra, br.Noise(random=0.001))
    assert_same(br.open_maps(br.write_maps(maps, tmp_path / f"maps{ending}")), maps)
    with pytest.raises(
        ValueError, match=r"a GeoTIFF holds images with the dimensions y and x, but .* has \('sample',\)"
    ):
        br.write_maps(maps, tmp_path / "maps.tif")


def test_flags_alone_stay_integers_in_a_geotiff(tmp_path):
    maps = some_maps()[["flag"]]
    path = br.write_maps(maps, tmp_path / "flags.tif")
    with open_raster(path) as file:
        assert file.dtypes == ("int8",)
    assert_same(br.open_maps(path), maps)


def test_large_labels_stay_exact(tmp_path):
    labels = xr.DataArray(np.array([[2**24 + 1, 5], [7, -3]], np.int32), dims=("y", "x"))
    maps = xr.Dataset({"label": labels, "value": labels.astype(np.float32)})
    for name in (["label"], ["label", "value"]):
        path = br.write_maps(maps[name], tmp_path / f"{len(name)}.tif")
        np.testing.assert_array_equal(br.open_maps(path).label, labels)


def test_geotiff_is_cloud_optimised(tmp_path):
    """The layout that readers over a network rely on.

    Cloud Optimized GeoTIFF, OGC 21-026 (2023): tiles, overviews, and all directories before any pixels.
    """
    rng = np.random.default_rng(4)
    values = xr.DataArray(
        rng.normal(5, 1, (1300, 1100)).astype(np.float32), dims=("y", "x"), attrs={"units": "wt%"}
    )
    values[:700, :500] = np.nan
    flags = (values > 5).astype(np.int8)
    path = br.write_maps(xr.Dataset({"tio2": values, "flag": flags}), tmp_path / "maps.tif")
    with open_raster(path) as file:
        assert file.descriptions == ("tio2", "flag")
        assert file.units[0] == "wt%"
        assert np.isnan(file.nodata)
        assert file.block_shapes[0] == (512, 512)
        assert file.overviews(1) == [2, 4]
        assert file.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        first, second = (file.tags(1, ns="TIFF").get(key) for key in ("IFD_OFFSET", "BLOCK_OFFSET_0_0"))
        assert first is None or int(first) < int(second or 1 << 60)
    reached = values.values
    for level in (0, 1):
        reached = by_hand(reached)
        with open_raster(path, overview_level=level) as file:
            np.testing.assert_allclose(file.read(1), reached, rtol=1e-6)
            step = 2 ** (level + 1)
            np.testing.assert_array_equal(file.read(2), flags.values[::step, ::step])
    raw = path.read_bytes()[:4096]
    assert b"LAYOUT=IFDS_BEFORE_DATA" in raw


def by_hand(values):
    rows, columns = values.shape
    padded = np.pad(values, ((0, rows % 2), (0, columns % 2)), constant_values=np.nan)
    blocks = (
        padded.reshape(padded.shape[0] // 2, 2, padded.shape[1] // 2, 2).transpose(0, 2, 1, 3).reshape(-1, 4)
    )
    valid = np.isfinite(blocks).sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.nansum(blocks, axis=1) / valid
    return mean.reshape(padded.shape[0] // 2, padded.shape[1] // 2)


@given(
    hnp.arrays(
        np.float32, hnp.array_shapes(min_dims=2, max_dims=2, max_side=9), elements=st.floats(-9, 9, width=32)
    )
)
def test_halved(values):
    np.testing.assert_allclose(halved(values), by_hand(values), rtol=1e-5, atol=1e-5)


@pytest.mark.parametrize(
    ("size", "levels"), [((512, 512), 0), ((513, 10), 1), ((1024, 2048), 2), ((10, 100_000), 8)]
)
def test_levels(size, levels):
    assert levels_for(*size) == levels


@pytest.mark.parametrize("chunks", [{"y": 1000, "x": 1000}, {"y": 512, "x": 900}, {"y": 37, "x": 2100}])
def test_overviews_for_any_chunks(tmp_path, chunks):
    values = np.random.default_rng(5).normal(0, 1, (2100, 1200)).astype(np.float32)
    maps = xr.Dataset({"value": (("y", "x"), values)}).chunk({**chunks, "x": min(chunks["x"], 1200)})
    path = br.write_maps(maps, tmp_path / "maps.tif")
    reached = values
    for level in range(3):
        reached = by_hand(reached)
        with open_raster(path, overview_level=level) as file:
            np.testing.assert_allclose(file.read(1), reached, rtol=1e-4, atol=1e-6)


@pytest.mark.parametrize("ending", ENDINGS)
def test_an_existing_output_is_refused_and_kept(tmp_path, ending):
    path = tmp_path / f"maps{ending}"
    maps = some_maps()
    br.write_maps(maps[["red_slope"]], path)
    with pytest.raises(FileExistsError, match=r"exists already; give another name, or --overwrite"):
        br.write_maps(maps, path)
    assert set(br.open_maps(path)) == {"red_slope"}
    br.write_maps(maps, path, overwrite=True)
    assert set(br.open_maps(path)) == set(maps)
    assert [file.name for file in tmp_path.iterdir()] == [path.name]


@pytest.mark.parametrize("ending", ENDINGS)
def test_maps_over_the_file_they_are_read_from(tmp_path, ending):
    path = br.write_maps(some_maps(), tmp_path / f"maps{ending}")
    opened = br.open_maps(path)
    br.write_maps(opened[["red_slope"]] * 2, path, overwrite=True)
    np.testing.assert_array_equal(br.open_maps(path).red_slope, some_maps().red_slope * 2)


@pytest.mark.parametrize(
    ("maps", "name", "error", "message"),
    [
        (
            "maps",
            "maps.png",
            ValueError,
            r"maps\.png: the ending must say the format, one of \.tif, \.zarr, \.nc",
        ),
        ("maps", "maps", ValueError, "the ending must say the format"),
        ("maps", "nowhere/maps.tif", FileNotFoundError, "the folder .*nowhere does not exist; make it first"),
        (
            np.zeros((2, 2)),
            "maps.tif",
            TypeError,
            "maps must be a Dataset, as br.parameters gives it, got ndarray",
        ),
        (xr.Dataset(), "maps.tif", ValueError, "the maps hold no variable"),
        (xr.DataArray(np.zeros((2, 2))), "maps.tif", ValueError, "the map has no name"),
        (xr.Dataset({"a/b": (("y", "x"), np.zeros((2, 2)))}), "maps.zarr", ValueError, "'a/b' holds a slash"),
        (
            xr.Dataset({"a": (("y", "x"), np.array([["b"]]))}),
            "maps.tif",
            ValueError,
            "holds numbers, but a is <U1",
        ),
    ],
)
def test_what_cannot_be_written(tmp_path, maps, name, error, message):
    maps = some_maps() if isinstance(maps, str) else maps
    with pytest.raises(error, match=message):
        br.write_maps(maps, tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_what_cannot_be_opened(tmp_path):
    with pytest.raises(FileNotFoundError, match=r"maps\.tif: no such file"):
        br.open_maps(tmp_path / "maps.tif")
    (tmp_path / "maps.tif").write_text("nothing")
    with pytest.raises(OSError, match=r"maps\.tif: cannot be opened as maps"):
        br.open_maps(tmp_path / "maps.tif")


def test_a_geotiff_from_elsewhere(tmp_path):
    with open_raster(
        tmp_path / "other.tif", "w", driver="GTiff", width=3, height=2, count=2, dtype="int16", nodata=-1, crs="EPSG:4326",
        transform=rasterio.Affine(1, 0, 0, 0, -1, 0.5),
    ) as file:  # fmt: skip
        file.write(np.array([[[1, 2, -1], [4, 5, 6]]] * 2, np.int16))
        file.set_band_description(1, "albedo")
    opened = br.open_maps(tmp_path / "other.tif")
    assert list(opened) == ["albedo", "band_2"]
    np.testing.assert_array_equal(opened.albedo, [[1, 2, np.nan], [4, 5, 6]])


def test_beside_leaves_nothing_after_an_error(tmp_path):
    path = tmp_path / "page.html"
    path.write_text("old")

    def fail_half_way():
        with beside(path, overwrite=True) as unfinished:
            unfinished.write_text("half")
            raise RuntimeError

    with pytest.raises(RuntimeError):
        fail_half_way()
    assert path.read_text() == "old"
    assert [file.name for file in tmp_path.iterdir()] == ["page.html"]


@given(
    hnp.arrays(
        np.float32,
        st.integers(1, 400),
        elements=st.one_of(st.floats(-1e6, 1e6, width=32, allow_subnormal=False), st.just(np.nan)),
    ),
    st.floats(0, 100),
)
def test_streamed_percentiles_keep_their_bound(values, percent):
    """Against numpy's order statistics: no further than the stated bound from the two that enclose the rank."""
    counts = BinCounts.total(
        [BinCounts.of(values[: len(values) // 2]), BinCounts.of(values[len(values) // 2 :])]
    )
    good = values[np.isfinite(values)].astype(float)
    assert counts.valid == good.size
    assert counts.missing == values.size - good.size
    found = counts.percentiles([percent])[0]
    if not good.size:
        assert np.isnan(found)
        return
    below = np.percentile(good, percent, method="lower")
    above = np.percentile(good, percent, method="higher")
    assert below - RELATIVE_ERROR * abs(below) - 1e-38 <= found <= above + RELATIVE_ERROR * abs(above) + 1e-38
