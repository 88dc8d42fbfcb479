"""``bandratio demo``: an invented scene, the main job on it, and a picture."""

from __future__ import annotations

import click

__all__ = ["command"]


@click.command(epilog="Example: bandratio demo corvane")
@click.argument("folder", default="corvane")
@click.option("--side", default=640, show_default=True, help="Pixels along each side of the scene.")
@click.option("--overwrite", is_flag=True, help="Replace what is in the folder.")
def command(folder: str, side: int, overwrite: bool) -> None:
    """Make the invented Corvane Basin, map it, and leave scene, maps and pictures in FOLDER."""
    from ..demo import run_demo
    from ._closing_table import closing_table

    result = run_demo(folder, side=side, overwrite=overwrite)
    click.echo(closing_table(result["maps"]))
    for path in result["files"]:
        click.echo(f"written to {path}")
