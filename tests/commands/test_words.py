"""The command line as a user meets it: what map and check do, and how bad input is answered."""

import subprocess
import sys

import click
import numpy as np
import pytest
import rasterio

import bandratio as br
from bandratio.__main__ import main

SPHERE = "+proj=eqc +R=1100000 +units=m"


@pytest.fixture
def scene(tmp_path):
    """A small scene with wavelengths, a map projection and one missing pixel."""
    path = tmp_path / "scene.tif"
    rng = np.random.default_rng(0)
    values = rng.uniform(0.1, 0.2, (4, 30, 40)).astype("f4")
    values[:, 0, 0] = -1
    with rasterio.open(
        path, "w", driver="GTiff", count=4, height=30, width=40, dtype="float32", nodata=-1, crs=SPHERE,
        transform=rasterio.transform.from_origin(0, 0, 100, 100),
    ) as target:  # fmt: skip
        target.write(values)
        for band, nm in enumerate((480, 600, 700, 830), start=1):
            target.set_band_description(band, f"{nm} nm")
    return path


def run(*words):
    """Exit code of a command."""
    with pytest.raises(SystemExit) as stop:
        main([str(word) for word in words])
    return stop.value.code


@pytest.mark.parametrize("ending", ["tif", "zarr", "nc"])
def test_map_writes_what_parameters_computes(scene, tmp_path, capsys, ending):
    out = tmp_path / f"maps.{ending}"
    assert run("map", scene, "-o", out, "--random", 0.001, "--band-gain", "0.01,0.01,0.02,0.01") == 0
    maps = br.open_maps(out)
    expected = br.parameters(br.open_cube(scene), br.Noise(random=0.001, band_gain=[0.01, 0.01, 0.02, 0.01]))
    assert set(maps.data_vars) == set(expected.data_vars)
    for name in expected.data_vars:
        np.testing.assert_array_equal(maps[name], expected[name])
    told = capsys.readouterr().out
    assert "typical sigma" in told
    assert "% per 100 nm" in told
    assert "0.1%" in told  # one pixel of 1,200 is missing
    assert "left out: mafic_depth_continuum: no band within 15 nm of 750 nm" in told


def test_map_takes_names_and_noise_from_a_table(scene, tmp_path):
    table = tmp_path / "noise.csv"
    table.write_text("wavelength,random\n480,0.001\n600,0.001\n700,0.002\n830,0.002\n")
    out = tmp_path / "maps.nc"
    assert run("map", scene, "-o", out, "--names", "red_slope", "--noise", table, "--parts") == 0
    assert set(br.open_maps(out).data_vars) == {
        "red_slope", "red_slope_sigma", "red_slope_sigma_random", "red_slope_sigma_shared",
    }  # fmt: skip


def test_map_without_noise_says_that_sigma_is_not_known(scene, tmp_path, capsys):
    assert run("map", scene, "-o", tmp_path / "maps.tif") == 0
    assert "not known" in capsys.readouterr().out


def test_check_tells_what_it_found(scene, tmp_path, capsys):
    assert run("check", scene) == 0
    assert "no findings; all 1,200 pixels were read" in capsys.readouterr().out
    assert run("check", scene, "--scale", 100) == 1
    assert "look like percent" in capsys.readouterr().out


BAD = {
    "no such scene": (["map", "nothing.tif", "-o", "out.tif"], "nothing.tif"),
    "no output": (["map", "SCENE"], "Missing option '-o'"),
    "unknown ending": (["map", "SCENE", "-o", "out.png"], ".png"),
    "no such folder": (["map", "SCENE", "-o", "nowhere/out.tif"], "nowhere"),
    "unknown name": (["map", "SCENE", "-o", "out.tif", "--names", "red_slop"], "did you mean red_slope"),
    "missing band": (["map", "SCENE", "-o", "out.tif", "--names", "r950_r750"], "no band within 15 nm of"),
    "words for wavelengths": (["map", "SCENE", "-o", "out.tif", "--wavelengths", "red,blue"],
                              "--wavelengths wants numbers with commas between"),
    "too few wavelengths": (["map", "SCENE", "-o", "out.tif", "--wavelengths", "480,600"], "480, 600 nm"),
    "micrometres": (["map", "SCENE", "-o", "out.tif", "--wavelengths", "0.48,0.6,0.7,0.83"], "look like µm"),
    "unknown quantity": (["map", "SCENE", "-o", "out.tif", "--quantity", "albedo"], "unknown quantity 'albedo'"),
    "negative noise": (["map", "SCENE", "-o", "out.tif", "--random", "-0.1"], "random must be zero or above"),
    "percent": (["map", "SCENE", "-o", "out.tif", "--band-gain", "3"], "3 % is 0.03"),
    "noise of wrong length": (["map", "SCENE", "-o", "out.tif", "--random", "0.1,0.2"],
                              "random has 2 values, but the cube has 4 bands"),
    "no such noise table": (["map", "SCENE", "-o", "out.tif", "--noise", "none.csv"], "none.csv"),
    "two kinds of noise": (["map", "SCENE", "-o", "out.tif", "--noise", "none.csv", "--random", "0.1"],
                           "give either --noise FILE.csv or single parts"),
    "parts without noise": (["map", "SCENE", "-o", "out.tif", "--parts"], "splits the sigmas"),
    "no number": (["map", "SCENE", "-o", "out.tif", "--tolerance", "wide"], "'wide' is not a valid float"),
    "unknown option": (["map", "SCENE", "--wavelength", "480"], "--wavelengths"),
    "unknown word": (["mop"], "mop"),
    "check nothing": (["check", "nothing.tif"], "nothing.tif"),
    "a text as a scene": (["check", "TEXT"], "notes.txt"),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_bad_input_gets_one_line_and_exit_code_2(case, scene, tmp_path, monkeypatch, capsys):
    words, message = BAD[case]
    text = tmp_path / "notes.txt"
    text.write_text("no raster")
    monkeypatch.chdir(tmp_path)
    before = set(tmp_path.iterdir())
    assert run(*(scene if word == "SCENE" else text if word == "TEXT" else word for word in words)) == 2
    answer = capsys.readouterr()
    assert message in answer.err
    assert answer.err.startswith("bandratio: ")
    assert answer.err.count("\n") == 1
    assert "Traceback" not in answer.err
    assert answer.out == ""
    assert set(tmp_path.iterdir()) == before, "something was left behind"


def test_an_existing_output_is_kept(scene, tmp_path, capsys):
    out = tmp_path / "maps.tif"
    out.write_bytes(b"precious")
    assert run("map", scene, "-o", out) == 2
    assert "exists" in capsys.readouterr().err
    assert out.read_bytes() == b"precious"
    assert run("map", scene, "-o", out, "--overwrite") == 0
    assert br.open_maps(out).sizes == {"y": 30, "x": 40}


def test_every_word_shows_an_example():
    answer = subprocess.run(
        [sys.executable, "-m", "bandratio", "--help"], capture_output=True, text=True, check=True
    )
    listed = answer.stdout.split("Commands:")[1].split()
    for word in ("map", "check", "demo"):
        assert word in listed
    from bandratio.__main__ import words

    for word in words.list_commands(None):
        command = words.get_command(None, word)
        text = command.get_help(click.Context(command))
        nested = [command.get_command(None, name) for name in getattr(command, "commands", {})]
        assert "Example" in text or all("Example" in one.get_help(click.Context(one)) for one in nested), word
