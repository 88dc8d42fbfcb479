"""Noise is stated for the cube as it came: what normalising and converting multiply it by, in every sigma."""

import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.noise_estimate import add_misregistration
from bandratio.photometry import Geometry, Hapke

from .scenes import ALBEDO, BANDS, cosines

LEVEL = br.BandRatio({700: 1}, name="level")
PURE = br.BandRatio({700: 1, 600: -1}, {700: 1, 600: 1}, name="pure")
OFFSET = br.BandRatio({700: 1, 480: 0.5}, {600: 1}, 0.01, 0.1, name="offset")
RATIOS = [LEVEL, PURE, OFFSET]
MINNAERT = br.Minnaert({480: 0.55, 600: 0.6, 700: 0.65, 830: 0.7})
PHASE = br.ExponentialPhase({480: (-0.022,), 600: (-0.021,), 700: (-0.02,), 830: (-0.019,)})
HAPKE = Hapke(b=0.25, c=0.3)
NOISE = br.Noise(random=0.0005, shot=0.003, band_offset=0.0006)


def geometry(n, seed=1):
    """Angles [deg] that belong together, up to a low sun."""
    rng = np.random.default_rng(seed)
    incidence, emission = rng.uniform(20, 72, n), rng.uniform(0, 40, n)
    least, most = np.abs(incidence - emission), incidence + emission
    return {"incidence": incidence, "emission": emission, "phase": rng.uniform(least, most)}


def seen(law, angles):
    """Radiance factors of a surface whose radiance factor at 30/0/30 is ALBEDO, from the formulas alone."""
    mu0, mu = cosines(angles["incidence"], angles["emission"])
    g, standard = angles["phase"], Geometry(30, 0, 30)
    if isinstance(law, Hapke):
        w = law.albedo(ALBEDO / standard.mu0, standard.mu0, standard.mu, standard.phase)
        return np.array([mu0 * law.reflectance_factor(one, mu0, mu, g) for one in w])
    return np.array(
        [
            albedo * each.disk(mu0, mu, g) / each.at(standard)
            for each, albedo in zip(law.for_bands(BANDS), ALBEDO, strict=True)
        ]
    )


def cube_of(values, quantity="radiance_factor"):
    return br.as_cube(values, BANDS, quantity=quantity)


@pytest.mark.parametrize("law", [br.LunarLambert(), MINNAERT, HAPKE], ids=lambda law: law.name)
@pytest.mark.parametrize("then", [None, "reflectance_factor"])
def test_one_sigma_holds_the_truth_as_often_as_it_should(law, then):
    """68.3 % within 1 %, of 200,000 pixels with an offset drawn anew in each, as over as many calibrations."""
    n = 200_000
    angles = geometry(n)
    truth = seen(law, angles)
    rng = np.random.default_rng(2)
    spread = np.sqrt(NOISE.random**2 + NOISE.shot**2 * truth + NOISE.band_offset**2)
    flat = br.normalise(
        cube_of(truth + spread * rng.normal(size=truth.shape)), **angles, law=law, spread=None
    )
    level = ALBEDO
    if then:
        flat, level = br.convert_quantity(flat, then), ALBEDO / np.cos(np.deg2rad(30))
    maps = br.parameters(flat, NOISE, RATIOS)
    wanted = br.parameters(br.as_cube(level, BANDS), names=RATIOS)
    without = br.parameters(flat.drop_vars("brightness_factor"), NOISE, RATIOS)
    for ratio in RATIOS:
        error = (maps[ratio.name] - wanted[ratio.name]).values
        used = np.isfinite(error)
        assert used.mean() > 0.95
        inside = np.abs(error)[used] <= maps[f"{ratio.name}_sigma"].values[used]
        assert inside.mean() == pytest.approx(0.683, abs=0.01), ratio.name
        # and it is the factor that does it
        inside = np.abs(error)[used] <= without[f"{ratio.name}_sigma"].values[used]
        assert inside.mean() < 0.65, ratio.name


@pytest.mark.parametrize(
    ("law", "phase_function", "dims"),
    [
        ("lambert", None, ("sample",)),
        ("lunar_lambert", None, ("sample",)),
        ("akimov", br.ExponentialPhase((-0.02,)), ("sample",)),
        (br.LunarLambert({480: 0.5, 600: 0.55, 700: 0.6, 830: 0.65}), None, ("wavelength", "sample")),
        (MINNAERT, None, ("wavelength", "sample")),
        ("lunar_lambert", PHASE, ("wavelength", "sample")),
    ],
)  # fmt: skip
@pytest.mark.parametrize("quantity", ["radiance_factor", "reflectance_factor"])
def test_it_is_what_the_values_were_multiplied_by(law, phase_function, dims, quantity):
    angles = geometry(300)
    angles["incidence"][0] = np.nan
    cube = cube_of(np.random.default_rng(3).uniform(0.05, 0.3, (4, 300)), quantity)
    flat, lazy = (
        br.normalise(each, **angles, law=law, phase_function=phase_function)
        for each in (cube, cube.chunk(sample=70))
    )
    assert flat.brightness_factor.dims == dims
    np.testing.assert_allclose((cube * flat.brightness_factor).transpose(*cube.dims), flat, rtol=1e-6)
    assert np.isnan(flat.brightness_factor[..., 0]).all()
    assert lazy.chunks is not None
    assert lazy.coords["brightness_factor"].chunks is not None
    np.testing.assert_array_equal(lazy.brightness_factor, flat.brightness_factor)


def test_for_hapkes_law_it_is_how_the_result_grows_with_the_value():
    angles, step = geometry(200), 1e-6
    values = np.random.default_rng(5).uniform(0.02, 0.2, (4, 200))
    here, more = (br.normalise(cube_of(values + s), **angles, law=HAPKE) for s in (0, step))
    np.testing.assert_allclose((more - here).values / step, here.brightness_factor, rtol=1e-4)
    lazy = br.normalise(cube_of(values).chunk(sample=70), **angles, law=HAPKE)
    np.testing.assert_array_equal(lazy.brightness_factor, here.brightness_factor)
    # nothing seen is nothing at the standard geometry, and its noise is still known
    dark = br.normalise(cube_of(np.zeros((4, 1))), incidence=60, emission=0, phase=60, law=HAPKE)
    assert np.isfinite(dark.brightness_factor).all()
    assert np.isfinite(br.parameters(dark, NOISE, [LEVEL]).level_sigma).all()


def test_converting_multiplies_noise_and_value_alike():
    cube = cube_of(np.full((4, 2, 3), 0.1))
    incidence = np.array([[0.0, 30, 60], [45, 70, 89.9]])
    noise = br.Noise(random=0.001, shot=0.002, band_offset=0.003)
    before = br.parameters(cube, noise, [LEVEL], parts=True)
    reff = br.convert_quantity(cube, "reflectance_factor", incidence=incidence)
    after = br.parameters(reff, noise, [LEVEL], parts=True)
    assert reff.brightness_factor.dims == ("y", "x")
    # the same measurement in another quantity: its relative sigma is the same
    for part in ("_sigma", "_sigma_random", "_sigma_shared"):
        wanted = (before[f"level{part}"] / before.level).where(incidence < 89)
        np.testing.assert_allclose(after[f"level{part}"] / after.level, wanted, rtol=1e-6)


@pytest.mark.parametrize("dims", [(), ("wavelength",), ("sample",)])
def test_a_factor_that_is_alike_in_all_pixels_counts_like_a_plane_of_it(dims):
    rng = np.random.default_rng(4)
    cube = cube_of(rng.uniform(0.05, 0.3, (4, 6)))
    factor = xr.DataArray(rng.uniform(0.4, 2.5, [cube.sizes[dim] for dim in dims]), dims=dims)
    whole = (factor * xr.ones_like(cube)).transpose(*cube.dims).reset_coords(drop=True)
    short, long = (cube.assign_coords(brightness_factor=each) for each in (factor, whole))
    for random in (0.001, xr.DataArray(rng.uniform(0, 0.002, 6), dims="sample")):
        noise = br.Noise(random=random, shot=0.002, band_offset=0.003, band_gain=0.01)
        one, other = (br.parameters(each, noise, RATIOS, parts=True) for each in (short, long))
        for name in one:
            np.testing.assert_allclose(one[name], other[name], rtol=1e-9)


def test_there_and_back_leaves_the_noise_as_it_came():
    cube = cube_of(np.full((4, 5), 0.1))
    assert "brightness_factor" not in br.convert_quantity(cube, "radiance_factor").coords
    there = br.convert_quantity(cube, "brdf", incidence=60)
    assert float(there.brightness_factor) == pytest.approx(1 / np.pi / 0.5)
    back = br.convert_quantity(there, "radiance_factor", incidence=60)
    assert float(back.brightness_factor) == pytest.approx(1)
    for noise in (NOISE, br.Noise(random=xr.DataArray(np.full(5, 0.01), dims="sample"))):
        one, other = (br.parameters(each, noise, RATIOS) for each in (cube, back))
        for name in one:
            np.testing.assert_allclose(one[name], other[name], rtol=1e-6)


def test_a_cube_that_was_converted_and_then_normalised_keeps_both():
    angles = geometry(50)
    cube = cube_of(np.full((4, 50), 0.1))
    first = br.convert_quantity(cube, "reflectance_factor", incidence=angles["incidence"])
    flat = br.normalise(first, **angles, law=MINNAERT)
    np.testing.assert_allclose((cube * flat.brightness_factor).transpose(*cube.dims), flat, rtol=1e-6)


def test_errors_that_are_a_fraction_of_the_value_do_not_change():
    flat = br.normalise(cube_of(np.full((4, 50), 0.1)), **geometry(50), spread=None)
    noise = br.Noise(relative=0.01, band_gain=0.02, common_gain=0.03)
    with_factor, without = (
        br.parameters(each, noise, RATIOS) for each in (flat, flat.drop_vars("brightness_factor"))
    )
    for name in with_factor:
        np.testing.assert_array_equal(with_factor[name], without[name])


def test_values_of_pure_ratios_do_not_depend_on_it():
    cube = cube_of(np.random.default_rng(7).uniform(0.05, 0.3, (4, 500)))
    flat = br.normalise(cube, **geometry(500))
    before, after = (br.parameters(each, NOISE, [PURE]) for each in (cube, flat))
    np.testing.assert_allclose(after.pure, before.pure, rtol=1e-6)
    # neither does their sigma where all bands of a pixel were multiplied alike
    np.testing.assert_allclose(after.pure_sigma, before.pure_sigma, rtol=1e-6)


@pytest.mark.parametrize("law", ["lunar_lambert", MINNAERT])
def test_means_over_regions_take_it_too(law):
    """Against many scenes: random errors new in each pixel, offsets the same in a scene."""
    shape, trials = (12, 20), 4000
    angles = {name: plane.reshape(shape) for name, plane in geometry(shape[0] * shape[1]).items()}
    cube = cube_of(np.random.default_rng(8).uniform(0.03, 0.1, (4, *shape)))
    flat = br.normalise(cube, **angles, law=law, spread=None)
    labels = np.ones(shape, int)
    labels[:, 12:] = 2
    noise = br.Noise(random=0.004, shot=0.01, band_offset=0.0005)
    told = br.region_means(flat, noise, labels, RATIOS)
    xr.testing.assert_allclose(br.region_means(flat.chunk(y=5), noise, labels, RATIOS), told)
    factor = np.broadcast_to(flat.brightness_factor.values, cube.shape).reshape(4, 1, -1)
    rng = np.random.default_rng(9)
    spread = np.sqrt(0.004**2 + 0.01**2 * cube.values).reshape(4, 1, -1)
    means = []
    for _ in range(20):
        noisy = cube.values.reshape(4, 1, -1) + spread * rng.normal(size=(4, trials // 20, labels.size))
        noisy = (noisy + 0.0005 * rng.normal(size=(4, trials // 20, 1))) * factor
        means.append(np.stack([noisy[..., labels.reshape(-1) == name].mean(-1) for name in (1, 2)], axis=1))
    trial = xr.DataArray(
        np.concatenate(means, axis=2), {"wavelength": BANDS}, ("wavelength", "region", "trial")
    )
    for ratio in RATIOS:
        values = ratio.value(trial).values
        # 4000 trials know a standard deviation to 1.1 %
        np.testing.assert_allclose(told[f"{ratio.name}_sigma"], values.std(axis=1), rtol=0.045)
        found = np.corrcoef(values)[0, 1]
        covariance = told[f"{ratio.name}_covariance"].values
        assert covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]) == pytest.approx(
            found, abs=0.06
        )


@pytest.mark.parametrize("law", ["lunar_lambert", MINNAERT, HAPKE])
def test_noise_is_estimated_for_the_cube_as_it_came(law):
    rng = np.random.default_rng(10)
    rows = np.linspace(30, 70, 128)[:, None] * np.ones((1, 128))
    angles = {"incidence": rows, "emission": 0.0, "phase": rows}
    image = np.full((4, 128, 128), 0.1) + rng.normal(scale=0.002, size=(4, 128, 128))
    flat = br.normalise(cube_of(image), **angles, law=law)
    reff = br.convert_quantity(flat, "reflectance_factor")
    estimate = br.estimate_noise(reff).random
    # Immerkær's estimate from 16,000 pixels scatters by about 1 %
    assert list(estimate.values()) == pytest.approx([0.002] * 4, rel=0.05)
    # what a shift of the bands adds is an error of the cube as it is
    plain = br.as_cube(reff.drop_vars(["brightness_factor", "pixel_gain"], errors="ignore"))
    sigmas = [
        br.parameters(each, add_misregistration(noise, each, 0.3), [LEVEL]).level_sigma
        for each, noise in ((reff.drop_vars("pixel_gain", errors="ignore"), br.Noise()), (plain, br.Noise()))
    ]
    np.testing.assert_allclose(*sigmas, rtol=1e-5)


def test_compositions_take_it_too():
    soil = np.array([[0.10796], [0.17715], [0.19390]])
    cube = br.as_cube(soil, [415, 750, 950])
    doubled = cube.assign_coords(brightness_factor=("sample", [2.0]))
    first, second = br.Noise(random=0.001, band_offset=0.002), br.Noise(random=0.002, band_offset=0.004)
    for method in (br.iron_oxide, br.titanium_oxide, br.optical_maturity):
        one, other = method(doubled, first), method(cube, second)
        for name in other.data_vars:
            np.testing.assert_allclose(one[name], other[name], rtol=1e-9)
