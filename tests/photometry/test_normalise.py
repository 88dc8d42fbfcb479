"""Normalising rendered bodies back to flat, masks with reasons, lazy and in-memory alike, and what is refused."""

import json

import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.photometry import Geometry, Hapke

from .scenes import ALBEDO, BANDS, cosines, facets, rough_height, sphere

PHASE = br.ExponentialPhase(
    {480: (-0.022, 1e-4), 600: (-0.021, 1e-4), 700: (-0.02, 1e-4), 830: (-0.019, 9e-5)}
)
LAWS = [
    br.Lambert(),
    br.LommelSeeliger(),
    br.LunarLambert(),
    br.LunarLambert({480: 0.5, 600: 0.55, 700: 0.6, 830: 0.65}),
    br.Minnaert({480: 0.55, 600: 0.58, 700: 0.6, 830: 0.62}),
    br.Akimov(),
]
SCENES = {"sphere": sphere(), "terrain": facets(rough_height(slope_deg=9))}


def render(law, incidence, emission, phase, phase_function=None, to=(30, 0, 30)):
    """Radiance factors of a body whose reflectance at the standard geometry is ALBEDO, from the formula alone."""
    mu0, mu = cosines(incidence, emission)
    target = Geometry.of(to)
    planes = []
    for band, (one, albedo) in enumerate(zip(law.for_bands(BANDS), ALBEDO, strict=True)):
        f = 1.0
        if phase_function is not None:
            g = phase_function.for_bands(BANDS)[band]
            f = g.value(phase) / g.value(target.phase)
        planes.append(albedo * f * one.disk(mu0, mu, phase) / one.at(target))
    return np.array(planes)


@pytest.mark.parametrize("scene", SCENES)
@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("phase_function", [None, PHASE], ids=["flat phase", "phase function"])
def test_rendered_bodies_normalise_back_to_flat(scene, law, phase_function):
    incidence, emission, phase = SCENES[scene]
    with np.errstate(all="ignore"):
        cube = br.as_cube(
            render(law, incidence, emission, phase, phase_function), BANDS, quantity="radiance_factor"
        )
    flat = br.normalise(
        cube, incidence=incidence, emission=emission, phase=phase, law=law, phase_function=phase_function
    )
    used = (flat.geometry_flag == 0).values
    assert used.mean() > 0.5
    np.testing.assert_allclose(
        flat.values[:, used], np.broadcast_to(ALBEDO[:, None], (4, used.sum())), rtol=1e-6
    )
    assert np.isnan(flat.values[:, ~used]).all()


@pytest.mark.parametrize("scene", SCENES)
@pytest.mark.parametrize(
    "quantity", ["radiance_factor", "reflectance_factor", "bidirectional_reflectance", "brdf"]
)
def test_hapke_bodies_normalise_back_to_flat_in_every_quantity(scene, quantity):
    incidence, emission, phase = SCENES[scene]
    law = Hapke(b=0.25, c=0.35, B0=1.0, h=0.06, roughness_deg=15)
    mu0, mu = cosines(incidence, emission)
    w = np.array([0.2, 0.3, 0.36, 0.42])
    with np.errstate(all="ignore"):
        reff = np.array([law.reflectance_factor(one, mu0, mu, phase) for one in w])
    seen = (mu0 > 0.1) & (mu > 0.1)
    cube = br.as_cube(np.where(seen, reff, np.nan), BANDS, quantity="reflectance_factor")
    cube = br.convert_quantity(cube, quantity, incidence=np.where(seen, incidence, 0))
    flat = br.normalise(cube, incidence=incidence, emission=emission, phase=phase, law=law)
    used = (flat.geometry_flag == 0).values
    wanted = br.as_cube(
        [float(law.reflectance_factor(one, *cosines(30, 0), 30)) for one in w],
        BANDS,
        quantity="reflectance_factor",
    )
    wanted = br.convert_quantity(wanted, quantity, incidence=30).values
    np.testing.assert_allclose(
        flat.values[:, used], np.broadcast_to(wanted[:, None], (4, used.sum())), rtol=1e-9
    )


def test_single_precision_is_flat_to_a_part_in_a_million():
    incidence, emission, phase = (plane.astype(np.float32) for plane in sphere())
    wide = [plane.astype(float) for plane in (incidence, emission, phase)]
    with np.errstate(all="ignore"):
        image = render(br.LunarLambert(), *wide).astype(np.float32)
    cube = br.as_cube(image, BANDS, quantity="radiance_factor")
    flat = br.normalise(cube, incidence=incidence, emission=emission, phase=phase)
    assert flat.dtype == np.float32
    used = (flat.geometry_flag == 0).values
    np.testing.assert_allclose(
        flat.values[:, used], np.broadcast_to(ALBEDO[:, None], (4, used.sum())), rtol=2e-6
    )


def test_noisy_terrain_is_flat_within_sigma():
    """Slopes known to 1.5°, instrument noise of 1 %: residuals over sigma have unit spread."""
    height = rough_height(size=128, slope_deg=10)
    incidence, emission, phase = facets(height, sun=(60, 50))
    rng = np.random.default_rng(21)
    cube = br.as_cube(
        render(br.LommelSeeliger(), incidence, emission, phase), BANDS, quantity="radiance_factor"
    )
    cube = cube * (1 + rng.normal(0, 0.01, cube.shape))
    # the same surface with every facet's normal turned by 1.5° along both axes across it
    rows, columns = np.gradient(height)
    normal = np.stack([-columns, rows, np.ones_like(height)])
    normal /= np.sqrt((normal**2).sum(0))
    first = np.cross(normal, [0.0, 1.0, 0.0], axis=0)
    first /= np.sqrt((first**2).sum(0))
    second = np.cross(normal, first, axis=0)
    turn = np.deg2rad(rng.normal(0, 1.5, (2, *height.shape)))
    normal = normal + turn[0] * first + turn[1] * second
    normal /= np.sqrt((normal**2).sum(0))
    sun = np.array([np.sin(np.deg2rad(60)), np.cos(np.deg2rad(60)), np.tan(np.deg2rad(50))])
    sun /= np.linalg.norm(sun)
    mistaken = [
        np.degrees(np.arccos(np.clip(np.tensordot(d, normal, 1), -1, 1))) for d in (sun, [0.0, 0.0, 1.0])
    ]
    flat = br.normalise(
        cube,
        incidence=mistaken[0],
        emission=mistaken[1],
        phase=phase,
        law="lommel_seeliger",
        slope_sigma=1.5,
        spread=None,
    )
    maps = br.parameters(flat, br.Noise(relative=0.01), ["reflectance_700", "red_slope"])
    pull = ((maps.reflectance_700 - ALBEDO[2]) / maps.reflectance_700_sigma).values
    # 16,000 pixels: the standard error of the spread is 0.006; the bend of the law within 1.5° adds a little
    assert np.nanstd(pull) == pytest.approx(1, abs=0.04)
    assert abs(np.nanmean(pull)) < 0.1
    # the slope error cancels in the pure ratio: its sigma is the instrument's alone, and true
    true_slope = 200 * (0.11 - 0.09) / 0.2
    pull = ((maps.red_slope - true_slope) / maps.red_slope_sigma).values
    assert np.nanstd(pull) == pytest.approx(1, abs=0.03)
    # without the slope's part, the level's sigma would be far too small
    bare = br.parameters(flat.drop_vars("pixel_gain"), br.Noise(relative=0.01), ["reflectance_700"])
    assert np.nanstd((bare.reflectance_700 - ALBEDO[2]) / bare.reflectance_700_sigma) > 1.5


@pytest.mark.parametrize(
    "law", [*LAWS, Hapke(b=0.2, c=0.3), Hapke({480: 0.1, 600: 0.2, 700: 0.2, 830: 0.3})], ids=str
)
def test_lazy_and_in_memory_are_alike(law):
    incidence, emission, phase = SCENES["terrain"]
    rng = np.random.default_rng(1)
    cube = br.as_cube(rng.uniform(0.01, 0.4, (4, 96, 96)), BANDS, quantity="radiance_factor")
    shadow = rng.random((96, 96)) < 0.1
    options = {"law": law, "slope_sigma": rng.uniform(0.1, 2, (96, 96)), "shadow": shadow}
    eager = br.normalise(cube, incidence=incidence, emission=emission, phase=phase, **options)
    lazy_plane = xr.DataArray(incidence, dims=("y", "x")).chunk(y=17)
    lazy = br.normalise(
        cube.chunk(wavelength=1, y=40, x=50), incidence=lazy_plane, emission=emission, phase=phase, **options
    )
    assert lazy.chunks is not None
    assert lazy.geometry_flag.chunks is not None
    xr.testing.assert_allclose(lazy.compute(), eager, rtol=1e-7)
    assert br.masked_pixels(lazy) == br.masked_pixels(eager)
    assert lazy.attrs == eager.attrs
    # an eager cube with lazy angles is lazy too
    assert br.normalise(cube, incidence=lazy_plane, emission=emission, phase=phase).chunks is not None


def test_compiled_loop_agrees_with_the_readable_formulas():
    from bandratio.photometry.execution import _plane_by_plane, _run

    rng = np.random.default_rng(12)
    n = 5000
    incidence, emission = rng.uniform(0, 95, n), rng.uniform(0, 95, n)
    phase = np.clip(np.abs(incidence - emission) + rng.uniform(-2, 60, n), 0, None)
    phase[:50] = np.nan
    planes = {"incidence": incidence, "emission": emission, "phase": phase, "shadow": rng.random(n) < 0.1}
    values = rng.uniform(0.01, 0.3, (4, n))
    for law in (br.LunarLambert(), LAWS[3], br.Lambert()):
        for per_mu0 in (False, True):
            for slope in (0.0, 3.0):
                correction = br.photometry.correction.Correction(
                    tuple(law.for_bands(BANDS)), None, Geometry(30, 0, 30), per_mu0, 1.0, slope,
                    (law.for_bands(BANDS)[0], br.Lambert(), br.LommelSeeliger()), 0.1, 0.2,
                )  # fmt: skip
                compiled = _run(values, planes, correction)
                factors = np.empty((1 if correction.bands_alike else 4, n), np.float32)
                plain = np.empty_like(values), np.empty(n, np.int8), np.empty(n, np.float32), factors
                _plane_by_plane(correction, values, planes, *plain, slice(0, n), 0)
                np.testing.assert_allclose(compiled[0], plain[0], rtol=1e-12)
                np.testing.assert_array_equal(compiled[1], plain[1])
                np.testing.assert_allclose(compiled[2], plain[2], rtol=1e-5)
                np.testing.assert_allclose(np.atleast_2d(compiled[3]), factors, rtol=1e-6)


def test_masks_say_why_and_nothing_is_divided_by_almost_zero():
    incidence = np.array([30.0, 89.0, 30.0, 30.0, np.nan, 30.0, 120.0, 40.0])
    emission = np.array([0.0, 0.0, 88.0, 0.0, 0.0, 0.0, 0.0, 0.0])
    phase = np.array([30.0, 89.0, 90.0, 30.0, 30.0, 70.0, 120.0, 40.0])
    shadow = np.array([0, 0, 0, 1, 0, 0, 0, 0], dtype=bool)
    cube = br.as_cube(np.full((4, 8), 0.1), BANDS, quantity="radiance_factor")
    narrow = br.ExponentialPhase((-0.02,), 0, 35)
    for law in ("lunar_lambert", "akimov"):
        flat = br.normalise(cube, incidence=incidence, emission=emission, phase=phase, shadow=shadow, law=law)
        words = flat.geometry_flag.attrs["flag_meanings"].split()
        assert [words[k] for k in flat.geometry_flag.values] == [
            "used", "sun_too_low", "view_too_oblique", "cast_shadow", "no_geometry", "impossible_angles",
            "sun_too_low", "used",
        ]  # fmt: skip
        assert np.isfinite(flat.values).sum() == 8
        assert br.masked_pixels(flat)["sun_too_low"] == 2
    within = br.normalise(cube, incidence=incidence, emission=emission, phase=phase, phase_function=narrow)
    assert br.masked_pixels(within)["outside_phase_function"] == 1
    bright = br.as_cube(np.full((4, 8), 1.5), BANDS, quantity="radiance_factor")
    hapke = br.normalise(bright, incidence=incidence, emission=emission, phase=phase, law="hapke")
    assert br.masked_pixels(hapke)["brighter_than_law"] == 3


def test_the_result_says_what_was_done_and_maps_carry_it():
    cube = br.as_cube(np.full((4, 3, 3), 0.1), BANDS, quantity="radiance_factor").assign_attrs(
        instrument="imager"
    )
    flat = br.normalise(
        cube,
        incidence=np.full((3, 3), 50.0),
        emission=0,
        phase=50,
        law=br.Minnaert({480: 0.6, 600: 0.6, 700: 0.6, 830: 0.7}),
    )
    told = json.loads(flat.attrs["normalisation"])
    assert told["law"] == {"name": "minnaert", "k": {"480": 0.6, "600": 0.6, "700": 0.6, "830": 0.7}}
    assert told["to"] == [30, 0, 30]
    assert told["spread"] == ["lommel_seeliger", "lambert"]
    assert flat.attrs["instrument"] == "imager"
    assert float(flat.incidence) == 30
    assert str(flat.quantity.values) == "radiance_factor"
    maps = br.parameters(flat, br.Noise(random=0.001), ["reflectance_700"])
    assert br.masked_pixels(maps) == {"used": 9}


def test_spectra_and_single_spectra_are_normalised_too():
    one = br.as_cube([0.05, 0.06], [600, 700], quantity="radiance_factor")
    flat = br.normalise(one, incidence=60, emission=0, phase=60, law="lambert", spread=None)
    np.testing.assert_allclose(flat.values, one.values * np.sqrt(3), rtol=1e-9)
    reff = br.as_cube([0.05, 0.06], [600, 700], quantity="reflectance_factor")
    flat = br.normalise(reff, incidence=60, emission=0, phase=60, law="lambert", spread=None)
    np.testing.assert_allclose(flat.values, reff.values, rtol=1e-9)


def test_zero_phase_albedo_reaches_the_laboratory_geometry_with_a_phase_function_alone():
    lidar = br.as_cube([[0.2, 0.3]], [640], quantity="zero_phase_albedo")
    f = br.ExponentialPhase((-0.02,))
    flat = br.normalise(
        lidar, incidence=[0.0, 30.0], emission=[0.0, 30.0], phase=0, law="lambert", phase_function=f
    )
    assert str(flat.quantity.values) == "reflectance_factor"
    np.testing.assert_allclose(flat.values, lidar.values * np.exp(-0.6), rtol=1e-6)


PLANE = np.full((3, 5), 40.0)


def _bad(quantity="radiance_factor", cube=None, **changes):
    if cube is None:
        cube = br.as_cube(np.full((4, 3, 5), 0.1), BANDS, quantity=quantity)
    return br.normalise(cube, **{"incidence": PLANE, "emission": 0.0, "phase": PLANE, **changes})


@pytest.mark.parametrize(
    ("changes", "error", "message"),
    [
        ({"quantity": None}, ValueError, "normalise needs to know which reflectance quantity this is"),
        (
            {"incidence": np.deg2rad(PLANE), "phase": np.deg2rad(PLANE)},
            ValueError,
            "look like radians or cosines",
        ),
        ({"incidence": 0.5, "phase": 0.5}, ValueError, "incidence up to 0.5.*give degrees"),
        (
            {"incidence": np.linspace(-0.5, 1, 15).reshape(3, 5)},
            ValueError,
            "look like cosines, some negative",
        ),
        ({"incidence": -PLANE}, ValueError, "incidence must not be negative, got -40"),
        ({"phase": PLANE + 180}, ValueError, "phase must be at most 180°, got 220°"),
        ({"incidence": PLANE * np.nan}, ValueError, "incidence holds no finite angle"),
        ({"incidence": "steep"}, TypeError, "incidence must be angles in degrees"),
        ({"incidence": PLANE.astype(complex)}, TypeError, "incidence must be angles in degrees"),
        (
            {"incidence": PLANE[:2]},
            ValueError,
            r"incidence has shape \(2, 5\), but a band of the cube has \(3, 5\)",
        ),
        (
            {"incidence": xr.DataArray(np.full((6, 10), 40.0), dims=("y", "x"))},
            ValueError,
            "incidence is on another grid: it has {'y': 6, 'x': 10}, the cube {'y': 3, 'x': 5}; resample",
        ),
        (
            {
                "cube": br.as_cube(np.full((4, 3, 5), 0.1), BANDS, quantity="brdf").assign_coords(
                    x=np.arange(5.0)
                ),
                "incidence": xr.DataArray(PLANE, {"x": np.arange(5.0) + 0.5}, ("y", "x")),
            },
            ValueError,
            "incidence is on another grid: its x runs from 0.5 to 4.5, the cube's from 0.0 to 4.0",
        ),
        (
            {"law": "lomel_seeliger"},
            ValueError,
            "unknown photometric law 'lomel_seeliger'; did you mean lommel",
        ),
        ({"law": br.Minnaert([0.5, 0.6])}, ValueError, "k has 2 values, but the cube has 4 bands"),
        ({"to": (30, 0, 80)}, ValueError, "the phase angle must lie between 30° and 30°"),
        ({"to": 30}, ValueError, "three angles in degrees"),
        ({"slope_sigma": -1}, ValueError, "slope_sigma must be zero or above and finite, got -1"),
        ({"slope_sigma": 60}, ValueError, "well below 45°, got 60"),
        ({"shadow": PLANE / 90}, TypeError, "shadow must be true or false for every pixel, got float64"),
        ({"shadow": np.zeros((2, 2), bool)}, ValueError, r"shadow has shape \(2, 2\)"),
        ({"spread": "lambert"}, TypeError, "spread is a list of laws, got the single name"),
        ({"spread": ["hapke"]}, ValueError, "Hapke's law has none; leave it out of spread"),
        ({"least_mu0": 0}, ValueError, "nothing is divided by almost zero"),
        ({"least_mu": 1.5}, ValueError, "least_mu is a cosine from 0.01 to below 1, got 1.5"),
        (
            {"phase_function": lambda g: g},
            TypeError,
            "must be an ExponentialPhase or a TabulatedPhase, got function",
        ),
        (
            {"phase_function": br.ExponentialPhase((-0.02,), 35, 90)},
            ValueError,
            "does not reach the standard geometry's phase of 30°",
        ),
        (
            {"law": "hapke", "phase_function": br.ExponentialPhase((-0.02,))},
            ValueError,
            "give b, c, B0 and h instead",
        ),
        ({"quantity": "zero_phase_albedo"}, ValueError, "only with a phase function .opposition effect"),
        (
            {"quantity": "zero_phase_albedo", "phase_function": br.ExponentialPhase((-0.02,))},
            ValueError,
            "a zero-phase albedo has a phase angle of 0, got up to 40°",
        ),
        ({"cube": np.zeros((4, 3, 5))}, TypeError, "a cube must be a DataArray"),
        (
            {"cube": _bad()},
            ValueError,
            "the cube is already normalised .*start from the cube as it was measured",
        ),
    ],
)
def test_bad_input_is_refused(changes, error, message):
    with pytest.raises(error, match=message):
        _bad(**changes)


def test_angles_that_cannot_belong_together_everywhere_are_refused():
    # incidence in radians, the others in degrees: |i − e| ≤ g ≤ i + e holds nowhere
    with pytest.raises(ValueError, match=r"cannot belong together .*all three in degrees\?"):
        _bad(incidence=np.deg2rad(PLANE))


def test_lazy_radians_are_noticed():
    lazy = xr.DataArray(np.deg2rad(PLANE), dims=("y", "x")).chunk(y=1)
    with pytest.raises(ValueError, match="look like radians"):
        _bad(incidence=lazy, phase=lazy)


def test_masked_pixels_needs_a_normalised_cube():
    with pytest.raises(ValueError, match="nothing was normalised here"):
        br.masked_pixels(br.as_cube([0.1], [700]))
