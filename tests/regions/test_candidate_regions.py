"""Candidates merged into regions: areas on the sphere, positions, files."""

import re

import numpy as np
import pandas as pd
import pyproj
import pytest
import rasterio
import rioxarray  # noqa: F401 (it adds .rio)
import xarray as xr

import bandratio as br

RADIUS = 1_737_400.0
SOUTH = f"+proj=stere +lat_0=-90 +lon_0=0 +R={RADIUS} +units=m +no_defs"
NOISE = br.Noise(random=0.001)


def scene(crs=SOUTH, y=None, x=None, patches=(), shape=(60, 80)):
    R = np.full(shape, 0.1)
    for rows, columns in patches:
        R[rows, columns] = 0.3
    coords = {}
    if y is not None:
        coords = {"y": y, "x": x}
    cube = br.as_cube(xr.DataArray([0.9 * R, R], dims=("wavelength", "y", "x"), coords=coords), [600, 700])
    if crs:
        cube = cube.rio.write_crs(crs)
    return cube, br.pyroclastic_flags(br.parameters(cube, NOISE), brighter_than=0.2)


def test_a_cap_on_the_sphere():
    """The area of a polar cap is 2πR²(1 − cos c) (Snyder 1987, USGS Prof. Paper 1395)."""
    pytest.importorskip("geopandas")
    step, size = 20_000.0, 121
    axis = (np.arange(size) - size // 2) * step
    R = np.full((size, size), 0.1)
    distance = np.hypot(*np.meshgrid(axis, axis))
    edge = 1_000_000.0
    R[distance <= edge] = 0.3
    cube = br.as_cube(xr.DataArray([0.9 * R, R], dims=("wavelength", "y", "x"), coords={"y": -axis, "x": axis}), [600, 700]).rio.write_crs(SOUTH)  # fmt: skip
    regions = br.candidate_regions(br.pyroclastic_flags(br.parameters(cube, NOISE), brighter_than=0.2))
    colatitude = 2 * np.arctan(edge / (2 * RADIUS))  # polar stereographic, k0 = 1 (Snyder, eq. 21-4)
    cap = 2 * np.pi * RADIUS**2 * (1 - np.cos(colatitude)) / 1e6
    assert regions.area_km2[0] == pytest.approx(cap, rel=0.01)
    assert regions.area_map[0] / 1e6 == pytest.approx(np.pi * 1000**2, rel=0.01)
    assert regions.latitude[0] == pytest.approx(-90, abs=1e-6)


def test_area_and_place_in_degrees():
    """A zone of a sphere has the area R²·Δλ·(sin φ2 − sin φ1), of an ellipsoid what the geodesic library says."""
    for ellipsoid, tolerance in ((f"+R={RADIUS}", 1e-9), ("+a=3396190 +b=3376200", 1e-4)):
        crs = f"+proj=longlat {ellipsoid} +no_defs"
        _, flags = scene(
            crs, y=59.5 - np.arange(60), x=10.5 + np.arange(80), patches=[(slice(10, 20), slice(5, 25))]
        )
        table, _ = br.candidate_table(flags)
        if "R=" in ellipsoid:
            area = RADIUS**2 * np.radians(20) * (np.sin(np.radians(50)) - np.sin(np.radians(40))) / 1e6
        else:
            # parallels as many short geodesics
            lon = np.linspace(15, 35, 2001)
            geod = pyproj.Geod(a=3396190, b=3376200)
            area = (
                abs(
                    geod.polygon_area_perimeter(
                        np.r_[lon, lon[::-1]], np.r_[np.full(2001, 40), np.full(2001, 50)]
                    )[0]
                )
                / 1e6
            )
        assert table.area_km2[0] == pytest.approx(area, rel=tolerance)
        assert (table.longitude[0], table.latitude[0]) == pytest.approx((25, 45))


def test_touching_corners_sizes_and_kinds():
    cube, flags = scene(None, patches=[(slice(2, 4), slice(2, 4)), (slice(4, 6), slice(4, 6)), (slice(20, 23), slice(20, 24)), (slice(40, 41), slice(40, 41))])  # fmt: skip
    table, labels = br.candidate_table(flags, cube, NOISE, ["reflectance_700"], min_pixels=2)
    assert table.n_pixels.tolist() == [12, 8]
    assert table.kind.tolist() == ["bright", "bright"]
    assert (table.x[1], table.y[1]) == (3.5, 3.5)
    assert table.expected_false_pixels.tolist() == pytest.approx([0.6, 0.4])
    assert table.reflectance_700.tolist() == pytest.approx([0.3, 0.3])
    assert table.reflectance_700_sigma.tolist() == pytest.approx([0.001 / 12**0.5, 0.001 / 8**0.5])
    assert labels[40, 40] == 0
    assert table.attrs["candidate_pixels"] == 21
    assert "longitude" not in table


def test_expected_number_of_false_pixels_is_not_exceeded_on_average():
    rng = np.random.default_rng(8)
    expected, false = [], []
    for _ in range(60):
        R = np.where(rng.random((50, 50)) < 0.05, 0.205, 0.2)
        cube = br.as_cube([0.9 * R, R + rng.normal(scale=0.001, size=R.shape)], [600, 700])
        flags = br.pyroclastic_flags(br.parameters(cube, NOISE, ["reflectance_700"]), brighter_than=0.2)
        table, labels = br.candidate_table(flags)
        expected.append(table.expected_false_pixels.sum())
        false.append(((labels.to_numpy() > 0) & (R < 0.201)).sum())
    assert np.mean(false) <= np.mean(expected) + 4 * np.std(false) / 60**0.5
    assert np.mean(false) > 0.5 * np.mean(expected)  # and it is not a bound of no use


def test_outlines_and_files(tmp_path):
    geopandas = pytest.importorskip("geopandas")
    cube, flags = scene(y=-1000.0 * np.arange(60), x=1000.0 * np.arange(80), patches=[(slice(2, 4), slice(2, 4)), (slice(4, 6), slice(4, 6)), (slice(30, 40), slice(50, 60))])  # fmt: skip
    regions = br.candidate_regions(flags, cube, NOISE)
    assert regions.geometry.is_valid.all()
    np.testing.assert_allclose(regions.geometry.area, regions.area_map)
    np.testing.assert_allclose(regions.geometry.centroid.x, regions.x)
    np.testing.assert_allclose(regions.geometry.centroid.y, regions.y)
    for ending in ("csv", "parquet", "gpkg"):
        br.write_regions(regions, tmp_path / f"regions.{ending}")
    back = geopandas.read_file(tmp_path / "regions.gpkg")
    assert rasterio.crs.CRS.from_wkt(back.crs.to_wkt()) == cube.rio.crs
    assert pyproj.CRS(back.crs).ellipsoid.semi_major_metre == RADIUS
    assert back.geometry.geom_equals(regions.geometry).all()
    for table in (pd.read_csv(tmp_path / "regions.csv"), pd.read_parquet(tmp_path / "regions.parquet")):
        np.testing.assert_allclose(table.red_slope_sigma, regions.red_slope_sigma)
        assert table.kind.tolist() == regions.kind.tolist()


def test_nothing_found(tmp_path):
    pytest.importorskip("geopandas")
    cube, flags = scene(y=-1000.0 * np.arange(60), x=1000.0 * np.arange(80))
    regions = br.candidate_regions(flags, cube, NOISE)
    assert len(regions) == 0
    br.write_regions(regions, tmp_path / "none.csv")
    br.write_regions(regions, tmp_path / "none.gpkg")


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda flags, cube: br.candidate_table(cube), TypeError, "flags must be the Dataset of a flagging function"),
        (lambda flags, cube: br.candidate_table(flags.isel(y=0)), ValueError, "regions need an image of flags"),
        (lambda flags, cube: br.candidate_table(flags, min_pixels=0), ValueError, "min_pixels is a number of pixels"),
        (lambda flags, cube: br.candidate_table(flags, cube[:, 1:]), ValueError, "the labels have the shape"),
        (lambda flags, cube: br.candidate_table(flags, cube, 0.1), TypeError, "noise must be a br.Noise"),
        (
            lambda flags, cube: br.candidate_table(
                flags.assign(flag=flags.flag.assign_attrs(flag_meanings="a b c d e"))
            ),
            ValueError,
            "no flag is a candidate: the flags are a, b",
        ),
        (lambda flags, cube: br.write_regions(br.candidate_table(flags)[0], "r.xlsx"), ValueError, ".csv, .parquet or .gpkg"),
        (lambda flags, cube: br.write_regions(br.candidate_table(flags)[0], "r.gpkg"), TypeError, "polygons need outlines"),
        (lambda flags, cube: br.write_regions(flags, "r.csv"), TypeError, "must be the table of candidate_regions"),
        (lambda flags, cube: br.write_regions(br.candidate_table(flags)[0], __file__.replace(".py", ".csv").replace("tests", "nowhere")), FileNotFoundError, "does not exist"),
    ],
)  # fmt: skip
def test_bad_input(call, error, message):
    cube, flags = scene(None, patches=[(slice(2, 4), slice(2, 4))])
    with pytest.raises(error, match=re.escape(message)):
        call(flags, cube)
