"""``bandratio check``: what is wrong with a scene, before it reaches a map."""

from __future__ import annotations

from typing import Any

import click

from ._options import band_options, cube_from

__all__ = ["command"]


@click.command(
    epilog="Example: bandratio check scene.tif --wavelengths 480,600,700,830. "
    "The exit code is 0 where nothing was found, 1 where something was, 2 where the scene cannot be read."
)
@click.argument("scene")
@click.option("--full", is_flag=True, help="Read every pixel; else large scenes are sampled.")
@band_options
def command(scene: str, full: bool, **bands: Any) -> int:
    """Look for what commonly goes wrong with SCENE: scale, gaps, saturation, wavelengths."""
    from ..cube_findings import check_cube

    cube = cube_from(scene, bands)
    findings = check_cube(cube, full=full or None)
    for finding in findings:
        click.echo(f"- {finding}")
    click.echo(f"{len(findings) or 'no'} finding{'' if len(findings) == 1 else 's'}; {findings.coverage}")
    return 1 if findings else 0
