"""ice_flags: the decision table, dropouts, labels, lazy arrays, and what is said of bad input."""

import dask.array as da
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

import bandratio as br
from bandratio.detection.false_discovery import adjusted
from bandratio.ice import FLAG_MEANINGS, GROUND_LISTS, ice_free_ground, ice_materials
from bandratio.mixing import ice_reflectance

SOIL, ILMENITE, ICE = (0.15981, 0.26907), (0.0553, 0.0599), (0.58, 0.0065)
LIST = {"soil": SOIL, "ilmenite": ILMENITE}
NOISE = {"relative_red": 0.03, "relative_infrared": 0.03, "ice_free": LIST}


def words(flags):
    meanings = flags["flag"].attrs["flag_meanings"].split()
    return [meanings[code] for code in np.ravel(flags["flag"].values)]


def scene(n=20_000, seed=5):
    rng = np.random.default_rng(seed)
    share = rng.uniform(0, 0.5, (n, 1))
    truth = (1 - share) * np.array(SOIL) + share * np.array(ILMENITE)
    icy = rng.random(n) < 0.05
    truth[icy] = 0.9 * truth[icy] + 0.1 * np.array(ICE)
    measured = truth * (1 + 0.03 * rng.standard_normal((n, 2)))
    measured[::97, 1] = np.nan
    measured[3, 0] = np.nan
    measured[50:60] = 0.05, 0.9
    return measured


def test_the_decision_table_in_its_order():
    flags = br.ice_flags(
        #  red missing, infrared missing, beyond all that is listed, ice, opaque, plain soil, a poor measurement
        [np.nan, 0.2, 0.05, 0.5, 0.0553, 0.16, 0.165],
        [0.2, np.nan, 0.9, 0.02, 0.0599, 0.27, 0.268],
        [0.001] * 6 + [0.02], 0.001, **NOISE,
    )  # fmt: skip
    assert words(flags) == [
        "no_data", "no_data", "unexplained", "ice_candidate", "opaque_like", "ice_free", "undecided",
    ]  # fmt: skip
    assert np.isnan(flags["p_value"].values[:2]).all()
    assert flags["p_value"].values[2] == 1  # set before the false discovery rule
    assert flags["flag"].attrs["flag_values"].tolist() == list(range(6))


def test_points_outside_all_that_is_listed_are_left_out_before_the_false_discovery_rule():
    # brighter than any ice listed: far outside the ground, and outside ground with ice too
    measured = scene()
    measured[100:200] = 0.9, 0.01
    flags = br.ice_flags(*measured.T, 0.001, 0.001, **NOISE, ice=[ICE])
    assert set(words(flags)[100:200]) == {"unexplained"}
    assert (flags["p_value"].values[100:200] == 1).all()
    assert (flags["outside_sigma"].values[100:200] > 10).all()


def test_q_values_and_flags_are_one_decision():
    flags = br.ice_flags(*scene().T, 0.001, 0.001, **NOISE)
    candidate = np.array(words(flags)) == "ice_candidate"
    assert candidate.sum() > 200
    p, q = flags["p_value"].values, flags["q_value"].values
    np.testing.assert_array_equal(candidate, q <= 0.05)
    np.testing.assert_allclose(q, adjusted(p))
    any_dependence = br.ice_flags(*scene().T, 0.001, 0.001, **NOISE, dependence="any")
    fewer = np.array(words(any_dependence)) == "ice_candidate"
    assert fewer.sum() < candidate.sum()
    assert not (fewer & ~candidate).any()


def test_a_missing_infrared_return_over_a_bright_red_one_is_the_signal():
    red, infrared = [0.30, 0.30, 0.05, 0.16], [np.nan, np.nan, np.nan, 0.27]
    flags = br.ice_flags(red, infrared, 0.001, 0.001, **NOISE, infrared_limit=[0.02, np.nan, 0.05, 0.02])
    assert words(flags) == ["ice_candidate", "no_data", "undecided", "ice_free"]
    # from a limit alone nothing is said to be opaque or unexplained, and much ice stays possible
    assert flags["fraction_upper"].values[0] > flags["fraction_lower"].values[0] > 0.2
    assert flags["ratio"].values[0] == pytest.approx(15)


@given(st.floats(0.01, 0.9), st.floats(0.005, 0.3))
def test_what_is_said_of_a_dropout_holds_for_every_infrared_albedo_below_the_limit(red, limit):
    dropout = br.ice_flags([red], [np.nan], 0.002, 0.002, **NOISE, ice=[ICE], infrared_limit=limit)
    below = np.linspace(0, limit, 9)
    known = br.ice_flags(np.full(9, red), below, 0.002, 0.002, **NOISE, ice=[ICE])
    assert dropout["p_value"].values[0] >= known["p_value"].values[known["p_value"].values < 1].max(
        initial=0
    ) * (1 - 1e-9)
    # scaled errors of the bounds grow with the infrared albedo, so compare at the largest
    assert dropout["fraction_upper"].values[0] >= known["fraction_upper"].values.max() - 0.02
    assert dropout["fraction_lower"].values[0] <= known["fraction_lower"].values.min() + 0.02
    assert words(dropout)[0] != "opaque_like"
    if words(dropout)[0] == "unexplained":
        assert set(words(known)) <= {"unexplained", "ice_candidate", "undecided", "ice_free", "opaque_like"}
        assert words(known)[-1] == "unexplained"


def test_a_lone_ratio_knows_no_amounts_and_no_opaques():
    flags = br.ice_flags([0.2, 0.05, 0.5, np.nan], [0.3, 0.06, 0.1, 0.1], 0.01, 0.01, ice_free_ratio=1.0)
    assert words(flags) == ["undecided", "undecided", "ice_candidate", "no_data"]
    assert flags["fraction_lower"].values[:3].tolist() == [0, 0, 0]
    assert flags["fraction_upper"].values[:3].tolist() == [1, 1, 1]
    assert np.isnan(flags.attrs["least_areal_ice"])
    assert flags.attrs["ice_free"] == "one ratio, 1"


def test_the_opposition_ratio_takes_the_red_back_to_the_laboratory():
    red, infrared = np.array([0.18, 0.3]), np.array([0.25, 0.2])
    once = br.ice_flags(red, infrared, 0.002, 0.003, **NOISE)
    again = br.ice_flags(1.1 * red, infrared, 1.1 * 0.002, 0.003, **NOISE, opposition_ratio=1.1)
    for name in once:
        np.testing.assert_allclose(again[name], once[name], rtol=1e-5)


def test_unknown_incidence_sees_less_than_a_known_one():
    red, infrared = np.full(3, 0.19), np.full(3, 0.26)
    flags = br.ice_flags(red, infrared, 0.001, 0.001, **NOISE, incidence_deg=[0.0, 45.0, np.nan])
    outside = flags["outside_sigma"].values
    assert outside[0] > outside[1] > outside[2]
    assert flags.attrs["geometry"].startswith("lidar")


@pytest.mark.parametrize("chunks", [2500, 20_000])
def test_lazy_arrays_give_the_same_flags_lazily(chunks):
    measured = scene()
    asked = NOISE | {"infrared_limit": 0.02}
    eager = br.ice_flags(*measured.T, 0.001, 0.001, **asked)
    lazy = br.ice_flags(
        *(da.from_array(column, chunks=chunks) for column in measured.T), 0.001, 0.001, **asked
    )
    assert lazy["flag"].chunks is not None
    assert lazy.attrs["p_value_cut"] == eager.attrs["p_value_cut"]
    computed = lazy.compute()
    for name in eager:
        assert computed[name].dtype == eager[name].dtype
        # the q-values of a streamed pass come from a table, never too small and at most 0.2 % too large
        np.testing.assert_allclose(computed[name], eager[name], rtol=2.1e-3 if name == "q_value" else 1e-12)
    np.testing.assert_array_equal(computed["q_value"] <= 0.05, eager["q_value"] <= 0.05)


def test_a_lazy_scene_with_many_telling_values_spills_to_a_file(monkeypatch):
    from bandratio.ice import judging as room

    monkeypatch.setattr(room, "_SPOOL_IN_MEMORY", 1000)
    measured = scene()
    eager = br.ice_flags(*measured.T, 0.001, 0.001, **NOISE)
    lazy = br.ice_flags(*(da.from_array(column, chunks=6000) for column in measured.T), 0.001, 0.001, **NOISE)
    np.testing.assert_array_equal(lazy["flag"].values, eager["flag"].values)


def test_two_bands_of_a_cube_keep_their_coordinates_and_give_their_wavelengths():
    cube = br.as_cube(scene(600).T.reshape(2, 20, 30), [650, 1550], quantity="reflectance_factor")
    cube = cube.assign_coords(y=np.arange(20.0), x=np.arange(30.0))
    red, infrared = cube.sel(wavelength=650), cube.sel(wavelength=1550)
    flags = br.ice_flags(
        red, infrared, 0.002, xr.full_like(red, 0.002), relative_red=0.03, relative_infrared=0.03
    )
    assert flags["flag"].dims == ("y", "x")
    assert flags["x"].values.tolist() == list(range(30))
    assert (flags.attrs["red_nm"], flags.attrs["infrared_nm"]) == (650, 1550)
    assert "wavelength" not in flags.coords
    assert flags.attrs["ice_free"].startswith("any rock")
    assert "Soil 62231" in flags.attrs["least_areal_ice_meaning"]
    assert "never proof" in flags.attrs["caution"]


@pytest.mark.parametrize("lazy", [False, True])
def test_what_can_be_seen_is_told_by_the_points_that_are_judged(lazy):
    # most cells of a grid of returns are empty, and hold errors of 0
    red, infrared = np.full((2, 30, 30), np.nan)
    red[:5], infrared[:5] = SOIL
    errors = np.where(np.isnan(red), 0.0, 0.01)
    arrays = (red, infrared, errors, errors)
    grid = br.ice_flags(*(da.from_array(a, chunks=15) if lazy else a for a in arrays), ice_free=LIST)
    alone = br.ice_flags(*SOIL, 0.01, 0.01, ice_free=LIST)
    assert grid.attrs["typical_sigma_red"] == grid.attrs["typical_sigma_infrared"] == 0.01
    assert grid.attrs["least_areal_ice"] == alone.attrs["least_areal_ice"] > 0


def test_flags_survive_a_file(tmp_path):
    flags = br.ice_flags(*scene(500).T, 0.001, 0.001, **NOISE)
    br.write_maps(flags, tmp_path / "flags.nc")
    again = br.open_maps(tmp_path / "flags.nc")
    np.testing.assert_array_equal(again["flag"], flags["flag"])
    assert again.attrs["ice_free"] == flags.attrs["ice_free"]
    np.testing.assert_allclose(again.attrs["ice_free_hull_red"], flags.attrs["ice_free_hull_red"])


def test_shapes_numbers_and_one_shot():
    assert br.ice_flags(0.16, 0.27, 0.001, 0.001, **NOISE)["flag"].shape == ()
    assert br.ice_flags([[0.16]], [[0.27]], 0.001, [[0.001]], **NOISE)["flag"].dims == ("y", "x")
    none = br.ice_flags([], [], 0.001, 0.001, **NOISE)
    assert none["flag"].shape == (0,)


def test_an_own_library_serves_as_ground():
    library = br.reference_spectra()
    own = library[library["group"].values == "plagioclase"]
    named = ice_free_ground("plagioclase", (640, 1535))
    np.testing.assert_allclose(ice_free_ground(own, (640, 1535)).albedos, named.albedos, atol=1e-6)


def test_the_ground_lists_are_of_the_table_and_any_rock_holds_them_all():
    rock = ice_free_ground(None, (640, 1535))
    for name in GROUND_LISTS:
        assert set(ice_free_ground(name, (640, 1535)).names) < set(rock.names)
    assert rock.names[-1] == "ideal white"
    assert rock.reflectance()[-1] == pytest.approx([1, 1])
    assert len(rock.names) > 30


def test_ices_by_name_are_those_of_the_constants():
    frost = ice_materials("frost 50 µm", (650, 1535))
    assert frost.reflectance()[0] == pytest.approx(ice_reflectance([650, 1535], 50))
    both = ice_materials(["snow", "frost 5 um"], (640, 1535))
    assert ice_materials("Slush mSnw15", (640, 1535)).names == ("Slush mSnw15",)
    assert both.names == ("Snow mSnw01a", "Snow mSnw05", "Slush mSnw09", "Slush mSnw15", "frost 5 µm")


A = xr.DataArray([0.1, 0.2], dims="shot", coords={"shot": [1, 2]})

BAD = [
    ({"sigma_red": -0.01}, "sigma_red must be zero or above, got -0.01"),
    ({"sigma_infrared": np.inf}, "sigma_infrared must be finite"),
    ({"covariance": 1.0}, r"covariance must not exceed what the two sigmas allow, got 1 for sigmas of 0.01"),
    ({"relative_red": -1}, "relative_red must be zero or above"),
    (
        {"relative_infrared": [0.1, 0.2, 0.3]},
        r"relative_infrared must be one number or have the shape of red, \(2,\)",
    ),
    ({"gain_sigma": -0.1}, "gain_sigma must be zero or above"),
    ({"ice_free_sigma": -0.1}, "ice_free_sigma must be zero or above"),
    ({"ice_free": "mare", "ice_free_ratio": 0.9}, "either ice_free=… .* or ice_free_ratio=…"),
    ({"ice_free": "marre"}, "'marre'; did you mean mare"),
    ({"ice_free": ["Soil 62231", "ilmenit"]}, "'ilmenit'; did you mean Ilmenite"),
    ({"ice_free": []}, r"must have shape \(material, 2\)"),
    ({"ice_free": [0.1, 0.2]}, r"must have shape \(material, 2\), red and infrared of each, got \(2,\)"),
    ({"ice_free": [[16, 27]]}, "at most 1.025 .* got 16 to 27; give reflectance factors as fractions"),
    ({"ice_free": [[0.1, 0.0]]}, "must be above 0"),
    ({"ice_free": [[0.1, np.nan]]}, "must be above 0"),
    ({"ice_free": "ice"}, "'ice' is ice, and cannot be ice-free ground"),
    ({"ice_free_ratio": 0}, "ice_free_ratio must be above zero"),
    ({"ice": "Soil 62231"}, "no ice in the reference table"),
    ({"ice": "frosty"}, "'frosty'; did you mean"),
    ({"ice": "frost 0 µm"}, "grain_size_um must be above zero"),
    ({"ice": "H2O-Ice GDS136 77K"}, "has a value at both 640 and 1535 nm"),
    ({"opposition_ratio": 0}, "opposition_ratio must be above zero"),
    ({"incidence_deg": 85.0}, "between 0 and 80 degrees, got 85"),
    ({"incidence_deg": [-5.0, 0.0]}, "between 0 and 80 degrees, got -5"),
    ({"infrared_limit": -0.1}, "infrared_limit must be zero or above"),
    ({"red_nm": -640}, "red_nm must be above zero"),
    ({"infrared_nm": 5000}, "reference table|1800"),
    ({"false_discovery_rate": 5}, "false_discovery_rate must lie between 0 and 1"),
    ({"dependence": "none"}, "dependence must be one of positive, any"),
    ({"least_fraction": 0}, "least_fraction must lie between 0 and 1"),
    ({"confidence": 95}, "confidence must lie between 0 and 1"),
    ({"infrared": [0.1, 0.2, 0.3]}, r"infrared must be one number or have the shape of red"),
    ({"red": A, "infrared": A.assign_coords(shot=[2, 3])}, "infrared does not lie on red's coordinates"),
    ({"red": A, "infrared": A.rename(shot="pulse").drop_vars("pulse")}, "infrared has the dimension pulse"),
    (
        {"red": A.assign_coords(quantity="radiance_factor")},
        "got radiance_factor; convert it with convert_quantity",
    ),
]


@pytest.mark.parametrize(("changed", "message"), BAD, ids=[str(list(changed)) for changed, _ in BAD])
def test_bad_input_gives_one_clear_error(changed, message):
    asked = {"red": [0.1, 0.2], "infrared": [0.2, 0.1], "sigma_red": 0.01, "sigma_infrared": 0.01} | changed
    with pytest.raises(ValueError, match=message):
        br.ice_flags(**asked)


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"red": ["bright", "dark"]}, "red must be numbers"),
        ({"ice_free": object()}, "must be names, albedos"),
        ({"sigma_red": np.array(["a", "b"])}, "sigma_red must be real numbers, got"),
        ({"infrared": ["a", "b"]}, "infrared must be real numbers, got"),
        ({"gain_sigma": "much"}, "gain_sigma must be a number"),
    ],
)
def test_bad_kinds_are_named(changed, message):
    asked = {"red": [0.1, 0.2], "infrared": [0.2, 0.1], "sigma_red": 0.01, "sigma_infrared": 0.01} | changed
    with pytest.raises((TypeError, ValueError), match=message):
        br.ice_flags(**asked)


def test_the_meanings_are_those_of_the_flag_words():
    assert FLAG_MEANINGS == (
        "no_data",
        "ice_free",
        "opaque_like",
        "undecided",
        "unexplained",
        "ice_candidate",
    )
