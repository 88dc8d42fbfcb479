"""``bandratio ice`` from files to flags, closing table and picture; bad input in one line."""

import numpy as np
import pandas as pd
import pytest

import bandratio as br
from bandratio.__main__ import main
from bandratio.mixing import ice_albedo, reflectance_from_albedo, single_scattering_albedo

GROUND = "Soil 62231,Ilmenite HS231.3B"


def run(capsys, *words):
    with pytest.raises(SystemExit) as stop:
        main([str(word) for word in words])
    captured = capsys.readouterr()
    return stop.value.code, captured.out, captured.err


@pytest.fixture
def shots(tmp_path):
    rng = np.random.default_rng(0)
    n = 4000
    incidence = rng.uniform(0, 40, (n, 1))
    grains = single_scattering_albedo([[0.15981, 0.26907], [0.0553, 0.0599]])
    share = rng.beta(1, 4, (n, 1))
    ground = reflectance_from_albedo((1 - share) * grains[0] + share * grains[1], incidence, incidence)
    ice = reflectance_from_albedo(ice_albedo(np.array([640, 1535]), 100), incidence, incidence)
    icy = rng.random(n) < 0.03
    albedo = np.where(icy[:, None], 0.8 * ground + 0.2 * ice, ground)
    albedo[:5, 1] = 0.001
    counts = rng.poisson(1e4 * albedo * np.cos(np.radians(incidence)))
    common = {"x": rng.uniform(0, 5000, n), "y": rng.uniform(0, 5000, n), "incidence_deg": incidence[:, 0]}
    energies = {"red": counts[:, 0], "infrared": np.where(counts[:, 1] < 50, 0, counts[:, 1])}
    pd.DataFrame(common | {"range_m": 1000.0} | energies).to_csv(tmp_path / "shots.csv", index=False)
    measured = albedo * (1 + 0.03 * rng.standard_normal((n, 2)))
    albedos = {"red": measured[:, 0], "infrared": measured[:, 1], "sigma_red": 0.001, "sigma_infrared": 0.001}
    pd.DataFrame(common | albedos).to_csv(tmp_path / "albedos.csv", index=False)
    (tmp_path / "lidar.csv").write_text(
        "channel,constant,constant_sigma,transmitted,relative,energy_per_count,limit\n"
        "red,1e10,1e8,1,0.01,1,50\ninfrared,1e10,1e8,1,0.01,1,50\n"
    )
    return tmp_path, icy


def test_from_energies_to_flags_with_table_and_picture(shots, capsys):
    folder, icy = shots
    code, out, err = run(
        capsys, "ice", folder / "shots.csv", "-o", folder / "ice.nc", "--calibration", folder / "lidar.csv",
        "--zero", "dropout", "--ice-free", GROUND, "--picture", folder / "plane.png",
    )  # fmt: skip
    assert (code, err) == (0, "")
    for told in (
        "ice candidate",
        "ratio red/infrared: 5 %",
        f"ice-free ground: {GROUND.replace(',', ', ')}",
        "never proof",
    ):
        assert told in out
    assert "least areal ice seen at the median noise: " in out
    flags = br.open_maps(folder / "ice.nc")
    found = np.asarray(flags["flag"]) == 5
    assert found[icy].mean() > 0.9
    assert np.mean(~icy[found]) < 0.1  # five of them are the dropouts
    assert found[:5].all()
    assert (folder / "plane.png").stat().st_size > 10_000


@pytest.mark.parametrize("ending", ["csv", "parquet"])
def test_from_albedos_to_a_table(shots, capsys, ending):
    folder, icy = shots
    output = folder / f"ice.{ending}"
    words = (
        "ice", folder / "albedos.csv", "-o", output, "--albedos", "--relative-red", 0.03, "--relative-infrared", 0.03,
        "--ice-free", GROUND,
    )  # fmt: skip
    code, _, err = run(capsys, *words)
    assert (code, err) == (0, "")
    table = pd.read_csv(output) if ending == "csv" else pd.read_parquet(output)
    assert len(table) == icy.size
    assert {"x", "y", "red", "infrared", "ratio", "p_value", "q_value", "fraction_lower", "flag"} <= set(
        table
    )
    assert (table["flag"] == "ice_candidate").sum() > 0.9 * icy.sum()
    code, _, err = run(capsys, *words)
    assert code == 2
    assert err == f"bandratio: {output} is there already; give --overwrite to replace it\n"
    assert run(capsys, *words, "--overwrite")[0] == 0


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("-o", "ice.xyz", "--albedos"), "OUT must end in .nc, .zarr, .csv, .parquet"),
        (("-o", "ice.tif", "--albedos"), "OUT must end in .nc, .zarr, .csv, .parquet"),
        (("-o", "ice.nc"), "give either --calibration FILE.csv"),
        (("-o", "ice.nc", "--albedos", "--calibration", "c.csv"), "give either --calibration FILE.csv"),
        (("-o", "ice.nc", "--albedos", "--like", "map.tif"), "--like sums return energies"),
        (("-o", "ice.nc", "--albedos", "--picture", "nowhere/plane.png"), "the folder of the picture"),
        (("-o", "ice.nc", "--albedos", "--ice-free", "marre"), "did you mean mare"),
        (("-o", "ice.nc", "--albedos", "--ice-free", "mare", "--ice-free-ratio", "1"), "not both"),
        (("-o", "ice.nc", "--albedos", "--incidence", "steep"), "--incidence wants unknown or an angle"),
        (("-o", "ice.nc", "--albedos", "--column", "sigma_red"), "--column wants NAME=VALUE"),
        (("-o", "ice.nc", "--albedos", "--red", "rouge"), "rouge"),
        (("-o", "ice.nc", "--albedos", "--false-discovery-rate", "5"), "must lie between 0 and 1"),
        (("-o", "ice.nc", "--albedos", "--false-discovery-rate", "low"), "'low' is not a valid float"),
        ((), "Missing option '-o'"),
    ],
)
def test_bad_input_gives_one_line_and_exit_code_two(shots, capsys, monkeypatch, words, message):
    folder, _ = shots
    monkeypatch.chdir(folder)
    code, out, err = run(capsys, "ice", folder / "albedos.csv", *words)
    assert code == 2
    assert out == ""
    assert message in err
    assert err.count("\n") == 1
    assert not (folder / "ice.nc").exists()


def test_help_shows_an_example(capsys):
    code, out, _ = run(capsys, "ice", "--help")
    assert code == 0
    assert "Example: bandratio ice shots.laz" in out
    assert "never proof of ice" in out
