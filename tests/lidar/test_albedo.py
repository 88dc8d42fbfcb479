from dataclasses import replace

import dask.array as da
import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.lidar.equation import albedo_per_energy, live_fraction, sigma_of_likely_count
from bandratio.lidar.returns import QUALITY

COUNTS = {"constant": 0.02, "transmitted": 4e12, "energy_per_count": 1.0}  # K [m²], E_t [photons]


def _calibration(red=None, infrared=None, **both):
    return br.LidarCalibration(
        red=br.LidarChannel(**COUNTS, **(red or {})),
        infrared=br.LidarChannel(**COUNTS, **(infrared or {})),
        **both,
    )


def _mean_counts(albedo, range_m, incidence_deg):
    return 0.02 * 4e12 * albedo * np.cos(np.radians(incidence_deg)) / range_m**2


def test_albedo_inverts_the_lidar_equation_written_out():
    # E_r = E_t · ρ · cos i · A_r·η / (π R²): a 0.5 m² aperture, efficiency 0.3, 30 km, 25°, 10 mJ
    rho, aperture, efficiency, range_m, tilt, transmitted = 0.16, 0.5, 0.3, 30e3, np.radians(25), 0.01
    energy = transmitted * rho * np.cos(tilt) * aperture * efficiency / (np.pi * range_m**2)
    channel = br.LidarChannel(constant=aperture * efficiency / np.pi, transmitted=transmitted)
    returns = br.as_returns([energy], [2 * energy], range_m=[range_m], incidence_deg=[25.0], units="J")
    albedos = br.albedo_from_returns(returns, br.LidarCalibration(red=channel, infrared=channel, units="J"))
    assert float(albedos["red"].values[0]) == pytest.approx(rho)
    assert float(albedos["infrared"].values[0]) == pytest.approx(2 * rho)
    assert albedos["quantity"].item() == "zero_phase_albedo"


@pytest.mark.parametrize("background", [0.0, 200.0])
@pytest.mark.parametrize("subtracted", [True, False])
def test_sigma_covers_poisson_counts_background_calibration_and_jitter(background, subtracted):
    # one true albedo in each of many missions, whose constants differ from the stated ones by their stated error
    rng = np.random.default_rng(4)
    n = 60_000
    truth, range_m, tilt = 0.16, 8e3, 30.0
    gain = 1 + 0.03 * rng.normal(size=n)
    level = truth * gain * (1 + 0.02 * rng.normal(size=n))
    counts = rng.poisson(_mean_counts(level, range_m * (1 + 0.002 * rng.normal(size=n)), tilt) + background)
    counts = counts - background if subtracted else counts
    part = {
        "constant_sigma": 0.03 * 0.02,
        "relative": 0.02,
        "background": background,
        "background_subtracted": subtracted,
    }
    returns = br.as_returns(
        counts,
        counts,
        zero="dropout",
        range_m=np.full(n, range_m),
        incidence_deg=np.full(n, tilt),
        units="count",
    )
    albedos = br.albedo_from_returns(returns, _calibration(part, part, range_sigma_m=0.002 * range_m))
    deviation = (albedos["red"] - truth) / albedos["red_sigma"]
    within = float((abs(deviation) < 1).mean())
    skew = 0.005  # of counts and calibration, a few per mille
    assert abs(within - 0.6827) < 4 * np.sqrt(0.68 * 0.32 / n) + skew
    parts = albedos["red_sigma_random"] ** 2 + albedos["red_sigma_shared"] ** 2
    np.testing.assert_allclose(albedos["red_sigma"] ** 2, parts)
    np.testing.assert_allclose(albedos["red_sigma_shared"], 0.03 * albedos["red"])
    scaling = albedos["red_relative"] * albedos["red"]
    unscaled = albedos["red_sigma_additive"] ** 2 + albedos["red_sigma_common"] ** 2
    np.testing.assert_allclose(albedos["red_sigma_random"] ** 2, unscaled + scaling**2)
    np.testing.assert_allclose(albedos["red_sigma_common"], 2 * 0.002 * albedos["red"])


def test_range_and_incidence_move_both_channels_alike():
    rng = np.random.default_rng(6)
    n = 200_000
    true_range = 8e3 * (1 + 0.01 * rng.normal(size=n))
    true_tilt = 40 + 0.8 * rng.normal(size=n)
    energies = [_mean_counts(rho, true_range, true_tilt) for rho in (0.2, 0.3)]
    returns = br.as_returns(*energies, range_m=np.full(n, 8e3), incidence_deg=np.full(n, 40.0))
    quiet = {"constant": 0.02, "transmitted": 4e12}
    channel = br.LidarChannel(**quiet)
    albedos = br.albedo_from_returns(
        returns,
        br.LidarCalibration(red=channel, infrared=channel, range_sigma_m=80.0, incidence_sigma_deg=0.8),
    )
    seen = np.cov(albedos["red"], albedos["infrared"])
    assert float(albedos["covariance"].mean()) == pytest.approx(seen[0, 1], rel=0.03)
    assert float((albedos["red_sigma"] ** 2).mean()) == pytest.approx(seen[0, 0], rel=0.03)


def test_dropouts_saturation_and_missing_are_told_apart():
    returns = br.as_returns(
        [50.0, 0.0, 60.0, np.nan, 5000.0],
        [0.0, 40.0, 9000.0, 30.0, 10.0],
        zero={"red": "missing", "infrared": "dropout"},
        saturated={"infrared": 8000},
        range_m=[1e5, 1e5, 1e5, 1e5, 2e5],
        incidence_deg=[0, 0, 0, 0, 60],
    )
    albedos = br.albedo_from_returns(returns, _calibration({"saturation": 4000.0}, {"limit": 4.0}))
    words = {value: word for word, value in QUALITY.items()}
    assert [words[int(v)] for v in albedos["red_quality"]] == [
        "good",
        "missing",
        "good",
        "missing",
        "saturated",
    ]
    assert [words[int(v)] for v in albedos["infrared_quality"]] == [
        "dropout",
        "good",
        "saturated",
        "good",
        "good",
    ]
    assert np.isnan(albedos["red"].values[[1, 3, 4]]).all()
    assert np.isnan(albedos["infrared"].values[[0, 2]]).all()
    # the limit as an albedo, for each shot: 4 counts at its range and incidence; none where it saturated
    expected = 4 / _mean_counts(1.0, np.array([1e5, 1e5, np.nan, 1e5, 2e5]), np.array([0, 0, 0, 0, 60]))
    np.testing.assert_allclose(albedos["infrared_limit"], expected)
    # the dropout's sigma is that of a return at the limit: √(n + 1) counts
    assert float(albedos["infrared_sigma_random"][0]) == pytest.approx(np.sqrt(5) / 4 * expected[0])
    assert albedos["infrared_quality"].attrs["flag_meanings"] == "good dropout saturated missing"


def test_dead_time_is_undone_and_its_noise_stated():
    # non-paralysable counter, counts simulated one by one (an outside way to the same mean and variance)
    rng = np.random.default_rng(8)
    rate, gate, dead, n = 3e6, 1e-4, 100e-9, 4000
    waits = rng.exponential(1 / rate, (n, 500)) + dead
    waits[:, 0] -= dead
    counts = (np.cumsum(waits, axis=1) < gate).sum(axis=1).astype(float)
    assert counts.mean() == pytest.approx(rate * gate / (1 + rate * dead), rel=0.01)
    part = {"dead_time_s": dead, "gate_s": gate}
    returns = br.as_returns(counts, counts, range_m=np.full(n, 1e4), incidence_deg=np.zeros(n))
    albedos = br.albedo_from_returns(returns, _calibration(part, part))
    truth = rate * gate / _mean_counts(1.0, 1e4, 0)
    assert float(albedos["red"].mean()) == pytest.approx(truth, rel=0.005)
    assert float(albedos["red_sigma_random"].mean()) == pytest.approx(float(albedos["red"].std()), rel=0.05)
    np.testing.assert_allclose(albedos["red_live_fraction"], 1 - counts * dead / gate)
    assert live_fraction(2 * gate / dead, dead, gate) == 0
    blind = _calibration(part | {"least_live": 0.9}, part)
    assert (br.albedo_from_returns(returns, blind)["red_quality"] == QUALITY["saturated"]).all()


def test_opposition_ratio_divides_the_red():
    returns = br.as_returns([100.0], [100.0], range_m=[1e5], incidence_deg=[0])
    plain, corrected = (
        br.albedo_from_returns(returns, _calibration({"limit": 2.0}), opposition_ratio=q) for q in (1.0, 1.1)
    )
    for name in ("red", "red_sigma", "red_sigma_additive", "red_limit"):
        assert float(plain[name][0]) == pytest.approx(1.1 * float(corrected[name][0]))
    assert float(plain["infrared"][0]) == float(corrected["infrared"][0])


def test_lazy_returns_give_the_same_lazily():
    rng = np.random.default_rng(9)
    n = 1000
    arrays = [
        rng.poisson(_mean_counts(rho, 1e5, 20)).astype(float) for rho in (0.2 * np.ones(n), 0.3 * np.ones(n))
    ]
    shot = {"range_m": np.full(n, 1e5), "incidence_deg": np.full(n, 20.0)}
    eager = br.as_returns(*arrays, zero="dropout", saturated=90, **shot)
    lazy = br.as_returns(
        *(da.from_array(a, chunks=300) for a in arrays),
        zero="dropout",
        saturated=90,
        **{name: da.from_array(a, chunks=300) for name, a in shot.items()},
    )
    assert isinstance(lazy["red"].data, da.Array)
    known = _calibration({"limit": 3.0}, {"limit": 3.0}, incidence_sigma_deg=1.0)
    expected = br.albedo_from_returns(eager, known)
    found = br.albedo_from_returns(lazy, known)
    assert all(isinstance(variable.data, da.Array) for variable in found.data_vars.values())
    xr.testing.assert_allclose(found.compute(), expected)


def test_unknown_incidence_keeps_the_ratio_and_says_so():
    returns = br.as_returns([100.0], [50.0], range_m=[1e5])
    albedos = br.albedo_from_returns(returns, _calibration(), incidence_deg="unknown")
    assert "incidence_deg" not in albedos
    assert "too low" in albedos.attrs["incidence"]
    given = br.albedo_from_returns(returns, _calibration(), incidence_deg=[60])
    assert float(given["red"][0]) == pytest.approx(2 * float(albedos["red"][0]))
    assert float((given["red"] / given["infrared"])[0]) == pytest.approx(2.0)
    scalar = br.albedo_from_returns(returns, _calibration(), incidence_deg=60)
    assert float(scalar["incidence_deg"][0]) == 60


def test_arguments_for_the_flags_carry_each_error_once():
    returns = br.as_returns(
        [100.0, 90.0], [50.0, 0.0], zero="dropout", range_m=[1e5, 1e5], incidence_deg=[0, 30]
    )
    part = {"relative": 0.03, "constant_sigma": 0.0004, "limit": 2.0}
    albedos = br.albedo_from_returns(returns, _calibration(part, part))
    given = br.flag_arguments(albedos)
    assert given["gain_sigma"] == pytest.approx(0.02 * np.sqrt(2))
    total = np.sqrt(given["sigma_red"] ** 2 + (given["relative_red"] * albedos["red"]) ** 2)
    np.testing.assert_allclose(total, albedos["red_sigma_random"])
    assert all(
        np.isfinite(given[name]).all() for name in ("sigma_infrared", "relative_infrared", "covariance")
    )
    assert np.isfinite(given["infrared_limit"].values[1])
    np.testing.assert_array_equal(given["incidence_deg"], [0, 30])


@pytest.mark.parametrize("infrared_counts", [3, 10, 30, 100])
def test_few_infrared_counts_over_a_precise_red_raise_no_false_alarm(infrared_counts):
    # ice-free ground on the edge of its list (ilmenite, half in shade), red a hundred times better measured: with
    # sigma taken at the measured count the p-values were up to 240 times too small
    n, level = 300_000, 0.5
    red_counts = 100 * infrared_counts
    rng = np.random.default_rng(infrared_counts)
    red, infrared = rng.poisson(red_counts, n), rng.poisson(infrared_counts, n)
    channels = [
        br.LidarChannel(constant=1.0, transmitted=mean / (level * albedo), energy_per_count=1, limit=0.5)
        for mean, albedo in ((red_counts, 0.0553), (infrared_counts, 0.0599))
    ]
    returns = br.as_returns(red, infrared, zero="dropout", range_m=np.ones(n), incidence_deg=np.full(n, 30.0))
    channels = [
        replace(channel, transmitted=channel.transmitted / np.cos(np.radians(30))) for channel in channels
    ]
    albedos = br.albedo_from_returns(returns, br.LidarCalibration(red=channels[0], infrared=channels[1]))
    given = br.flag_arguments(albedos)
    # at the laboratory's geometry, where the listed albedos hold and the ground lies on the hull's edge
    given = {
        name: given[name].to_numpy()
        for name in ("red", "infrared", "sigma_red", "sigma_infrared", "infrared_limit")
    }
    p = br.ice_flags(**given, ice_free={"soil": (0.15981, 0.26907), "ilmenite": (0.0553, 0.0599)})["p_value"]
    for nominal in (1e-2, 1e-3, 1e-4, 1e-5):
        alarms = int((p <= nominal).sum())
        assert alarms <= nominal * n + 4 * np.sqrt(nominal * n) + 1
    at_count = given["sigma_infrared"] / albedos["infrared_per_count"]
    assert (at_count[infrared > 0] > np.sqrt(infrared[infrared > 0] + 1)).all()


def test_sigma_of_a_likely_count_solves_its_equation():
    # Wilson's score: the mean μ from which the measured n lies z√μ below
    for n, z in ((0.0, 5.0), (4.0, 3.0), (1000.0, 5.0)):
        mean = sigma_of_likely_count(np.sqrt(n), 1.0, z) ** 2
        assert mean - n == pytest.approx(z * np.sqrt(mean))
    assert sigma_of_likely_count(0.3, 0.0) == 0.3


def test_equation_by_hand():
    # R² / (K E_t cos i) = 100² / (2 · 4 · 0.5)
    assert albedo_per_energy(100.0, 60.0, 4.0, 2.0) == pytest.approx(2500)


GOOD = br.as_returns([100.0], [50.0], range_m=[1e5], incidence_deg=[0.0], units="count")


@pytest.mark.parametrize(
    ("returns", "calibration", "options", "error", "message"),
    [
        (
            np.ones(3),
            _calibration(),
            {},
            TypeError,
            "Dataset as from open_returns or as_returns, got ndarray",
        ),
        (
            xr.Dataset({"red": ("shot", [1.0])}),
            _calibration(),
            {},
            ValueError,
            "no red_quality, infrared, .*stored zero",
        ),
        (GOOD, {"red": 1}, {}, TypeError, "LidarCalibration, got dict"),
        (GOOD.drop_vars("range_m"), _calibration(), {}, ValueError, r"no range_m \[m\].*returns.assign"),
        (
            br.as_returns([5.0], [0.0], zero="dropout", range_m=[1e5], incidence_deg=[0]),
            _calibration(),
            {},
            ValueError,
            "1 infrared returns are dropouts, .*no limit; give LidarChannel.limit=…",
        ),
        (GOOD.drop_vars("incidence_deg"), _calibration(), {}, ValueError, 'no incidence_deg.*"unknown"'),
        (
            GOOD,
            _calibration(),
            {"incidence_deg": "flat"},
            ValueError,
            "angles in degrees or \"unknown\", got 'flat'",
        ),
        (GOOD, _calibration(), {"incidence_deg": [1, 2]}, ValueError, "one angle or one for each of 1 shots"),
        (GOOD, _calibration(), {"incidence_deg": 95}, ValueError, r"\[0, 90\) degrees, got 95"),
        (GOOD, _calibration(), {"opposition_ratio": 0}, ValueError, "opposition_ratio must be above zero"),
        (GOOD, _calibration(units="J"), {}, ValueError, "in 'count', but the calibration holds for 'J'"),
        (
            GOOD.assign(range_m=("shot", [-5.0])),
            _calibration(),
            {},
            ValueError,
            "range_m must be positive, got -5 m",
        ),
        (
            GOOD.assign(transmitted_red=("shot", [0.0])),
            _calibration(),
            {},
            ValueError,
            "transmitted_red must be positive, got 0",
        ),
        (
            br.as_returns([1e5] * 4, [1e5] * 4, range_m=[1e5] * 4, incidence_deg=[0] * 4),
            _calibration(),
            {},
            ValueError,
            "median red albedo would be 1.25e.04.*units of energy",
        ),
        (
            GOOD,
            br.LidarCalibration(red=br.LidarChannel(constant=1.0), infrared=br.LidarChannel(constant=1.0)),
            {},
            ValueError,
            "transmitted energy of the red channel is not known.*column transmitted_red",
        ),
    ],
)
def test_bad_input(returns, calibration, options, error, message):
    with pytest.raises(error, match=message):
        br.albedo_from_returns(returns, calibration, **options)


def test_flags_refuse_what_is_no_albedos():
    with pytest.raises(ValueError, match=r"hold no red_sigma_additive.*albedo_from_returns"):
        br.flag_arguments(GOOD)


@pytest.mark.parametrize(
    ("red", "infrared", "options", "error", "message"),
    [
        (
            [1.0, 0.0],
            [1.0, 2.0],
            {},
            ValueError,
            "red holds 1 stored zeros of 2.*zero='dropout'.*zero='missing'",
        ),
        ([1.0, 0.0], [1.0, 2.0], {"zero": "nothing"}, ValueError, "one of dropout, missing, got 'nothing'"),
        ([1.0], [1.0, 2.0], {}, ValueError, "red has 1 shots, but infrared has 2"),
        ([[1.0]], [1.0], {}, ValueError, r"one value for each shot, got the shape \(1, 1\)"),
        (["a"], [1.0], {}, TypeError, "red must be real numbers"),
        ([1.0], [1.0], {"rnage_m": [1.0]}, TypeError, "no 'rnage_m'; did you mean range_m"),
        ([1.0], [1.0], {"range_m": [0.0]}, ValueError, "range_m must be positive, got 0 m at 1 shots"),
        ([1.0], [1.0], {"incidence_deg": [-3.0]}, ValueError, "got -3 at 1 shots; a scan angle with a sign"),
        ([1.0], [1.0], {"saturated": {"green": 3}}, ValueError, "one of red, infrared, got 'green'"),
        ([1.0], [1.0], {"saturated": [True]}, TypeError, "saturated must be one value or"),
        (
            [1.0],
            [1.0],
            {"saturated": {"red": [1.5]}},
            ValueError,
            "an energy or one bool for each of 1 shots",
        ),
        ([1.0], [1.0], {"crs": "the plain"}, ValueError, "crs must be a map projection.*got 'the plain'"),
    ],
)
def test_bad_returns(red, infrared, options, error, message):
    with pytest.raises(error, match=message):
        br.as_returns(red, infrared, **options)
