"""Every job on the demo scene: maps with standard uncertainties, both kinds of candidates, pictures, a page, the truth."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from ..files import beside, open_cube, write_maps
from ..ice import ice_flags
from ..lidar import albedo_from_returns, flag_arguments
from ..maps import parameters
from ..photometry import convert_quantity, normalise
from ..plots import plot_ice_plane, plot_map
from ..pyroclastic import pyroclastic_flags
from ..report import write_report
from .basin import MATERIALS, make_basin
from .scene import BANDS_NM, NOISE, see
from .shots import CALIBRATION, range_counts

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

__all__ = [
    "LIMITS", "DemoResult", "draw_overview", "ground_list", "normalised_scene", "run_demo", "truth_table",
    "write_instruments", "write_scene",
]  # fmt: skip


#: What the demo calls bright, dark and flat: reflectance at 700 nm [1], red slope [% per 100 nm]. Invented, as the
#: scene is; for real ground take thresholds from laboratory spectra of your own.
LIMITS = {"brighter_than": 0.24, "darker_than": 0.10, "flatter_than": 7.0}
_FILES = (
    "scene.tif", "angles.tif", "maps.tif", "flags.tif", "shots.parquet", "ice.nc", "truth.csv",
    "corvane.png", "ice.png", "corvane.html", "noise.csv", "lidar.csv",
)  # fmt: skip


@dataclass(frozen=True)
class DemoResult:
    """What the demo made: `maps`, `flags`, `ice` (over shot), `truth` (a table), and the `files` it wrote."""

    maps: xr.Dataset
    flags: xr.Dataset
    ice: xr.Dataset
    truth: pd.DataFrame
    files: list[Path]


def run_demo(folder: str | Path = "corvane", *, side: int = 640, overwrite: bool = False) -> DemoResult:
    """Make the Corvane Basin, run every job on it, and leave what comes out in a folder.

    Parameters
    ----------
    folder : str or Path
        Where to write: the cube and its geometry (``scene.tif``, ``angles.tif``), the parameter maps (``maps.tif``),
        candidate pyroclastic pixels (``flags.tif``), lidar returns and candidate ice (``shots.parquet``, ``ice.nc``), what
        is known of both instruments (``noise.csv``, ``lidar.csv``), what was planted and what was found (``truth.csv``),
        two pictures and one page.
    side : int
        Pixels along each side of the scene.
    overwrite : bool
        Replace what is there.

    Returns
    -------
    DemoResult

    Raises
    ------
    FileExistsError
        If a file is there and `overwrite` is False, before anything is made.
    """
    folder = Path(folder)
    files = {name: folder / name for name in _FILES}
    taken = [path for path in files.values() if path.exists()]
    if taken and not overwrite:
        raise FileExistsError(f"{taken[0]} exists; give --overwrite to replace it, or another folder")
    basin = make_basin(side)
    folder.mkdir(parents=True, exist_ok=True)

    scene = see(basin)
    # what the relief keeps from the sun has no angle that a normalisation could use
    angles = scene[["incidence", "emission", "phase"]].where(~scene["shadow"]).to_dataarray("angle")
    write_scene(scene["cube"], files["scene.tif"], overwrite=overwrite)
    write_scene(angles, files["angles.tif"], overwrite=overwrite)
    measured = open_cube(files["scene.tif"], quantity="radiance_factor", chunks=None)
    cube = normalised_scene(scene.assign(cube=measured))
    maps = parameters(cube, NOISE, parts=True)
    write_maps(maps, files["maps.tif"], overwrite=overwrite)
    flags = pyroclastic_flags(maps, **LIMITS)
    write_maps(flags, files["flags.tif"], overwrite=overwrite)

    write_instruments(files["noise.csv"], files["lidar.csv"], overwrite=overwrite)

    returns = range_counts(basin)
    with beside(files["shots.parquet"], overwrite=overwrite) as unfinished:
        returns.to_dataframe().reset_index(drop=True).to_parquet(unfinished)
    albedos = albedo_from_returns(returns, CALIBRATION)
    ice = ice_flags(**flag_arguments(albedos), ice_free=ground_list())
    write_maps(ice, files["ice.nc"], overwrite=overwrite)

    truth = truth_table(scene, flags, returns, ice)
    with beside(files["truth.csv"], overwrite=overwrite) as unfinished:
        truth.to_csv(unfinished, index=False)
    with beside(files["corvane.png"], overwrite=overwrite) as unfinished:
        draw_overview(scene, maps).savefig(unfinished, dpi=200)
    with beside(files["ice.png"], overwrite=overwrite) as unfinished:
        axes = plot_ice_plane(ice, albedos["red"], albedos["infrared"])
        axes.figure.savefig(unfinished, dpi=200)
    write_report(
        maps,
        files["corvane.html"],
        flags=flags,
        cube=cube,
        noise=NOISE,
        min_pixels=4,
        title="Corvane Basin (invented)",
        command=f"bandratio demo {folder}" + (f" --side {side}" if side != 640 else ""),
        overwrite=overwrite,
    )
    return DemoResult(maps, flags, ice, truth, list(files.values()))


def write_instruments(noise_path: Path, lidar_path: Path, *, overwrite: bool = False) -> None:
    """What is known of the camera and of the lidar, as the tables that the commands read."""
    import pandas as pd

    parts = {
        name: getattr(NOISE, name) for name in ("random", "shot", "band_gain", "band_offset", "common_gain")
    }
    noise = pd.DataFrame({"wavelength": BANDS_NM}).assign(**parts)
    channels = {"red": CALIBRATION.red, "infrared": CALIBRATION.infrared}
    lidar = pd.DataFrame([{"channel": name, **asdict(channel)} for name, channel in channels.items()])
    lidar = lidar.dropna(axis="columns").assign(units=CALIBRATION.units, source=CALIBRATION.source)
    for table, path in ((noise, noise_path), (lidar, lidar_path)):
        with beside(path, overwrite=overwrite) as unfinished:
            table.to_csv(unfinished, index=False)


def ground_list() -> list[str]:
    """Samples of the reference table that the scene's ice-free ground is mixed of."""
    return sorted({sample for name, parts in MATERIALS.items() if name != "frost" for sample in parts})


def truth_table(scene: xr.Dataset, flags: xr.Dataset, returns: xr.Dataset, ice: xr.Dataset) -> pd.DataFrame:
    """What was planted and what was found: a row for each kind of candidate.

    A pixel is truly bright or dark (and flat) where its reflectances without errors are. A shot is planted where frost
    fills one per cent of its beam or more, and a candidate is false where there is none (less than 0.01 %).
    """
    import pandas as pd

    true = parameters(scene["true_cube"], names=["reflectance_700", "red_slope"])
    seen = flags["flag"].values != 0
    flat = true["red_slope"].values < LIMITS["flatter_than"]
    icy = returns["true_ice"].values
    planted = {
        "bright_candidate": (true["reflectance_700"].values > LIMITS["brighter_than"]) & flat & seen,
        "dark_candidate": (true["reflectance_700"].values < LIMITS["darker_than"]) & flat & seen,
        "ice_candidate": icy >= 0.01,
    }
    truly_none = {kind: ~really for kind, really in planted.items()} | {"ice_candidate": icy < 1e-4}
    rows = []
    for kind, really in planted.items():
        variable = (ice if kind == "ice_candidate" else flags)["flag"]
        words = str(variable.attrs["flag_meanings"]).split()
        found = variable.values == variable.attrs["flag_values"][words.index(kind)]
        false = int((found & truly_none[kind]).sum())
        rows.append(
            {
                "kind": kind,
                "looked_at": int(seen.sum()) if variable.ndim == 2 else variable.size,
                "planted": int(really.sum()),
                "planted_and_found": int((found & really).sum()),
                "found": int(found.sum()),
                "false": false,
                "false_share": false / max(int(found.sum()), 1),
            }
        )
    return pd.DataFrame(rows)


def normalised_scene(scene: xr.Dataset) -> xr.DataArray:
    """The scene's cube as reflectance factor at incidence 30°, emission 0°, phase 30°, shadows missing."""
    cube = normalise(
        scene["cube"],
        incidence=scene["incidence"],
        emission=scene["emission"],
        phase=scene["phase"],
        shadow=scene["shadow"],
        spread=None,  # the law that the scene was made with is known here; of real ground it is not
    )
    return convert_quantity(cube, "reflectance_factor", incidence=30)


def write_scene(planes: xr.DataArray, path: Path, *, overwrite: bool = False) -> None:
    """Planes (first dimension) as a GeoTIFF with map projection; bands of a cube tell their wavelengths."""
    import rasterio

    with beside(path, overwrite=overwrite) as unfinished:
        values = planes.transpose(..., "y", "x").astype(np.float32)
        with rasterio.open(
            unfinished, "w", driver="GTiff", count=values.shape[0], height=values.shape[1], width=values.shape[2],
            dtype="float32", crs=planes.rio.crs, transform=planes.rio.transform(), nodata=np.nan, compress="deflate",
            tiled=True, blockxsize=256, blockysize=256,
        ) as target:  # fmt: skip
            target.write(values.values)
            for band, label in enumerate(values[values.dims[0]].values, start=1):
                if values.dims[0] == "wavelength":
                    width = float(values["fwhm"].values[band - 1])
                    target.set_band_description(band, f"{label:g} nm")
                    target.update_tags(
                        band, wavelength=f"{label:g}", fwhm=f"{width:g}", wavelength_units="nm"
                    )
                else:
                    target.set_band_description(band, str(label))


def draw_overview(scene: xr.Dataset, maps: xr.Dataset) -> Any:
    """One picture of the scene as it is seen and of what the maps make of it."""
    from ..plots.frame import style

    with style():
        import matplotlib.pyplot as plt

        figure, axes = plt.subplots(2, 3, figsize=(10.5, 6.4), layout="constrained")
        _draw_seen(axes[0, 0], scene["cube"])
        for ax, name in zip(
            axes.flat[1:],
            ("reflectance_700", "red_slope", "uv_vis_slope", "mafic_depth", "red_slope_sigma"),
            strict=True,
        ):
            plot_map(maps, name, ax=ax)
        figure.suptitle(
            "Corvane Basin (invented): the scene, four spectral parameters, one standard uncertainty"
        )
    plt.close(figure)
    return figure


def _draw_seen(ax: Axes, cube: xr.DataArray) -> None:
    from ..plots.frame import Grid, finish_map

    colours = np.stack([cube.sel(wavelength=nm).values for nm in (700.0, 600.0, 480.0)], axis=-1)
    # each band to its own white: the eye takes the reddish whole for grey
    bright = np.nanpercentile(colours, 99, axis=(0, 1))
    grid = Grid.of(cube[0])
    ax.imshow(np.clip(colours / bright, 0, 1) ** 0.6, extent=grid.extent)
    finish_map(ax, cube[0], grid)
    ax.set_title("as seen: 700, 600, 480 nm")
