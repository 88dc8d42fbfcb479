"""The false discovery promise, kept on simulated scenes whose truth is known."""

import numpy as np
import pytest
import xarray as xr

import bandratio as br

LIMIT, FLAT = 0.17, 7.0
SCENES, PIXELS = 220, 2500
SIGMA_R, SIGMA_S, GAIN = 0.002, 0.8, 0.02


def false_share(share, gain, correlation, *, dark=False, seed=0):
    """Share of false ones among the candidates of each scene.

    The ground that is no deposit is as hard as it can be: a third each lies at the limit in brightness and clearly
    beyond in slope, the other way round, and well inside both.
    """
    rng = np.random.default_rng([seed, int(1000 * share), int(100 * gain), int(10 * correlation + 20), dark])
    sign = -1 if dark else 1
    found = np.empty(SCENES)
    for scene in range(SCENES):
        true = rng.random(PIXELS) < share
        kind = rng.integers(0, 3, PIXELS)
        R = np.select(
            [true, kind == 0, kind == 1],
            [LIMIT + sign * 0.03, LIMIT, LIMIT + sign * 0.05],
            LIMIT - sign * 0.03,
        )
        S = np.select([true, kind == 0, kind == 1], [FLAT - 5, FLAT - 9, FLAT], FLAT + 4)
        first, other = rng.standard_normal((2, PIXELS))
        second = correlation * first + np.sqrt(1 - correlation**2) * other
        measured = R * (1 + gain * rng.standard_normal()) + SIGMA_R * first
        maps = xr.Dataset(
            {
                "reflectance_700": ("sample", measured),
                "reflectance_700_sigma": ("sample", np.hypot(SIGMA_R, gain * measured)),
                "red_slope": ("sample", S + SIGMA_S * second),
                "red_slope_sigma": ("sample", np.full(PIXELS, SIGMA_S)),
            },
            attrs={"noise": f'{{"random": {SIGMA_R}, "common_gain": {gain}}}', "wavelengths": "600, 700 nm"},
        )
        limits = {"darker_than" if dark else "brighter_than": LIMIT, "flatter_than": FLAT}
        flag = br.pyroclastic_flags(maps, **limits).flag.values >= 3
        found[scene] = (flag & ~true).sum() / max(flag.sum(), 1)
        if share == 0.2 and scene == 0 and not gain:
            assert flag[true].mean() > 0.5  # it does find them
    return found


@pytest.mark.parametrize("correlation", [0.0, 0.8, -0.8])
@pytest.mark.parametrize("gain", [0.0, GAIN])
@pytest.mark.parametrize("share", [0.0, 0.001, 0.2])
def test_bright_candidates(share, gain, correlation):
    found = false_share(share, gain, correlation)
    assert found.mean() <= 0.05 + 3 * max(found.std() / SCENES**0.5, (0.05 * 0.95 / SCENES) ** 0.5)


@pytest.mark.parametrize("gain", [0.0, 5 * GAIN])
@pytest.mark.parametrize("share", [0.0, 0.2])
def test_dark_candidates(share, gain):
    found = false_share(share, gain, 0.0, dark=True)
    assert found.mean() <= 0.05 + 3 * max(found.std() / SCENES**0.5, (0.05 * 0.95 / SCENES) ** 0.5)


@pytest.mark.parametrize("mosaic", [False, True])
@pytest.mark.parametrize("part", ["band_gain", "band_offset"])
def test_threshold_from_the_scene(part, mosaic):
    """Whole cubes with errors that all pixels, or the pixels of an image, share; the threshold is the scene's own.

    What is true is decided against the same quantile of the true maps. The dark part of the scene, where an offset
    moves the slope most, is where the slope's threshold comes from.
    """
    rng = np.random.default_rng([mosaic, part == "band_gain"])
    size = {"band_gain": 0.02, "band_offset": 0.003}[part]
    shares = []
    labels = np.repeat(np.arange(4), 800)
    for _ in range(60):
        R = rng.choice([0.06, 0.2], p=[0.7, 0.3], size=3200) * rng.uniform(0.95, 1.05, 3200)
        S = rng.normal(9, 2.5, 3200)
        true_cube = np.stack([R * (1 - S / 200) / (1 + S / 200), R])
        groups = labels if mosaic else np.zeros(3200, dtype=int)
        shared = size * rng.standard_normal((2, 4))[:, groups]
        measured = true_cube * (1 + shared) if part == "band_gain" else true_cube + shared
        measured = measured + rng.normal(scale=0.0005, size=measured.shape)
        noise = br.Noise(random=0.0005, **{part: size}, shared_within=labels if mosaic else None)
        maps = br.parameters(
            br.as_cube(measured, [600, 700]), noise, ["red_slope", "reflectance_700"], parts=True
        )
        truth = br.parameters(br.as_cube(true_cube, [600, 700]), names=["red_slope", "reflectance_700"])
        limits = [
            (br.scene_threshold(m, "reflectance_700", 0.6), br.scene_threshold(m, "red_slope", 0.1))
            for m in (maps, truth)
        ]
        flags = br.pyroclastic_flags(maps, brighter_than=limits[0][0], flatter_than=limits[0][1])
        found = flags.flag.values == 3
        true = (truth["reflectance_700"] > limits[1][0].value) & (truth["red_slope"] < limits[1][1].value)
        shares.append((found & ~true.values).sum() / max(found.sum(), 1))
    assert np.mean(shares) <= 0.05 + 3 * max(np.std(shares) / 60**0.5, (0.05 * 0.95 / 60) ** 0.5)
