"""``bandratio plan``: which bands tell materials apart, before a camera is built."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from ._options import noise_from, noise_options, numbers

__all__ = ["command"]


@click.group()
def command() -> None:
    """Plan an instrument: bands and sets of filters that tell materials apart, lasers that find ice."""


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
    epilog="Example: bandratio plan bands --wavelengths 415,480,600,700,750,830,900,950,1000 --size 4 "
    "--wanted olivine,basalt --unwanted plagioclase,opaque --relative 0.01"
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
    best["as_good_as_best"] = best.as_good_as_best.map({True: "yes", False: "no"}).fillna("–")
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


@command.command(
    epilog="Example: bandratio plan lasers --ice-free mare --relative 0.03 --sigma 0.002 -o lasers.png"
)
@click.option(
    "-o", "--output", metavar="FILE", help="Picture (.png, .pdf, .svg) of the curves, or their table (.csv)."
)
@click.option(
    "--ice-free",
    metavar="NAME,NAME,…",
    help="Ground list: mare, highland, groups or materials; else any rock.",
)
@click.option("--site", metavar="NAME", help="Material of the list that the ice lies on; else mature soil.")
@click.option("--red-nm", default=640.0, show_default=True, help="Red wavelength [nm].")
@click.option("--infrared-nm", default=1535.0, show_default=True, help="Infrared wavelength [nm].")
@click.option("--grain", default=50.0, show_default=True, help="Grain size of the ice [µm].")
@click.option(
    "--relative",
    default="0.03",
    show_default=True,
    metavar="F[,F]",
    help="Noise of each shot, a fraction; red, infrared.",
)
@click.option(
    "--sigma",
    default="0.002",
    show_default=True,
    metavar="A[,A]",
    help="Noise of each shot, in albedo; red, infrared.",
)
@click.option(
    "--gain-sigma", default=0.0, show_default=True, help="Error of the red/infrared gain, a fraction."
)
@click.option(
    "--incidence", type=float, help="Incidence of the shots [degree]; else the laboratory's geometry."
)
@click.option(
    "--false-discovery-rate", default=0.05, show_default=True, help="Share of false candidates, at most."
)
@click.option("--prevalence", default=0.05, show_default=True, help="Share of the shots that hold ice.")
@click.option(
    "--probability", default=0.9, show_default=True, help="Wanted probability to flag a shot with ice."
)
@click.option("--overwrite", is_flag=True, help="Replace FILE where it exists.")
def lasers(output: str | None, ice_free: str | None, **given: Any) -> None:
    """The least ice that two lasers find, over noise, infrared wavelength and grain size of the ice.

    Eye safety of any laser follows IEC 60825-1, local rules and a licensed laser safety officer.
    """
    from ..files.atomic import require_free
    from ..planning import plan_lasers

    kinds = (".png", ".pdf", ".svg", ".csv")
    if output is not None and Path(output).suffix.lower() not in kinds:
        raise ValueError(f"FILE must end in {', '.join(kinds)}, got {output!r}")
    if output is not None:
        require_free(output, overwrite=given["overwrite"])
    plan = plan_lasers(
        None if ice_free is None else _words(ice_free),
        site=given["site"], red_nm=given["red_nm"], infrared_nm=given["infrared_nm"], grain_um=given["grain"], relative=_one_or_two(given["relative"], "--relative"), sigma=_one_or_two(given["sigma"], "--sigma"), gain_sigma=given["gain_sigma"], incidence_deg=given["incidence"], false_discovery_rate=given["false_discovery_rate"], prevalence=given["prevalence"], probability=given["probability"],
    )  # fmt: skip
    names = {
        "noise": "noise [% of the albedo]",
        "wavelength": "infrared [nm]",
        "grain_size": "ice grains [µm]",
    }
    click.echo("least ice found: areal [% of the area], intimate [% of the weight]; blank where none is")
    for part, title in names.items():
        table = 100 * getattr(plan, part)
        across = [f"{100 * x if part == 'noise' else x:g}" for x in table.index]
        click.echo(f"\n{title:<26}{'areal':>8}{'intimate':>10}")
        for x, areal, intimate in zip(across, table["areal"], table["intimate"], strict=True):
            cells = ("" if value != value else f"{value:.1f}" for value in (areal, intimate))  # noqa: PLR0124 (NaN)
            click.echo(f"{x:<26}{next(cells):>8}{next(cells):>10}")
    click.echo("")
    for line in (plan.sentence, *plan.findings, plan.caution):
        click.echo(f"- {line}")
    if output is not None:
        _write_plan(plan, Path(output), overwrite=given["overwrite"])
        click.echo(f"written to {output}")


def _one_or_two(text: str, option: str) -> Any:
    values = numbers(text, option) or []
    if len(values) not in (1, 2):
        raise ValueError(f"{option} wants one number, or one for red and one for infrared, got {text!r}")
    return values[0] if len(values) == 1 else values


def _write_plan(plan: Any, path: Path, *, overwrite: bool) -> None:
    import pandas as pd

    from ..files import beside

    with beside(path, overwrite=overwrite) as unfinished:
        if path.suffix.lower() == ".csv":
            parts = {
                "relative noise": plan.noise,
                "infrared [nm]": plan.wavelength,
                "ice grains [µm]": plan.grain_size,
            }
            table = pd.concat(parts, names=["curve", "value"])
            table.to_csv(unfinished)
        else:
            from ..plots import plot_laser_plan

            plot_laser_plan(plan)[0].figure.savefig(unfinished)
