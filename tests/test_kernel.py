"""The compiled loop against the readable reference path, on random ratios, noise and bands, gaps included."""

from dataclasses import replace

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

import bandratio as br
from bandratio import kernel

WAVELENGTHS = [480.0, 600.0, 700.0, 750.0, 830.0, 950.0]


@st.composite
def ratios(draw):
    """A ratio of one to six bands with weights that are not tiny beside each other."""
    weight = st.sampled_from([-2.0, -1.0, -0.3, 0.25, 0.5, 1.0, 1.7])
    n = draw(st.dictionaries(st.sampled_from(WAVELENGTHS), weight, min_size=1, max_size=6))
    d = draw(st.dictionaries(st.sampled_from(WAVELENGTHS), weight, max_size=6))
    n0, d0 = (draw(st.sampled_from([0.0, 0.0, 0.1, -0.2])) for _ in range(2))
    if not d and not d0:
        d = None
    return br.BandRatio(n, d, n0, d0, draw(st.sampled_from([1.0, 100.0, -3.0])), name="p")


@st.composite
def noises(draw):
    def part():
        one = st.sampled_from([0.0, 0.001, 0.02])
        return draw(st.one_of(one, st.lists(one, min_size=6, max_size=6)))

    return br.Noise(part(), part(), part(), part(), draw(st.sampled_from([0.0, 0.05])), shot=part())


@st.composite
def cubes(draw, dtype):
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    shape = (6, *draw(st.sampled_from([(), (1,), (5,), (700,), (13, 60)])))
    R = rng.uniform(0.02, 0.9, shape).astype(dtype)
    gaps = rng.random(shape) < draw(st.sampled_from([0.0, 0.1]))
    R[gaps] = np.nan
    return br.as_cube(R, WAVELENGTHS)


@st.composite
def brightened(draw, dtype):
    """A cube whose reflectances were multiplied since they were measured: alike, by band, by pixel, or by both."""
    cube = draw(cubes(dtype))
    pixels = cube.dims[1:]
    dims = draw(st.sampled_from([(), ("wavelength",), pixels, cube.dims]))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    factor = rng.uniform(0.3, 3.0, [cube.sizes[dim] for dim in dims]).astype("f4")
    return cube.assign_coords(brightness_factor=(dims, factor))


def plain(ratio, cube, noise):
    random, shared = ratio.variances(cube.astype(float), noise)
    return {
        "p": ratio.value(cube.astype(float)),
        "p_sigma": (random + shared) ** 0.5,
        "p_sigma_random": random**0.5,
        "p_sigma_shared": shared**0.5,
    }


def compare(maps, ratio, cube, noise, rtol):
    """Every plane against the readable path, apart from pixels whose denominator is all but cancelled."""
    wide = cube.astype(float)
    n, d = ratio.weights_for(WAVELENGTHS)
    used = (n != 0) | (d != 0)
    R = wide.values[used]
    lower = np.tensordot(d[used], R, 1) + ratio.denominator_offset
    added = np.tensordot(np.abs(d[used]), np.abs(R), 1) + abs(ratio.denominator_offset)
    sound = ~(np.abs(lower) < 1e-3 * added)
    p = np.abs(ratio.value(wide).values)
    # a gradient is a difference: what rounding leaves of it where it cancels, times the largest band sigma (below 1)
    terms = abs(ratio.scale) * (np.abs(n).sum() + abs(ratio.numerator_offset))
    left = 1e-11 * (terms + p * (np.abs(d).sum() + abs(ratio.denominator_offset))) / np.abs(lower)
    for name, expected in plain(ratio, cube, noise).items():
        if name not in maps:
            continue
        value, wanted = maps[name].values[sound], expected.values[sound]
        np.testing.assert_array_equal(np.isnan(value), np.isnan(wanted))
        good = ~np.isnan(wanted)
        assert (np.abs(value - wanted)[good] <= (rtol * np.abs(wanted) + left[sound])[good]).all()


@pytest.mark.parametrize("parts", [False, True])
@given(data=st.data())
@settings(max_examples=60)
def test_agrees_with_the_readable_path_in_float64(parts, data):
    ratio, noise, cube = data.draw(ratios()), data.draw(noises()), data.draw(cubes("f8"))
    maps = br.parameters(cube, noise, [ratio], parts=parts)
    assert len(maps) == (4 if parts else 2)
    compare(maps, ratio, cube, noise, rtol=1e-9)


@given(data=st.data())
@settings(max_examples=60)
def test_agrees_with_the_readable_path_in_float32(data):
    ratio, noise, cube = data.draw(ratios()), data.draw(noises()), data.draw(cubes("f4"))
    maps = br.parameters(cube, noise, [ratio], parts=data.draw(st.booleans()))
    assert all(variable.dtype == np.float32 for variable in maps.data_vars.values())
    compare(maps, ratio, cube, noise, rtol=1e-5)


@pytest.mark.parametrize(("dtype", "rtol"), [("f8", 1e-9), ("f4", 1e-5)])
@pytest.mark.parametrize("parts", [False, True])
@given(data=st.data())
@settings(max_examples=40)
def test_agrees_with_the_readable_path_after_reflectances_were_multiplied(parts, dtype, rtol, data):
    ratio, noise, cube = data.draw(ratios()), data.draw(noises()), data.draw(brightened(dtype))
    if cube.ndim == 3 and data.draw(st.booleans()):
        noise = replace(
            noise, random=xr.full_like(cube[0].drop_vars(["wavelength", "brightness_factor"]), 0.01)
        )
    compare(br.parameters(cube, noise, [ratio], parts=parts), ratio, cube, noise, rtol)


@given(data=st.data())
@settings(max_examples=15)
def test_lazy_and_in_memory_are_the_same(data):
    ratio, noise = data.draw(ratios()), data.draw(noises())
    either = st.one_of(cubes("f4"), brightened("f4"))
    cube = data.draw(either.filter(lambda c: c.ndim == 3))
    maps = br.parameters(cube, noise, [ratio], parts=True)
    lazy = br.parameters(cube.chunk(wavelength=2, y=4, x=17), noise, [ratio], parts=True)
    assert all(variable.chunks is not None for variable in lazy.data_vars.values())
    assert lazy.attrs == maps.attrs
    xr.testing.assert_equal(lazy.compute(), maps)


def test_blocks_strides_and_threads_change_nothing():
    rng = np.random.default_rng(3)
    R = rng.uniform(0.05, 0.5, (3, 300_001)).astype("f4")
    table = kernel.RatioTable.build(
        [br.named_ratio("red_slope", [480, 600, 700]), br.named_ratio("reflectance_700", [480, 600, 700])],
        np.array([480.0, 600, 700]),
        15,
    )
    noise = kernel.NoiseTable.build(*(np.full(3, 0.01) for _ in range(5)), 0.02)
    whole = kernel.evaluate(R, table, noise, threads=1)
    np.testing.assert_array_equal(kernel.evaluate(R, table, noise, threads=2), whole)
    strided = np.ascontiguousarray(R.T).T
    np.testing.assert_array_equal(kernel.evaluate(strided, table, noise, threads=1), whole)
    np.testing.assert_array_equal(kernel.evaluate(strided, table, noise, threads=2), whole)
    for start, stop in [(0, 1), (5, 516), (511, 1537)]:
        part = kernel.evaluate(np.ascontiguousarray(R[:, start:stop]), table, noise)
        np.testing.assert_array_equal(part, whole[:, :, start:stop])
    assert kernel.cores() >= 1


@pytest.mark.parametrize("lower", [0.0, -0.2, np.nan, np.inf])
def test_denominators_that_are_not_positive_give_nan(lower):
    cube = br.as_cube(np.array([[0.3, 0.3], [lower, 0.6]], "f4"), [950, 750])
    maps = br.parameters(
        cube, br.Noise(random=0.01, band_gain=0.01), [br.BandRatio({950: 1}, {750: 1})], parts=True
    )
    for variable in maps.data_vars.values():
        assert np.isnan(variable[0]) or lower == np.inf
        assert np.isfinite(variable[1])
        assert not np.isinf(variable).any()


@pytest.mark.parametrize("parts", [False, True])
def test_what_does_not_fit_the_type_of_the_output_is_nan(parts):
    """A nodata value that was never masked must not become infinite."""
    cube = br.as_cube(np.array([[0.2, 0.2], [np.finfo("f4").max, 0.3]], "f4"), [600, 700])
    noise = br.Noise(random=0.01, relative=0.1, common_gain=0.1)
    names = [
        "red_slope",
        br.BandRatio({700: 1}, {600: 1}),
        br.BandRatio({700: 5}, name="five"),
        "reflectance_700",
    ]
    maps = br.parameters(cube, noise, names, parts=parts)
    for name, variable in maps.data_vars.items():
        assert not np.isinf(variable).any(), name
        assert np.isfinite(variable[1]), name
