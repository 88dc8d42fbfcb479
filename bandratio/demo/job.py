"""The main job on the demo scene: cube in, maps with standard uncertainties and a picture out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from ..files import beside, open_cube, write_maps
from ..maps import parameters
from ..photometry import convert_quantity, normalise
from ..plots import plot_map
from .basin import make_basin
from .scene import NOISE, see

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_overview", "normalised_scene", "run_demo", "write_scene"]


def run_demo(folder: str | Path = "corvane", *, side: int = 640, overwrite: bool = False) -> dict[str, Any]:
    """Make the Corvane Basin, run the main job on it, and leave scene, maps and picture in a folder.

    Parameters
    ----------
    folder : str or Path
        Where to write ``scene.tif``, ``angles.tif``, ``maps.tif`` and ``corvane.png``.
    side : int
        Pixels along each side of the scene.
    overwrite : bool
        Replace what is there.

    Returns
    -------
    dict
        ``maps``, the Dataset, and ``files``, what was written.

    Raises
    ------
    FileExistsError
        If a file is there and `overwrite` is False, before anything is made.
    """
    folder = Path(folder)
    files = {name: folder / name for name in ("scene.tif", "angles.tif", "maps.tif", "corvane.png")}
    taken = [path for path in files.values() if path.exists()]
    if taken and not overwrite:
        raise FileExistsError(f"{taken[0]} exists; give --overwrite to replace it, or another folder")
    folder.mkdir(parents=True, exist_ok=True)
    scene = see(make_basin(side))
    write_scene(scene["cube"], files["scene.tif"], overwrite=overwrite)
    write_scene(
        scene[["incidence", "emission", "phase"]].to_dataarray("angle"),
        files["angles.tif"],
        overwrite=overwrite,
    )
    cube = normalised_scene(
        scene.assign(cube=open_cube(files["scene.tif"], quantity="radiance_factor", chunks=None))
    )
    maps = parameters(cube, NOISE)
    write_maps(maps, files["maps.tif"], overwrite=overwrite)
    with beside(files["corvane.png"], overwrite=overwrite) as unfinished:
        draw_overview(scene, maps).savefig(unfinished, dpi=200)
    return {"maps": maps, "files": list(files.values())}


def normalised_scene(scene: xr.Dataset) -> xr.DataArray:
    """The scene's cube as reflectance factor at incidence 30°, emission 0°, phase 30°, shadows missing."""
    cube = normalise(
        scene["cube"],
        incidence=scene["incidence"],
        emission=scene["emission"],
        phase=scene["phase"],
        shadow=scene["shadow"],
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
