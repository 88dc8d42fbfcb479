import dask.array as da
import numpy as np
import pytest
import rioxarray  # noqa: F401 (puts .rio on arrays)
import xarray as xr
from rasterio.warp import transform

import bandratio as br

MOON = "+proj=stere +lat_0=-90 +R=1737400 +units=m"


def _like(rows=4, columns=5, step=10.0, y_down=True):
    y = np.arange(rows) * step
    cube = xr.DataArray(
        np.zeros((rows, columns)),
        dims=("y", "x"),
        coords={"y": y[::-1] if y_down else y, "x": np.arange(columns) * step},
    )
    return cube.rio.write_crs(MOON)


def _albedos(
    red, infrared, x, y, *, incidence=20.0, crs=MOON, lazy=False, zero="dropout", limit=None, **part
):
    """Shots whose energies are the albedos themselves."""
    n = len(red)
    channel = br.LidarChannel(
        constant=1.0, transmitted=1 / np.cos(np.radians(incidence)), limit=limit, **part
    )
    arrays = [np.asarray(a, dtype=float) for a in (red, infrared, x, y, np.ones(n), np.full(n, incidence))]
    if lazy:
        arrays = [da.from_array(a, chunks=50) for a in arrays]
    red, infrared, x, y, range_m, incidence_deg = arrays
    returns = br.as_returns(
        red, infrared, x=x, y=y, range_m=range_m, incidence_deg=incidence_deg, zero=zero, crs=crs
    )
    return br.albedo_from_returns(
        returns, br.LidarCalibration(red=channel, infrared=channel, range_sigma_m=0.01)
    )


def test_sums_by_a_second_way():
    # pandas groups by the nearest cell centre, and each error's rule is written out again
    rng = np.random.default_rng(1)
    n = 600
    x, y = rng.uniform(-8, 50, n), rng.uniform(-8, 40, n)
    red, infrared = rng.uniform(0.1, 0.3, (2, n))
    albedos = _albedos(red, infrared, x, y, read_noise=0.004, relative=0.03, constant_sigma=0.02)
    like = _like()
    grid = br.grid_returns(albedos, like)
    shots = albedos.drop_vars(["spatial_ref", "quantity"]).to_dataframe()
    shots["row"] = 3 - np.rint(shots["y"] / 10)
    shots["column"] = np.rint(shots["x"] / 10)
    inside = shots[shots["row"].between(0, 3) & shots["column"].between(0, 4)]
    assert grid.attrs["n_outside"] == n - len(inside)
    for (row, column), cell in inside.groupby(["row", "column"]):
        here = grid.isel(y=int(row), x=int(column))
        count = len(cell)
        assert int(here["n_shots"]) == count
        for name in ("red", "infrared"):
            assert float(here[name]) == pytest.approx(cell[name].mean())
            random = np.sqrt((cell[f"{name}_sigma_random"] ** 2).sum()) / count
            assert float(here[f"{name}_sigma_random"]) == pytest.approx(random)
            assert float(here[f"{name}_sigma_shared"]) == pytest.approx(0.02 * cell[name].mean())
            unscaled = np.hypot(here[f"{name}_sigma_additive"], here[f"{name}_sigma_common"])
            assert float(np.hypot(unscaled, here[f"{name}_relative"] * here[name])) == pytest.approx(random)
        assert float(here["covariance"]) == pytest.approx(cell["covariance"].sum() / count**2)
        assert float(here["incidence_deg"]) == pytest.approx(20)
    assert int(grid["n_shots"].sum()) == len(inside)
    assert grid["spatial_ref"].attrs["crs_wkt"] == like["spatial_ref"].attrs["crs_wkt"]


def test_ratio_of_sums_not_mean_of_ratios():
    # two shots of one cell, one ten times brighter: 1.1/2.1, where the mean of ratios is (1/1 + 0.1/1.1)/2
    albedos = _albedos([1.0, 0.1], [1.0, 1.1], [0, 0], [0, 0])
    cell = br.grid_returns(albedos, _like()).isel(y=3, x=0)
    assert float(cell["red"] / cell["infrared"]) == pytest.approx(1.1 / 2.1)


def test_spread_of_cells_is_the_random_part_and_a_shared_error_stays():
    rng = np.random.default_rng(7)
    n = 40_000
    gain = 1.05  # one calibration error for all, two of its stated sigmas
    x, y = rng.uniform(-5, 45, n), rng.uniform(-5, 35, n)
    red = gain * 0.2 * (1 + 0.05 * rng.normal(size=n)) + 0.01 * rng.normal(size=n)
    albedos = _albedos(red, np.full(n, 0.3), x, y, read_noise=0.01, relative=0.05, constant_sigma=0.025)
    grid = br.grid_returns(albedos, _like(20, 25, 2.0))
    cells = grid.stack(cell=("y", "x"))
    few = cells["n_shots"].values > 30
    deviation = (cells["red"] / gain - 0.2).values[few] / cells["red_sigma_random"].values[few]
    assert abs(np.std(deviation) - 1) < 4 / np.sqrt(2 * few.sum())
    np.testing.assert_allclose(cells["red_sigma_shared"].values[few], 0.025 * cells["red"].values[few])
    assert (abs(cells["red"].values[few] - 0.2) < 3.5 * cells["red_sigma"].values[few]).all()


def test_dropouts_enter_at_the_limit_and_are_told():
    albedos = _albedos(
        [0.5, 0.5, 0.5, np.nan, 0.4], [0.0, 0.01, 0.0, 0.2, 0.2], [0, 0, 10, 20, 30], [0, 0, 0, 0, 0], limit=0.02,
        read_noise=0.001,
    )  # fmt: skip
    grid = br.grid_returns(albedos, _like()).isel(y=3)
    np.testing.assert_array_equal(grid["n_shots"], [2, 1, 0, 1, 0])
    np.testing.assert_array_equal(grid["n_dropouts"], [1, 1, 0, 0, 0])
    np.testing.assert_allclose(grid["infrared"], [np.nan, np.nan, np.nan, 0.2, np.nan])
    np.testing.assert_allclose(grid["infrared_limit"], [0.015, 0.02, np.nan, np.nan, np.nan])
    assert float(grid["infrared_sigma_additive"][0]) == pytest.approx(0.001 / np.sqrt(2))
    assert grid.attrs["n_left_out"] == 1


def test_missing_infrared_is_left_out_where_zero_means_missing():
    grid = br.grid_returns(
        _albedos([0.5, 0.3], [0.0, 0.2], [0, 0], [0, 0], zero="missing", limit=0.02), _like()
    )
    assert int(grid["n_shots"].sum()) == 1
    assert float(grid["red"].isel(y=3, x=0)) == pytest.approx(0.3)


@pytest.mark.parametrize("pool", [3, 5])
def test_pooling_sums_the_window(pool):
    rng = np.random.default_rng(3)
    n = 900
    albedos = _albedos(
        *rng.uniform(0.1, 0.3, (2, n)), rng.uniform(0, 80, n), rng.uniform(0, 80, n), read_noise=0.01
    )
    like = _like(9, 9)
    plain, pooled = br.grid_returns(albedos, like), br.grid_returns(albedos, like, pool=pool)
    window = {"y": pool, "x": pool}
    shots = plain["n_shots"].rolling(window, center=True, min_periods=1).sum()
    np.testing.assert_array_equal(pooled["n_shots"], shots)
    red = (plain["red"] * plain["n_shots"]).rolling(window, center=True, min_periods=1).sum() / shots
    np.testing.assert_allclose(pooled["red"], red)
    np.testing.assert_allclose(pooled["red_sigma_additive"], 0.01 / np.sqrt(shots), rtol=1e-9)


def test_lazy_shots_and_another_projection_give_the_same_grid():
    rng = np.random.default_rng(4)
    n = 300
    x, y = rng.uniform(0, 40, n), rng.uniform(0, 30, n)
    red, infrared = rng.uniform(0.1, 0.3, (2, n))
    expected = br.grid_returns(_albedos(red, infrared, x, y), _like())
    xr.testing.assert_allclose(br.grid_returns(_albedos(red, infrared, x, y, lazy=True), _like()), expected)
    degrees = "+proj=longlat +R=1737400"
    longitude, latitude = transform(MOON, degrees, x, y)
    found = br.grid_returns(_albedos(red, infrared, longitude, latitude, crs=degrees), _like())
    xr.testing.assert_allclose(found, expected, rtol=1e-9)
    upward = br.grid_returns(_albedos(red, infrared, x, y), _like(y_down=False))
    np.testing.assert_allclose(upward["red"], expected["red"].values[::-1])


def _scene(rng, side, per_cell):
    """Shots over a map of soil with up to half ilmenite, areas of 10 × 10 cells alike; 3 % of ice in patches of 5 × 5."""
    soil, ilmenite, ice = np.array([0.15981, 0.26907]), np.array([0.0553, 0.0599]), np.array([0.58, 0.0065])
    t = np.kron(rng.uniform(0, 0.5, (side // 10, side // 10)), np.ones((10, 10)))[..., None]
    ground = (1 - t) * soil + t * ilmenite
    icy = np.zeros((side, side), dtype=bool)
    for row, column in rng.integers(0, side - 5, (3, 2)):
        icy[row : row + 5, column : column + 5] = True
    f = np.where(icy, 0.03, 0.0)[..., None]
    cells = np.repeat(((1 - f) * ground + f * ice).reshape(-1, 2), per_cell, axis=0)
    noisy = cells * (1 + 0.06 * rng.normal(size=cells.shape)) + 0.002 * rng.normal(size=cells.shape)
    y, x = np.divmod(np.repeat(np.arange(icy.size), per_cell), side)
    return noisy, x * 10.0, y * 10.0, icy


def test_pooled_map_finds_more_and_keeps_its_false_discovery_rate():
    rng = np.random.default_rng(12)
    side, scenes = 40, 40
    like = _like(side, side, y_down=False)
    found, shares = {1: [], 3: []}, {1: [], 3: []}
    for _ in range(scenes):
        noisy, x, y, icy = _scene(rng, side, 4)
        albedos = _albedos(*noisy.T, x, y, read_noise=0.002, relative=0.06)
        for pool in (1, 3):
            grid = br.grid_returns(albedos, like, pool=pool)
            flags = br.ice_flags(**br.flag_arguments(grid), ice_free=["Soil 62231", "Ilmenite HS231.3B"])
            candidate = flags["flag"].values == 5
            window = xr.DataArray(icy).astype(int).rolling(dim_0=pool, dim_1=pool, center=True, min_periods=1)
            somewhere = window.max().values > 0  # what a candidate claims: ice in the window
            shares[pool].append((candidate & ~somewhere).sum() / max(candidate.sum(), 1))
            found[pool].append(candidate[icy].mean())
    for pool in (1, 3):
        assert np.mean(shares[pool]) < 0.05 + 3.5 * np.std(shares[pool]) / np.sqrt(scenes)
    assert np.mean(found[3]) > 0.4 > 3 * np.mean(found[1])


SHOTS = _albedos([0.1, 0.2], [0.1, 0.2], [0, 10], [0, 0])


def test_the_grid_takes_only_the_axes_and_projection_of_a_cube():
    # a cube at one geometry holds its quantity and angles as scalar coordinates, which do not hold for a lidar
    like = _like().assign_coords(quantity="radiance_factor", incidence=30.0, phase=30.0)
    grid = br.grid_returns(SHOTS, like)
    assert set(grid.coords) == {"y", "x", "quantity", "spatial_ref"}
    assert grid["quantity"].item() == "zero_phase_albedo"
    assert grid.rio.crs == like.rio.crs
    assert br.ice_flags(**br.flag_arguments(grid))["flag"].shape == (4, 5)


@pytest.mark.parametrize(
    ("albedos", "like", "options", "error", "message"),
    [
        (
            SHOTS.drop_vars("covariance"),
            _like(),
            {},
            ValueError,
            "wanted albedos over shot .* without covariance",
        ),
        (SHOTS.drop_vars("x"), _like(), {}, ValueError, "the shots have no positions; give x and y"),
        (SHOTS, _like(), {"pool": 2}, ValueError, r"odd number of cells \(1, 3, 5, …\), got 2"),
        (SHOTS, _like(), {"pool": True}, ValueError, "odd number of cells"),
        (SHOTS, "grid", {}, TypeError, "like must be a cube or map with coordinates x and y, got str"),
        (SHOTS, _like().drop_vars("x"), {}, ValueError, "no 1-D coordinate x of two cells or more"),
        (
            SHOTS,
            _like().assign_coords(x=[0, 1, 2, 3, 50.0]),
            {},
            ValueError,
            "grid's x is not regular, .* from 1 to 47",
        ),
        (SHOTS.assign_coords(x=SHOTS.x + 1e6), _like(), {}, ValueError, "none of the 2 shots .*2 outside"),
    ],
)
def test_bad_input(albedos, like, options, error, message):
    with pytest.raises(error, match=message):
        br.grid_returns(albedos, like, **options)
