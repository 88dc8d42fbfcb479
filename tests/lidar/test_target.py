import numpy as np
import pytest

import bandratio as br


def _shots(rng, n, gains, *, reflectance=(0.99, 0.98), background=0.0, jitter=0.0, distances=(20.0, 30.0)):
    """Poisson counts of n shots at a target; E_t·K·ρ·cos i/R² with K as given, jitter common to both channels."""
    distance = rng.uniform(*distances, n)
    common = 1 + jitter * rng.normal(size=n)
    counts = [
        rng.poisson(1e6 * gain * rho * common / distance**2 + background)
        for gain, rho in zip(gains, reflectance, strict=True)
    ]
    return br.as_returns(
        *counts,
        zero="dropout",
        range_m=distance,
        incidence_deg=np.zeros(n),
        transmitted_red=np.full(n, 1e6),
        transmitted_infrared=np.full(n, 1e6),
        units="count",
    )


@pytest.mark.parametrize("shots", [4, 40])
def test_recovers_the_constants_within_the_stated_uncertainty(shots):
    # 68.3 % of simulated calibrations: counting, jitter of both channels together, an error of the target's
    # reflectance drawn anew for each, and few shots as well as many
    rng = np.random.default_rng(shots)
    repeats = 3500
    true = np.array([0.5, 0.3])
    stated = np.array([0.99, 0.98])
    held, ratio_held = [], []
    for _ in range(repeats):
        target_error = rng.multivariate_normal([0, 0], [[1e-4, 5e-5], [5e-5, 1e-4]])
        returns = _shots(rng, shots, true, reflectance=stated * (1 + target_error), jitter=0.03)
        found = br.calibrate_lidar(
            returns, stated, reflectance_sigma=0.01 * stated, reflectance_correlation=0.5
        )
        for channel, constant in zip((found.red, found.infrared), true, strict=True):
            held.append(abs(channel.constant - constant) < channel.constant_sigma)
        ratio = found.red.constant / found.infrared.constant / (true[0] / true[1])
        ratio_held.append(abs(ratio - 1) < found.gain_sigma)
    assert abs(np.mean(held) - 0.6827) < 0.02
    assert abs(np.mean(ratio_held) - 0.6827) < 0.03


def test_calibrated_albedo_recovers_a_known_surface():
    rng = np.random.default_rng(5)
    calibration = br.calibrate_lidar(
        _shots(rng, 400, (0.5, 0.3)), (0.99, 0.98), reflectance_sigma=(0.005, 0.005)
    )
    field = _shots(rng, 400, (0.5, 0.3), reflectance=(0.16, 0.27), distances=(60.0, 90.0))
    albedos = br.albedo_from_returns(field, calibration)
    for name, truth in (("red", 0.16), ("infrared", 0.27)):
        mean = float(albedos[name].mean())
        sigma = np.hypot(
            float(albedos[f"{name}_sigma_shared"].mean()), float(albedos[name].std()) / np.sqrt(400)
        )
        assert abs(mean - truth) < 3.5 * sigma


def test_ratio_knows_what_both_channels_share():
    # an error of 10 % common to both constants cancels in the ratio: its sigma is that of the counts
    rng = np.random.default_rng(6)
    calibration = br.calibrate_lidar(_shots(rng, 2000, (0.5, 0.3)), (0.99, 0.98), common_sigma=0.1)
    albedos = br.albedo_from_returns(_shots(rng, 500, (0.5, 0.3), reflectance=(0.16, 0.27)), calibration)
    pair = (albedos["red"], albedos["infrared"], albedos["red_sigma"], albedos["infrared_sigma"])
    alone = br.lidar_ratio(*pair)
    together = br.lidar_ratio(*pair, covariance=albedos["covariance"] + albedos["covariance_shared"])
    assert float(alone["ratio_sigma"].median()) > 1.3 * 0.1 * float(alone["ratio"].median())
    calm = float(together["ratio_sigma"].median())
    assert calm < 0.03
    shared = float((albedos["covariance_shared"] / albedos["red"] / albedos["infrared"]).mean())
    assert shared == pytest.approx(0.1**2, rel=0.01)


def test_common_error_of_the_setup_cancels_in_the_gain():
    returns = _shots(np.random.default_rng(1), 50, (0.5, 0.3))
    plain = br.calibrate_lidar(returns, (0.99, 0.98))
    shared = br.calibrate_lidar(returns, (0.99, 0.98), common_sigma=0.05)
    assert shared.gain_sigma == pytest.approx(plain.gain_sigma, rel=1e-6)
    assert shared.red.constant_sigma / shared.red.constant > 0.05


def test_instrument_is_kept_but_for_the_constants():
    channel = br.LidarChannel(
        constant=1.0, background=40.0, background_subtracted=False, limit=5.0, energy_per_count=1
    )
    instrument = br.LidarCalibration(red=channel, infrared=channel, units="count", range_sigma_m=0.1)
    returns = _shots(np.random.default_rng(2), 2000, (0.5, 0.3), background=40.0)
    found = br.calibrate_lidar(returns, (0.99, 0.98), instrument=instrument)
    assert found.red.constant == pytest.approx(0.5, abs=4 * found.red.constant_sigma)
    assert (found.red.limit, found.range_sigma_m) == (5.0, 0.1)


def test_table_round_trip(tmp_path):
    path = tmp_path / "calibration.csv"
    path.write_text(
        "# Corvane Basin test range\n"
        "channel,constant,constant_sigma,limit,background_subtracted,units,correlation\n"
        "red,0.5,0.01,,false,count,0.3\n"
        "infrared,0.3,0.01,4,,count,0.3\n"
    )
    found = br.LidarCalibration.from_csv(path)
    assert found == br.LidarCalibration(
        red=br.LidarChannel(constant=0.5, constant_sigma=0.01, background_subtracted=False),
        infrared=br.LidarChannel(constant=0.3, constant_sigma=0.01, limit=4.0),
        correlation=0.3,
        units="count",
    )


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("constant\n1\n", "wanted a column channel with rows red and infrared"),
        ("channel,constant\nred,1\n", "no row for infrared"),
        ("channel,constant\nred,1\nred,2\ninfrared,1\n", "red stands in two rows"),
        ("channel,constnat\nred,1\ninfrared,1\n", "unknown column 'constnat'; did you mean constant"),
        ("channel,constant\nred,one\ninfrared,1\n", "constant must be a number, got 'one'"),
        (
            "channel,constant,limit\nred,1,-3\ninfrared,1,2\n",
            "limit must be zero or above and finite, got -3",
        ),
        (
            "channel,constant,units\nred,1,J\ninfrared,1,count\n",
            "units is one value for both channels, got J, count",
        ),
        (
            "channel,background_subtracted,constant\nred,maybe,1\ninfrared,no,1\n",
            "must be true or false, got 'maybe'",
        ),
        ("channel,limit\nred,1\ninfrared,1\n", "no column 'constant'"),
    ],
)
def test_bad_table(tmp_path, text, message):
    path = tmp_path / "bad.csv"
    path.write_text(text)
    with pytest.raises(ValueError, match=message) as caught:
        br.LidarCalibration.from_csv(path)
    assert str(path) in str(caught.value)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"constant": 0}, "constant must be above zero"),
        ({"constant": 1, "relative": 3}, "fraction below 1, got 3; 3 % is 0.03"),
        ({"constant": 1, "dead_time_s": 1e-8}, "dead time needs the gate's length"),
        ({"constant": 1, "read_noise": -1}, "read_noise must be zero or above"),
        ({"constant": 1, "least_live": 0}, r"least_live is a fraction of the gate in \(0, 1\], got 0"),
    ],
)
def test_bad_channel(options, message):
    with pytest.raises(ValueError, match=message):
        br.LidarChannel(**options)


GOOD = {
    "range_m": [10.0, 10.0],
    "incidence_deg": [0.0, 0.0],
    "transmitted_red": [1.0, 1.0],
    "transmitted_infrared": [1.0, 1.0],
}


@pytest.mark.parametrize(
    ("returns", "reflectance", "options", "message"),
    [
        (
            br.as_returns([5.0, 0.0], [5.0, 5.0], zero="dropout", **GOOD),
            (1, 1),
            {},
            "1 of 2 red shots .* dropout.*bias",
        ),
        (
            br.as_returns([5.0, 9.0], [5.0, 5.0], saturated=9, **GOOD),
            (1, 1),
            {},
            "1 of 2 red shots .* saturated",
        ),
        (
            br.as_returns([5.0, np.nan], [5.0, 5.0], **GOOD),
            (1, 1),
            {},
            "1 of 2 red shots at the target are missing",
        ),
        (
            br.as_returns([5.0, 5.0], [5.0, 5.0], **GOOD).isel(shot=[0]),
            (1, 1),
            {},
            "two shots or more .* got 1",
        ),
        (
            br.as_returns([5.0, 5.0], [5.0, 5.0], **GOOD),
            (1, 0),
            {},
            "infrared reflectance must be above zero",
        ),
        (br.as_returns([5.0, 5.0], [5.0, 5.0], **GOOD), 0.99, {}, "two numbers, red and infrared, got 0.99"),
        (br.as_returns([-5.0, -5.0], [5.0, 5.0], **GOOD), (1, 1), {}, "sum to -10; they must be positive"),
        (
            br.as_returns([5.0, 5.0], [5.0, 5.0], **GOOD),
            (1, 1),
            {"reflectance_correlation": 2},
            r"\[-1, 1\], got 2",
        ),
        (
            br.as_returns([5.0, 5.0], [5.0, 5.0], **GOOD),
            (1, 1),
            {"common_sigma": -1},
            "common_sigma must be zero",
        ),
    ],
)
def test_bad_input(returns, reflectance, options, message):
    with pytest.raises(ValueError, match=message):
        br.calibrate_lidar(returns, reflectance, **options)
