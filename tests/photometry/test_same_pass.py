"""Maps made in the same pass as the normalisation are those of the normalised cube."""

import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.photometry import Hapke

from .scenes import BANDS, facets, rough_height

PHASE = br.ExponentialPhase(
    {480: (-0.022, 1e-4), 600: (-0.021, 1e-4), 700: (-0.02, 1e-4), 830: (-0.019, 9e-5)}
)
RATIOS = [
    "red_slope",
    "reflectance_700",
    br.BandRatio({480: 1, 600: 1, 700: 1, 830: 1}, {600: 1}, 0.01, 0.1, name="many"),
]


def _scene(dtype=np.float32, side=300):
    height = np.tile(rough_height(side // 3, 15), (3, 3))
    angles = dict(zip(("incidence", "emission", "phase"), facets(height, (70, 35)), strict=True))
    rng = np.random.default_rng(5)
    image = rng.uniform(0.02, 0.2, (4, side, side)).astype(dtype)
    image[1, 5, 5] = np.nan
    cube = br.as_cube(image, BANDS, quantity="radiance_factor").assign_attrs(instrument="imager")
    return cube, {**angles, "shadow": rng.random((side, side)) < 0.05}


def _same(first, second, rtol):
    assert set(first) == set(second)
    for name in first:
        np.testing.assert_allclose(first[name], second[name], rtol=rtol, err_msg=name)
        assert first[name].attrs == second[name].attrs
    np.testing.assert_array_equal(first.geometry_flag, second.geometry_flag)
    assert first.attrs == second.attrs
    assert str(first.quantity.values) == str(second.quantity.values)
    assert float(first.incidence) == 30


@pytest.mark.parametrize("parts", [False, True])
@pytest.mark.parametrize(
    ("dtype", "rtol"), [(np.float32, 2e-5), (np.float64, 1e-6)]
)  # pixel_gain is held in single precision where it is held
@pytest.mark.parametrize(
    "options",
    [
        {},
        {"slope_sigma": 2.0, "law": "akimov"},
        {
            "law": br.Minnaert({480: 0.6, 600: 0.6, 700: 0.65, 830: 0.7}),
            "phase_function": PHASE,
            "spread": None,
        },
    ],
    ids=["default", "akimov", "per band"],
)
def test_one_pass_gives_what_two_give(parts, dtype, rtol, options):
    cube, angles = _scene(dtype)
    noise = br.Noise(
        random=0.001, relative=0.01, band_gain=0.01, band_offset=0.0005, common_gain=0.02, shot=0.002
    )
    geometry = {**angles, **options}
    one = br.parameters(cube, noise, RATIOS, geometry=geometry, parts=parts)
    two = br.parameters(br.normalise(cube, **geometry), noise, RATIOS, parts=parts)
    _same(one, two, rtol)
    assert "pixel_gain" not in one.coords  # it has been used; the cube was never held


def test_without_noise_and_with_a_map_of_slope_errors():
    cube, angles = _scene()
    _same(
        br.parameters(cube, names=RATIOS, geometry=angles),
        br.parameters(br.normalise(cube, **angles), names=RATIOS),
        1e-6,
    )
    slopes = {**angles, "slope_sigma": np.random.default_rng(1).uniform(0, 3, cube.shape[1:])}
    noise = br.Noise(relative=0.01)
    _same(
        br.parameters(cube, noise, RATIOS, geometry=slopes),
        br.parameters(br.normalise(cube, **slopes), noise, RATIOS),
        2e-5,
    )


def test_what_does_not_fit_one_pass_takes_two():
    cube, angles = _scene(side=90)
    noise = br.Noise(random=xr.DataArray(np.full((90, 90), 0.001), dims=("y", "x")))
    cases = [
        (cube, br.Noise(random=0.001), {**angles, "law": Hapke(b=0.2, c=0.3)}),
        (cube.chunk(y=40), br.Noise(random=0.001), angles),
        (cube, noise, angles),
        (cube.assign_coords(pixel_gain=(("y", "x"), np.full((90, 90), 0.1))), br.Noise(random=0.001), angles),
    ]
    for scene, errors, geometry in cases:
        one = br.parameters(scene, errors, RATIOS, geometry=geometry)
        _same(one, br.parameters(br.normalise(scene, **geometry), errors, RATIOS), 1e-6)
        assert (one.reflectance_700.chunks is not None) == (scene.chunks is not None)


def test_terrain_goes_straight_into_the_maps():
    height = xr.DataArray(
        rough_height(60, 10), {"y": np.arange(60.0)[::-1], "x": np.arange(60.0)}, ("y", "x")
    )
    planes = br.terrain_geometry(height, sun=(60, 40))
    cube = br.as_cube(np.full((4, 60, 60), 0.1), BANDS, quantity="radiance_factor")
    maps = br.parameters(cube, br.Noise(random=0.001), geometry=planes)
    assert br.masked_pixels(maps)["used"] > 3000
    assert "lunar-Lambert" in br.photometry.geometry_summary(maps)[0]


@pytest.mark.parametrize(
    ("geometry", "error", "message"),
    [
        (30.0, TypeError, "geometry is a mapping of normalise's arguments, .*got float"),
        ({"incidence": 30, "phase": 30}, ValueError, "geometry has no emission; it holds incidence, phase"),
        (
            {"incidence": 30, "emission": 0, "phase": 30, "law": "lambrt"},
            ValueError,
            "unknown photometric law",
        ),
    ],
)
def test_bad_geometry_is_refused(geometry, error, message):
    cube, _ = _scene(side=30)
    with pytest.raises(error, match=message):
        br.parameters(cube, geometry=geometry)
