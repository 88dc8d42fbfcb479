"""``bandratio lab``: what the parameters say about materials, at the user's own bands and noise."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from ._options import noise_from, noise_options, numbers

if TYPE_CHECKING:
    import xarray as xr

    from ..detection import Threshold

__all__ = ["command"]

_PICTURES = (".png", ".pdf", ".svg")


@click.command(
    epilog="Example: bandratio lab --wavelengths 480,600,700,830 --fwhm 20 --relative 0.01 --wanted olivine "
    "--unwanted plagioclase --names mafic_depth --picture materials.png"
)
@click.option("--wavelengths", metavar="NM,NM,…", help="Band centres [nm].")
@click.option(
    "--fwhm", metavar="NM[,NM…]", help="Widths of Gaussian bands (full width at half maximum) [nm]."
)
@click.option(
    "--responses",
    metavar="FILE.csv",
    help="Tabulated filter responses: wavelength_nm, then one column a band.",
)
@click.option(
    "--library", metavar="PATH", help="Spectra of your own, a file or a folder; else the embedded table."
)
@click.option("--quantity", help="Reflectance quantity of the library, where its files do not say.")
@click.option("--materials", metavar="NAME,NAME,…", help="Groups, samples or specimens to show; else all.")
@click.option(
    "--names", metavar="NAME,NAME,…", help="Which parameters; all that the bands allow unless given."
)
@click.option(
    "--wanted", metavar="NAME,NAME,…", help="Find thresholds: groups or samples that are looked for."
)
@click.option("--unwanted", metavar="NAME,NAME,…", help="… and those that they are to be told from.")
@click.option(
    "--false-alarm-rate", default=0.05, show_default=True, help="Share of the unwanted beyond the threshold."
)
@click.option("--together", is_flag=True, help="Use two --names together: beyond both thresholds.")
@click.option("-o", "--output", metavar="OUT.csv", help="Also write the table.")
@click.option(
    "--thresholds", "threshold_file", metavar="OUT.json", help="Also write the thresholds, for use on scenes."
)
@click.option("--picture", metavar="OUT.png", help="Also draw it (.png, .pdf or .svg).")
@click.option("--overwrite", is_flag=True, help="Replace outputs that exist.")
@noise_options
def command(**given: Any) -> None:
    """Show every parameter of every laboratory material, with sigma for one pixel of your noise.

    With --wanted and --unwanted it also gives the threshold that tells the two apart, and says what that rests on.
    """
    from ..materials import material_table

    overwrite = given["overwrite"]
    outputs = [
        _output(given["output"], (".csv",), overwrite),
        _output(given["picture"], _PICTURES, overwrite),
    ]
    threshold_file = _output(given["threshold_file"], (".json",), overwrite)
    if threshold_file is not None and given["wanted"] is None:
        raise ValueError("--thresholds needs --wanted and --unwanted: what is to be told from what")
    if (given["wanted"] is None) != (given["unwanted"] is None):
        raise ValueError("thresholds need both --wanted and --unwanted")
    if given["wavelengths"] is None and given["responses"] is None:
        raise ValueError("give the bands: --wavelengths 480,600,700,830 or --responses FILE.csv")
    noise = noise_from(given)
    centres, widths = numbers(given["wavelengths"], "--wavelengths"), numbers(given["fwhm"], "--fwhm")
    library = _library(given)
    names = _words(given["names"])
    bands: dict[str, Any] = {"responses": given["responses"]} if given["responses"] else {}
    table = material_table(
        centres, widths, noise, names=names, materials=_words(given["materials"]), spectra=library, **bands
    )
    click.echo(_table_text(table))
    for title in ("left_out", "materials_left_out"):
        if table.attrs.get(title):
            click.echo(f"{title.replace('_', ' ')}: {table.attrs[title]}")
    found = _thresholds(given, centres, widths, library, noise, table, bands)
    click.echo(_thresholds_text(found, table), nl=bool(found))
    if threshold_file is not None:
        from ..detection import write_thresholds

        click.echo(f"written to {write_thresholds(found, threshold_file, overwrite=overwrite)}")
    if outputs[0]:
        _write(outputs[0], lambda part: _frame(table).to_csv(part))
    if outputs[1]:
        _draw(outputs[1], table, found)


def _output(name: str | None, endings: tuple[str, ...], overwrite: bool) -> Path | None:
    from ..files.atomic import require_free

    if name is None:
        return None
    if Path(name).suffix.lower() not in endings:
        raise ValueError(f"{name}: the ending must be one of {', '.join(endings)}")
    return require_free(name, overwrite=overwrite)


def _words(text: str | None) -> list[str] | None:
    return None if text is None else [word.strip() for word in text.split(",") if word.strip()]


def _library(given: dict[str, Any]) -> xr.DataArray | None:
    from ..spectra import open_library

    if given["library"] is None:
        if given["quantity"] is not None:
            raise ValueError(
                "--quantity is for a --library of your own; the embedded table says what it holds"
            )
        return None
    return open_library(given["library"], quantity=given["quantity"])


def _thresholds(
    given: dict[str, Any],
    centres: list[float] | None,
    widths: list[float] | None,
    library: xr.DataArray | None,
    noise: Any,
    table: xr.Dataset,
    bands: dict[str, Any],
) -> dict[str, Threshold]:
    from ..detection import thresholds
    from ..spectra import band_average, reference_spectra

    wanted, unwanted = _words(given["wanted"]), _words(given["unwanted"])
    if wanted is None or unwanted is None:
        return {}
    names = _words(given["names"]) or [str(n) for n in table.data_vars if not str(n).endswith("_sigma")]
    spectra = (
        reference_spectra(centres, widths, **bands)
        if library is None
        else band_average(library, centres, widths, **bands)
    )
    rate = given["false_alarm_rate"]
    asked = [names] if given["together"] else [[name] for name in names]
    found: dict[str, Threshold] = {}
    for each in asked:
        found |= thresholds(spectra, each, wanted, unwanted, noise=noise, false_alarm_rate=rate)
    return found


def _frame(table: xr.Dataset) -> Any:
    columns = [n for n in ("specimen", "group", "grain_size", "record", "source") if n in table.coords]
    frame = table.reset_coords(drop=False).to_dataframe()
    values = [str(name) for name in table.data_vars]
    return frame[columns + values]


def _table_text(table: xr.Dataset) -> str:
    names = [str(n) for n in table.data_vars if not str(n).endswith("_sigma")]
    groups = table["group"].values if "group" in table.coords else np.full(table.sizes["sample"], "")
    rows = [["material", "group", *names]]
    rows.append(
        [
            "",
            "",
            *(str(table[name].attrs.get("units", "")).replace("% per 100 nm", "%/100 nm") for name in names),
        ]
    )
    for i, sample in enumerate(table["sample"].values):
        rows.append([str(sample), str(groups[i]), *(_value_text(table, name, i) for name in names)])
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    return "\n".join(
        "  ".join(
            cell.ljust(width) if i < 2 else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    )


def _value_text(table: xr.Dataset, name: str, row: int) -> str:
    value = float(table[name].values[row])
    if not np.isfinite(value):
        return "–"
    digits = 1 if str(table[name].attrs.get("units", "")).startswith("%") else 3
    text = f"{value:.{digits}f}"
    return (
        f"{text} ± {float(table[f'{name}_sigma'].values[row]):.{digits}f}"
        if f"{name}_sigma" in table
        else text
    )


def _thresholds_text(found: dict[str, Threshold], table: xr.Dataset) -> str:
    """One line a threshold with what is said of it alone, then once what is said of all."""
    told = {name: each.separation for name, each in found.items() if each.separation is not None}
    common = list(dict.fromkeys(f for each in told.values() for f in each.findings))
    common = [finding for finding in common if all(finding in each.findings for each in told.values())]
    lines = []
    for name, separation in told.items():
        threshold, units = found[name], str(table[name].attrs.get("units", ""))
        low, high = separation.area_interval
        lines.append(
            f"{name} {separation.direction} {threshold.value:.4g} ± {threshold.sigma:.2g}"
            f"{'' if units == '1' else ' ' + units}: finds {separation.detection_rate:.0%} of {separation.n_wanted} "
            f"wanted specimens and {separation.false_alarm_rate:.1%} of {separation.n_unwanted} unwanted; area under "
            f"the ROC curve {separation.area:.3f} [{low:.2f}, {high:.2f}]"
        )
        lines += [f"  {finding}" for finding in separation.findings if finding not in common]
    return "\n".join(lines + [f"- {finding}" for finding in common])


def _write(path: Path, save: Any) -> None:
    from ..files.atomic import beside

    with beside(path, overwrite=True) as unfinished:
        save(unfinished)
    click.echo(f"written to {path}")


def _draw(path: Path, table: xr.Dataset, found: dict[str, Threshold]) -> None:
    import matplotlib as mpl

    mpl.use("Agg")
    import matplotlib.pyplot as plt

    from ..plots.frame import style
    from ..plots.laboratory import plot_materials

    figure: Any = plot_materials(table, thresholds=found)[0].figure
    with style():
        _write(path, figure.savefig)
    plt.close(figure)
