"""The band ratio: its form, its value, its gradient, and its uncertainty against outside references."""

import math
import pickle

import GTC
import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

import bandratio as br

WAVELENGTHS = [480.0, 600.0, 700.0, 750.0, 830.0]

weights = st.floats(-3, 3).filter(lambda w: w == 0 or abs(w) > 1e-3)
weight_sets = st.dictionaries(st.sampled_from(WAVELENGTHS), weights, min_size=1, max_size=5).filter(
    lambda w: any(w.values())
)
positive_sets = st.dictionaries(st.sampled_from(WAVELENGTHS), st.floats(0.1, 3), min_size=1, max_size=5)


def direct(n, d, n0, d0, scale, R):
    """The definition, written once more and apart, on plain numbers."""
    upper = sum(w * R[WAVELENGTHS.index(nm)] for nm, w in n.items()) + n0
    lower = sum(w * R[WAVELENGTHS.index(nm)] for nm, w in d.items()) + d0
    return scale * upper / lower


class TestGuideToUncertaintyH2:
    """GUM, JCGM 100:2008, annex H.2: resistance from voltage and current, Z = V/I, as a band ratio."""

    # the two inputs take the place of two bands; their "wavelengths" are labels only
    cube = br.as_cube([4.9990, 19.661e-3], [500, 600])
    u_voltage, u_current, correlation = 3.2e-3, 9.5e-6, -0.36
    covariance = np.array(
        [
            [u_voltage**2, correlation * u_voltage * u_current],
            [correlation * u_voltage * u_current, u_current**2],
        ]
    )
    impedance = br.BandRatio({500: 1}, {600: 1}, units="Ω")

    def test_value(self):
        assert float(self.impedance.value(self.cube)) == pytest.approx(254.26, abs=0.005)  # table H.4

    def test_combined_standard_uncertainty(self):
        sigma = float(self.impedance.sigma(self.cube, covariance=self.covariance))
        assert (
            round(sigma, 2) == 0.24
        )  # H.2.3: u_c(Z) = 0.236 Ω from unrounded inputs, 0.24 Ω from the rounded

    def test_agrees_with_gtc(self):
        voltage, current = GTC.multiple_ureal([4.9990, 19.661e-3], [self.u_voltage, self.u_current], 5)
        GTC.set_correlation(self.correlation, voltage, current)
        sigma = float(self.impedance.sigma(self.cube, covariance=self.covariance))
        assert sigma == pytest.approx((voltage / current).u, rel=1e-9)


@given(
    n=weight_sets,
    d=positive_sets,
    n0=st.floats(-0.5, 0.5),
    d0=st.floats(0, 0.5),
    scale=st.floats(0.1, 100),
    R=arrays(float, 5, elements=st.floats(0.02, 0.9)),
    root=arrays(float, (5, 5), elements=st.floats(-0.02, 0.02)),
)
def test_propagation_agrees_with_gtc(n, d, n0, d0, scale, R, root):
    """Value and uncertainty of random ratios under a random covariance, against GTC to 1e-9."""
    ratio = br.BandRatio(n, d, n0, d0, scale)
    cube = br.as_cube(R, WAVELENGTHS)
    covariance = root @ root.T + 1e-4 * np.eye(5)
    u = np.sqrt(np.diag(covariance))
    inputs = GTC.multiple_ureal(list(R), list(u), math.inf)
    for i in range(5):
        for j in range(i):
            GTC.set_correlation(float(covariance[i, j] / (u[i] * u[j])), inputs[i], inputs[j])
    expected = direct(n, d, n0, d0, scale, inputs)
    assert float(ratio.value(cube)) == pytest.approx(GTC.value(expected), rel=1e-9, abs=1e-12)
    # where a band stands on both sides its two terms may cancel: the rounding that is left follows their size
    terms = sum(abs(scale * w) for w in n.values()) + abs(GTC.value(expected)) * sum(d.values())
    bound = terms * u.max() / (sum(w * R[WAVELENGTHS.index(nm)] for nm, w in d.items()) + d0)
    assert float(ratio.sigma(cube, covariance=covariance)) == pytest.approx(
        GTC.uncertainty(expected), rel=1e-9, abs=1e-12 * bound
    )


@given(
    n=weight_sets, d=positive_sets, n0=st.floats(-0.5, 0.5), d0=st.floats(0, 0.5),
    R=arrays(float, (5, 4), elements=st.floats(0.05, 0.9)),
)  # fmt: skip
@settings(max_examples=20)
def test_gradient_is_the_derivative(n, d, n0, d0, R):
    ratio = br.BandRatio(n, d, n0, d0)
    gradient = ratio.gradient(br.as_cube(R, WAVELENGTHS))
    step = 1e-6
    for j in range(5):
        up, down = R.copy(), R.copy()
        up[j] += step
        down[j] -= step
        numeric = (ratio.value(br.as_cube(up, WAVELENGTHS)) - ratio.value(br.as_cube(down, WAVELENGTHS))) / (
            2 * step
        )
        np.testing.assert_allclose(gradient[j], numeric, rtol=1e-5, atol=1e-5)


@pytest.mark.parametrize("shape", [(), (7,), (3, 4), (2, 3, 4)])
def test_any_shape_and_any_place_of_the_wavelength_axis(shape):
    rng = np.random.default_rng(1)
    R = rng.uniform(0.1, 0.4, (2, *shape))
    dims = ("wavelength", *"abc"[: len(shape)])
    cube = xr.DataArray(R, {"wavelength": [750.0, 950.0]}, dims)
    ratio = br.BandRatio({950: 1}, {750: 1})
    moved = cube.transpose(..., "wavelength")
    np.testing.assert_allclose(ratio.value(moved), R[1] / R[0], rtol=1e-14)
    assert ratio.gradient(moved).dims == moved.dims
    noise = br.Noise(random=0.01)
    np.testing.assert_allclose(ratio.sigma(moved, noise), ratio.sigma(cube, noise), rtol=1e-14)


@pytest.mark.parametrize("lower", [0.0, -0.1, np.nan])
def test_no_value_where_the_denominator_is_not_positive(lower):
    cube = br.as_cube([[0.2, 0.2], [lower, 0.4]], [950, 750])
    ratio = br.BandRatio({950: 1}, {750: 1})
    value, sigma = ratio.value(cube), ratio.sigma(cube, br.Noise(random=0.01))
    assert np.isnan(value[0])
    assert np.isnan(sigma[0])
    assert float(value[1]) == pytest.approx(0.5)
    assert np.isfinite(sigma[1])


def test_a_missing_band_that_is_not_used_does_not_matter():
    cube = br.as_cube([0.2, np.nan, 0.4], [600, 700, 750])
    ratio = br.BandRatio({600: 1}, {750: 1})
    assert float(ratio.value(cube)) == 0.5
    assert float(ratio.sigma(cube, br.Noise(random=0.01, common_gain=0.1))) > 0


def test_common_gain_alone_is_exactly_zero_for_a_pure_ratio():
    rng = np.random.default_rng(2)
    cube = br.as_cube(rng.uniform(0.01, 0.7, (2, 500)).astype("f4"), [750, 950])
    noise = br.Noise(common_gain=0.3)
    assert (br.BandRatio({950: 1}, {750: 1}).sigma(cube, noise) == 0).all()
    assert (br.BandRatio({950: 1}).sigma(cube, noise) > 0).all()


def test_the_error_model_term_by_term():
    """Each part alone against the formula for p = R950/R750, worked out by hand."""
    a, b = 0.3, 0.25
    cube, ratio = br.as_cube([a, b], [950, 750]), br.BandRatio({950: 1}, {750: 1})
    p = a / b

    def sigma(**parts):
        return float(ratio.sigma(cube, br.Noise(**parts)))

    assert sigma(random=[0.02, 0.01]) == pytest.approx(math.hypot(0.02 / b, p * 0.01 / b))
    assert sigma(relative=0.03) == pytest.approx(p * 0.03 * math.sqrt(2))
    assert sigma(band_gain=0.03) == pytest.approx(p * 0.03 * math.sqrt(2))
    assert sigma(shot=0.05) == pytest.approx(0.05 * math.sqrt(a / b**2 + p**2 / b))
    assert sigma(band_offset={950: 0.01, 750: 0.0}) == pytest.approx(0.01 / b)
    assert sigma(random=0.01, band_offset=0.02) == pytest.approx(
        math.hypot(sigma(random=0.01), sigma(band_offset=0.02))
    )


def test_it_is_a_value():
    one = br.BandRatio({950: 1, 750: 0}, {750.0: 1})
    two = br.BandRatio({950.0: 1.0}, {750: 1})
    assert one == two
    assert hash(one) == hash(two)
    assert one != br.BandRatio({950: 2}, {750: 1})
    assert pickle.loads(pickle.dumps(one)) == one
    with pytest.raises(AttributeError):
        one.scale = 3
    with pytest.raises(TypeError):
        one.numerator[950] = 3


def test_names_and_definitions():
    assert br.BandRatio({950: 1}, {750: 1}).name == "r950_r750"
    assert br.BandRatio({700: 1}).name == "r700"
    assert br.BandRatio({700: 1}).definition == "R700"
    assert br.BandRatio({750: 1, 830: -1}, {750: 1}).name == "r750mr830_r750"
    assert br.BandRatio({750: 1, 830: -1}, {750: 1}).definition == "(R750 − R830)/R750"
    assert br.BandRatio({600: 2}, None, -0.5, scale=3).definition == "3·(2·R600 − 0.5)"


BAD = [
    (({},), {}, "a band ratio needs weights"),
    (({950: 0},), {}, "a band ratio needs weights"),
    (({950: 1}, {}), {}, "the denominator is zero"),
    (({}, {750: 1}), {}, "the numerator is zero, and every value would be"),
    (({950: 0}, {750: 1}), {}, "the numerator is zero, and every value would be"),
    (({950: 1}, {750: 0}), {}, "the denominator is zero"),
    (({-950: 1}, {750: 1}), {}, "numerator has the wavelength -950 nm"),
    (({950: 1}, {0: 1}), {}, "denominator has the wavelength 0 nm"),
    (({math.nan: 1},), {}, "numerator has the wavelength nan nm"),
    (({950: math.nan},), {}, "numerator has the weight nan at 950 nm"),
    (({950: 1}, {750: math.inf}), {}, "denominator has the weight inf at 750 nm"),
    (([950, 750],), {}, "numerator must be a mapping"),
    (({"red": 1},), {}, "numerator must map numbers to numbers"),
    (({950: 1}, {750: 1}), {"scale": 0}, "scale must not be zero"),
    (({950: 1}, {750: 1}), {"scale": math.inf}, "scale must be finite"),
    (({950: 1}, {750: 1}), {"numerator_offset": "x"}, "numerator_offset must be a number"),
    (({950: 1}, {750: 1}), {"name": 3}, "name must be text"),
    (({950: 1}, {750: 1}), {"name": "a/b"}, "name must hold no slash"),
    (({950: 1}, {750: 1}), {"name": "my ratio"}, "no space, got 'my ratio'; use _ between words"),
    (({0.95: 1}, {0.75: 1}), {}, "must be in nm, got 0.95, 0.75, which look like µm; multiply by 1000"),
]


@pytest.mark.parametrize(("arguments", "options", "message"), BAD)
def test_bad_weights(arguments, options, message):
    with pytest.raises((ValueError, TypeError), match=message):
        br.BandRatio(*arguments, **options)


def test_bad_use():
    ratio, cube = br.BandRatio({950: 1}, {750: 1}), br.as_cube([0.2, 0.3], [750, 950])
    with pytest.raises(
        ValueError, match=r"no band within 15 nm of 750 nm; the bands are 480, 600 nm; give tolerance"
    ):
        ratio.value(br.as_cube([0.2, 0.3], [480, 600]))
    with pytest.raises(ValueError, match="the band at 850 nm would serve for both 750 and 950 nm"):
        ratio.value(br.as_cube([0.2], [850]), tolerance=200)
    with pytest.raises(ValueError, match="either noise=… or covariance=…"):
        ratio.sigma(cube)
    with pytest.raises(ValueError, match="either noise=… or covariance=…"):
        ratio.sigma(cube, br.Noise(random=0.1), covariance=np.eye(2))
    with pytest.raises(
        ValueError, match=r"covariance must have shape \(2, 2\), one row per band, got \(3, 3\)"
    ):
        ratio.sigma(cube, covariance=np.eye(3))
    with pytest.raises(ValueError, match="covariance must be symmetric"):
        ratio.sigma(cube, covariance=[[1, 2], [0, 1]])
    with pytest.raises(ValueError, match="covariance must be symmetric"):
        ratio.sigma(cube, covariance=[[1e-8, 9e-9], [0, 1e-8]])
    with pytest.raises(ValueError, match="covariance must be finite"):
        ratio.sigma(cube, covariance=[[1, math.nan], [math.nan, 1]])
    with pytest.raises(ValueError, match="covariance must be symmetric and without negative eigenvalues"):
        ratio.sigma(cube, covariance=[[1, 2], [2, 1]])
    with pytest.raises(TypeError, match="a cube must be a DataArray with a wavelength coordinate"):
        ratio.value(np.zeros((2, 3)))
    with pytest.raises(ValueError, match="tolerance must be zero or above and finite, got -1 nm"):
        ratio.value(cube, tolerance=-1)
