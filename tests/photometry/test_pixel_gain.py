"""The error of a normalisation in the sigmas: common to the bands of a pixel, new from pixel to pixel."""

import numpy as np
import pytest

import bandratio as br

from .scenes import BANDS, cosines, facets, rough_height

LEVEL = br.BandRatio({700: 1}, name="level")
PURE = br.BandRatio({600: 1, 480: -1}, {600: 1, 480: 1}, name="pure")
OFFSET = br.BandRatio({700: 1, 480: 0.5}, {600: 1}, 0.01, 0.1, scale=-3, name="offset")
MANY = br.BandRatio({480: 1, 600: 1, 700: 1, 830: 1}, numerator_offset=0.2, name="many")
RATIOS = [LEVEL, PURE, OFFSET, MANY]


def _cube(dtype=float, shape=(7, 400)):
    rng = np.random.default_rng(3)
    cube = br.as_cube(rng.uniform(0.05, 0.3, (4, *shape)).astype(dtype), BANDS)
    return cube.assign_coords(pixel_gain=(("y", "x"), rng.uniform(0, 0.2, shape)))


@pytest.mark.parametrize("parts", [False, True])
@pytest.mark.parametrize("lazy", [False, True])
@pytest.mark.parametrize(("dtype", "rtol"), [(np.float64, 1e-9), (np.float32, 1e-4)])
def test_compiled_loop_agrees_with_the_readable_path(parts, lazy, dtype, rtol):
    cube = _cube(dtype)
    noise = br.Noise(0.001, 0.01, 0.02, 0.002, 0.03)
    maps = br.parameters(cube.chunk(x=150) if lazy else cube, noise, RATIOS, parts=parts)
    for ratio in RATIOS:
        random, shared = ratio.variances(cube, noise)
        np.testing.assert_allclose(maps[f"{ratio.name}_sigma"], np.sqrt(random + shared), rtol=rtol)
        if parts:
            np.testing.assert_allclose(maps[f"{ratio.name}_sigma_random"], np.sqrt(random), rtol=rtol)
            np.testing.assert_allclose(
                maps[f"{ratio.name}_sigma_shared"], np.sqrt(shared), rtol=rtol, atol=1e-12
            )


def test_it_cancels_exactly_in_pure_ratios_and_only_there():
    cube = _cube()
    noise = br.Noise(random=0.001)
    with_gain, without = (br.parameters(c, noise, RATIOS) for c in (cube, cube.drop_vars("pixel_gain")))
    np.testing.assert_array_equal(with_gain.pure_sigma, without.pure_sigma)
    # a single reflectance keeps the whole of it: σ² = random² + (gain·R)²
    expected = np.sqrt(0.001**2 + (cube.pixel_gain * cube.sel(wavelength=700)) ** 2)
    np.testing.assert_allclose(with_gain.level_sigma, expected, rtol=1e-12)


def test_composition_takes_it_too():
    gain = 0.05
    soil = br.as_cube(np.array([[0.10796], [0.17715], [0.19390]]), [415, 750, 950])
    noisy = soil.assign_coords(pixel_gain=("sample", [gain]))
    omat = br.optical_maturity(noisy, br.Noise()).omat_sigma
    # OMAT depends on the level through R750 alone: ∂OMAT/∂R750 = (R750 − 0.08)/OMAT
    value = np.hypot(0.17715 - 0.08, 0.19390 / 0.17715 - 1.19)
    assert float(omat[0]) == pytest.approx(gain * 0.17715 * (0.17715 - 0.08) / value, rel=1e-6)
    assert float(br.optical_maturity(noisy, br.Noise(common_gain=gain)).omat_sigma[0]) == pytest.approx(
        np.sqrt(2) * float(omat[0]), rel=1e-9
    )


@pytest.mark.parametrize("law", ["lambert", "lommel_seeliger", "lunar_lambert", "akimov", br.Minnaert(0.7)])
def test_slope_error_enters_with_its_true_size(law):
    """Normals turned at random by 1°: what the normalised level scatters by is what pixel_gain says."""
    sigma_deg, copies = 1.0, 4000
    rng = np.random.default_rng(8)
    i0, e0, g = 50.0, 20.0, 45.0
    # sun and viewer in the frame of the true normal
    sun = np.array([np.sin(np.deg2rad(i0)), 0, np.cos(np.deg2rad(i0))])
    mu0, mu, cos_g = cosines(i0, e0, g)
    along = (cos_g - mu0 * mu) / np.sin(np.deg2rad(i0))
    viewer = np.array([along, np.sqrt(1 - mu**2 - along**2), mu])
    tilt = np.tan(np.deg2rad(rng.normal(0, sigma_deg, (2, copies))))
    normal = np.stack([tilt[0], tilt[1], np.ones(copies)]) / np.sqrt(1 + (tilt**2).sum(0))
    incidence, emission = (np.degrees(np.arccos(direction @ normal)) for direction in (sun, viewer))
    cube = br.as_cube(np.full((4, copies), 0.1), BANDS, quantity="radiance_factor")
    scattered = br.normalise(cube, incidence=incidence, emission=emission, phase=g, law=law, spread=None)
    told = br.normalise(
        cube[:, :1], incidence=[i0], emission=[e0], phase=[g], law=law, spread=None, slope_sigma=sigma_deg
    )
    seen = float(scattered[2].std() / scattered[2].mean())
    # standard deviation of 4000 copies is known to 1.1 %; 5 % also leaves room for the bend of the law within 1°
    assert float(told.pixel_gain[0]) == pytest.approx(seen, rel=0.05)


def test_slope_error_in_a_reflectance_factor_is_that_of_d_over_mu0():
    cube = br.as_cube(np.full((1, 1), 0.1), [700], quantity="reflectance_factor")
    flat = br.normalise(
        cube, incidence=[60.0], emission=[0.0], phase=[60.0], law="lambert", slope_sigma=2.0, spread=None
    )
    # a Lambert surface's reflectance factor does not depend on its slope at all
    assert float(flat.pixel_gain[0]) == pytest.approx(0, abs=1e-9)
    assert float(flat[0, 0]) == pytest.approx(0.1, rel=1e-12)


def test_spread_between_laws_is_the_rectangular_distribution_between_the_outermost():
    cube = br.as_cube(np.full((1, 1), 0.1), [700], quantity="radiance_factor")
    flat = br.normalise(cube, incidence=[60.0], emission=[0.0], phase=[60.0], law="lommel_seeliger")
    # GUM, JCGM 100:2008, 4.3.7: u = (a+ − a−)/√12. Factors from 60/0 to 30/0: Lambert cos 30/cos 60 = 1.7321,
    # Lommel–Seeliger (2·0.8660/1.8660)/(2·0.5/1.5) = 1.3923
    assert float(flat[0, 0]) == pytest.approx(0.13923, rel=1e-4)
    assert float(flat.pixel_gain[0]) == pytest.approx((1.73205 - 1.39230) / np.sqrt(12) / 1.39230, rel=1e-4)


def test_pure_ratios_do_not_move_under_any_law_that_is_alike_in_all_bands():
    incidence, emission, phase = facets(rough_height())
    rng = np.random.default_rng(4)
    cube = br.as_cube(rng.uniform(0.05, 0.2, (4, *incidence.shape)), BANDS, quantity="radiance_factor")
    before = br.parameters(cube, names=["red_slope", "uv_vis_slope", "mafic_depth"])
    for law in ("lambert", "lommel_seeliger", "lunar_lambert", "minnaert", "akimov"):
        flat = br.normalise(
            cube, incidence=incidence, emission=emission, phase=phase, law=law,
            phase_function=br.ExponentialPhase((-0.02, 1e-4)), slope_sigma=2,
        )  # fmt: skip
        after = br.parameters(flat, names=["red_slope", "uv_vis_slope", "mafic_depth"])
        for name in before:
            np.testing.assert_allclose(after[name], before[name].where(flat.geometry_flag == 0), rtol=1e-6)


def test_means_over_regions_average_it_away():
    cube = _cube(shape=(20, 30))
    labels = np.ones((20, 30), int)
    labels[:, 20:] = 2
    ratios = [LEVEL, PURE, OFFSET]
    eager, lazy = (br.region_means(c, br.Noise(), labels, ratios) for c in (cube, cube.chunk(y=7)))
    # the same by drawing the pixels' gains: 4000 trials know a standard deviation to 1.1 %
    rng = np.random.default_rng(17)
    for place, name in enumerate((1, 2)):
        inside = labels == name
        R, gain = cube.values[:, inside], cube.pixel_gain.values[inside]
        drawn = 1 + rng.normal(size=(4000, gain.size)) * gain
        means = br.as_cube(R @ drawn.T / gain.size, BANDS)
        for ratio in ratios:
            seen = float(ratio.value(means).std())
            assert float(eager[f"{ratio.name}_sigma"][place]) == pytest.approx(seen, rel=0.05)
    for ratio in ratios:
        np.testing.assert_allclose(eager[f"{ratio.name}_sigma_shared"], 0, atol=1e-15)
        np.testing.assert_allclose(lazy[f"{ratio.name}_sigma"], eager[f"{ratio.name}_sigma"], rtol=1e-9)
    # pixels alike in colour: the pure ratio of the sums is free of it
    grey = cube.copy(
        data=np.broadcast_to(cube.values[:1] * np.array([1, 1.2, 1.4, 1.5])[:, None, None], cube.shape)
    )
    np.testing.assert_allclose(br.region_means(grey, br.Noise(), labels, [PURE]).pure_sigma, 0, atol=1e-8)
