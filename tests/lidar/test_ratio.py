import dask.array as da
import numpy as np
import pytest
import xarray as xr
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.optimize import brentq

import bandratio as br
from bandratio.lidar.fieller import fieller_interval

Z95 = 1.959963984540054  # two-sided 95 % point of the normal distribution


def _excess(theta, a, b, sa, sb, c, z):
    """Fieller's condition itself: at most zero for the ratios that belong to the set."""
    return (a - theta * b) ** 2 - z**2 * (sa**2 - 2 * theta * c + theta**2 * sb**2)


@pytest.mark.parametrize(
    ("a", "b", "sa", "sb", "c"),
    [
        (0.16, 0.27, 0.004, 0.006, 0.0),
        (0.16, 0.27, 0.004, 0.006, 1.9e-5),
        (0.58, 0.0065, 0.02, 0.002, 0.0),
        (0.58, 0.0065, 0.02, 0.002, -3e-5),
        (5.0, 40.0, 1.0, 1.0, 0.8),
    ],
)
def test_ends_against_a_numerical_root(a, b, sa, sb, c):
    lower, upper = fieller_interval(a, b, sa, sb, c, Z95)
    ends = (a, b, sa, sb, c, Z95)
    assert lower == pytest.approx(brentq(_excess, 0, a / b, args=ends, xtol=1e-14), rel=1e-9)
    assert upper == pytest.approx(brentq(_excess, a / b, 1e4 * a / b, args=ends, xtol=1e-14), rel=1e-9)


numbers = st.floats(-50, 50).filter(lambda x: x == 0 or abs(x) > 1e-6)
sigmas = st.floats(1e-3, 10)


@given(numbers, numbers, sigmas, sigmas, st.floats(-0.99, 0.99), st.floats(0.5, 4))
def test_interval_is_the_smallest_that_holds_fiellers_set(a, b, sa, sb, rho, z):
    c = rho * sa * sb
    lower, upper = fieller_interval(a, b, sa, sb, c, z)
    assert 0 <= lower <= upper
    theta = np.concatenate([[0.0], np.geomspace(1e-7, 1e9, 20_000)])
    excess = _excess(theta, a, b, sa, sb, c, z)
    scale = a**2 + z**2 * sa**2 + theta**2 * (b**2 + z**2 * sb**2)
    inside = theta[excess <= -1e-10 * scale]
    assume(inside.size > 0)
    assert lower <= inside.min() * (1 + 1e-6) + 1e-9
    assert upper >= inside.max() * (1 - 1e-6)
    # nothing more than needed: an end that is no bound belongs to the set itself
    if lower == 0:
        assert excess[0] <= 1e-10 * scale[0]
    if np.isinf(upper):
        assert excess[-1] <= 1e-10 * scale[-1]


def test_degenerate_cases_by_hand():
    # b not told from zero, a is: open above; (a − θb)² = z²(σa² + θ²σb²) at b = 0 gives θ = √(a² − z²σa²)/(zσb)
    lower, upper = fieller_interval(1.0, 0.0, 0.1, 0.1, 0.0, 2.0)
    assert lower == pytest.approx(np.sqrt(1 - 0.04) / 0.2)
    assert np.isinf(upper)
    # neither told from zero, of one sign: two pieces of positive ratios or everything
    assert fieller_interval(0.1, 0.1, 0.1, 0.1, 0.0, 2.0) == (0, np.inf)
    # b so far below zero that no ratio ≥ 0 fits: as b = 0
    assert fieller_interval(1.0, -1.0, 0.1, 0.1, 0.0, 2.0) == fieller_interval(1.0, 0.0, 0.1, 0.1, 0.0, 2.0)
    # a so far below zero: as a = 0, θ up to zσa/√(b² − z²σb²)
    lower, upper = fieller_interval(-1.0, 1.0, 0.1, 0.1, 0.0, 2.0)
    assert lower == 0
    assert upper == pytest.approx(0.2 / np.sqrt(1 - 0.04))
    # no errors: the ratio itself; no errors and b = 0: infinite
    assert fieller_interval(1.0, 2.0, 0.0, 0.0, 0.0, 2.0) == (0.5, 0.5)
    assert fieller_interval(1.0, 0.0, 0.0, 0.0, 0.0, 2.0) == (np.inf, np.inf)
    # b exactly z sigmas from zero: the condition is linear, −2abθ + a² − z²σa² ≤ 0
    lower, upper = fieller_interval(1.0, 0.25, 0.125, 0.125, 0.0, 2.0)
    assert lower == pytest.approx((1 - 0.0625) / 0.5)
    assert np.isinf(upper)


@pytest.mark.parametrize("rho", [0.0, 0.6])
@pytest.mark.parametrize("red", [0.5, 1, 3, 25])
@pytest.mark.parametrize("infrared", [0.5, 1, 3, 25])
def test_coverage(red, infrared, rho):
    n = 200_000
    rng = np.random.default_rng([int(2 * red), int(2 * infrared), int(10 * rho)])
    noise = rng.multivariate_normal([0, 0], [[1, rho], [rho, 1]], n)
    lower, upper = fieller_interval(red + noise[:, 0], infrared + noise[:, 1], 1, 1, rho, Z95)
    held = ((lower <= red / infrared) & (red / infrared <= upper)).mean()
    standard_error = np.sqrt(0.95 * 0.05 / n)
    assert held > 0.945
    if red > 20:
        # counting an infrared below −z sigmas as zero adds what the set of no ratios would have missed:
        # Φ(−z − signal), 0.7 % at a signal-to-noise of 0.5, 0.15 % at 1
        from scipy.special import ndtr

        added = ndtr(-Z95 - infrared)
        assert abs(held - 0.95 - added) < 4 * standard_error + 0.001
        if infrared >= 1:
            assert abs(held - 0.95) < 0.005


def test_labels_stay_and_lazy_stays_lazy():
    rng = np.random.default_rng(2)
    red = xr.DataArray(rng.uniform(0.1, 0.5, (4, 6)), dims=("y", "x"), coords={"x": np.arange(6)})
    infrared = red * 0.5
    eager = br.lidar_ratio(red, infrared, 0.01, 0.01, covariance=5e-5, confidence=0.95)
    lazy = br.lidar_ratio(
        red.chunk({"y": 2}), infrared.chunk({"y": 2}), 0.01, 0.01, covariance=5e-5, confidence=0.95
    )
    assert all(isinstance(variable.data, da.Array) for variable in lazy.data_vars.values())
    xr.testing.assert_allclose(lazy.compute(), eager)
    assert eager["ratio"].dims == ("y", "x")
    assert "x" in eager.coords
    assert ((eager["lower"] < eager["ratio"]) & (eager["ratio"] < eager["upper"])).all()


def test_one_sigma_is_the_default_and_agrees_with_first_order_at_high_signal():
    found = br.lidar_ratio(0.16, 0.27, 0.00016, 0.00027)
    assert float(found["upper"] - found["lower"]) / 2 == pytest.approx(float(found["ratio_sigma"]), rel=1e-3)
    assert float(found["ratio_sigma"]) == pytest.approx(0.16 / 0.27 * np.hypot(1e-3, 1e-3))


def test_missing_and_negative():
    found = br.lidar_ratio([np.nan, 0.5, 0.5, -0.1, -0.1], [0.1, np.nan, -0.01, 0.2, -0.2], 0.01, 0.01)
    np.testing.assert_array_equal(found["ratio"], [np.nan, np.nan, np.inf, 0, np.nan])
    assert np.isnan(found["lower"].values[:2]).all()
    assert np.isnan(found["upper"].values[:2]).all()
    assert np.isinf(found["upper"].values[2])


@pytest.mark.parametrize(
    ("arguments", "options", "message"),
    [
        ((0.1, 0.1, -0.01, 0.01), {}, "sigma_red must not be negative, got -0.01"),
        ((0.1, 0.1, 0.01, -0.02), {}, "sigma_infrared must not be negative, got -0.02"),
        ((0.1, 0.1, 0.01, 0.01), {"covariance": 0.1}, "covariance .* larger than"),
        ((0.1, 0.1, 0.01, 0.01), {"confidence": 95}, "confidence must lie between 0 and 1.*got 95"),
        ((np.ones((2, 2, 2)), 1, 0.1, 0.1), {}, r"\(shot,\) or \(y, x\).*\(2, 2, 2\)"),
        ((xr.DataArray([1.0, 2.0], dims="shot"), [1.0], 0.1, 0.1), {}, "does not fit the labelled one"),
    ],
)
def test_bad_input(arguments, options, message):
    with pytest.raises(ValueError, match=message):
        br.lidar_ratio(*arguments, **options)
