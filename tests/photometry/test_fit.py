"""Photometric parameters from scenes whose truth is known, with intervals that hold what they promise."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from scipy.stats import binom

import bandratio as br
from bandratio.photometry.fit import fit_photometry

from .scenes import BANDS, facets, rough_height

K = np.array([0.55, 0.6, 0.65, 0.7])


def scene(law, seed, phase_function=None, size=96, variety=0.05, outliers=0.0):
    """Rough terrain of one kind of ground whose brightness varies smoothly, seen under two suns, joined along y."""
    rng = np.random.default_rng(seed)
    parts = [
        facets(rough_height(size, 18, seed + k), sun, (100, 60))
        for k, sun in enumerate([(60, 55), (250, 40)])
    ]
    incidence, emission, phase = (np.concatenate(planes) for planes in zip(*parts, strict=True))
    mu0, mu = np.cos(np.deg2rad([incidence, emission]))
    ground = gaussian_filter(rng.normal(size=(len(BANDS), *mu0.shape)), (0, 1.5, 1.5))
    ground *= variety / ground.std()
    image = np.empty_like(ground)
    with np.errstate(all="ignore"):
        for band, one in enumerate(law.for_bands(BANDS)):
            f = 1.0 if phase_function is None else phase_function.for_bands(BANDS)[band].value(phase)
            image[band] = 0.1 * f * one.disk(mu0, mu, phase) * np.exp(ground[band])
    deposit = rng.random(mu0.shape) < outliers
    image[:, deposit] *= 2
    cube = br.as_cube(image, BANDS, quantity="radiance_factor")
    return cube, {"incidence": incidence, "emission": emission, "phase": phase}


@pytest.mark.parametrize(
    ("name", "law"),
    [
        ("minnaert", br.Minnaert(dict(zip(BANDS, K, strict=True)))),
        ("lunar_lambert", br.LunarLambert(dict(zip(BANDS, K, strict=True)))),
    ],
)
def test_intervals_cover_the_truth_as_often_as_they_promise(name, law):
    hits = total = 0
    for seed in range(12):
        cube, angles = scene(law, 100 * seed, size=64)
        found = fit_photometry(cube, **angles, law=name)
        hits += int(((found.lower[:, 0] <= K) & (found.upper[:, 0] >= K)).sum())
        total += K.size
        assert np.abs(found.estimates[:, 0] - K).max() < 0.1
    # 48 intervals at 95 %: below the 1e-4 quantile of the binomial they do not hold
    assert hits >= binom.ppf(1e-4, total, 0.95)


def test_phase_function_and_law_together():
    f = br.ExponentialPhase({nm: (-0.02 - 0.001 * band, 5e-5) for band, nm in enumerate(BANDS)})
    law = br.Minnaert(dict(zip(BANDS, K, strict=True)))
    cube, angles = scene(law, 7, f, variety=0.02)
    # two suns make two phase angles, so a straight line is what can be told; between them it must agree
    found = fit_photometry(cube, **angles, order=1)
    g = np.unique(np.round(angles["phase"], 6))
    assert g.size == 2
    for band, (fitted, true) in enumerate(
        zip(found.phase_function.for_bands(BANDS), f.for_bands(BANDS), strict=True)
    ):
        seen = np.log(fitted.value(g[1]) / fitted.value(g[0]))
        wanted = np.log(true.value(g[1]) / true.value(g[0]))
        assert seen == pytest.approx(wanted, abs=0.02), band
    assert np.abs(found.estimates[:, 0] - K).max() < 0.05


def test_the_fitted_law_flattens_the_scene():
    law = br.Minnaert(dict(zip(BANDS, K, strict=True)))
    cube, angles = scene(law, 3, variety=1e-4)
    found = fit_photometry(cube, **angles)
    # one phase function for both suns is left out, since the scene was made without one
    flat = br.normalise(cube, **angles, law=found.law)
    assert float((flat.std(("y", "x")) / flat.mean(("y", "x"))).max()) < 0.002
    assert float((cube.std(("y", "x")) / cube.mean(("y", "x"))).min()) > 0.1
    np.testing.assert_allclose(found.scatter, 1e-4, rtol=0.2)


def test_bright_deposits_hardly_move_it():
    law = br.Minnaert(0.6)
    cube, angles = scene(law, 5, variety=0.02, outliers=0.1)
    found = fit_photometry(cube, **angles)
    np.testing.assert_allclose(found.estimates[:, 0], 0.6, atol=0.02)


def test_reflectance_factors_and_lazy_cubes_give_the_same():
    cube, angles = scene(br.LunarLambert(0.5), 9)
    first = fit_photometry(cube, **angles, law="lunar_lambert").estimates
    inside = np.cos(np.deg2rad(angles["incidence"])) > 0.2
    cube = cube.where(xr_plane(inside))
    factor = br.convert_quantity(
        cube, "reflectance_factor", incidence=np.where(inside, angles["incidence"], 0)
    )
    np.testing.assert_allclose(
        fit_photometry(factor, **angles, law="lunar_lambert").estimates, first, rtol=1e-5
    )
    lazy = cube.chunk(y=50)
    np.testing.assert_allclose(
        fit_photometry(lazy, **angles, law="lunar_lambert").estimates, first, rtol=1e-5
    )


def xr_plane(array):
    import xarray as xr

    return xr.DataArray(array, dims=("y", "x"))


def test_the_table_names_what_it_holds():
    cube, angles = scene(br.Minnaert(0.6), 2)
    table = fit_photometry(cube, **angles, order=1).table()
    assert list(table) == ["k", "k_lower", "k_upper", "c1", "c1_lower", "c1_upper", "scatter"]
    assert list(table.index) == BANDS
    assert (table.k_lower < table.k).all()


def _level(i=40.0, spread=0.5, shape=(60, 60), quantity="radiance_factor"):
    """Level ground seen from above: phase is incidence."""
    incidence = i + spread * np.linspace(-1, 1, shape[1]) * np.ones(shape)
    cube = br.as_cube(np.full((2, *shape), 0.1), [600, 700], quantity=quantity)
    return cube, {"incidence": incidence, "emission": 0.0, "phase": incidence}


@pytest.mark.parametrize(
    ("made", "changes", "message"),
    [
        (_level(), {}, r"varies too little to tell k: nine tenths of the pixels have incidence 39\.\d to 40"),
        (_level(), {"law": "lunar_lambert"}, "varies too little to tell L"),
        (
            _level(spread=30),
            {"order": 2},
            "k and the phase function cannot be told apart: slope and phase vary together",
        ),
        (
            scene(br.Minnaert(0.6), 1),
            {"order": 1, "phase": 40.0},
            "phase varies too little for a phase function: 40.0",
        ),
        (_level(i=85, spread=2), {}, "only 0 pixels are lit, seen and complete; a fit wants 500 or more"),
        (_level(shape=(5, 5), spread=30), {}, "only 25 pixels are lit"),
        (_level(spread=30, quantity=None), {}, "fit_photometry needs to know which reflectance quantity"),
        (
            _level(spread=30, quantity="zero_phase_albedo"),
            {},
            "fit_photometry needs radiance_factor, .*zero phase",
        ),
        (_level(spread=30), {"law": "hapke"}, "law must be one of minnaert, lunar_lambert, got 'hapke'"),
        (_level(spread=30), {"order": 5}, "order is how many phase coefficients are fitted, 0 to 3, got 5"),
        (_level(spread=30), {"confidence": 95}, "confidence must lie between 0 and 1"),
        (_level(spread=30), {"least_cosine": 0}, "least_cosine must lie from 0.01 to below 1"),
        (_level(spread=30), {"incidence": 0.5, "phase": 0.5}, "look like radians or cosines"),
    ],
)
def test_what_cannot_be_told_is_refused_with_the_reason(made, changes, message):
    cube, angles = made
    with pytest.raises(ValueError, match=message):
        fit_photometry(cube, **{**angles, **changes})
