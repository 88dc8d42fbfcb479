"""``bandratio demo``: an invented scene, the main job on it, and a picture."""

from __future__ import annotations

import click

__all__ = ["command"]


@click.command(epilog="Example: bandratio demo corvane")
@click.argument("folder", default="corvane")
@click.option("--side", default=640, show_default=True, help="Pixels along each side of the scene.")
@click.option("--overwrite", is_flag=True, help="Replace what is in the folder.")
def command(folder: str, side: int, overwrite: bool) -> None:
    """Make the invented Corvane Basin, run every job on it, and leave maps, candidates, pictures and a page in FOLDER.

    Flags are indicators to follow up, never proof of ice or of a pyroclastic deposit. Eye safety of any laser follows
    IEC 60825-1, local rules and a licensed laser safety officer; no figure here is a safety assessment.
    """
    from ..demo import run_demo
    from ._closing_table import closing_table

    result = run_demo(folder, side=side, overwrite=overwrite)
    click.echo(closing_table(result.maps))
    click.echo("\nwhat was planted, and what was found at a false discovery rate of 5 %")
    click.echo(result.truth.to_string(index=False, formatters={"false_share": "{:.1%}".format}))
    for path in result.files:
        click.echo(f"written to {path}")
