"""A threshold as a value: what it holds, and what it refuses to be held against."""

import dataclasses
import json

import dask.array as da
import numpy as np
import pytest
import xarray as xr

import bandratio as br
from bandratio.detection import as_threshold

LABORATORY = br.Threshold(
    0.03, 0.01, "laboratory", "mafic_depth", shoulder=750, quantity="reflectance_factor"
)


def depth_map(quantity="reflectance_factor", shoulder=750.0, name="mafic_depth"):
    values = xr.DataArray(np.zeros((2, 2)), dims=("y", "x"), name=name)
    if shoulder is not None:
        values.attrs["shoulder"] = shoulder
    return values if quantity is None else values.assign_coords(quantity=quantity)


def test_it_is_a_value():
    assert br.Threshold(1) == br.Threshold(1.0, 0.0, "absolute", "")
    assert hash(LABORATORY) == hash(dataclasses.replace(LABORATORY))
    with pytest.raises(dataclasses.FrozenInstanceError):
        LABORATORY.value = 2.0


def test_what_fits_is_let_through():
    LABORATORY.check_map(depth_map())
    LABORATORY.check_map(depth_map(shoulder=749.2))
    br.Threshold(0.03).check_map(depth_map(quantity=None))
    br.Threshold(0.03, origin="scene", parameter="mafic_depth").check_map(depth_map(quantity=None))


def test_a_word_of_the_user_lets_it_through():
    LABORATORY.for_quantity("radiance_factor").check_map(depth_map("radiance_factor"))
    LABORATORY.for_quantity("any").check_map(depth_map(None))


@pytest.mark.parametrize(
    ("threshold", "values", "message"),
    [
        (
            LABORATORY,
            depth_map("radiance_factor"),
            r"holds for reflectance_factor, and the maps hold radiance_factor",
        ),
        (LABORATORY, depth_map(None), r"maps do not say which quantity.*for_quantity\('any'\)"),
        (
            LABORATORY,
            depth_map(shoulder=700.0),
            r"made with a shoulder at 750 nm, and the maps have theirs at 700 nm",
        ),
        (LABORATORY, depth_map(shoulder=None), r"maps do not say where theirs is"),
        (LABORATORY, depth_map(name="red_slope"), r"threshold of mafic_depth was given for red_slope"),
        (
            dataclasses.replace(LABORATORY, shoulder=None),
            depth_map(),
            r"does not say which shoulder it was made with, and the maps have theirs at 750 nm",
        ),
        (
            dataclasses.replace(LABORATORY, quantity=None),
            depth_map(),
            r"does not say which reflectance quantity it holds for",
        ),
        (
            br.Threshold(0.03, origin="scene", quantity="brdf"),
            depth_map(),
            r"scene threshold of any parameter holds for brdf",
        ),
    ],
)
def test_unlike_maps_are_refused(threshold, values, message):
    with pytest.raises(ValueError, match=message):
        threshold.check_map(values)


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ((float("nan"),), ValueError, r"value must be finite"),
        (("high",), TypeError, r"value must be a number, got 'high'"),
        ((1, -0.1), ValueError, r"sigma must be zero or above"),
        ((1, 0, "moon"), ValueError, r"origin must be one of laboratory, scene, absolute, got 'moon'"),
        ((1, 0, "absolute", 7), TypeError, r"parameter must be a name"),
        ((1, 0, "absolute", "", 0.75), ValueError, r"shoulder must be a wavelength in nm"),
    ],
)
def test_bad_thresholds(arguments, error, message):
    with pytest.raises(error, match=message):
        br.Threshold(*arguments)


def test_numbers_become_thresholds():
    assert as_threshold(0.1, "red_slope").parameter == "red_slope"
    assert as_threshold(LABORATORY) is LABORATORY
    assert as_threshold(np.float32(0.5)).value == 0.5
    for wrong in ("0.1", None, True):
        with pytest.raises(TypeError, match="must be a number or a Threshold"):
            as_threshold(wrong, "red_slope")


def test_it_can_be_told_and_read_back():
    told = json.loads(json.dumps(LABORATORY.describe()))
    assert br.Threshold.from_description(told) == LABORATORY
    with pytest.raises(ValueError, match="needs value"):
        br.Threshold.from_description({"sigma": 1})


# ---- thresholds from the scene


@pytest.mark.parametrize("quantile", [0.001, 0.25, 0.5, 0.99, 0.9999])
@pytest.mark.parametrize("shape", ["normal", "ties", "tail"])
@pytest.mark.parametrize("held", [4_000_000, 20])
def test_lazy_and_eager_quantiles_are_the_same(quantile, shape, held, monkeypatch):
    monkeypatch.setattr("bandratio.detection.scene._HELD", held)
    monkeypatch.setattr("bandratio.detection.scene._BINS", 65_536 if held > 1000 else 8)
    generator = np.random.default_rng(3)
    draw = {
        "normal": lambda: generator.normal(size=(80, 90)),
        "ties": lambda: generator.integers(0, 4, (80, 90)).astype(float),
        "tail": lambda: generator.standard_cauchy((80, 90)),
    }
    values = draw[shape]().astype(np.float32)
    values[::7, ::5] = np.nan
    eager = xr.Dataset({"p": (("y", "x"), values)})
    lazy = xr.Dataset({"p": (("y", "x"), da.from_array(values, chunks=(33, 40)))})
    expected = np.quantile(values[np.isfinite(values)], quantile, method="higher")
    assert br.scene_threshold(eager, "p", quantile).value == expected
    assert br.scene_threshold(lazy, "p", quantile) == br.scene_threshold(eager, "p", quantile)


def test_a_lazy_map_is_read_three_times():
    """Once for the ends, once to count, once to keep what is near the quantile: maps are computed anew each time."""
    reads = []

    def block(values):
        reads.append(values.size)
        return values

    values = np.random.default_rng(5).normal(size=(40, 50))
    lazy = da.from_array(values, chunks=(40, 50)).map_blocks(block, dtype=float, meta=np.empty((0, 0)))
    br.scene_threshold(xr.Dataset({"p": (("y", "x"), lazy)}), "p", 0.9)
    assert len(reads) == 3


def test_its_sigma_is_the_sampling_error_of_the_quantile():
    generator = np.random.default_rng(4)
    found = [
        br.scene_threshold(xr.Dataset({"p": ("x", generator.normal(size=2000))}), "p", 0.9)
        for _ in range(300)
    ]
    spread = np.std([each.value for each in found])
    assert np.mean([each.sigma for each in found]) == pytest.approx(spread, rel=0.2)


def test_it_carries_what_the_map_says():
    maps = depth_map("radiance_factor", 700.0).to_dataset()
    threshold = br.scene_threshold(maps, "mafic_depth", 0.5)
    assert (threshold.origin, threshold.quantity, threshold.shoulder) == ("scene", "radiance_factor", 700.0)
    threshold.check_map(maps["mafic_depth"])


@pytest.mark.parametrize(
    ("maps", "name", "quantile", "error", "message"),
    [
        (
            xr.Dataset({"red_slope": ("x", [1.0])}),
            "red_slop",
            0.5,
            ValueError,
            r"hold no 'red_slop'; did you mean red_",
        ),
        (xr.Dataset({"p": ("x", [np.nan])}), "p", 0.5, ValueError, r"p has no finite value"),
        (xr.Dataset({"p": ("x", [1.0])}), "p", 95, ValueError, r"quantile must lie between 0 and 1"),
        (
            xr.DataArray([1.0], dims="x"),
            "p",
            0.5,
            TypeError,
            r"must be a Dataset of parameters, got DataArray",
        ),
    ],
)
def test_bad_scene_thresholds(maps, name, quantile, error, message):
    with pytest.raises(error, match=message):
        br.scene_threshold(maps, name, quantile)


# ---- thresholds in a file


def test_a_file_of_thresholds_round_trips(tmp_path):
    spectra = br.reference_spectra([600, 700, 830])
    made = br.thresholds(spectra, "mafic_depth", "olivine", "plagioclase", noise=br.Noise(relative=0.01))
    file = br.write_thresholds(made, tmp_path / "thresholds.json")
    assert br.read_thresholds(file) == made
    read, wrote = (each["mafic_depth"].separation for each in (br.read_thresholds(file), made))
    assert read == wrote  # all but the curve
    assert read.curve.size == 0
    assert br.read_thresholds(file, "mafic_depth") == made
    assert json.loads(file.read_text())["mafic_depth"]["separation"]["n_unwanted"] == 4
    assert [path.name for path in tmp_path.iterdir()] == ["thresholds.json"]
    with pytest.raises(FileExistsError, match="exists already"):
        br.write_thresholds(made, file)
    with pytest.raises(ValueError, match=r"holds no threshold of 'mafic_deth'; did you mean mafic_depth"):
        br.read_thresholds(file, "mafic_deth")


@pytest.mark.parametrize("text", ["no json", "[1, 2]", '{"red_slope": 9}', '{"red_slope": {"sigma": 1}}'])
def test_files_that_hold_no_thresholds(tmp_path, text):
    (tmp_path / "thresholds.json").write_text(text)
    with pytest.raises(ValueError, match=r"thresholds\.json: not a file of thresholds"):
        br.read_thresholds(tmp_path / "thresholds.json")


def test_the_side_of_the_wanted_is_remembered(tmp_path):
    spectra = br.reference_spectra([600, 700])
    made = br.thresholds(spectra, "reflectance_700", "opaque", "plagioclase", false_alarm_rate=0.1)
    file = br.write_thresholds(made, tmp_path / "dark.json")
    maps = br.parameters(spectra, br.Noise(relative=0.01))
    for threshold in (made["reflectance_700"], br.read_thresholds(file)["reflectance_700"]):
        threshold.check_direction("below")
        with pytest.raises(
            ValueError, match="made for wanted values below it, and values above it are asked for"
        ):
            br.pyroclastic_flags(maps, brighter_than=threshold)
        assert "flag" in br.pyroclastic_flags(maps, darker_than=threshold)
    br.Threshold(0.1).check_direction("above")
