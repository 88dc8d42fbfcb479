"""Normalisation on the command line: `bandratio map … --geometry` and `--dem … --sun`."""

import json

import numpy as np
import pytest
import rasterio
import xarray as xr

import bandratio as br
from bandratio.__main__ import main

from .scenes import ALBEDO, BANDS, rough_height
from .test_normalise import render
from .test_terrain import write_raster

SUN = (70.0, 25.0)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A rough surface of one material under a low sun: scene, elevation model and angles as rasters."""
    folder = tmp_path_factory.mktemp("corvane")
    height = rough_height(slope_deg=20).astype(np.float32)
    write_raster(folder / "dem.tif", height[None])
    planes = br.terrain_geometry(br.open_elevation(folder / "dem.tif"), sun=SUN)
    angles = [planes[name].values.astype(float) for name in ("incidence", "emission", "phase")]
    with np.errstate(all="ignore"):
        image = render(br.LunarLambert(), *angles)
    write_raster(folder / "scene.tif", np.where(planes.shadow, 0.001, image).astype(np.float32))
    write_raster(folder / "angles.tif", np.stack(angles).astype(np.float32))
    return folder


def run(folder, *options, output="maps.zarr", code=0):
    common = [
        "--wavelengths",
        ",".join(f"{nm:g}" for nm in BANDS),
        "--quantity",
        "radiance_factor",
        "--overwrite",
    ]
    arguments = ["map", str(folder / "scene.tif"), "-o", str(folder / output), *common, *map(str, options)]
    with pytest.raises(SystemExit) as stop:
        main(arguments)
    assert stop.value.code == code


@pytest.mark.parametrize("output", ["maps.zarr", "maps.tif", "maps.nc"])
def test_dem_and_sun_flatten_the_scene(folder, output, capsys):
    run(
        folder,
        "--dem",
        folder / "dem.tif",
        "--sun",
        "70,25",
        "--slope-sigma",
        1,
        "--random",
        0.0005,
        output=output,
    )
    told = capsys.readouterr().out
    assert "normalised to incidence 30°, emission 0°, phase 30° by the lunar-Lambert law" in told
    assert "sigma holds a slope error of 1° and the spread to Lommel–Seeliger, Lambert" in told
    masked = next(line for line in told.splitlines() if line.startswith("masked: "))
    assert "cast shadow" in masked
    maps = br.open_maps(folder / output)
    level = maps.reflectance_700.values
    assert int(masked.split()[1]) == np.isnan(level).sum() > 0
    np.testing.assert_allclose(level[np.isfinite(level)], ALBEDO[2], rtol=1e-5)
    assert (maps.reflectance_700_sigma.values[np.isfinite(level)] > 0.001).mean() > 0.3
    assert json.loads(maps.attrs["normalisation"])["to"] == [30, 0, 30]
    # the file itself tells what the closing table told
    assert br.photometry.geometry_summary(maps)[-1] == masked


def test_the_report_says_which_geometry(folder):
    from bandratio.report.wording import provenance

    run(folder, "--geometry", folder / "angles.tif", "--law", "lambert")
    page = provenance(br.open_maps(folder / "maps.zarr"), None, {})
    assert (
        "<dt>geometry</dt><dd>normalised to incidence 30°, emission 0°, phase 30° by the Lambert law" in page
    )
    assert "sun too low" in page
    bare = provenance(xr.Dataset(attrs={"noise": "{}"}), None, {})
    assert "<dt>geometry</dt><dd>as observed, not normalised</dd>" in bare
    broken = provenance(xr.Dataset(attrs={"normalisation": "<b>"}), None, {})
    assert "cannot be read" in broken
    assert "<b>" not in broken


def test_without_geometry_the_slopes_show(folder, capsys):
    run(folder, "--names", "reflectance_700")
    assert "normalised" not in capsys.readouterr().out
    level = br.open_maps(folder / "maps.zarr").reflectance_700.values
    assert level.std() > 0.15 * level.mean()


def test_angles_from_a_file_and_a_law_with_parameters(folder, capsys):
    options = ["--geometry", folder / "angles.tif", "--law", "minnaert", "--minnaert-k", "0.6,0.6,0.65,0.7"]
    run(
        folder,
        *options,
        "--to",
        "40,0,40",
        "--phase-function",
        "-0.02,1e-4",
        "--no-spread",
        "--least-elevation",
        10,
    )
    told = capsys.readouterr().out
    assert (
        "incidence 40°, emission 0°, phase 40° by the Minnaert law (k [0.6, 0.6, 0.65, 0.7]), with a phase"
        in told
    )
    assert "sigma holds" not in told
    kept = json.loads(br.open_maps(folder / "maps.zarr").attrs["normalisation"])
    assert kept["phase_function"]["coefficients"] == [-0.02, 1e-4]
    assert kept["least_mu0"] == pytest.approx(np.sin(np.deg2rad(10)))


def test_the_maps_name_the_geometry_they_rest_on(folder):
    # what a resumed run compares: another file of angles, or another law, is another job
    run(folder, "--geometry", folder / "angles.tif")
    attributes = br.open_maps(folder / "maps.zarr").attrs
    assert "angles.tif" in attributes["geometry_input"]
    assert json.loads(attributes["normalisation"])["law"]["name"] == "lunar_lambert"


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (["--dem", "dem.tif"], "--dem needs --sun AZ,ELEV"),
        (["--sun", "70,30"], "--sun needs --geometry ANGLES, or --dem DEM with --sun"),
        (["--law", "lambert"], "--law needs --geometry ANGLES, or --dem DEM with --sun"),
        (["--dem", "dem.tif", "--sun", "70,-3"], "sun's elevation must lie above 0 and up to 90°, got -3°"),
        (["--dem", "dem.tif", "--sun", "seventy"], "--sun wants numbers with commas between"),
        (["--dem", "none.tif", "--sun", "70,30"], "none.tif: no such file"),
        (
            ["--dem", "small.tif", "--sun", "70,30"],
            "dem is on another grid: it has {'y': 20, 'x': 20}, the cube",
        ),
        (["--dem", "scene.tif", "--sun", "70,30"], "has 4 bands; an elevation model has one, heights in m"),
        (["--geometry", "dem.tif"], "has 1 bands; wanted three, incidence, emission and phase"),
        (["--geometry", "radians.tif"], "these look like radians or cosines; give degrees"),
        (["--geometry", "angles.tif", "--dem", "dem.tif"], "give either --geometry ANGLES, or --dem DEM"),
        (
            ["--geometry", "angles.tif", "--law", "akimov", "--minnaert-k", "0.6"],
            "--minnaert-k goes with --law minnaert",
        ),
        (["--geometry", "angles.tif", "--to", "30,0"], "three angles in degrees"),
        (["--geometry", "angles.tif", "--to", "30,0,80"], "the phase angle must lie between 30° and 30°"),
        (["--geometry", "angles.tif", "--law", "lambrt"], "Invalid value for '--law'"),
        (["--geometry", "angles.tif", "--slope-sigma", "70"], "well below 45°, got 70"),
        (["--geometry", "angles.tif", "--least-elevation", "0"], "--least-elevation must lie from 0.6"),
        (
            ["--geometry", "angles.tif", "--law", "hapke", "--phase-function", "-0.02"],
            "give b, c, B0 and h instead",
        ),
    ],
)
def test_bad_options_get_one_line_and_exit_code_2(folder, options, message, capsys):
    if not (folder / "small.tif").exists():
        write_raster(folder / "small.tif", np.zeros((1, 20, 20), np.float32))
        with rasterio.open(folder / "angles.tif") as angles:
            write_raster(folder / "radians.tif", np.deg2rad(angles.read()))
    named = [folder / word if word.endswith(".tif") else word for word in options]
    run(folder, *named, code=2)
    said = capsys.readouterr().err
    assert message in said
    assert len(said.strip().splitlines()) == 1


def test_a_scene_that_does_not_say_its_quantity_is_not_normalised(folder, capsys):
    arguments = ["map", folder / "scene.tif", "-o", folder / "m.tif", "--geometry", folder / "angles.tif"]
    with pytest.raises(SystemExit) as stop:
        main([*map(str, arguments), "--wavelengths", "480,600,700,830"])
    assert stop.value.code == 2
    assert "which reflectance quantity this is" in capsys.readouterr().err
