"""From counts to candidates: whole simulated missions, each with a calibration of its own."""

import numpy as np
import xarray as xr

import bandratio as br

SOIL, ILMENITE, SNOW = np.array([0.15981, 0.26907]), np.array([0.0553, 0.0599]), np.array([0.58, 0.0065])
#: Receiver constants of the simulated instrument, and photons sent.
CONSTANTS, SENT = (0.02, 0.012), 2e11


def _counts(rng, albedo, range_m, constants=CONSTANTS):
    mean = SENT * np.array(constants) * albedo / range_m[:, None] ** 2
    return rng.poisson(mean * (1 + 0.02 * rng.normal(size=mean.shape)))


def _returns(counts, range_m, limit=0):
    counts = np.where(counts <= limit, 0, counts).astype(float)
    sent = np.full(len(counts), SENT)
    return br.as_returns(
        *counts.T, zero="dropout", units="count", range_m=range_m, transmitted_red=sent, transmitted_infrared=sent,
        incidence_deg=np.zeros(len(counts)),
    )  # fmt: skip


def _calibrated(rng):
    """A calibration on a target whose reflectance is known to 1 % in each channel."""
    target = np.array([0.99, 0.98]) * (1 + 0.01 * rng.normal(size=2))
    range_m = np.full(200, 2000.0)
    channel = br.LidarChannel(constant=1.0, energy_per_count=1, relative=0.02, limit=4)
    return br.calibrate_lidar(
        _returns(_counts(rng, target, range_m), range_m),
        (0.99, 0.98),
        reflectance_sigma=(0.0099, 0.0098),
        instrument=br.LidarCalibration(red=channel, infrared=channel),
    )


def test_missions_hold_their_false_discovery_rate_and_find_the_snow():
    rng = np.random.default_rng(17)
    shares, found = [], []
    for _ in range(40):
        calibration = _calibrated(rng)
        n = 3000
        t = rng.uniform(0, 1, (n, 1))  # up to pure ilmenite, on the edge of the list
        icy = rng.random(n) < 0.03
        f = np.where(icy, 0.3, 0.0)[:, None]
        albedo = (1 - f) * ((1 - t) * SOIL + t * ILMENITE) + f * SNOW
        albedo *= rng.uniform(0.3, 1, (n, 1))  # partly shaded beams
        range_m = rng.uniform(2900, 3100, n)
        returns = _returns(_counts(rng, albedo, range_m), range_m, limit=3)
        albedos = br.albedo_from_returns(returns, calibration)
        given = br.flag_arguments(albedos)
        del given["incidence_deg"]  # the mixtures above are of albedos at the laboratory's geometry
        flags = br.ice_flags(**given, ice_free={"soil": SOIL, "ilmenite": ILMENITE}, ice={"snow": SNOW})
        candidate = flags["flag"].to_numpy() == 5
        shares.append((candidate & ~icy).sum() / max(candidate.sum(), 1))
        found.append(candidate[icy].mean())
    assert np.mean(shares) < 0.05 + 3 * np.std(shares) / np.sqrt(40)
    assert np.mean(found) > 0.5


def test_dropouts_over_bright_ground_are_the_signal():
    # pure snow seen from so far that its infrared is below the limit, on soil that is seen in both
    rng = np.random.default_rng(5)
    n = 400
    icy = np.arange(n) < 20
    albedo = np.where(icy[:, None], SNOW, SOIL)
    range_m = np.full(n, 3000.0)
    returns = _returns(_counts(rng, albedo, range_m), range_m, limit=3)
    dropout = returns["infrared_quality"].to_numpy() == 1
    assert dropout[icy].mean() > 0.6
    flags = br.ice_flags(
        **br.flag_arguments(br.albedo_from_returns(returns, _calibrated(rng))), ice_free="mare"
    )
    candidate = flags["flag"].to_numpy() == 5
    assert candidate[icy].all()
    assert not candidate[~icy].any()


def test_lazy_chain_gives_the_same_flags(tmp_path):
    rng = np.random.default_rng(9)
    n = 2000
    f = np.where(rng.random(n) < 0.05, 0.4, 0.0)[:, None]
    range_m = np.full(n, 3000.0)
    counts = _counts(rng, (1 - f) * SOIL + f * SNOW, range_m)
    path = tmp_path / "shots.zarr"
    xr.Dataset(
        {
            "red": ("shot", counts[:, 0]),
            "infrared": ("shot", counts[:, 1]),
            "range_m": ("shot", range_m, {"units": "m"}),
        }
    ).to_zarr(path, consolidated=False)
    calibration = _calibrated(rng)
    results = []
    for chunks in (None, 300):
        returns = br.open_returns(path, red="red", infrared="infrared", zero="dropout", chunks=chunks)
        returns = returns.assign(
            {f"transmitted_{c}": xr.full_like(returns["range_m"], SENT) for c in ("red", "infrared")}
        )
        albedos = br.albedo_from_returns(returns, calibration, incidence_deg=0)
        results.append(br.ice_flags(**br.flag_arguments(albedos), ice_free="mare").compute())
    np.testing.assert_array_equal(results[0]["flag"], results[1]["flag"])
    np.testing.assert_allclose(results[0]["p_value"], results[1]["p_value"])
    assert (results[0]["flag"] == 5).sum() > 50
