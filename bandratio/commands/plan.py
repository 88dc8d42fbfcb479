"""``bandratio plan``: which bands tell materials apart, before a camera is built."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from ._options import noise_from, noise_options, numbers

__all__ = ["command"]


@click.group()
def command() -> None:
    """Plan an instrument: which bands, and which sets of filters, tell materials apart."""


def _words(text: str) -> list[str]:
    return [word.strip() for word in text.split(",") if word.strip()]


def _spectra(library: str | None) -> Any:
    from ..spectra import open_library, reference_spectra

    return reference_spectra() if library is None else open_library(library)


_LIBRARY = click.option(
    "--library", metavar="PATH", help="Spectra of your own, a file or a folder; else the embedded table."
)
_WANTED = click.option(
    "--wanted", required=True, metavar="NAME,NAME,…", help="Groups or samples that are looked for."
)
_UNWANTED = click.option(
    "--unwanted", required=True, metavar="NAME,NAME,…", help="Those that they are to be told from."
)


@command.command(
    epilog="Example: bandratio plan bands --wavelengths 415,480,600,700,750,830,900,950,1000 --size 4 --wanted "
    "olivine,low-calcium pyroxene --unwanted plagioclase,opaque --relative 0.01"
)
@click.option("--wavelengths", required=True, metavar="NM,NM,…", help="Candidate band centres [nm].")
@click.option("--size", required=True, type=int, help="How many bands the camera may have.")
@click.option("--fwhm", metavar="NM[,NM…]", help="Widths of the bands (full width at half maximum) [nm].")
@click.option("--keep", metavar="NM,NM,…", help="Candidates that must be among them [nm].")
@click.option("--show", default=10, show_default=True, help="How many of the best subsets to show.")
@_LIBRARY
@_WANTED
@_UNWANTED
@noise_options
def bands(
    wavelengths: str,
    size: int,
    fwhm: str | None,
    keep: str | None,
    show: int,
    library: str | None,
    wanted: str,
    unwanted: str,
    **given: Any,
) -> None:
    """Rank every subset of candidate bands by how well its ratios tell unseen specimens apart."""
    from ..planning import rank_bands

    ranking = rank_bands(
        numbers(wavelengths, "--wavelengths") or [],
        size,
        _spectra(library),
        _words(wanted),
        _words(unwanted),
        fwhm=numbers(fwhm, "--fwhm"),
        noise=noise_from(given),
        keep=numbers(keep, "--keep") or (),
    )
    best = ranking.subsets.head(max(show, 1)).copy()
    best["bands"] = [", ".join(f"{band:g}" for band in bands) for bands in best.bands]
    best["as_good_as_best"] = best.as_good_as_best.map({True: "yes", False: "no"})
    click.echo(best.rename(columns={"bands": "bands [nm]"}).to_string(float_format="{:.3f}".format))
    click.echo("\ncandidates: best area with and without each, and the band that may stand in for it")
    table = ranking.bands.copy()
    table["redundant"] = table.redundant.map({True: "yes", False: "no"})
    table.index = [f"{band:g} nm" for band in table.index]
    click.echo(table.to_string(float_format="{:.3f}".format))
    for finding in ranking.findings:
        click.echo(f"- {finding}")


@command.command(
    epilog="Example: bandratio plan sets filters.csv --wanted olivine --unwanted plagioclase,opaque, with the columns "
    "set,wavelength,fwhm,relative in filters.csv and one row a band"
)
@click.argument("table", metavar="FILE.csv")
@_LIBRARY
@_WANTED
@_UNWANTED
def sets(table: str, library: str | None, wanted: str, unwanted: str) -> None:
    """Compare named filter sets on the same spectra: a table with one row for each band of each set.

    Columns: set, wavelength [nm], and as known fwhm [nm], random, shot, relative, band_gain, band_offset.
    """
    from ..planning import compare_filter_sets

    found = compare_filter_sets(_read_sets(Path(table)), _spectra(library), _words(wanted), _words(unwanted))
    click.echo(found.areas.to_string(float_format="{:.3f}".format))
    click.echo("")
    click.echo(found.differences.to_string(index=False, float_format="{:.3f}".format))
    for finding in found.findings:
        click.echo(f"- {finding}")


def _read_sets(path: Path) -> dict[str, tuple[Any, ...]]:
    import pandas as pd

    from .._checks import suggestion
    from ..noise import Noise

    parts = ("random", "shot", "relative", "band_gain", "band_offset")
    known = ("set", "wavelength", "fwhm", *parts)
    try:
        frame = pd.read_csv(path, comment="#", skipinitialspace=True)
    except (pd.errors.ParserError, pd.errors.EmptyDataError, UnicodeDecodeError) as error:
        raise ValueError(f"{path}: not readable as a table ({error})") from None
    for column in frame.columns:
        if column not in known:
            raise ValueError(f"{path}: unknown column {column!r}{suggestion(str(column), known)}")
    for column in ("set", "wavelength"):
        if column not in frame:
            raise ValueError(f"{path}: wanted the columns set and wavelength, got {', '.join(frame.columns)}")
    for column in frame.columns.drop("set"):
        numeric = pd.to_numeric(frame[column], errors="coerce")
        if numeric.isna().any():
            row = int(numeric.isna().to_numpy().argmax())
            raise ValueError(
                f"{path}, row {row + 2}: {column} must be a number, got {frame[column].iloc[row]!r}"
            )
        frame[column] = numeric
    sets: dict[str, tuple[Any, ...]] = {}
    for name, rows in frame.groupby("set", sort=False):
        given = {part: rows[part].to_list() for part in parts if part in rows}
        widths = rows.fwhm.to_list() if "fwhm" in rows else None
        sets[str(name)] = (rows.wavelength.to_list(), widths, Noise(**given) if given else None)
    return sets
