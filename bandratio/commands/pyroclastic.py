"""``bandratio pyroclastic``: maps in, candidate pyroclastic pixels and regions out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from ._running import progress_bar, scheduled

if TYPE_CHECKING:
    import xarray as xr

    from ..detection import Threshold

__all__ = ["command", "limit_from"]

_LIMIT = "X[,SIGMA]|scene:Q|FILE.json"


@click.command(
    epilog="Example: bandratio pyroclastic maps.tif -o flags.tif --brighter-than 0.19 --flatter-than scene:0.05 "
    "--regions candidates.gpkg --min-pixels 5"
)
@click.argument("maps")
@click.option(
    "-o", "--output", required=True, metavar="OUT", help="Flags to write: .tif, .zarr or .nc by its ending."
)
@click.option(
    "--brighter-than",
    metavar=_LIMIT,
    help="Bright candidates: reflectance at 700 nm above X; scene:0.95 takes the scene's own 95 % quantile.",
)
@click.option("--darker-than", metavar=_LIMIT, help="Dark candidates: reflectance at 700 nm below X.")
@click.option("--flatter-than", metavar=_LIMIT, help="Of both kinds: red slope below X [% per 100 nm].")
@click.option(
    "--false-discovery-rate",
    default=0.05,
    show_default=True,
    help="Share of false candidates, on average at most.",
)
@click.option("--regions", metavar="FILE", help="Also write connected candidates: .csv, .parquet or .gpkg.")
@click.option("--min-pixels", default=1, show_default=True, help="Leave out smaller regions.")
@click.option("--overwrite", is_flag=True, help="Replace OUT and FILE where they exist.")
def command(
    maps: str, output: str, regions: str | None, min_pixels: int, overwrite: bool, **given: Any
) -> None:
    """Flag candidate pyroclastic pixels in MAPS, with a known false discovery rate.

    Flags are indicators to follow up, never proof. Bright and flat finds one family of deposits only: many are dark.
    """
    from ..files import open_maps, write_and_count, write_regions
    from ..files.atomic import require_free
    from ..pyroclastic import pyroclastic_flags
    from ..regions import candidate_table

    opened = open_maps(maps)
    if regions is not None:
        require_free(regions, overwrite=overwrite)
        if Path(regions).suffix.lower() not in (".csv", ".parquet", ".gpkg"):
            raise ValueError(f"--regions wants a .csv, .parquet or .gpkg, got {regions!r}")
        if Path(regions).suffix.lower() == ".gpkg":
            _require_polygons()
    with scheduled(None, None), progress_bar("flagging") as progress:
        limits = {
            name: limit_from(opened, name, given[name])
            for name in ("brighter_than", "darker_than", "flatter_than")
        }
        flags = pyroclastic_flags(opened, **limits, false_discovery_rate=given["false_discovery_rate"])
        written = write_and_count(flags, output, overwrite=overwrite, progress=progress).path
        flags = open_maps(written)
        click.echo(_closing(flags))
        if flags["flag"].ndim == 2:
            table, _ = candidate_table(flags, min_pixels=min_pixels)
            click.echo(_largest(table))
            if regions is not None:
                if Path(regions).suffix.lower() == ".gpkg":
                    from ..regions import candidate_regions

                    table = candidate_regions(flags, min_pixels=min_pixels)
                click.echo(f"regions in {write_regions(table, regions, overwrite=overwrite)}")
    click.echo(f"written to {written}")


def _require_polygons() -> None:
    """Refuse before anything is flagged where the library for polygons is not there."""
    from ..regions.membership import require_geopandas

    try:
        require_geopandas("a .gpkg of regions")
    except ModuleNotFoundError as error:
        raise ValueError(f"{error}; or take .csv or .parquet") from None


def limit_from(maps: xr.Dataset, name: str, text: str | None) -> float | Threshold | None:
    """A limit as typed: a number, a number and its sigma, a quantile of the scene, or a file of thresholds.

    Raises
    ------
    ValueError
        If it is none of them.
    """
    if text is None:
        return None
    from ..detection import Threshold, read_thresholds, scene_threshold
    from ..pyroclastic.cancellation import BRIGHTNESS, SLOPE

    parameter = SLOPE if name == "flatter_than" else BRIGHTNESS
    option = f"--{name.replace('_', '-')}"
    if text.lower().endswith(".json"):
        return read_thresholds(text, parameter)[parameter]
    try:
        if text.startswith("scene:"):
            quantile = float(text.removeprefix("scene:"))
        else:
            value, *sigma = (float(word) for word in text.split(","))
            if len(sigma) > 1:
                raise ValueError
    except ValueError:
        raise ValueError(
            f"{option} wants a number, a number and its sigma such as 0.19,0.01, scene:0.95, or a FILE.json of "
            f"thresholds, got {text!r}"
        ) from None
    if text.startswith("scene:"):
        return scene_threshold(maps, parameter, quantile)
    return Threshold(value, sigma[0] if sigma else 0.0, parameter=parameter)


def _closing(flags: xr.Dataset) -> str:
    import json

    import numpy as np

    values = np.asarray(flags["flag"].values)
    words = str(flags["flag"].attrs["flag_meanings"]).split()
    counts = np.bincount(values.reshape(-1), minlength=len(words))
    lines = [
        f"{word:<18}{count:>14,} {count / max(values.size, 1):>8.2%}"
        for word, count in zip(words, counts, strict=True)
    ]
    for name, told in json.loads(flags.attrs["thresholds"]).items():
        sigma = f" ± {told['sigma']:.3g}" if told["sigma"] else ""
        lines.append(f"{name}: {told['value']:.5g}{sigma} ({told['origin']}); {told['errors']}")
    lines.append(
        f"at most {float(flags.attrs['false_discovery_rate']):.0%} of the candidates are false on average; "
        f"{flags.attrs['caution']}"
    )
    return "\n".join(lines)


def _largest(table: Any) -> str:
    if len(table) == 0:
        return "no region of candidates"
    shown = table.head(5).to_string(index=False, float_format=lambda number: f"{number:.5g}")
    return f"{len(table):,} region{'' if len(table) == 1 else 's'} of candidates, the largest:\n{shown}"
