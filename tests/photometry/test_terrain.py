"""Angles and cast shadow of elevation models, on a plane and on a sphere in several map projections."""

import numpy as np
import pytest
import rioxarray  # noqa: F401  the accessor
import xarray as xr

import bandratio as br
from bandratio.photometry.terrain import terrain_geometry

from .scenes import facets, rough_height

RADIUS = 1_000_000.0
EQUIRECTANGULAR = f"+proj=eqc +R={RADIUS} +lat_ts=0 +lon_0=0 +units=m +no_defs"
POLAR = f"+proj=stere +lat_0=90 +lon_0=0 +R={RADIUS} +units=m +no_defs"
GEOGRAPHIC = f"+proj=longlat +R={RADIUS} +no_defs"


def plane_dem(height, spacing=1.0):
    rows, columns = height.shape
    return xr.DataArray(
        height, {"y": np.arange(rows)[::-1] * spacing, "x": np.arange(columns) * spacing}, ("y", "x")
    )


def sphere_dem(crs, x, y, height):
    """Heights as a function of longitude and latitude [deg], on a grid of a map projection."""
    import pyproj

    turn = pyproj.Transformer.from_crs(pyproj.CRS(crs), pyproj.CRS(GEOGRAPHIC), always_xy=True)
    longitude, latitude = turn.transform(*np.meshgrid(x, y))
    return xr.DataArray(height(longitude, latitude), {"y": y, "x": x}, ("y", "x")).rio.write_crs(crs)


@pytest.mark.parametrize("sun", [(60, 35), (200, 70), (-45, 10)])
@pytest.mark.parametrize("viewer", [None, (120, 60)])
def test_angles_on_a_plane_agree_with_the_facets(sun, viewer):
    height = rough_height(slope_deg=15)
    planes = terrain_geometry(plane_dem(height), sun=sun, viewer=viewer)
    expected = facets(height, sun, viewer or (0, 90))
    for name, wanted in zip(("incidence", "emission", "phase"), expected, strict=True):
        # degrees in single precision
        np.testing.assert_allclose(planes[name], wanted, atol=2e-5)


def test_rows_that_run_north_and_coarse_pixels_change_nothing():
    height = rough_height(slope_deg=15)
    dem = plane_dem(height)
    flipped = dem.isel(y=slice(None, None, -1))
    first, second = (terrain_geometry(d, sun=(60, 35)) for d in (dem, flipped))
    xr.testing.assert_allclose(first, second.isel(y=slice(None, None, -1)), atol=1e-5)
    scaled = terrain_geometry(plane_dem(height * 50, 50.0), sun=(60, 35))
    np.testing.assert_allclose(scaled.incidence, first.incidence, atol=2e-5)
    np.testing.assert_array_equal(scaled.shadow, first.shadow)


@pytest.mark.parametrize(
    ("crs", "x", "y"),
    [
        (EQUIRECTANGULAR, np.linspace(-2e5, 2e5, 81), np.linspace(1.2e6, 0.8e6, 81)),
        (POLAR, np.linspace(-2e5, 2e5, 81), np.linspace(-4e5, -8e5, 81)),
        (GEOGRAPHIC, np.linspace(-12, 12, 81), np.linspace(68, 46, 81)),
    ],
    ids=["equirectangular", "polar stereographic", "longitude and latitude"],
)
def test_a_smooth_sphere_has_the_angles_of_spherical_astronomy(crs, x, y):
    dem = sphere_dem(crs, x, y, lambda longitude, _: 0 * longitude)
    planes = terrain_geometry(dem, sun=(150, 30), cast_shadow=False)
    import pyproj

    turn = pyproj.Transformer.from_crs(pyproj.CRS(crs), pyproj.CRS(GEOGRAPHIC), always_xy=True)
    longitude, latitude = np.deg2rad(turn.transform(*np.meshgrid(x, y)))
    # subsolar point by the navigator's formula from the middle pixel: at angular distance 60° in azimuth 150°
    lon0, lat0 = longitude[40, 40], latitude[40, 40]
    distance, azimuth = np.deg2rad([60, 150])
    lat_s = np.arcsin(np.sin(lat0) * np.cos(distance) + np.cos(lat0) * np.sin(distance) * np.cos(azimuth))
    lon_s = lon0 + np.arctan2(
        np.sin(azimuth) * np.sin(distance) * np.cos(lat0), np.cos(distance) - np.sin(lat0) * np.sin(lat_s)
    )
    # cosine of the sun's zenith distance: sin φ sin φs + cos φ cos φs cos(λ − λs)
    zenith = np.degrees(
        np.arccos(
            np.sin(latitude) * np.sin(lat_s) + np.cos(latitude) * np.cos(lat_s) * np.cos(longitude - lon_s)
        )
    )
    inner = (slice(1, -1), slice(1, -1))
    np.testing.assert_allclose(planes.incidence.values[inner], zenith[inner], atol=2e-3)
    np.testing.assert_allclose(planes.emission.values[inner], 0, atol=0.02)
    np.testing.assert_allclose(planes.phase.values[inner], zenith[inner], atol=2e-3)


def test_the_same_hill_in_two_projections():
    """A cone-free smooth hill near 60° north: slopes do not depend on the map they are drawn on."""

    def hill(longitude, latitude):
        x, y = np.deg2rad(longitude) * np.cos(np.deg2rad(60)), np.deg2rad(latitude - 60)
        return 3000 * np.exp(-(x**2 + y**2) * (RADIUS / 20_000) ** 2)

    # 250 m pixels on the ground: equirectangular maps stretch x by 1/cos 60° = 2
    flat = sphere_dem(
        EQUIRECTANGULAR, np.arange(-60e3, 60e3, 500), 1_047_197.55 - np.arange(-30e3, 30e3, 250), hill
    )
    rho = 2 * RADIUS * np.tan(np.deg2rad(15))
    scale = 2 / (1 + np.sin(np.deg2rad(60)))  # of the stereographic map at 60°
    polar = sphere_dem(
        POLAR, np.arange(-30e3, 30e3, 250) * scale, -rho + -np.arange(-30e3, 30e3, 250) * scale, hill
    )
    both = [terrain_geometry(dem, sun=(100, 5)) for dem in (flat, polar)]
    for name in ("incidence", "emission"):
        np.testing.assert_allclose(
            both[0][name].values[2:-2, 2:-2], both[1][name].values[2:-2, 2:-2], atol=0.25, err_msg=name
        )
    assert float(both[0].emission.max()) > 7
    assert 0.01 < float(both[0].shadow.mean()) < 0.5
    # the two maps' columns are not quite parallel: shadow edges may differ by a pixel
    assert float((both[0].shadow.values != both[1].shadow.values).mean()) < 0.01


@pytest.mark.parametrize("elevation", [10.0, 30.0, 45.0, 60.0])
@pytest.mark.parametrize("azimuth", [0.0, 90.0, 180.0, 270.0])
def test_a_wall_throws_its_shadow_as_far_as_the_tangent_says(azimuth, elevation):
    height = np.zeros((121, 121))
    height[60, :] = height[:, 60] = 10.0
    shadow = terrain_geometry(plane_dem(height), sun=(azimuth, elevation)).shadow.values
    length = 10 / np.tan(np.deg2rad(elevation))
    # along the row or column through the quarter point, away from the other wall's shadow
    line = shadow[:, 20] if azimuth in (0.0, 180.0) else shadow[20, :]
    found = np.flatnonzero(line[61:] if azimuth in (0.0, 270.0) else line[:60][::-1])
    if azimuth == 270.0:
        found = np.flatnonzero(line[61:])
    assert found.size == pytest.approx(min(length, 60), abs=1.01)
    assert (found == np.arange(found.size)).all()


@pytest.mark.parametrize("sun", [(33, 14), (214, 22), (300, 30)])
def test_shadow_on_a_plane_agrees_with_marching_rays(sun):
    """Second, independent way: march every ray in small steps through the interpolated terrain."""
    from scipy.ndimage import map_coordinates

    height = rough_height(size=64, slope_deg=25, seed=9)
    found = terrain_geometry(plane_dem(height), sun=sun).shadow.values
    azimuth, elevation = np.deg2rad(sun)
    row, column = np.mgrid[:64, :64].astype(float)
    above = np.full((64, 64), -np.inf)
    for distance in np.arange(0.05, 95, 0.05):
        r, c = row - np.cos(azimuth) * distance, column + np.sin(azimuth) * distance
        inside = (r >= 0) & (r <= 63) & (c >= 0) & (c <= 63)
        terrain = map_coordinates(height, [r, c], order=1, mode="nearest")
        above = np.maximum(above, np.where(inside, terrain - height - np.tan(elevation) * distance, -np.inf))
    # the compiled search looks where rays cross lines of the grid; the interpolated terrain bulges between them by up to
    # 0.03 m here, so rays that pass closer are left out
    clear = (above > 0.03) | (above < -1e-4)
    assert clear.mean() > 0.9
    assert (above[clear] > 0).mean() > 0.02
    # the marching stops up to 0.05 pixels before the edge of the model, so that a crest right there escapes it
    assert (found != (above > 0))[clear].sum() <= 2


def test_shadow_on_a_sphere_near_the_terminator():
    """A mountain beyond the terminator: its top is lit, and the sphere itself hides the sun from what is lower."""
    x = np.arange(-150e3, 150e3, 2e3)
    dem = sphere_dem(EQUIRECTANGULAR, x, x[::-1], lambda longitude, _: 0 * longitude)
    # sun in the east, at 4° over the middle's horizon: on the smooth sphere night begins 4° (69.8 km) to the west
    planes = terrain_geometry(dem, sun=(90, 4))
    middle = planes.sel(y=0, method="nearest")
    dark = middle.shadow | (middle.incidence >= 90)
    assert float(dark.x[dark.values].max()) == pytest.approx(-RADIUS * np.deg2rad(4), abs=2.5e3)
    # a point in the night at angle a behind the terminator sees the sun from height R(1/cos a − 1)
    behind = np.deg2rad(3.0)
    peak = RADIUS * (1 / np.cos(behind) - 1)
    column = int(np.argmin(np.abs(x + RADIUS * (np.deg2rad(4) + behind))))
    for factor, lit in ((1.2, True), (0.8, False)):
        high = dem.copy()
        high.values[73:78, column - 2 : column + 3] = peak * factor
        shadow = terrain_geometry(high, sun=(90, 4)).shadow.values
        assert bool(shadow[75, column + 2]) is not lit


def test_missing_heights_have_no_angles_and_throw_no_shadow():
    height = np.zeros((40, 40))
    height[20, 20] = np.nan
    planes = terrain_geometry(plane_dem(height), sun=(90, 20))
    assert np.isnan(planes.incidence.values[19:22, 20]).any()
    assert int(np.isnan(planes.incidence).sum()) <= 5
    assert not planes.shadow.any()


def test_rendered_terrain_with_shadow_normalises_back_to_flat():
    height = rough_height(slope_deg=25, seed=3)
    planes = terrain_geometry(plane_dem(height), sun=(70, 25))
    image = np.where(
        planes.shadow, 0, 0.1 * br.Lambert().disk(np.cos(np.deg2rad(planes.incidence.values)), 1, 0)
    )
    cube = br.as_cube(image[None].astype(float), [700], quantity="radiance_factor")
    flat = br.normalise(cube, law="lambert", **planes)
    used = flat.geometry_flag.values == 0
    assert br.masked_pixels(flat)["cast_shadow"] == int(planes.shadow.sum()) > 50
    np.testing.assert_allclose(flat.values[0][used], 0.1 * np.cos(np.deg2rad(30)), rtol=1e-6)


def write_raster(path, bands, descriptions=()):
    import rasterio

    count, height, width = bands.shape
    shape = {"count": count, "height": height, "width": width, "dtype": bands.dtype.name}
    transform = rasterio.Affine(1, 0, -0.5, 0, -1, height - 0.5)
    with rasterio.open(path, "w", driver="GTiff", crs=EQUIRECTANGULAR, transform=transform, **shape) as file:
        file.write(bands)
        for number, words in enumerate(descriptions, start=1):
            file.set_band_description(number, words)


def test_geometry_travels_through_files(tmp_path):
    planes = terrain_geometry(plane_dem(rough_height()), sun=(70, 45))
    angles = planes[["incidence", "emission", "phase"]]
    planes.to_zarr(tmp_path / "angles.zarr", zarr_format=2)
    planes.to_netcdf(tmp_path / "angles.nc", engine="h5netcdf")
    order = ["phase", "shadow", "emission", "incidence"]
    write_raster(tmp_path / "angles.tif", angles.to_array().values)
    write_raster(tmp_path / "named.tif", planes[order].astype("float32").to_array().values, order)
    for name in ("angles.zarr", "angles.nc", "angles.tif", "named.tif"):
        back = br.open_geometry(tmp_path / name)
        assert back.incidence.chunks is not None
        for angle in angles:
            np.testing.assert_allclose(back[angle], planes[angle])
        assert ("shadow" in back) == (name != "angles.tif")
    np.testing.assert_array_equal(br.open_geometry(tmp_path / "named.tif").shadow, planes.shadow)
    with pytest.raises(FileNotFoundError, match=r"none\.tif: no such file"):
        br.open_geometry(tmp_path / "none.tif")
    write_raster(tmp_path / "two.tif", angles.to_array().values[:2])
    with pytest.raises(ValueError, match="has 2 bands; wanted three, incidence, emission and phase"):
        br.open_geometry(tmp_path / "two.tif")
    planes[["incidence"]].to_netcdf(tmp_path / "one.nc", engine="h5netcdf")
    with pytest.raises(ValueError, match="has no emission, phase; wanted"):
        br.open_geometry(tmp_path / "one.nc")


def test_slope_error_of_independent_heights():
    rng = np.random.default_rng(6)
    noise = rng.normal(0, 0.02, (200, 200))
    # emission seen from above is the slope itself; its square's mean is twice the variance along one axis
    emission = terrain_geometry(plane_dem(noise), sun=(90, 45), cast_shadow=False).emission.values[1:-1, 1:-1]
    assert np.sqrt((emission**2).mean() / 2) == pytest.approx(br.slope_sigma_from_height(0.02, 1.0), rel=0.03)


@pytest.mark.parametrize(
    ("changes", "error", "message"),
    [
        (
            {"sun": (90, -5)},
            ValueError,
            "sun's elevation must lie above 0 and up to 90°, got -5°, which is below",
        ),
        ({"sun": (90, 0)}, ValueError, "which is below the horizon"),
        ({"sun": (90, 120)}, ValueError, "got 120°, which is no elevation"),
        ({"sun": (1.6, 0.8)}, ValueError, "looks like radians; give azimuth and elevation in degrees"),
        ({"sun": (500, 30)}, ValueError, "azimuth is clockwise from north, 0 to 360°, got 500°"),
        ({"sun": 30}, ValueError, "sun is two angles in degrees, .azimuth, elevation., got 30"),
        ({"sun": ("east", 30)}, TypeError, "sun is two angles in degrees"),
        ({"viewer": (0, -10)}, ValueError, "viewer's elevation must lie above 0"),
        (
            {"dem": np.zeros((5, 5))},
            TypeError,
            "dem must be a DataArray of heights in m over y and x, got ndarray",
        ),
        ({"dem": plane_dem(np.zeros((5, 5))).rename(y="row")}, ValueError, "dimensions y and x, got row, x"),
        ({"dem": plane_dem(np.zeros((2, 5)))}, ValueError, "at least 3 × 3 pixels for a slope"),
        ({"dem": plane_dem(np.zeros((5, 5))).drop_vars("x")}, ValueError, "dem has no coordinate x"),
        (
            {"dem": plane_dem(np.zeros((5, 5))).assign_coords(x=[0, 1, 3, 4, 5])},
            ValueError,
            "dem is not on a regular grid: its x steps by 1 to 2",
        ),
        ({"dem": plane_dem(np.full((5, 5), np.nan))}, ValueError, "dem holds no finite height"),
        (
            {"dem": plane_dem(np.zeros((5, 5), complex))},
            TypeError,
            "dem must hold heights in m, got complex128",
        ),
        (
            {"like": br.as_cube(np.zeros((2, 7, 9)), [600, 700])},
            ValueError,
            "dem is on another grid: it has {'y': 5, 'x': 5}, the cube {'y': 7, 'x': 9}",
        ),
        ({"radius": 1e6}, ValueError, "its place on a sphere of the given radius is unknown"),
    ],
)
def test_bad_terrain_is_refused(changes, error, message):
    with pytest.raises(error, match=message):
        terrain_geometry(**{"dem": plane_dem(np.zeros((5, 5))), "sun": (90, 30), **changes})
