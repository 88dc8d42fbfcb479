"""The words pyroclastic and report as a user meets them: files in, files and a page out, one line for bad input."""

import re
import sys

import numpy as np
import pandas as pd
import pytest
import xarray as xr

import bandratio as br
from bandratio.__main__ import main


@pytest.fixture
def files(tmp_path, monkeypatch):
    """Maps of a small scene with one bright flat patch, and its cube, in the folder where the commands run."""
    import rioxarray  # noqa: F401 (it adds .rio)

    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(0)
    R = rng.normal(0.12, 0.004, (40, 50))
    S = rng.normal(11, 0.5, (40, 50))
    R[5:9, 5:12], S[5:9, 5:12] = 0.2, 3
    R1 = R * (1 - S / 200) / (1 + S / 200)
    coords = {"y": 20_000 - 100.0 * np.arange(40), "x": 100.0 * np.arange(50)}
    array = xr.DataArray(np.stack([R1, R]).astype("f4"), dims=("wavelength", "y", "x"), coords=coords)
    cube = br.as_cube(array, [600, 700]).rio.write_crs("+proj=eqc +R=1100000 +units=m")
    cube.drop_vars("wavelength").rio.to_raster(tmp_path / "scene.tif")
    br.write_maps(
        br.parameters(cube, br.Noise(random=0.001, band_gain=0.002), parts=True), tmp_path / "maps.tif"
    )
    return tmp_path


def run(capsys, *words):
    with pytest.raises(SystemExit) as stop:
        main(list(words))
    said = capsys.readouterr()
    return stop.value.code, said.out, said.err


FLAG = ("pyroclastic", "maps.tif", "-o", "flags.tif", "--brighter-than", "0.17", "--flatter-than", "7,0.2")


def test_flags_regions_and_closing_lines(files, capsys):
    code, out, _ = run(capsys, *FLAG, "--regions", "regions.csv", "--min-pixels", "3")
    assert code == 0
    flags = br.open_maps(files / "flags.tif")
    maps = br.open_maps(files / "maps.tif")
    same = br.pyroclastic_flags(maps.compute(), brighter_than=0.17, flatter_than=br.Threshold(7, 0.2))
    np.testing.assert_array_equal(flags.flag, same.flag)
    assert flags.flag.attrs["flag_meanings"] == same.flag.attrs["flag_meanings"]
    count = int((same.flag == 3).sum())
    assert re.search(rf"bright_candidate +{count} ", out)
    assert "flatter_than: 7 ± 0.2 (absolute); whole sigma" in out
    assert "never proof" in out
    table = pd.read_csv("regions.csv")
    assert table.n_pixels.max() >= 20
    assert table.n_pixels.min() >= 3


def test_threshold_of_the_scene(files, capsys):
    code, out, _ = run(capsys, *FLAG[:4], "--brighter-than", "scene:0.97", "--flatter-than", "scene:0.05")
    assert code == 0
    assert "(scene); random part of sigma: gains that the scene shares cancel" in out


def test_report_says_how_to_make_it_again(files, capsys):
    run(capsys, *FLAG)
    words = (
        "report", "maps.tif", "-o", "page.html", "--flags", "flags.tif", "--scene", "scene.tif", "--wavelengths", "600,700",
        "--title", "Corvane Basin",
    )  # fmt: skip
    code, out, _ = run(capsys, *words)
    assert code == 0
    assert "page.html: " in out
    page = (files / "page.html").read_text()
    again = "bandratio report maps.tif -o page.html --flags flags.tif --scene scene.tif --title &#x27;Corvane Basin&#x27; --wavelengths 600,700"
    assert again in page
    assert "reflectance_700 spread" in page
    assert page.count("<h1>Corvane Basin</h1>") == 1


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (FLAG[:4], "no limit is given; give brighter_than"),
        ((*FLAG[:4], "--brighter-than", "high"), "--brighter-than wants a number"),
        ((*FLAG[:4], "--brighter-than", "1,2,3"), "--brighter-than wants a number"),
        ((*FLAG[:4], "--brighter-than", "scene:2"), "quantile must lie between 0 and 1"),
        ((*FLAG[:4], "--brighter-than", "0.2,-1"), "a threshold's sigma must be zero or above"),
        ((*FLAG, "--regions", "regions.xlsx"), "--regions wants a .csv, .parquet or .gpkg"),
        ((*FLAG[:3], "flags.jpg", *FLAG[4:]), "flags.jpg"),
        (("pyroclastic", "none.tif", *FLAG[2:]), "none.tif"),
        (("report", "maps.tif", "-o", "page.pdf"), "must end in .html"),
        (("report", "none.tif", "-o", "page.html"), "none.tif"),
        (
            ("report", "maps.tif", "-o", "maps.html", "--flags", "maps.tif"),
            "flags must be the Dataset of a flagging function",
        ),
    ],
)
def test_bad_input_is_one_line_and_exit_code_2(files, capsys, words, said):
    code, _, err = run(capsys, *words)
    assert code == 2
    assert len(err.strip().splitlines()) == 1
    assert said in err


def test_polygons_without_their_library(files, capsys, monkeypatch):
    monkeypatch.setitem(sys.modules, "geopandas", None)
    code, _, err = run(capsys, *FLAG, "--regions", "regions.gpkg")
    assert code == 2
    assert "pip install 'bandratio[regions]'; or take .csv or .parquet" in err
    assert not (files / "flags.tif").exists()
    assert run(capsys, *FLAG, "--regions", "regions.parquet")[0] == 0


def test_existing_files_stay(files, capsys):
    for name in ("flags.tif", "page.html"):
        (files / name).write_text("older")
    assert run(capsys, *FLAG)[0] == 2
    assert run(capsys, "report", "maps.tif", "-o", "page.html")[0] == 2
    assert (files / "flags.tif").read_text() == (files / "page.html").read_text() == "older"
    assert run(capsys, "report", "maps.tif", "-o", "page.html", "--overwrite")[0] == 0
