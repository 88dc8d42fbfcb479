"""How much ice: a number with an interval that covers the truth, and what it refuses."""

import dask.array as da
import numpy as np
import pytest

import bandratio as br
from bandratio.ice import ice_fraction
from bandratio.mixing import ICE_DENSITY, areal_mixture, ice_reflectance, intimate_mixture, mass_weights

#: Soil 62231 at 650 and 1535 nm (Pieters 1999, RELAB).
SOIL = np.array([0.16168, 0.26907])
ASKED = {"ground": {"soil": SOIL}, "ice": "frost 50 µm", "red_nm": 650}


def albedos(mixture, fraction):
    pair = [ice_reflectance([650, 1535], 50), SOIL]
    if mixture == "areal":
        return areal_mixture(pair, [fraction, 1 - fraction])
    return intimate_mixture(pair, mass_weights([fraction, 1 - fraction], [ICE_DENSITY, 3.0], [50, 50]))


@pytest.mark.parametrize("mixture", ["areal", "intimate"])
@pytest.mark.parametrize("fraction", [0.0, 0.02, 0.15, 0.5, 1.0])
@pytest.mark.parametrize("relative", [0.03, 0.1])
def test_the_interval_covers_the_truth_as_often_as_it_says(mixture, fraction, relative):
    rng = np.random.default_rng(8)
    n = 8000
    measured = albedos(mixture, fraction) * (1 + relative * rng.standard_normal((n, 2)))
    measured += 0.001 * rng.standard_normal((n, 2))
    amount = ice_fraction(
        *measured.T, 0.001, 0.001, relative_red=relative, relative_infrared=relative, mixture=mixture,
        ground_grain_um=50, **ASKED,
    )  # fmt: skip
    covered = (amount["fraction_lower"] <= fraction + 1e-6) & (amount["fraction_upper"] >= fraction - 1e-6)
    # at the ends, where the fraction cannot go further, the interval covers more often
    most = 0.99 if fraction in (0, 0.02, 1) else 0.96
    assert 0.95 - 4 * np.sqrt(0.05 * 0.95 / n) < covered.mean() < most
    assert (amount["fraction_lower"] <= amount["fraction"]).sum() == amount["fraction"].notnull().sum()


@pytest.mark.parametrize("mixture", ["areal", "intimate"])
def test_without_errors_to_speak_of_the_fraction_is_exact(mixture):
    for fraction in (0.03, 0.2, 0.7):
        red, infrared = albedos(mixture, fraction)
        amount = ice_fraction(red, infrared, 1e-5, 1e-5, mixture=mixture, ground_grain_um=50, **ASKED)
        assert float(amount["fraction"]) == pytest.approx(fraction, abs=2e-4)
        assert float(amount["misfit_sigma"]) < 1


def test_albedos_that_no_mixture_leads_to_have_no_fraction():
    amount = ice_fraction([0.05, 0.2], [0.4, 0.267], 0.003, 0.003, **ASKED)
    assert np.isnan(amount["fraction"].values[0])
    assert amount["misfit_sigma"].values[0] > 4
    assert 0 < amount["fraction"].values[1] < 0.1


def test_a_lidar_shot_is_judged_at_its_own_incidence():
    from bandratio.mixing import ice_albedo, reflectance_from_albedo, single_scattering_albedo

    angle = np.array([0.0, 30.0, 60.0])[:, None]
    soil = reflectance_from_albedo(single_scattering_albedo(SOIL), angle, angle)
    ice = reflectance_from_albedo(ice_albedo(np.array([650, 1535]), 50), angle, angle)
    seen = 0.9 * soil + 0.1 * ice
    amount = ice_fraction(*seen.T, 1e-3, 1e-3, incidence_deg=angle[:, 0], **ASKED)
    assert amount["fraction"].values == pytest.approx([0.1, 0.1, 0.1], abs=3e-3)
    unknown = ice_fraction(*seen.T, 1e-3, 1e-3, incidence_deg=np.nan, **ASKED)
    assert np.isnan(unknown["fraction"]).all()


def test_lazy_arrays_stay_lazy():
    rng = np.random.default_rng(1)
    measured = albedos("areal", 0.1) + 0.002 * rng.standard_normal((1000, 2))
    eager = ice_fraction(*measured.T, 0.002, 0.002, **ASKED)
    lazy = ice_fraction(*(da.from_array(column, chunks=300) for column in measured.T), 0.002, 0.002, **ASKED)
    assert lazy["fraction"].chunks is not None
    np.testing.assert_array_equal(lazy["fraction"], eager["fraction"])
    assert "area" in lazy.attrs["mixture"]


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"ground": None}, "needs one named ground=… and one named ice=…"),
        ({"ice": None}, "needs one named ground=… and one named ice=…"),
        ({"ground": "plagioclase"}, "needs one ground, got 4: Anorthite"),
        ({"ice": "snow"}, "needs one ice, got 4"),
        ({"mixture": "layered"}, "mixture must be one of areal, intimate"),
        ({"mixture": "intimate"}, "needs both grain sizes"),
        ({"mixture": "intimate", "ground_grain_um": 50, "ice": "Snow mSnw05"}, "needs both grain sizes"),
        ({"mixture": "intimate", "ground_grain_um": -50}, "ground_grain_um must be above zero"),
        (
            {"mixture": "intimate", "ground_grain_um": 50, "ground_density": 0},
            "ground_density must be above zero",
        ),
        ({"incidence_deg": 89.0}, "between 0 and 80 degrees"),
        ({"confidence": 1}, "confidence must lie between 0 and 1"),
    ],
)
def test_bad_input_gives_one_clear_error(changed, message):
    with pytest.raises(ValueError, match=message):
        br.ice_fraction([0.2], [0.2], 0.01, 0.01, **(ASKED | changed))
