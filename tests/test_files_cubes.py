"""Opening cubes: what each kind of file says, and what is asked for where it says nothing."""

import numpy as np
import pytest
import rasterio
import xarray as xr
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st

import bandratio as br
from bandratio.files.band_metadata import band_metadata, to_nm, wavelength_in_text
from bandratio.files.block_shape import block_shape
from bandratio.files.sources import RasterSource, identity_of, open_raster

CENTRES = [480.0, 600.0, 700.0, 750.0, 830.0]
#: IAU/IAG mean radius of the Moon: Archinal et al. 2018, Celest. Mech. Dyn. Astron. 130, 22
MOON_RADIUS_M = 1_737_400


@pytest.fixture
def values() -> np.ndarray:
    return np.random.default_rng(1).uniform(0.05, 0.4, (5, 33, 47)).astype(np.float32)


def write_tif(path, stored, crs=None, transform=None, **options):
    bands, rows, columns = stored.shape
    place = {"transform": transform} if transform is not None else {}
    with open_raster(
        path,
        "w",
        driver="GTiff",
        width=columns,
        height=rows,
        count=bands,
        dtype=stored.dtype,
        crs=crs,
        **place,
        **options,
    ) as file:
        file.write(stored)
    return path


def write_raw(folder, values, interleave, *, name="scene.img", **header):
    """Raw raster written byte by byte, so that the reader is not tested against its own library."""
    order = {"bsq": (0, 1, 2), "bil": (1, 0, 2), "bip": (1, 2, 0)}[interleave]
    codes = {"uint8": 1, "int16": 2, "int32": 3, "float32": 4, "float64": 5, "uint16": 12}
    big = header.pop("big_endian", False)
    bands, rows, columns = values.shape
    path = folder / name
    path.write_bytes(
        b"\0" * header.get("header_offset", 0)
        + np.ascontiguousarray(values.transpose(order))
        .astype(values.dtype.newbyteorder(">" if big else "<"))
        .tobytes()
    )
    lines = {
        "samples": columns,
        "lines": rows,
        "bands": bands,
        "header offset": header.pop("header_offset", 0),
        "data type": codes[values.dtype.name],
        "interleave": interleave,
        "byte order": int(big),
        **{key.replace("_", " "): value for key, value in header.items()},
    }
    path.with_suffix(".hdr").write_text(
        "ENVI\n" + "".join(f"{key} = {value}\n" for key, value in lines.items())
    )
    return path


def braced(numbers):
    return "{" + ", ".join(map(str, numbers)) + "}"


@pytest.mark.parametrize("interleave", ["bsq", "bil", "bip"])
@pytest.mark.parametrize("big_endian", [False, True])
def test_raw_raster_in_every_interleave(tmp_path, values, interleave, big_endian):
    path = write_raw(
        tmp_path,
        values,
        interleave,
        big_endian=big_endian,
        header_offset=96,
        wavelength=braced(c / 1000 for c in CENTRES),
        wavelength_units="Micrometers",
        fwhm=braced([0.02, 0.021, 0.022, 0.023, 0.024]),
    )
    cube = br.open_cube(path)
    np.testing.assert_array_equal(cube.values, values)
    assert cube.dtype == np.float32
    assert cube.wavelength.values.tolist() == CENTRES
    np.testing.assert_allclose(cube.fwhm, [20, 21, 22, 23, 24], rtol=1e-12)
    xr.testing.assert_identical(br.open_cube(path.with_suffix(".hdr")), cube)


def test_raw_raster_scale_and_missing(tmp_path, values):
    stored = np.round(values * 10_000).astype(np.int16)
    stored[2, 3, 4] = -9999
    path = write_raw(
        tmp_path,
        stored,
        "bil",
        wavelength=braced(CENTRES),
        data_ignore_value=-9999,
        reflectance_scale_factor=10_000,
    )
    cube = br.open_cube(path)
    np.testing.assert_allclose(
        cube.where(cube.notnull(), 0.5), np.where(stored == -9999, 0.5, stored / 1e4), rtol=1e-6
    )
    assert int(cube.isnull().sum()) == 1
    assert np.isnan(cube[2, 3, 4])
    np.testing.assert_array_equal(br.open_cube(path, scale=1, nodata=-1), stored)


def test_raw_raster_shorter_than_its_header_says(tmp_path, values):
    path = write_raw(tmp_path, values, "bip", wavelength=braced(CENTRES))
    path.write_bytes(path.read_bytes()[:-100])
    with pytest.raises(
        OSError, match=r"scene\.img: the file has \d+ bytes, but its header describes 31020 .*incomplete"
    ):
        br.open_cube(path)


def test_header_without_its_raster(tmp_path):
    (tmp_path / "scene.hdr").write_text("ENVI\n")
    with pytest.raises(
        FileNotFoundError, match="wanted the one raw raster that this header describes, found none"
    ):
        br.open_cube(tmp_path / "scene.hdr")


def test_geotiff_scale_offset_and_missing_of_each_band(tmp_path, values):
    stored = np.round((values - 0.01) * 20_000).astype(np.uint16)
    stored[:, 0, 0] = 65535
    path = write_tif(tmp_path / "scene.tif", stored, nodata=65535)
    with open_raster(path, "r+") as file:
        file.scales, file.offsets = (1 / 20_000,) * 5, (0.01,) * 5
        for band, centre in enumerate(CENTRES, start=1):
            file.set_band_description(band, f"{centre:g} nm")
    cube = br.open_cube(path)
    assert np.isnan(cube[:, 0, 0]).all()
    np.testing.assert_allclose(cube[:, 1:], values[:, 1:], atol=3e-5)
    assert cube.wavelength.values.tolist() == CENTRES
    np.testing.assert_allclose(br.open_cube(path, scale=0.5)[:, 1:], stored[:, 1:] * 0.5)


def test_mask_beside_the_values_is_missing(tmp_path, values):
    mask = np.full(values.shape[1:], 255, np.uint8)
    mask[5:9, 3] = 0
    with rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True):
        path = write_tif(tmp_path / "scene.tif", values)
        with open_raster(path, "r+") as file:
            file.write_mask(mask)
    cube = br.open_cube(path, CENTRES)
    np.testing.assert_array_equal(cube, np.where(mask == 0, np.nan, values))


@pytest.mark.parametrize(
    ("tags", "namespace"),
    [
        ({"CENTRAL_WAVELENGTH_UM": "{um}", "FWHM_UM": "0.02"}, "IMAGERY"),
        ({"wavelength": "{um}", "wavelength_units": "Micrometers", "fwhm": "0.02"}, None),
        ({"wavelength": "{nm}", "wavelength_units": "Nanometers", "fwhm": "20"}, None),
        ({"WAVELENGTH": "{nm}", "FWHM": "20"}, None),
        ({"wavelength": "{um}", "fwhm": "0.02"}, None),
    ],
)
def test_wavelengths_in_the_tags_of_bands(tmp_path, values, tags, namespace):
    path = write_tif(tmp_path / "scene.tif", values)
    with open_raster(path, "r+") as file:
        for band, centre in enumerate(CENTRES, start=1):
            file.update_tags(
                band, ns=namespace, **{k: t.format(um=centre / 1000, nm=centre) for k, t in tags.items()}
            )
    cube = br.open_cube(path)
    assert cube.wavelength.values.tolist() == CENTRES
    np.testing.assert_allclose(cube.fwhm, 20, rtol=1e-12)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("700 nm", 700),
        ("Band 3 (0.7 Micrometers)", 700),
        ("R830nm", 830),
        ("0.48 µm", 480),
        ("1.535um", 1535),
        ("601.5", 601.5),
        ("0.7", 700),
        ("Band 1", None),
        ("3", None),
        ("red", None),
        ("", None),
        (None, None),
    ],
)
def test_wavelength_in_a_description(text, expected):
    assert wavelength_in_text(text) == expected


def test_wavelengths_of_another_unit_are_not_taken():
    assert to_nm([20_000.0], "Wavenumber") is None
    assert to_nm([480.0, -1.0], "nm") is None
    assert band_metadata([], [[], []], ["480 nm", "Band 2"]).centres is None
    file = [{"wavelength": "{0.48, 0.6}", "fwhm": "{20, 25}", "wavelength units": "µm"}]
    # widths are in the unit of the centres, as the file says, however odd
    assert band_metadata(file, [[], []], [None, None]).widths == (20_000.0, 25_000.0)


def test_no_wavelengths_asks_for_them(tmp_path, values):
    path = write_tif(tmp_path / "plain.tif", values)
    with pytest.raises(
        ValueError, match=r"plain\.tif.*wavelengths of its 5 bands.*wavelengths=\[…\].*--wavelengths"
    ):
        br.open_cube(path)
    with pytest.raises(
        ValueError, match=r"2 wavelengths are given \(480, 600 nm\), but the file has 5 bands"
    ):
        br.open_cube(path, [480, 600])
    with pytest.raises(ValueError, match=r"must be in nm.*look like µm"):
        br.open_cube(path, [0.48, 0.6, 0.7, 0.75, 0.83])
    assert br.open_cube(path, CENTRES, fwhm=20, quantity="radiance_factor").quantity == "radiance_factor"


@pytest.mark.parametrize(
    "crs",
    [
        f"+proj=eqc +lat_ts=0 +lon_0=0 +R={MOON_RADIUS_M} +units=m +no_defs",
        f"+proj=stere +lat_0=-90 +lon_0=0 +R={MOON_RADIUS_M} +units=m +no_defs",
        f"+proj=longlat +R={MOON_RADIUS_M} +no_defs",
        "EPSG:32633",
    ],
)
def test_projection_and_transform_are_kept(tmp_path, values, crs):
    transform = (
        Affine(7.5, 0, -1200.5, 0, -2.5, 800.25)
        if "longlat" not in crs
        else Affine(0.25, 0, -10, 0, -0.125, 5)
    )
    path = write_tif(tmp_path / "scene.tif", values, crs, transform)
    cube = br.open_cube(path, CENTRES)
    with open_raster(path) as file:
        # as the file holds it: the scale of a polar projection becomes a latitude of true scale
        wanted = file.crs.to_dict()
    assert cube.rio.crs.to_dict() == wanted
    if "R=" in crs:
        assert float(wanted["R"]) == MOON_RADIUS_M
    assert cube.x.values[:2].tolist() == [transform.c + transform.a * 0.5, transform.c + transform.a * 1.5]
    assert cube.y.values[:2].tolist() == [transform.f + transform.e * 0.5, transform.f + transform.e * 1.5]
    maps = br.write_maps(br.parameters(cube), tmp_path / "maps.tif")
    with open_raster(maps) as file:
        assert file.crs.to_dict() == wanted
        assert file.transform == transform


@pytest.mark.parametrize("engine", ["zarr", "netcdf"])
@pytest.mark.parametrize("bands", ["wavelength", "band"])
def test_labelled_files(tmp_path, values, engine, bands):
    cube = xr.DataArray(
        values.transpose(1, 2, 0),
        dims=("lat", "lon", bands),
        coords={
            "wavelength": (bands, np.array(CENTRES) / 1000, {"units": "micrometers"}),
            "fwhm": (bands, np.full(5, 0.02), {"units": "um"}),
        },
        name="rho",
        attrs={"quantity": "radiance_factor"},
    )
    others = xr.Dataset({"rho": cube, "incidence": (("lat", "lon"), values[0])})
    path = tmp_path / f"scene.{'zarr' if engine == 'zarr' else 'nc'}"
    packed = {"rho": {"dtype": "int16", "scale_factor": 1e-4, "_FillValue": -9999}}
    others["rho"][3, 4, 2] = np.nan
    if engine == "zarr":
        others.to_zarr(path, zarr_format=2, encoding=packed)
    else:
        others.to_netcdf(path, engine="h5netcdf", encoding=packed)
    opened = br.open_cube(path)
    assert opened.dims == ("wavelength", "y", "x")
    assert opened.dtype == np.float32
    assert opened.wavelength.values.tolist() == CENTRES
    assert opened.fwhm.values.tolist() == [20] * 5
    assert opened.quantity == "radiance_factor"
    np.testing.assert_allclose(opened, others["rho"].values.transpose(2, 0, 1), atol=6e-5)
    assert np.isnan(opened[2, 3, 4])
    stored = br.open_cube(path, scale=1, nodata=-1)
    assert stored[2, 3, 4] == -9999
    np.testing.assert_allclose(stored[0], np.round(values[0] * 1e4))
    xr.testing.assert_identical(br.open_cube(path, variable="rho"), opened)


def test_netcdf_of_the_classic_format(tmp_path, values):
    path = tmp_path / "scene.nc"
    br.as_cube(values, CENTRES).to_dataset().to_netcdf(path, engine="scipy")
    np.testing.assert_array_equal(br.open_cube(path), values)


def test_projection_of_a_netcdf_file_under_another_name(tmp_path, values):
    import pyproj
    import rioxarray  # noqa: F401 (puts .rio on xarray)

    cube = br.as_cube(values, CENTRES).assign_coords(y=-np.arange(33.0), x=np.arange(47.0))
    moon = pyproj.CRS.from_user_input(f"+proj=stere +lat_0=90 +R={MOON_RADIUS_M}")
    file = cube.assign_coords(polar=xr.DataArray(0, attrs=moon.to_cf())).to_dataset()
    file["reflectance"].attrs["grid_mapping"] = "polar"
    file.to_netcdf(tmp_path / "scene.nc", engine="h5netcdf")
    opened = br.open_cube(tmp_path / "scene.nc")
    assert opened.rio.crs.to_dict()["R"] == MOON_RADIUS_M
    for ending in (".tif", ".zarr", ".nc"):
        maps = br.open_maps(br.write_maps(br.parameters(opened), tmp_path / f"maps{ending}"))
        assert maps.red_slope.rio.crs.to_dict()["R"] == MOON_RADIUS_M


def test_which_variable(tmp_path, values):
    dims = ("wavelength", "y", "x")
    both = xr.Dataset({"a": (dims, values), "b": (dims, values + 1)}, {"wavelength": CENTRES})
    both.to_netcdf(tmp_path / "scene.nc", engine="h5netcdf")
    with pytest.raises(ValueError, match="a, b could each be the cube; say which with variable="):
        br.open_cube(tmp_path / "scene.nc")
    np.testing.assert_array_equal(br.open_cube(tmp_path / "scene.nc", variable="b"), values + 1)
    with pytest.raises(ValueError, match="no variable 'c'"):
        br.open_cube(tmp_path / "scene.nc", variable="c")
    xr.Dataset({"a": (("u", "v"), values[0])}).to_netcdf(tmp_path / "flat.nc", engine="h5netcdf")
    with pytest.raises(ValueError, match="no variable with a band dimension such as wavelength; there are a"):
        br.open_cube(tmp_path / "flat.nc")


def test_what_cannot_be_opened(tmp_path, values):
    (tmp_path / "notes.txt").write_text("no raster")
    with pytest.raises(OSError, match=r"notes\.txt: no raster that can be opened .* wanted a GeoTIFF"):
        br.open_cube(tmp_path / "notes.txt")
    with pytest.raises(FileNotFoundError, match=r"note\.txt: no such file"):
        br.open_cube(tmp_path / "note.txt")
    (tmp_path / "scene.tif").write_bytes(b"")
    with pytest.raises(FileNotFoundError, match=r"scene\.tiff: no such file; there are scene\.tif"):
        br.open_cube(tmp_path / "scene.tiff")
    (tmp_path / "broken.nc").write_bytes(b"\x89HDF\r\n\x1a\n" + b"\0" * 64)
    with pytest.raises(OSError, match=r"broken\.nc: cannot be opened as h5netcdf"):
        br.open_cube(tmp_path / "broken.nc")
    path = write_tif(tmp_path / "complex.tif", values.astype(np.complex64))
    with pytest.raises(ValueError, match="real numbers, got complex64"):
        br.open_cube(path, CENTRES)
    path = write_tif(tmp_path / "good.tif", values)
    with pytest.raises(ValueError, match="scale must be above zero and finite, got 0"):
        br.open_cube(path, CENTRES, scale=0)
    with pytest.raises(ValueError, match="variable= is for Zarr and netCDF"):
        br.open_cube(path, CENTRES, variable="rho")
    with pytest.raises(ValueError, match="unknown quantity 'radiance'"):
        br.open_cube(path, CENTRES, quantity="radiance")
    with pytest.raises(ValueError, match="chunks names row, but the dimensions are wavelength, y, x"):
        br.open_cube(path, CENTRES, chunks={"row": 5})


def test_chunks_as_asked(tmp_path, values):
    path = write_tif(tmp_path / "scene.tif", values)
    assert br.open_cube(path, CENTRES, chunks=None).chunks is None
    assert br.open_cube(path, CENTRES, chunks={"y": 10}).chunks == ((5,), (10, 10, 10, 3), (47,))


def test_blocks_follow_the_tiles_of_the_file(tmp_path):
    with open_raster(
        tmp_path / "tiled.tif", "w", driver="GTiff", width=4000, height=3000, count=2, dtype="float32", tiled=True,
        blockxsize=256, blockysize=512, compress="deflate", sparse_ok=True,
    ):  # fmt: skip
        pass
    _, high, wide = br.open_cube(tmp_path / "tiled.tif", [600, 700]).data.chunksize
    assert (high % 512, wide % 256) == (0, 0)


@given(
    size=st.tuples(st.integers(1, 300_000), st.integers(1, 300_000)),
    bands=st.integers(1, 400),
    tile=st.one_of(st.none(), st.tuples(st.integers(1, 5000), st.integers(1, 300_000))),
    free=st.booleans(),
)
def test_blocks_are_of_bounded_size(size, bands, tile, free):
    rows, columns = block_shape(size, bands, tile, free=free)
    assert 1 <= rows <= size[0]
    assert 1 <= columns <= size[1]
    assert rows * columns <= max(1 << 20, 5 * (1 << 20))
    assert rows * columns * bands * 4 <= 5 * max(64 << 20, (1 << 14) * bands * 4)


@pytest.fixture(scope="module")
def small_source(tmp_path_factory):
    values = np.random.default_rng(2).uniform(0, 1, (4, 9, 11)).astype(np.float32)
    path = str(write_tif(tmp_path_factory.mktemp("source") / "scene.tif", values))
    ones = (1.0,) * 4
    source = RasterSource(
        path,
        values.shape,
        identity_of(path),
        bands=(1, 2, 3, 4),
        nodata=(None,) * 4,
        scale=ones,
        offset=(0.0,) * 4,
    )
    return source, values


def an_index(size):
    number = st.integers(-size, size - 1)
    edge = st.one_of(st.none(), st.integers(-size - 2, size + 2))
    return st.one_of(
        number, st.slices(size), st.builds(slice, edge, edge), st.lists(number, min_size=1, max_size=4)
    )


@given(data=st.data())
@settings(max_examples=150)
def test_slices_are_those_of_the_array(small_source, data):
    source, values = small_source
    index = tuple(data.draw(an_index(size)) for size in values.shape)
    expected = values
    for axis in reversed(range(3)):
        expected = expected[(slice(None),) * axis + (index[axis],)]
    np.testing.assert_array_equal(source[index], expected)


def test_laboratory_spectra_through_files(lab, tmp_path):
    """Spectra as a GeoTIFF and as a raw raster, against the definitions evaluated by hand.

    Spectra: Kokaly et al. 2017, USGS Spectral Library Version 7, doi:10.3133/ds1035. Definitions: the normalised
    gradient is that of Luu & Jewitt 1990, AJ 99, 1985.
    """
    import pandas as pd

    table = pd.read_csv(lab / "values.csv")
    R = table[[f"r{c:g}" for c in CENTRES]].to_numpy(float).T
    R = R[:, np.isfinite(R).all(axis=0)]
    assert R.shape[1] > 25
    slope = 200 * (R[2] - R[1]) / (R[2] + R[1])
    stored = R.astype(np.float32).reshape(5, 1, -1)
    files = [write_tif(tmp_path / "lab.tif", stored)] + [
        write_raw(tmp_path, stored, interleave, name=f"{interleave}.img", wavelength=braced(CENTRES))
        for interleave in ("bsq", "bil", "bip")
    ]
    for path in files:
        maps = br.parameters(br.open_cube(path, CENTRES))
        np.testing.assert_allclose(maps.red_slope[0], slope, rtol=1e-6, atol=2e-5)
        np.testing.assert_allclose(maps.reflectance_700[0], R[2], rtol=1e-6)
        np.testing.assert_allclose(maps.mafic_depth[0], 1 - R[4] / R[3], rtol=1e-6, atol=2e-7)
