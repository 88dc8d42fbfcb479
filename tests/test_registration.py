"""Shifts between bands against shifts that were put in, exactly, through the Fourier shift theorem."""

import re

import numpy as np
import pytest
from scipy.ndimage import fourier_shift

import bandratio as br
from bandratio.registration import band_shifts, misregistration_sigma


def ground(size, seed):
    """Discs of unlike brightness: sharp edges in every direction."""
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[:size, :size]
    picture = np.full((size, size), 0.12)
    for cy, cx, radius, step in zip(
        *rng.uniform(0, size, (2, 80)), rng.uniform(4, 20, 80), rng.uniform(-0.05, 0.05, 80), strict=True
    ):
        picture[(y - cy) ** 2 + (x - cx) ** 2 < radius**2] += step
    return picture


def moved(picture, shift):
    return np.real(np.fft.ifft2(fourier_shift(np.fft.fft2(picture), shift)))


@pytest.mark.parametrize("shift", [(0.33, 0.0), (0.1, -0.25), (2.4, -1.3), (0.0, 0.0), (-7.0, 5.5)])
def test_known_shift(shift):
    rng = np.random.default_rng(7)
    whole = ground(320, 3)
    # the second band is brighter and the ground goes on outside the picture, as in a real pair of bands
    first, second = whole[32:-32, 32:-32], 1.3 * moved(whole, shift)[32:-32, 32:-32] + 0.02
    stack = np.stack([first, second]) + rng.normal(scale=0.001, size=(2, 256, 256))
    np.testing.assert_allclose(band_shifts(stack, reference=0), [(0, 0), shift], atol=0.03)


def test_missing_pixels_do_not_pull():
    whole = ground(320, 4)
    stack = np.stack([whole, moved(whole, (0.3, 0.2))])[:, 32:-32, 32:-32].copy()
    stack[1, :60, :90] = np.nan
    np.testing.assert_allclose(band_shifts(stack, reference=0)[1], (0.3, 0.2), atol=0.03)


def test_tiles_of_a_large_picture():
    whole = ground(700, 5)
    stack = np.stack([moved(whole, (-0.4, 0.15)), whole, whole]).astype(np.float32)
    found = band_shifts(stack)
    np.testing.assert_allclose(found, [(-0.4, 0.15), (0, 0), (0, 0)], atol=0.03)


def test_no_structure_cannot_be_told():
    flat = np.full((2, 64, 64), 0.2)
    flat[0] = ground(64, 1)
    assert np.isnan(band_shifts(flat, reference=0)[1]).all()
    flat[1] = np.nan
    assert np.isnan(band_shifts(flat, reference=0)[1]).all()


def test_sigma_covers_the_error_at_an_edge():
    """A step of 0.1 shifted by 0.3 pixel: the pixel at the edge is wrong by 0.03, by linear interpolation."""
    row = np.where(np.arange(20) < 10, 0.1, 0.2)
    stack = np.broadcast_to(row, (1, 5, 20))
    sigma = misregistration_sigma(stack, [(0.0, 0.3)])
    np.testing.assert_allclose(sigma[0, 2, 9:11], 0.03)
    np.testing.assert_allclose(sigma[0, 2, [0, 5, 15, 19]], 0, atol=1e-15)
    assert np.isnan(misregistration_sigma(np.where(stack > 0.15, np.nan, stack), [(0.0, 0.3)])[0, 0, 15])


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: band_shifts(np.zeros((4, 9))), "shape (band, row, column)"),
        (lambda: band_shifts(np.zeros((2, 8, 64))), "16 × 16 pixels or more"),
        (lambda: band_shifts(np.zeros((2, 64, 64)), reference=2), "index of one of 2 bands"),
        (lambda: misregistration_sigma(np.zeros((2, 8, 8)), [0.3, 0.3]), "shifts (band, 2)"),
        (lambda: misregistration_sigma(np.zeros((1, 8, 8)), [(np.nan, 0)]), "not finite"),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(ValueError, match=re.escape(message)):
        call()


def test_check_cube_reports_the_shift():
    whole = 0.1 + ground(320, 8)
    stack = np.stack([whole, moved(whole, (0.0, 1 / 3)), whole, 0.9 * whole])[:, 32:-32, 32:-32]
    stack = stack + np.random.default_rng(1).normal(scale=0.001, size=stack.shape)
    cube = br.as_cube(stack, [480, 600, 700, 830])
    (finding,) = br.check_cube(cube)
    assert re.match(
        r"band 600 nm is shifted by [+-]0\.0\d pixels along rows and \+0\.3\d along columns", finding
    )
    (lazily,) = br.check_cube(cube.chunk({"y": 100}))
    assert lazily == finding
    assert br.check_cube(cube.isel(wavelength=[0, 2, 3])) == []
