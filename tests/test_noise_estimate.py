"""Estimated noise against the noise that was simulated, and misregistration against shifted pictures."""

import re

import dask.array as da
import numpy as np
import pytest
import xarray as xr
from scipy.ndimage import fourier_shift, gaussian_filter

import bandratio as br

BANDS = [480, 600, 700, 830]


def ground(rows, columns, seed):
    """Hills of brightness with sharp-edged discs on them."""
    rng = np.random.default_rng(seed)
    smooth = gaussian_filter(rng.normal(size=(rows, columns)), 5)
    picture = 0.12 + 0.015 * smooth / smooth.std()
    y, x = np.mgrid[:rows, :columns]
    for cy, cx, radius in zip(
        rng.uniform(0, rows, 40), rng.uniform(0, columns, 40), rng.uniform(2, 12, 40), strict=True
    ):
        picture[(y - cy) ** 2 + (x - cx) ** 2 < radius**2] *= rng.uniform(0.5, 1.5)
    return picture


@pytest.mark.parametrize("sigma", [0.0005, 0.002, 0.01])
def test_within_ten_percent_of_the_simulated_noise(sigma):
    rng = np.random.default_rng(int(1e6 * sigma))
    sigmas = sigma * np.array([1.0, 0.7, 1.5, 2.0])
    picture = ground(200, 260, 1)
    cube = br.as_cube(picture * np.array([0.7, 0.9, 1, 1.1])[:, None, None], BANDS)
    cube = cube + rng.normal(size=cube.shape) * sigmas[:, None, None]
    found = br.estimate_noise(cube)
    np.testing.assert_allclose(list(found.random.values()), sigmas, rtol=0.1)
    assert list(found.random) == BANDS


def test_missing_pixels_and_lazy_cubes():
    rng = np.random.default_rng(5)
    cube = br.as_cube(0.2 + rng.normal(scale=0.003, size=(1, 1300, 700)), [600])
    cube[0, 100:140, :] = np.nan
    lazy = cube.chunk({"y": 500, "x": 350})
    assert isinstance(lazy.data, da.Array)
    for each in (cube, lazy):
        assert br.estimate_noise(each).random[600] == pytest.approx(0.003, rel=0.02)


def test_noise_serves_the_maps():
    rng = np.random.default_rng(6)
    cube = br.as_cube(0.2 + rng.normal(scale=0.002, size=(4, 120, 120)), BANDS)
    maps = br.parameters(cube, br.estimate_noise(cube), ["red_slope"])
    assert float(maps.red_slope_sigma.mean()) == pytest.approx(float(maps.red_slope.std()), rel=0.05)


def test_misregistration_covers_false_slopes():
    """Both bands are alike, so every slope is false; with the shift in sigma they stay within three sigma."""
    whole = gaussian_filter(ground(264, 264, 9), 0.8)  # a camera's blur: without it a shift would ring
    shifted = np.real(np.fft.ifft2(fourier_shift(np.fft.fft2(whole), (0.0, 1 / 3))))
    rng = np.random.default_rng(10)
    cube = br.as_cube(np.stack([whole, shifted])[:, 4:-4, 4:-4], [600, 700])
    cube = cube + rng.normal(scale=0.0005, size=cube.shape)
    noise = br.Noise(random=0.0005)
    without = br.parameters(cube, noise, ["red_slope"])
    with_shift = br.parameters(cube, br.add_misregistration(noise, cube), ["red_slope"])
    wild = [float((abs(m.red_slope) > 3 * m.red_slope_sigma).mean()) for m in (without, with_shift)]
    assert wild[0] > 0.03
    assert wild[1] < 0.005
    kept = with_shift.red_slope_sigma < 1.2 * without.red_slope_sigma
    assert float(kept.mean()) > 0.2  # away from edges sigma stays what it was


def test_one_number_and_given_shifts():
    cube = br.as_cube(ground(40, 40, 2) * np.ones((2, 1, 1)), [600, 700])
    one = br.add_misregistration(br.Noise(random=0.001, band_gain=0.01), cube, 0.2)
    same = br.add_misregistration(br.Noise(random=0.001, band_gain=0.01), cube, np.full((2, 2), 0.2))
    xr.testing.assert_equal(one.random, same.random)
    assert one.band_gain == 0.01
    assert float(one.random.min()) >= 0.001


def _image(bands=2):
    return br.as_cube(np.random.default_rng(0).normal(0.2, 0.01, (bands, 64, 64)), BANDS[:bands])


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: br.estimate_noise(_image().isel(y=0)), ValueError, "wanted (wavelength, y, x)"),
        (lambda: br.estimate_noise(_image()[:, :20, :20]), ValueError, "give noise=… by hand"),
        (lambda: br.estimate_noise(_image().values), TypeError, "br.as_cube makes one"),
        (lambda: br.add_misregistration(0.001, _image()), TypeError, "must be a br.Noise"),
        (lambda: br.add_misregistration(br.Noise(), _image().chunk()), ValueError, "give cube.compute()"),
        (lambda: br.add_misregistration(br.Noise(), _image() * 0 + 0.2), ValueError, "give shifts=…"),
        (lambda: br.add_misregistration(br.Noise(), _image(), np.zeros((3, 2))), ValueError, "(band, 2)"),
    ],
)
def test_bad_input(call, error, message):
    with pytest.raises(error, match=re.escape(message)):
        call()
