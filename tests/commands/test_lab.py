"""``bandratio lab``: the table and thresholds as typed, and one line for whatever is wrong."""

import csv

import pytest

from bandratio.__main__ import main

BANDS = ["--wavelengths", "480,600,700,750,830"]


def run(capsys, *arguments):
    """Exit code, standard output and standard error of the command line."""
    with pytest.raises(SystemExit) as left:
        main(["lab", *arguments])
    captured = capsys.readouterr()
    return left.value.code or 0, captured.out, captured.err


def test_the_table(capsys):
    code, out, _ = run(capsys, *BANDS, "--fwhm", "20", "--relative", "0.01")
    assert code == 0
    lines = {line.split("  ")[0]: line for line in out.splitlines()}
    assert "highland" in lines["Soil 62231"]
    assert "11.1 ± 1.4" in lines["Soil 62231"]
    assert "–" in lines["H2O-Ice GDS136 77K"]
    assert "left out: r415_r750: no band within 15 nm of 415 nm" in out


def test_thresholds_say_what_they_rest_on(capsys):
    code, out, _ = run(
        capsys, *BANDS, "--names", "mafic_depth", "--relative", "0.01", "--wanted", "olivine,low-calcium pyroxene",
        "--unwanted", "plagioclase",
    )  # fmt: skip
    assert code == 0
    assert "mafic_depth above 0.0" in out
    assert "of 9 wanted specimens" in out
    assert "- too few specimens: 4 unwanted" in out


def test_two_parameters_together(capsys):
    arguments = [
        *BANDS,
        "--names",
        "mafic_depth,reflectance_700",
        "--wanted",
        "olivine",
        "--unwanted",
        "plagioclase",
    ]
    _, apart, _ = run(capsys, *arguments)
    code, together, _ = run(capsys, *arguments, "--together")
    assert code == 0
    assert apart != together


def test_outputs(capsys, tmp_path):
    table, picture = tmp_path / "table.csv", tmp_path / "picture.png"
    code, out, _ = run(capsys, *BANDS, "--materials", "opaque", "-o", str(table), "--picture", str(picture))
    assert code == 0
    assert f"written to {table}" in out
    rows = list(csv.DictReader(table.read_text(encoding="utf-8").splitlines()))
    assert len(rows) == 4
    assert rows[0]["source"].startswith("Kokaly et al. 2017")
    assert float(rows[0]["red_slope"]) > 0
    assert picture.read_bytes()[:4] == b"\x89PNG"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["picture.png", "table.csv"]
    code, _, err = run(capsys, *BANDS, "-o", str(table))
    assert (code, "exists already" in err) == (2, True)


def test_a_library_of_the_users_own(capsys, tmp_path):
    file = tmp_path / "slag.csv"
    file.write_text(
        "wavelength_nm,slag,ash\n" + "".join(f"{nm},{nm / 2000},0.3\n" for nm in range(400, 1001, 5))
    )
    code, out, _ = run(capsys, *BANDS, "--library", str(file))
    assert code == 0
    assert "slag" in out
    assert "Soil 62231" not in out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ([], "give the bands: --wavelengths"),
        (["--wavelengths", "480;600"], "--wavelengths wants numbers with commas between"),
        (["--wavelengths", "0.48,0.6"], "look like µm"),
        ([*BANDS, "--wanted", "olivine"], "thresholds need both --wanted and --unwanted"),
        ([*BANDS, "--materials", "olvine"], "no group or sample is called 'olvine'; did you mean olivine"),
        ([*BANDS, "--names", "red_slop"], "unknown parameter 'red_slop'; did you mean red_slope"),
        ([*BANDS, "--relative", "1"], "relative is a fraction below 1"),
        ([*BANDS, "--quantity", "brdf"], "--quantity is for a --library of your own"),
        ([*BANDS, "--library", "absent"], "absent: no such file or folder of spectra"),
        ([*BANDS, "-o", "table.xlsx"], "the ending must be one of .csv"),
        ([*BANDS, "--picture", "absent/p.png"], "the folder absent does not exist"),
        (
            [*BANDS, "--wanted", "olivine", "--unwanted", "mare"],
            "unwanted group holds 1 samples of 1 specimen",
        ),
    ],
)
def test_bad_input_is_one_line_and_exit_code_two(capsys, arguments, message):
    code, _, err = run(capsys, *arguments)
    assert code == 2
    assert message in err
    assert err.count("\n") == 1
    assert "Traceback" not in err


def test_help_shows_an_example(capsys):
    code, out, _ = run(capsys, "--help")
    assert code == 0
    assert "Example: bandratio lab" in out


def test_a_threshold_goes_from_the_laboratory_to_a_scene(capsys, tmp_path):
    """``lab`` writes it, ``pyroclastic`` uses it, and the flags say where it came from."""
    import json

    import numpy as np
    import xarray as xr

    import bandratio as br

    file = tmp_path / "thresholds.json"
    code, out, _ = run(
        capsys, *BANDS, "--names", "reflectance_700", "--relative", "0.01", "--wanted", "plagioclase", "--unwanted",
        "opaque", "--thresholds", str(file),
    )  # fmt: skip
    assert code == 0
    assert f"written to {file}" in out
    values = np.random.default_rng(0).uniform(0.05, 0.4, (2, 8, 9))
    scene = xr.DataArray(values, dims=("wavelength", "y", "x"), coords={"wavelength": [600.0, 700.0]})
    maps = br.parameters(br.as_cube(scene, quantity="reflectance_factor"), br.Noise(random=0.001))
    br.write_maps(maps, tmp_path / "maps.nc")
    with pytest.raises(SystemExit) as left:
        main(
            [
                "pyroclastic",
                str(tmp_path / "maps.nc"),
                "-o",
                str(tmp_path / "flags.nc"),
                "--brighter-than",
                str(file),
            ]
        )
    assert not left.value.code
    used = json.loads(br.open_maps(tmp_path / "flags.nc").attrs["thresholds"])["brighter_than"]
    assert used["origin"] == "laboratory"
    assert used["value"] == pytest.approx(br.read_thresholds(file)["reflectance_700"].value)


def test_a_file_of_thresholds_needs_groups(capsys, tmp_path):
    code, _, err = run(capsys, *BANDS, "--thresholds", str(tmp_path / "t.json"))
    assert code == 2
    assert "--thresholds needs --wanted and --unwanted" in err


def test_bands_by_their_response_curves(capsys, tmp_path):
    file = tmp_path / "filters.csv"
    file.write_text("wavelength_nm,a,b\n580,0,0\n600,1,0\n620,0,0\n680,0,0\n700,0,1\n720,0,0\n")
    code, out, _ = run(capsys, "--responses", str(file))
    assert code == 0
    assert "11.1" in next(line for line in out.splitlines() if line.startswith("Soil 62231"))
