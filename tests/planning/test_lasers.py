import matplotlib as mpl
import numpy as np
import pytest

import bandratio as br
from bandratio.__main__ import main
from bandratio.ice.materials import ice_free_ground, ice_materials
from bandratio.mixing import mass_weights, reflectance_from_albedo
from bandratio.planning import LASER_CAUTION
from bandratio.planning.lasers import _FRACTIONS, _mixed

GROUND = ["Soil 62231", "Ilmenite HS231.3B"]


@pytest.fixture(autouse=True)
def _no_display():
    with mpl.rc_context({"backend": "agg"}):
        yield


def _scene(kind, fraction, n, prevalence, relative, sigma, rng):
    """Shots at soil, some with ice: mixed and made noisy here, without the planning's own code."""
    soil = ice_free_ground("Soil 62231", (640, 1535)).albedos[0]
    frost = ice_materials("frost 50 µm", (640, 1535)).albedos[0]
    icy = rng.random(n) < prevalence
    if kind == "areal":
        bare, ice = reflectance_from_albedo(soil, 30, 0), reflectance_from_albedo(frost, 30, 0)
        with_ice = (1 - fraction) * bare + fraction * ice
    else:
        share = mass_weights([fraction, 1 - fraction], [0.917, 3.0], [50, 50])
        bare = reflectance_from_albedo(soil, 30, 0)
        with_ice = reflectance_from_albedo(share[0] * frost + share[1] * soil, 30, 0)
    true = np.where(icy[:, None], with_ice, bare)
    return true * (1 + relative * rng.normal(size=true.shape)) + sigma * rng.normal(size=true.shape), icy


@pytest.mark.parametrize("kind", ["areal", "intimate"])
@pytest.mark.parametrize(("relative", "prevalence"), [(0.03, 0.05), (0.08, 0.01)])
def test_a_shot_with_that_much_ice_is_flagged_as_often_as_said(kind, relative, prevalence):
    fraction = br.least_ice(kind, ice_free=GROUND, relative=relative, prevalence=prevalence)
    n = 100_000
    shots, icy = _scene(kind, fraction, n, prevalence, relative, 0.002, np.random.default_rng(3))
    flags = br.ice_flags(
        *shots.T,
        0.002,
        0.002,
        relative_red=relative,
        relative_infrared=relative,
        ice_free=GROUND,
        ice="frost 50 µm",
    )
    found = (flags["flag"].to_numpy() == 5)[icy].mean()
    standard_error = np.sqrt(0.9 * 0.1 / (n * prevalence))
    # ice-free shots on the edge of the ground list move the cut outwards a little: rather too many are found
    assert 0.9 - 4 * standard_error - 0.01 < found < 0.93 + 4 * standard_error


def test_intimate_mixtures_are_the_published_formulas():
    # R650/R1535 of soil 62231 with 10 wt% and 20 wt% of ice, 50 µm both: 0.817 and 1.026 by Hapke's formulas with the
    # constants of Warren & Brandt 2008 (computed outside the project: 2002 H-function, i = 30°, e = 0°)
    soil = ice_free_ground("Soil 62231", (650, 1535)).albedos[0]
    frost = ice_materials("frost 50 µm", (650, 1535)).albedos[0]
    red, infrared = _mixed("intimate", soil, frost, (30.0, 0.0), 50.0, (50.0, 3.0)).T
    for fraction, ratio in ((0.1, 0.817), (0.2, 1.026)):
        assert np.interp(fraction, _FRACTIONS, red / infrared) == pytest.approx(ratio, abs=0.003)


def test_more_noise_rarer_ice_and_a_longer_list_need_more_ice():
    base = br.least_ice("areal", ice_free=GROUND)
    assert br.least_ice("areal", ice_free=GROUND, relative=0.1) > 1.3 * base
    assert br.least_ice("areal", ice_free=GROUND, prevalence=1e-4) > base
    assert br.least_ice("areal", ice_free=GROUND, probability=0.99) > base
    assert br.least_ice("areal", ice_free=GROUND, gain_sigma=0.05) > base
    assert br.least_ice("areal") > 3 * base  # any rock
    assert br.least_ice("areal", ice_free=GROUND, relative=(0.03, 0.1)) > base
    assert np.isnan(br.least_ice("areal", relative=0.3))
    assert br.least_ice("areal", ice_free=GROUND, incidence_deg=60) > 0


def test_curves_hold_the_same_ground_everywhere():
    plan = br.plan_lasers(
        "mare", noises=[0.02, 0.05], infrared_wavelengths=[1400, 1535], grain_sizes_um=[50, 300]
    )
    at = br.least_ice("areal", ice_free="mare", site="Moon mare")
    # soil 62231 has no value at 1400 nm: without it the list is shorter, and ice is seen no worse
    assert plan.wavelength["areal"][1535] <= at
    assert plan.wavelength["areal"][1535] == plan.grain_size["areal"][50]
    assert "Soil 62231" in plan.findings[0]
    assert plan.settings["site"] == "Moon mare"
    assert "Soil 62231" not in plan.settings["ground"]
    assert plan.noise.index.tolist() == [0.02, 0.05]


def test_a_site_unknown_at_a_wavelength_leaves_that_out():
    plan = br.plan_lasers(GROUND, noises=[0.03], infrared_wavelengths=[1400, 1535], grain_sizes_um=[50])
    assert np.isnan(plan.wavelength["areal"][1400])
    assert plan.wavelength["areal"][1535] == br.least_ice("areal", ice_free=GROUND)
    assert "1400" in plan.findings[0]


def test_caution_stands_with_the_plan_and_its_picture():
    plan = br.plan_lasers("mare", noises=[0.02, 0.3], infrared_wavelengths=[1500, 1535], grain_sizes_um=[50])
    assert "IEC 60825-1" in plan.caution
    assert "laser safety officer" in plan.caution
    axes = br.plot_laser_plan(plan)
    text = " ".join(" ".join(entry.get_text().split()) for entry in axes[0].figure.texts)
    assert LASER_CAUTION in text
    assert "0.05 where 5 % of the shots hold ice" in text
    drawn = axes[1].lines[0].get_xydata()
    np.testing.assert_allclose(drawn[:, 1], 100 * plan.wavelength["areal"])
    mpl.pyplot.close("all")


def test_command(tmp_path, capsys):
    table = tmp_path / "plan.csv"
    arguments = ["plan", "lasers", "--ice-free", "mare", "--relative", "0.03,0.05", "-o", str(table)]
    with pytest.raises(SystemExit) as stopped:
        main(arguments)
    assert stopped.value.code == 0
    out = capsys.readouterr().out
    assert "IEC 60825-1" in out
    assert "noise 3 % and 5 % of the albedo" in out
    assert table.read_text().startswith("curve,value,areal,intimate")
    with pytest.raises(SystemExit) as stopped:
        main(arguments)
    assert stopped.value.code == 2
    assert "exists already" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["-o", "plan.doc"], "FILE must end in .png, .pdf, .svg, .csv, got 'plan.doc'"),
        (["--relative", "1,2,3"], "--relative wants one number, or one for red and one for infrared"),
        (["--relative", "3"], "relative is a fraction below 1, got 3, 3; 3 % is 0.03"),
        (["--ice-free", "mary"], "names no known material: 'mary'"),
    ],
)
def test_bad_words(words, message, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["plan", "lasers", *words])
    assert stopped.value.code == 2
    assert message in capsys.readouterr().err


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"kind": "dry"}, ValueError, "kind must be one of areal, intimate, got 'dry'"),
        ({"site": "Moon"}, ValueError, "site must be a material of the ground list, .*got 'Moon'"),
        ({"relative": -0.1}, ValueError, "relative must be zero or above"),
        ({"relative": "x"}, TypeError, "relative must be a number, or one for red"),
        ({"sigma": [1, 2, 3]}, ValueError, "sigma must be a number, or one for red"),
        ({"relative": 0, "sigma": (0.1, 0)}, ValueError, "both channels need some noise"),
        ({"prevalence": 5}, ValueError, "prevalence must lie between 0 and 1.*got 5"),
        ({"probability": 1}, ValueError, "probability must lie between 0 and 1"),
        ({"false_discovery_rate": 0}, ValueError, "false discovery rate must lie between 0 and 1"),
        ({"grain_um": 0}, ValueError, "grain_um must be above zero"),
        ({"incidence_deg": 85}, ValueError, "incidence_deg must lie between 0 and 80 degrees, got 85"),
        ({"kind": "intimate", "ground_density": 0}, ValueError, "ground_density must be above zero"),
    ],
)
def test_bad_input(options, error, message):
    with pytest.raises(error, match=message):
        br.least_ice(**{"kind": "areal", "ice_free": "mare", **options})


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"noise": 0.1}, TypeError, "plan_lasers has no noise; it takes site, red_nm"),
        ({"noises": []}, ValueError, "noises must be a list of one value or more"),
        ({"infrared_wavelengths": 1535}, ValueError, "infrared_wavelengths must be a list"),
    ],
)
def test_bad_plans(options, error, message):
    with pytest.raises(error, match=message):
        br.plan_lasers("mare", **options)
    with pytest.raises(TypeError, match="plan must be a LaserPlan"):
        br.plot_laser_plan("plan")
