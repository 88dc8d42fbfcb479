"""Cubes: putting labels on, keeping what was there, refusing what is none; and what check_cube finds."""

import re

import dask.array as da
import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.bands import nearest_band, nearest_bands
from bandratio.cube import QUANTITIES, band_indices, quantity_of, require_cube

RNG = np.random.default_rng(0)


@pytest.mark.parametrize(
    ("shape", "dims"),
    [((2,), ("wavelength",)), ((2, 3), ("wavelength", "sample")), ((2, 3, 4), ("wavelength", "y", "x"))],
)
def test_dimensions_by_shape(shape, dims):
    assert br.as_cube(np.zeros(shape), [600, 700]).dims == dims


def test_a_cube_of_a_dask_array_is_not_called_by_its_task():
    assert br.as_cube(da.zeros((2, 3)), [600, 700]).name == "reflectance"


def test_a_labelled_array_keeps_its_coordinates_and_projection():
    array = xr.DataArray(
        RNG.random((3, 4, 2)),
        {"y": [3.0, 2, 1], "x": [0.0, 1, 2, 3], "band": [1, 2], "spatial_ref": 0},
        ("y", "x", "band"),
        attrs={"origin": "somewhere"},
    )
    cube = br.as_cube(array, [600, 700], 20, quantity="radiance_factor")
    assert cube.dims == ("wavelength", "y", "x")
    assert set(cube.coords) == {"y", "x", "spatial_ref", "wavelength", "fwhm", "quantity"}
    assert cube.attrs == array.attrs
    np.testing.assert_array_equal(cube.fwhm, [20, 20])
    assert quantity_of(cube) == "radiance_factor"
    assert quantity_of(br.as_cube([0.1], [600])) is None
    again = br.as_cube(cube)
    assert again.identical(cube)


def test_dtypes():
    assert br.as_cube(np.zeros(1, "i2"), [600]).dtype == np.float32
    assert br.as_cube(np.zeros(1, "f2"), [600]).dtype == np.float32
    assert br.as_cube(np.zeros(1, "f4"), [600]).dtype == np.float32
    assert br.as_cube(np.zeros(1, "f8"), [600]).dtype == np.float64


@pytest.mark.parametrize(("given", "native"), [(">f4", "f4"), (">f8", "f8"), ("f2", "f4"), ("g", "f8")])
@pytest.mark.parametrize("lazy", [False, True])
def test_any_float_is_mapped(given, native, lazy):
    """Archive formats hold big-endian floats, which the compiled loop does not know."""
    values = RNG.uniform(0.1, 0.5, (2, 3, 4)).astype(given)
    plain = xr.DataArray(values, {"wavelength": [600, 700]}, ("wavelength", "y", "x"))
    plain = plain.chunk(y=2) if lazy else plain
    assert br.as_cube(plain).dtype == np.dtype(native)
    maps = br.parameters(plain, br.Noise(random=0.01), ["red_slope"])
    expected = br.parameters(plain.astype(native), br.Noise(random=0.01), ["red_slope"])
    assert maps.red_slope.dtype == np.dtype(native)
    xr.testing.assert_equal(maps.compute(), expected.compute())


def test_a_count_of_bands_is_not_taken_for_wavelengths():
    counted = xr.DataArray(np.zeros((40, 2)), {"band": np.arange(1, 41)}, ("band", "sample"))
    with pytest.raises(ValueError, match="the array has no wavelengths"):
        br.as_cube(counted)
    centres = np.linspace(400, 790, 40)
    for coordinate in (("band", centres), 500.0):
        cube = br.as_cube(counted.assign_coords(wavelength=coordinate), centres)
        assert set(cube.coords) == {"wavelength"}
        np.testing.assert_array_equal(cube.indexes["wavelength"], centres)
    np.testing.assert_array_equal(
        br.as_cube(counted.assign_coords(wavelength=("band", centres))).wavelength, centres
    )


def test_a_lazy_array_stays_lazy():
    cube = br.as_cube(da.zeros((2, 10, 10), chunks=5), [600, 700])
    assert cube.chunks is not None


@pytest.mark.parametrize(
    ("arguments", "options", "message"),
    [
        (
            (np.zeros(3), [600, 700]),
            {},
            r"wavelengths has 2 values \(600, 700 nm\), but the array has 3 bands",
        ),
        ((np.zeros(2), [0.6, 0.7]), {}, r"must be in nm, got 0.6, 0.7, which look like µm; multiply by 1000"),
        ((np.zeros(2), [600, np.nan]), {}, "wavelengths must be finite"),
        ((np.zeros(2), [-600, 700]), {}, "wavelengths must be positive"),
        ((np.zeros(2), ["red", "blue"]), {}, "wavelengths must be numbers in nm"),
        ((np.zeros(2), [[600], [700]]), {}, "one number per band"),
        ((np.zeros(2), []), {}, "one number per band"),
        ((np.zeros(2), None), {}, r"the array has no wavelengths; give wavelengths=\[…\]"),
        ((np.zeros(2), [600, 700], [10, 20, 30]), {}, "fwhm must hold one width in nm for each of 2 bands"),
        ((np.zeros(2), [600, 700], [10, -20]), {}, "fwhm must be positive"),
        ((np.zeros(2), [600, 700], "wide"), {}, "fwhm must be numbers"),
        (
            (np.zeros(2), [600, 700]),
            {"quantity": "radiance factor"},
            "unknown quantity 'radiance factor'; give one of these words: reflectance_factor",
        ),
        ((np.zeros((2, 1, 1, 1)), [600, 700]), {}, r"shape \(2, 1, 1, 1\) is no cube"),
        ((0.5, [600]), {}, r"shape \(\) is no cube"),
        ((np.zeros(2, complex), [600, 700]), {}, "must be real numbers, got complex128"),
        ((["a", "b"], [600, 700]), {}, "must be real numbers"),
    ],
)
def test_bad_cubes(arguments, options, message):
    with pytest.raises((ValueError, TypeError), match=message):
        br.as_cube(*arguments, **options)


@pytest.mark.parametrize(
    ("cube", "message"),
    [
        (
            np.zeros((2, 3)),
            "a cube must be a DataArray of reflectance with a wavelength dimension, got ndarray",
        ),
        (xr.Dataset(), "got Dataset; pick one of its variables"),
        (xr.DataArray(np.zeros(2), dims="band"), "a cube needs a wavelength dimension"),
        (xr.DataArray(np.zeros(2), dims="wavelength"), "a cube needs a wavelength dimension"),
        (xr.DataArray(np.zeros(2), {"wavelength": [0.6, 0.7]}, "wavelength"), "look like µm"),
        (xr.DataArray(np.zeros(2, int), {"wavelength": [600, 700]}, "wavelength"), "float, got int64"),
    ],
)
def test_what_is_no_cube(cube, message):
    with pytest.raises((ValueError, TypeError), match=message):
        require_cube(cube)


def test_nearest_band():
    centres = [480, 590, 610, 700]
    assert nearest_band(centres, 595) == 1
    assert nearest_band(centres, 600) == 1  # a draw: the shorter
    assert nearest_band([610, 590], 600) == 1
    assert nearest_band(centres, 720, tolerance=20) == 3
    with pytest.raises(
        ValueError, match=r"no band within 5 nm of 600 nm; the bands are 480, 590, 610, 700 nm"
    ):
        nearest_band(centres, 600, 5)
    with pytest.raises(ValueError, match="would serve for both 700 and 710"):
        nearest_bands(centres, [700, 710])
    assert band_indices(br.as_cube([0.1, 0.2], [600, 700]), [701, 598]) == [1, 0]


def test_every_quantity_has_a_unit_and_a_name():
    assert all(unit in ("1", "sr-1") and name for unit, name in QUANTITIES.values())


def good():
    return RNG.uniform(0.05, 0.4, (3, 40, 50))


def findings(values, wavelengths=(480, 600, 700), **options):
    cube = xr.DataArray(values, {"wavelength": list(wavelengths)}, ("wavelength", "y", "x"))
    return br.check_cube(cube, **options)


def test_nothing_wrong():
    found = findings(good())
    assert found == []
    assert found.coverage == "all 2,000 pixels were read"


def with_change(change):
    values = good()
    change(values)
    return values


def saturate(values):
    values[1] = np.minimum(values[1], 0.35)


@pytest.mark.parametrize(
    ("values", "wavelengths", "sentence"),
    [
        (good() * 100, (480, 600, 700), "look like percent"),
        (np.rint(good() * 10000), (480, 600, 700), "scaled integers that were never unscaled"),
        (np.rint(good() * 10000).astype("i2"), (480, 600, 700), "scaled integers that were never unscaled"),
        (good() * 1000.5, (480, 600, 700), "the values are no fractions"),
        (np.rint(good() * 250).astype("u1"), (480, 600, 700), "scaled integers that were never unscaled"),
        (with_change(lambda v: v.__setitem__((slice(None), slice(20)), 0)), (480, 600, 700),
         "1,000 pixels are exactly zero in every band, as fill around an image is; give nodata=0"),
        (with_change(lambda v: v[1].__setitem__((0, slice(3)), -0.01)), (480, 600, 700),
         "band 600 nm has 3 pixels with a negative value, the lowest -0.01"),
        (with_change(lambda v: v[2].__setitem__((0, 0), 1.2)), (480, 600, 700),
         "band 700 nm has 1 pixel above 1, the highest 1.2"),
        (with_change(lambda v: v[2].__setitem__((0, 0), np.inf)), (480, 600, 700),
         "band 700 nm has 1 pixel with an infinite value"),
        (with_change(lambda v: v[0].fill(0.2)), (480, 600, 700), "band 480 nm is constant at 0.2 in 2,000 pixels"),
        (with_change(lambda v: v[0].fill(np.nan)), (480, 600, 700), "band 480 nm is empty"),
        (np.full((3, 4, 5), np.nan), (480, 600, 700), "every value is missing"),
        (np.zeros((3, 0, 5)), (480, 600, 700), "the cube holds no pixel"),
        (good(), (0.48, 0.6, 0.7), "look like micrometres; multiply by 1000"),
        (good(), (600, 480, 700), "not in ascending order"),
        (good(), (480, 600, 600), "600 nm is given to more than one band"),
        (good(), (480, 600, -1), "must be positive and finite"),
        (with_change(saturate), (480, 600, 700), r"at its highest value, 0.35: saturation\?"),
        (with_change(lambda v: v[0].__setitem__((slice(2), 0), np.nan)), (480, 600, 700),
         r"2 pixels miss some bands and not others \(missing by band: 480 nm: 2, 600 nm: 0, 700 nm: 0\)"),
    ],
)  # fmt: skip
def test_what_goes_wrong_is_found(values, wavelengths, sentence):
    found = findings(values, wavelengths)
    assert any(re.search(sentence, finding) for finding in found), found


def test_a_cube_without_wavelengths_is_told():
    assert any(
        "no wavelengths" in f for f in br.check_cube(xr.DataArray(good(), dims=("wavelength", "y", "x")))
    )


def test_lazy_and_eager_find_the_same():
    values = with_change(lambda v: v[1].__setitem__((0, slice(3)), -0.01))
    cube = br.as_cube(values, [480, 600, 700])
    assert br.check_cube(cube) == br.check_cube(cube.chunk(y=7, x=11), full=True)


def test_a_large_lazy_cube_is_sampled_and_says_so():
    cube = br.as_cube(da.full((2, 10_000, 10_000), 1.5, chunks=(2, 500, 500), dtype="f4"), [600, 700])
    found = br.check_cube(cube)
    assert "a sample of 4,000,000 of 100,000,000 pixels" in found.coverage
    assert found
    assert all("in a sample of 4,000,000 pixels" in finding for finding in found)
    unsorted = br.check_cube(cube.assign_coords(wavelength=[700.0, 600.0]))
    assert not any("sample" in finding for finding in unsorted if "ascending" in finding)


@pytest.mark.parametrize(
    ("cube", "message"),
    [
        (np.zeros((2, 2)), "wanted a DataArray"),
        (xr.DataArray(np.zeros(2), dims="band"), "wanted a dimension wavelength"),
        (xr.DataArray(np.zeros(2, complex), dims="wavelength"), "wanted real numbers"),
    ],
)
def test_what_cannot_be_checked(cube, message):
    with pytest.raises((ValueError, TypeError), match=message):
        br.check_cube(cube)
