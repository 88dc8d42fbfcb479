import dask.array as da
import laspy
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import xarray as xr
from pyproj import CRS

import bandratio as br
from bandratio.files import returns as room

N = 500
MOON = "+proj=stere +lat_0=-90 +R=1737400 +units=m"  # a sphere of the Moon's mean radius


@pytest.fixture
def shots():
    rng = np.random.default_rng(1)
    infrared = rng.uniform(0.5, 2, N)
    infrared[::10] = 0
    return {
        "x": np.arange(N) * 2.0,
        "y": rng.uniform(0, 100, N),
        "range": rng.uniform(25, 35, N),
        "slope": rng.uniform(0, 60, N),
        "red": rng.uniform(0.5, 2, N),
        "infrared": infrared,
    }


OPTIONS = {
    "red": "red", "infrared": "infrared", "zero": "dropout",
    "columns": {"range_m": "range", "incidence_deg": "slope"},
}  # fmt: skip


def _write(shots, path, kind):
    if kind == "csv":
        header = {
            "range": "range [km]",
            "slope": "slope (degree)",
            "red": "red [fJ]",
            "infrared": "infrared [fJ]",
        }
        pd.DataFrame(shots).rename(columns=header).to_csv(path, index=False)
    elif kind == "parquet":
        units = {"range": "km", "slope": "degree", "red": "fJ", "infrared": "fJ"}
        fields = [
            pa.field(name, pa.float64(), metadata={"units": units[name]} if name in units else None)
            for name in shots
        ]
        pq.write_table(pa.table(list(shots.values()), schema=pa.schema(fields)), path, row_group_size=120)
    else:
        units = {"range": "km", "slope": "degree", "red": "fJ", "infrared": "fJ"}
        data = xr.Dataset(
            {k: ("shot", v, {"units": units[k]} if k in units else {}) for k, v in shots.items()}
        )
        data.to_netcdf(path, engine="h5netcdf") if kind == "nc" else data.to_zarr(path, consolidated=False)


@pytest.mark.parametrize("kind", ["csv", "parquet", "nc", "zarr"])
@pytest.mark.parametrize("chunks", [None, 100])
def test_tables_with_units_give_the_same_returns(shots, tmp_path, kind, chunks):
    path = tmp_path / f"shots.{kind}"
    _write(shots, path, kind)
    found = br.open_returns(path, **OPTIONS, chunks=chunks)
    assert isinstance(found["red"].data, da.Array) == (chunks is not None)
    found = found.compute()
    np.testing.assert_allclose(found["range_m"], shots["range"] * 1e3)
    np.testing.assert_allclose(found["incidence_deg"], shots["slope"])
    np.testing.assert_allclose(found["red"], shots["red"] * 1e-15)
    assert found["red"].attrs["units"] == "J"
    dropouts = shots["infrared"] == 0
    np.testing.assert_array_equal(found["infrared_quality"] == 1, dropouts)
    assert np.isnan(found["infrared"].to_numpy()[dropouts]).all()
    np.testing.assert_allclose(found["x"], shots["x"])


def test_units_may_be_said_where_the_file_does_not(shots, tmp_path):
    path = tmp_path / "plain.csv"
    pd.DataFrame(shots).to_csv(path, index=False)
    said = br.open_returns(path, **OPTIONS, units={"range_m": "km", "red": "counts", "infrared": "counts"})
    np.testing.assert_allclose(said["range_m"], shots["range"] * 1e3)
    assert said["infrared"].attrs["units"] == "count"
    unsaid = br.open_returns(path, **OPTIONS)
    np.testing.assert_allclose(unsaid["range_m"], shots["range"])
    assert unsaid["red"].attrs["units"] == ""


def _las(path, x, y, intensity, crs=MOON, **dimensions):
    header = laspy.LasHeader(point_format=6, version="1.4")
    header.scales, header.offsets = [0.001] * 3, [0, 0, 0]
    header.add_crs(CRS.from_user_input(crs))
    for name, values in dimensions.items():
        if name not in header.point_format.dimension_names:
            header.add_extra_dim(laspy.ExtraBytesParams(name=name, type=values.dtype))
    las = laspy.LasData(header)
    las.x, las.y, las.z = x, y, np.zeros(len(x))
    las.intensity = intensity
    for name, values in dimensions.items():
        setattr(las, name, values)
    las.write(path)


@pytest.mark.parametrize("ending", ["las", "laz"])
@pytest.mark.parametrize("chunks", [None, 150])
def test_las_with_extra_dimensions(tmp_path, ending, chunks):
    rng = np.random.default_rng(2)
    x, intensity = rng.uniform(0, 1000, N).round(3), rng.integers(1, 3000, N).astype(np.uint16)
    infrared = rng.uniform(1, 2, N)
    angle = rng.integers(-5000, 5000, N).astype(np.int16)
    path = tmp_path / f"shots.{ending}"
    _las(path, x, x[::-1], intensity, swir=infrared, scan_angle=angle)
    found = br.open_returns(
        path, red="intensity", infrared="swir", columns={"incidence_deg": "scan_angle"}, chunks=chunks,
        saturated={"red": 2500},
    )  # fmt: skip
    assert isinstance(found["infrared"].data, da.Array) == (chunks is not None)
    found = found.compute()
    np.testing.assert_allclose(found["x"], x)
    np.testing.assert_allclose(found["infrared"], infrared)
    np.testing.assert_array_equal(found["red_quality"] == 2, intensity >= 2500)
    # LAS 1.4 R15, table 13: steps of 0.006 degrees, with a sign
    np.testing.assert_allclose(found["incidence_deg"], np.abs(angle.astype(float)) * 0.006)
    assert "1737400" in found["spatial_ref"].attrs["crs_wkt"]


def test_two_lasers_in_two_files_are_paired_and_the_rest_kept(tmp_path):
    rng = np.random.default_rng(3)
    x, y = rng.uniform(0, 1e4, (2, N))
    red, infrared = rng.integers(1, 3000, (2, N)).astype(np.uint16)
    shift = rng.uniform(-0.3, 0.3, (2, N))
    order = rng.permutation(N)[:400]  # the other file: other order, 100 shots less, 50 far away
    x2, y2 = (x + shift[0])[order], (y + shift[1])[order]
    x2[350:] += 2e4
    _las(tmp_path / "red.las", x, y, red, range_m=np.full(N, 30e3))
    _las(tmp_path / "swir.laz", x2, y2, infrared[order], range_m=np.full(400, 31e3))
    found = br.open_returns(
        (tmp_path / "red.las", tmp_path / "swir.laz"), red="intensity", infrared="intensity", pair_radius=1.0
    )
    paired = found.isel(shot=np.isfinite(found["pair_distance"].to_numpy()))
    assert (found.attrs["n_paired"], found.attrs["n_unpaired_red"], found.attrs["n_unpaired_infrared"]) == (
        350,
        150,
        50,
    )
    assert found.sizes["shot"] == 550
    expected = {round(a, 3): (r, i) for a, r, i in zip(x, red, infrared, strict=True)}
    for shot in range(350):
        pair = paired.isel(shot=shot)
        assert (float(pair["red"]), float(pair["infrared"])) == expected[round(float(pair["x"]), 3)]
    assert float(paired["pair_distance"].max()) < 0.5
    assert (paired["range_m"] == 30e3).all()
    assert (paired["range_m_infrared"] == 31e3).all()
    alone = found.isel(shot=np.isnan(found["pair_distance"].to_numpy()))
    assert ((alone["red_quality"] == 3) ^ (alone["infrared_quality"] == 3)).all()
    # the infrared pulse's own range counts: albedos of equal energies differ by the squares of the ranges
    channel = br.LidarChannel(constant=1.0, transmitted=1e12)
    albedos = br.albedo_from_returns(
        found, br.LidarCalibration(red=channel, infrared=channel), incidence_deg=0
    )
    ratio = (albedos["infrared"] / albedos["red"]) / (found["infrared"] / found["red"])
    np.testing.assert_allclose(ratio.to_numpy()[:350], (31 / 30) ** 2)


def test_two_channels_of_one_file_with_the_same_pulses(tmp_path):
    x = np.repeat(np.arange(100.0), 2)
    channel = np.tile([0, 1], 100).astype(np.uint8)
    intensity = np.arange(1, 201).astype(np.uint16)
    _las(tmp_path / "both.las", x, x, intensity, scanner_channel=channel)
    found = br.open_returns(
        tmp_path / "both.las",
        red={"column": "intensity", "where": {"scanner_channel": 0}},
        infrared={"column": "intensity", "where": {"scanner_channel": 1}},
    )
    np.testing.assert_array_equal(found["red"], intensity[::2])
    np.testing.assert_array_equal(found["infrared"], intensity[1::2])
    words = br.open_returns(
        tmp_path / "both.las",
        red="intensity where scanner_channel=0",
        infrared="intensity where scanner_channel=1",
    )
    xr.testing.assert_identical(words, found)
    assert found.attrs["n_unpaired_red"] == 0
    assert "spatial_ref" in found.coords


def test_variable_of_two_dimensions(tmp_path):
    energy = np.arange(1.0, 21.0).reshape(10, 2)
    xr.Dataset({"energy": (("shot", "channel"), energy)}).to_zarr(tmp_path / "a.zarr", consolidated=False)
    found = br.open_returns(
        tmp_path / "a.zarr", red={"column": "energy", "index": 0}, infrared={"column": "energy", "index": 1}
    )
    np.testing.assert_array_equal(found["infrared"], energy[:, 1])


def test_pairing_on_longitude_and_latitude_is_in_metres(tmp_path):
    # a degree of latitude on a sphere of 1737.4 km is 30.32 km
    degrees = "+proj=longlat +R=1737400"
    metres = 20 / (np.pi / 180 * 1737400)
    pd.DataFrame({"x": [10.0, 50.0], "y": [-89.0, -88.0], "e": [1.0, 2.0]}).to_csv(
        tmp_path / "a.csv", index=False
    )
    pd.DataFrame({"x": [50.0, 10.0], "y": [-88.0 + metres, -89.0], "e": [4.0, 3.0]}).to_csv(
        tmp_path / "b.csv", index=False
    )
    files = (tmp_path / "a.csv", tmp_path / "b.csv")
    near, far = (
        br.open_returns(files, red="e", infrared="e", crs=degrees, pair_radius=r) for r in (19.9, 20.1)
    )
    assert near.attrs["n_paired"] == 1
    assert far.attrs["n_paired"] == 2
    assert float(far["pair_distance"].max()) == pytest.approx(20, abs=1e-3)


def test_two_files_in_two_projections_are_refused(tmp_path):
    x, intensity = np.array([1.0, 2.0]), np.array([5, 6], dtype=np.uint16)
    _las(tmp_path / "a.las", x, x, intensity)
    _las(tmp_path / "b.las", x, x, intensity, crs="+proj=stere +lat_0=90 +R=1737400 +units=m")
    files = (tmp_path / "a.las", tmp_path / "b.las")
    with pytest.raises(ValueError, match=r"a.las and .*b.las are in different map projections; .*crs="):
        br.open_returns(files, red="intensity", infrared="intensity")
    assert br.open_returns(files, red="intensity", infrared="intensity", crs=MOON).attrs["n_paired"] == 2


def test_saturated_column_and_zero_for_each_channel(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("red,infrared,clipped\n1,0,0\n0,2,1\n3,4,1\n5,6,0\n")
    found = br.open_returns(
        path, red="red", infrared="infrared", zero={"red": "missing", "infrared": "dropout"},
        saturated={"infrared": "clipped"},
    )  # fmt: skip
    assert found["red_quality"].to_numpy().tolist() == [0, 3, 0, 0]
    assert found["infrared_quality"].to_numpy().tolist() == [1, 2, 2, 0]


def test_many_shots_are_lazy_by_themselves(shots, tmp_path, monkeypatch):
    _write(shots, tmp_path / "a.parquet", "parquet")
    monkeypatch.setattr(room, "_IN_MEMORY", 100)
    found = br.open_returns(tmp_path / "a.parquet", **OPTIONS)
    assert found["red"].chunks == ((120, 120, 120, 120, 20),)


PLAIN = {"red": "red", "infrared": "infrared"}
TABLE = "x,y,red,infrared,word\n1,1,5,6,a\n2,2,7,0,b\n"


@pytest.mark.parametrize(
    ("name", "text", "options", "error", "message"),
    [
        ("a.csv", None, PLAIN, FileNotFoundError, "a.csv: no such file"),
        ("a.txt", TABLE, PLAIN, ValueError, r"read from .las, .laz, .*got '.txt'"),
        ("a.csv", "", PLAIN, ValueError, "cannot be read as a table"),
        ("a.csv", "red,infrared\n", PLAIN, ValueError, "holds no shots"),
        ("a.las", "not points", PLAIN, ValueError, "is no LAS or LAZ file"),
        ("a.laz", "", PLAIN, ValueError, "is no LAS or LAZ file"),
        ("a.parquet", "not a table", PLAIN, ValueError, "is no Parquet file"),
        ("a.nc", "not data", PLAIN, ValueError, "cannot be read as netCDF"),
        ("a.csv", TABLE, PLAIN, ValueError, "a.csv: infrared holds 1 stored zeros of 2.*zero='dropout'"),
        ("a.csv", TABLE, {**PLAIN, "red": "reed"}, ValueError, "no column 'reed'; did you mean red"),
        ("a.csv", TABLE, {**PLAIN, "red": "word"}, ValueError, "column 'word' must hold numbers for red"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "red": "red where word"},
            ValueError,
            "red wants COLUMN where COLUMN=VALUE",
        ),
        ("a.csv", TABLE, {**PLAIN, "red": 3}, TypeError, "red must be a column's name or .*got 3"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "red": {"column": "red", "wher": 1}},
            ValueError,
            "unknown entry 'wher'.*where",
        ),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "red": {"column": "red", "where": 1}},
            TypeError,
            r"where of red must be \{column",
        ),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "red": {"column": "red", "where": {"word": "z"}}},
            ValueError,
            "no red shot where word is 'z'; it holds a, b",
        ),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "red": {"column": "red", "index": 1}},
            ValueError,
            "variables of two dimensions",
        ),
        ("a.csv", TABLE, {**PLAIN, "pair_radius": 1.0}, ValueError, "both columns are of the same shots"),
        ("a.csv", TABLE, {**PLAIN, "pair_radius": -1.0}, ValueError, "pair_radius must be above zero"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "columns": {"rnage_m": "x"}},
            ValueError,
            "no 'rnage_m'; did you mean range_m",
        ),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "units": {"red": "km"}},
            ValueError,
            "red is in 'km', which is no unit for it",
        ),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "units": {"red": "J"}, "zero": "missing"},
            ValueError,
            "energies must be in one unit, got no stated unit, J",
        ),
        ("a.csv", TABLE, {**PLAIN, "saturated": "wrod"}, ValueError, "no column 'wrod'; did you mean word"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "saturated": [1]},
            TypeError,
            r"saturated of red must be an energy.*got \[1\]",
        ),
        ("a.csv", TABLE, {**PLAIN, "saturated": {"blue": 1}}, ValueError, "unknown channel 'blue'"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "chunks": 0},
            ValueError,
            "chunks must be a number of shots, 'auto' or None, got 0",
        ),
        ("a.csv", "red [m],red,infrared\n1,2,3\n", PLAIN, ValueError, "two columns have the same name"),
        (
            "a.csv",
            TABLE,
            {**PLAIN, "zero": "missing", "crs": "flat"},
            ValueError,
            "crs must be a map projection",
        ),
    ],
)
def test_bad_input(tmp_path, name, text, options, error, message):
    path = tmp_path / name
    if text is not None:
        path.write_text(text)
    with pytest.raises(error, match=message):
        br.open_returns(path, **options)


def test_bad_pairs(tmp_path):
    path, other, bare = tmp_path / "a.csv", tmp_path / "b.csv", tmp_path / "c.csv"
    path.write_text("x,y,e\n1,1,5\n2,2,7\n")
    other.write_text("x,y,e\n1,1.5,5\n2,2,7\n")
    bare.write_text("e\n5\n7\n")
    with pytest.raises(
        ValueError, match=r"2 red and 2 infrared shots are not at the same positions; give pair_radius"
    ):
        br.open_returns((path, other), red="e", infrared="e")
    other.write_text("x,y,e\n1,1.5,5\n2,2.5,7\n")
    with pytest.raises(ValueError, match=r"no red and infrared shot lie within 0.1 m"):
        br.open_returns((path, other), red="e", infrared="e", pair_radius=0.1)
    with pytest.raises(ValueError, match=r"the infrared shots have no x, y; name the columns"):
        br.open_returns((path, bare), red="e", infrared="e", pair_radius=0.1)
    with pytest.raises(ValueError, match=r"one file, or from two \(red first\), got 3 paths"):
        br.open_returns((path, path, path), red="e", infrared="e")
