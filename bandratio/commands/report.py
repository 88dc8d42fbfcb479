"""``bandratio report``: maps in, one self-contained page out."""

from __future__ import annotations

import shlex
from typing import Any

import click

from ._options import band_options, cube_from
from ._running import scheduled

__all__ = ["command"]


@click.command(
    epilog="Example: bandratio report maps.tif -o page.html --flags flags.tif --title 'Corvane Basin'"
)
@click.argument("maps")
@click.option("-o", "--output", required=True, metavar="PAGE.html", help="Page to write.")
@click.option("--flags", metavar="FLAGS", help="Flags of the same scene, from pyroclastic or ice.")
@click.option(
    "--scene", metavar="SCENE", help="The cube behind the maps, for the means of candidate regions."
)
@click.option("--min-pixels", default=1, show_default=True, help="Leave out smaller regions.")
@click.option("--title", help="Heading; the name of MAPS unless given.")
@click.option("--overwrite", is_flag=True, help="Replace PAGE.html where it exists.")
@band_options
def command(
    maps: str,
    output: str,
    flags: str | None,
    scene: str | None,
    min_pixels: int,
    title: str | None,
    overwrite: bool,
    **bands: Any,
) -> None:
    """Make one self-contained page of MAPS: linked views, candidate regions, and how they were made."""
    from ..files import open_maps
    from ..report import write_report

    context = click.get_current_context()
    with scheduled(None, None):
        opened = open_maps(maps)
        cube = None
        if scene is not None:
            cube = cube_from(scene, bands)
        written = write_report(
            opened,
            output,
            flags=None if flags is None else open_maps(flags),
            cube=cube,
            min_pixels=min_pixels,
            title=title or maps,
            command=_typed(context),
            overwrite=overwrite,
        )
    click.echo(f"{written}: {written.stat().st_size / 1e6:.1f} MB, in one file that needs no network")


def _typed(context: click.Context) -> str:
    """The command with every option that is not at its default, as it can be typed again."""
    words = ["bandratio", "report"]
    for parameter in context.command.params:
        value = context.params.get(parameter.name or "")
        if isinstance(parameter, click.Argument):
            words.append(str(value))
        elif value is True:
            words.append(parameter.opts[-1])
        elif value not in (None, False, parameter.default):
            words += [parameter.opts[-1] if parameter.name != "output" else "-o", str(value)]
    return shlex.join(words)
