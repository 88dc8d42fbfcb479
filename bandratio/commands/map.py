"""``bandratio map``: the main job, a scene in, parameter maps with standard uncertainties out."""

from __future__ import annotations

from typing import Any

import click

from ..bands import TOLERANCE_NM
from ._geometry import count_masked, geometry_lines, geometry_options, normalised
from ._options import band_options, cube_from, names_from, noise_from, noise_options
from ._running import progress_bar, run_options, scheduled

__all__ = ["command"]


@click.command(
    epilog="Example: bandratio map scene.tif -o maps.tif --random 0.001 --band-gain 0.01 --names red_slope,mafic_depth"
)
@click.argument("scene")
@click.option(
    "-o", "--output", required=True, metavar="OUT", help="Maps to write: .tif, .zarr or .nc by its ending."
)
@click.option(
    "--names", metavar="NAME,NAME,…", help="Which parameters; all that the bands allow unless given."
)
@click.option(
    "--tolerance",
    default=TOLERANCE_NM,
    show_default=True,
    help="How far a band may lie from its wavelength [nm].",
)
@click.option("--parts", is_flag=True, help="Also write the random and the shared part of each sigma.")
@click.option("--overwrite", is_flag=True, help="Replace OUT where it exists.")
@run_options
@geometry_options
@band_options
@noise_options
def command(
    scene: str,
    output: str,
    names: str | None,
    tolerance: float,
    parts: bool,
    overwrite: bool,
    resume: bool,
    scheduler: str | None,
    workers: int | None,
    **given: Any,
) -> None:
    """Map the spectral parameters of SCENE, each with its standard uncertainty.

    Scenes of any size are mapped block by block. OUT appears when it is whole; a run that was killed is
    continued by the same command with --resume.
    """
    from ..files import write_and_count
    from ..maps import parameters
    from ._closing_table import closing_table

    noise = noise_from(given)
    if parts and noise is None:
        raise ValueError(
            "--parts splits the sigmas, for which a noise is needed: give --random … or --noise FILE.csv"
        )
    cube = cube_from(scene, given)
    cube = normalised(cube, given)
    maps = parameters(cube, noise, names_from(names), tolerance=tolerance, parts=parts)
    maps.attrs |= {name: cube.attrs[name] for name in ("input", "geometry_input") if name in cube.attrs}
    with scheduled(scheduler, workers), progress_bar("mapping") as progress:
        count_masked(maps)
        written = write_and_count(maps, output, overwrite=overwrite, resume=resume, progress=progress)
    click.echo("\n".join([closing_table(maps, written.counts), *geometry_lines(maps)]))
    click.echo(f"written to {output}")
