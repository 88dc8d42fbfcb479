"""The page's texts: question and answer, cautions, tables, provenance. Everything that comes from a file is escaped."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from html import escape
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from ..photometry import geometry_summary
from .noise_words import noise_words, readable_attribute
from .pictures import PageData

__all__ = [
    "answer_lines", "caution_text", "legend", "parameter_table", "picture_note", "provenance", "region_section",
    "table_html",
]  # fmt: skip

#: Rows and cells of a table of regions; the rest is in the file of regions.
_MOST_ROWS, _MOST_CELLS = 500, 20_000

_READABLE = {
    "region": "region", "kind": "kind", "n_pixels": "pixels", "area_map": "area [map unit²]",
    "area_km2": "true area [km²]", "longitude": "longitude [°]", "latitude": "latitude [°]",
    "expected_false_pixels": "expected false pixels",
}  # fmt: skip


def answer_lines(data: PageData, flags: xr.Dataset | None, table: pd.DataFrame | None) -> list[str]:
    """Question, answer, and how far it can be relied on: three lines of HTML."""
    pixels = data.shape[0] * data.shape[1]
    if flags is None or table is None:
        size = f"{data.shape[0]:,} × {data.shape[1]:,} pixels"
        answer = (
            f"{len(data.names)} parameters over {size}, each with its standard uncertainty where the noise is known; the "
            "table of parameters has median and typical sigma."
        )
        return [
            "<strong>What do the spectral parameters of this scene look like, and how well are they known?</strong>",
            answer,
            "No candidates were flagged: map first, then flag, then make this page with the flags.",
        ]
    ice = "ice_candidate" in data.counts
    subject = "ice" if ice else "a pyroclastic deposit"
    candidates = {word: count for word, count in data.counts.items() if word.endswith("candidate")}
    total = sum(candidates.values())
    told = " and ".join(f"{count:,} {word.replace('_', ' ')}" for word, count in candidates.items() if count)
    if total == 0:
        answer = f"Nowhere that can be told from the noise: no pixel of {pixels:,} is a candidate."
    else:
        least = table.attrs.get("min_pixels", 1)
        sizes = f" of {least} pixels or more" if least > 1 else ""
        answer = (
            f"{told} pixels of {pixels:,} ({total / pixels:.2%}), in {len(table):,} "
            f"region{'' if len(table) == 1 else 's'}{sizes}."
        )
        if len(table):
            answer += f" The largest: {_largest(table.iloc[0])}."
    rate = flags.attrs.get("false_discovery_rate")
    held = "The flags do not say which false discovery rate they hold."
    if rate is not None:
        held = (
            f"On average at most {100 * float(rate):.3g} % of the candidates are false, if the noise is what was stated "
            f"({escape(_short(noise_words(flags.attrs.get('noise', 'not said'))))}); {data.counts.get('undecided', 0):,} pixels are undecided."
        )
    return [f"<strong>Where does this scene look like {subject}?</strong>", answer, held]


def _largest(row: Any) -> str:
    text: str = f"{int(row['n_pixels']):,} pixels"
    if "area_km2" in row.index:
        text += f", {row['area_km2']:.3g} km²"
    if "longitude" in row.index:
        text += f", at longitude {row['longitude']:.3f}°, latitude {row['latitude']:.3f}°"
        return text
    return f"{text}, at {row['x']:.6g}, {row['y']:.6g}"


def _short(told: Any, longest: int = 240) -> str:
    text = str(told)
    return text if len(text) <= longest else text[:longest] + " …"


def caution_text(flags: xr.Dataset | None) -> str:
    """What a reader must not conclude."""
    if flags is not None and "ice_candidate" in str(flags["flag"].attrs.get("flag_meanings")):
        return (
            "Flags are indicators to follow up, never proof of ice. Lasers near 1.5 µm and in the red can blind: where "
            "one is planned or used, eye safety follows IEC 60825-1, local rules and a licensed laser safety officer."
        )
    return (
        "Flags are indicators to follow up, never proof of a pyroclastic deposit. Bright and flat finds one family only: "
        "many deposits are dark, and fresh craters are bright too. The promised rate holds on average; errors that all "
        "pixels share move a whole scene at once."
    )


def picture_note(data: PageData) -> str:
    """What was left out for the page."""
    rows, columns = data.shape
    if data.step > 1:
        text = (
            f"The pictures are averaged over {data.step} × {data.step} pixels of {rows:,} × {columns:,} to keep this page "
            "small (a square with a candidate in it shows as one; sigmas are those of single pixels)."
        )
    else:
        text = f"The pictures show every pixel of {rows:,} × {columns:,}."
    text += f" {len(data.points):,} pixels can be selected."
    if data.flag is not None:
        text += " A white and black outline round candidates is no candidate; it makes them easier to see."
    if data.candidates_left_out:
        text += f" {data.candidates_left_out:,} candidates are in the pictures and the table, but not among those."
    return text


def legend(data: PageData, colours: dict[str, str]) -> str:
    """Key of the flags, with how many pixels of the scene have each."""
    if not data.counts:
        return ""
    items = []
    for word, count in data.counts.items():
        shown = word == "no_data" or word.endswith("candidate")
        swatch = (
            f'<span class="swatch" style="background:{colours.get(word, "#4D4D4D")}"></span>' if shown else ""
        )
        items.append(
            f"<li>{swatch}{escape(word.replace('_', ' '))}: {count:,}{'' if shown else ' (not marked)'}</li>"
        )
    return f'<ul class="legend" aria-label="Flags, with their number of pixels">{"".join(items)}</ul>'


def table_html(
    header: Sequence[str],
    rows: Iterable[Sequence[Any]],
    *,
    text_columns: Iterable[int] = (),
    sortable: bool = False,
) -> str:
    """HTML table; numbers keep their full value for sorting. Cells that are tuples hold ready HTML."""
    texts = set(text_columns)
    cells = []
    for place, name in enumerate(header):
        label = f'<button type="button">{escape(name)}</button>' if sortable and name else escape(name)
        kind = ' class="text"' if place in texts else ""
        cells.append(f'<th scope="col"{kind}>{label}</th>' if name else "<td></td>")
    body = []
    for row in rows:
        line = []
        for place, value in enumerate(row):
            if isinstance(value, tuple):
                line.append(f"<td>{value[0]}</td>")
            elif isinstance(value, (float, np.floating)):
                known = bool(np.isfinite(value))
                shown = str(value) if isinstance(value, _Place) else f"{value:,.5g}"
                line.append(
                    f'<td data-value="{float(value) if known else ""}">{shown if known else "–"}</td>'
                )
            elif isinstance(value, (int, np.integer)):
                line.append(f'<td data-value="{value}">{value:,}</td>')
            else:
                line.append(f'<td class="{"text" if place in texts else ""}">{escape(str(value))}</td>')
        body.append(f"<tr>{''.join(line)}</tr>")
    return f"<table><thead><tr>{''.join(cells)}</tr></thead><tbody>{''.join(body)}</tbody></table>"


def region_section(table: pd.DataFrame | None, unit: str = "") -> str:
    """The table of regions, with a button in each row that selects its pixels in the views.

    `unit` is that of the coordinates x and y.
    """
    if table is None:
        return ""
    heading = '<section aria-labelledby="regions-title"><h2 id="regions-title">Candidate regions</h2>'
    if len(table) == 0:
        return f"{heading}<p>There are none.</p></section>"
    shown = table.head(min(_MOST_ROWS, _MOST_CELLS // table.shape[1]))
    note = f"<p>The {len(shown):,} largest of {len(table):,}.</p>" if len(table) > len(shown) else ""
    if "area_km2" in shown.columns:
        shown = shown.drop(columns="area_map", errors="ignore")
    placed = {axis: f"{axis} [{unit}]" if unit else axis for axis in "xy"}
    header = ["", *(placed.get(str(name)) or _heading(str(name)) for name in shown.columns)]
    rows = []
    for _, row in shown.iterrows():
        number = int(row["region"])
        button = f'<button type="button" data-region="{number}" aria-label="select region {number}">select</button>'
        rows.append([(button,), *(_cell(str(name), row[name]) for name in shown.columns)])
    body = table_html(header, rows, text_columns=[1 + list(shown.columns).index("kind")], sortable=True)
    if "expected_false_pixels" in shown.columns:
        note += (
            "<p><strong>Expected false pixels</strong>: how many of a region's pixels are no candidates after all, if the "
            "promised false discovery rate is spread evenly over all candidates (rate × pixels). Lone pixels are false "
            "more often than that, large regions less.</p>"
        )
    return (
        f'{heading}{note}<div class="scroll" tabindex="0" role="region" aria-label="Table of candidate regions">{body}</div>'
        "</section>"
    )


#: Decimals of a region's place; the fourth of a degree is 3 m on the Moon.
_DECIMALS = {"x": 3, "y": 3, "longitude": 4, "latitude": 4}


def _cell(column: str, value: Any) -> Any:
    return _Place(value).to(_DECIMALS[column]) if column in _DECIMALS else value


class _Place(float):
    """A coordinate, which a table shows to fixed decimals."""

    decimals = 3

    def to(self, decimals: int) -> _Place:
        self.decimals = decimals
        return self

    def __str__(self) -> str:
        return f"{float(self):,.{self.decimals}f}"


def _heading(column: str) -> str:
    for ending, readable in (
        ("_sigma_random", " σ, random part"),
        ("_sigma_shared", " σ, shared part"),
        ("_sigma", " σ"),
    ):
        if column.endswith(ending):
            return column.removesuffix(ending) + readable
    return _READABLE.get(
        column, column.removesuffix("_spread") + " spread" if column.endswith("_spread") else column
    )


def parameter_table(maps: xr.Dataset, data: PageData) -> str:
    """Every parameter with its formula, what it is like in the scene, and its source."""
    header = ["name", "meaning", "unit", "formula", "5 %", "median", "95 %", "typical sigma", "source"]
    rows = []
    for name in data.names:
        attributes = maps[name].attrs
        values = data.planes[name][np.isfinite(data.planes[name])]
        low, middle, high = np.percentile(values, [5, 50, 95]) if values.size else (np.nan,) * 3
        sigma = data.planes.get(f"{name}_sigma")
        typical = np.nan if sigma is None or not np.isfinite(sigma).any() else float(np.nanmedian(sigma))
        told = [str(attributes.get(key, "")) for key in ("long_name", "units", "definition")]
        rows.append(
            [name, *told, float(low), float(middle), float(high), typical, str(attributes.get("source", ""))]
        )
    return table_html(header, rows, text_columns=[0, 1, 2, 3, 8])


def provenance(maps: xr.Dataset, flags: xr.Dataset | None, versions: dict[str, str]) -> str:
    """Noise, thresholds, attributes of the files, and versions, as a list of terms."""
    told: list[tuple[str, str]] = [("noise", noise_words(maps.attrs.get("noise", "not said in the maps")))]
    done = {"noise", "thresholds"}
    try:
        told.append(("geometry", "; ".join(geometry_summary(maps)).removeprefix("geometry: ")))
        done |= {"normalisation", "masked_pixels"}
    except (ValueError, TypeError, KeyError, AttributeError):
        told.append(("geometry", "cannot be read from the maps' attributes"))
    if flags is not None and "thresholds" in flags.attrs:
        try:
            for name, limit in json.loads(flags.attrs["thresholds"]).items():
                sigma = f" ± {limit['sigma']:.3g}" if limit.get("sigma") else ""
                told.append(
                    (
                        f"threshold {name}",
                        f"{limit['value']:.6g}{sigma}, {limit['origin']}; {limit.get('errors', '')}",
                    )
                )
        except (ValueError, TypeError, KeyError, AttributeError):
            told.append(("thresholds", str(flags.attrs["thresholds"])))
    for title, dataset in (("maps", maps), ("flags", flags)):
        if dataset is not None:
            told += [
                (f"{title}: {key}", _short(readable_attribute(str(key), value), 2000))
                for key, value in dataset.attrs.items()
                if key not in done and str(value)
            ]
    told.append(("versions", ", ".join(f"{name} {version}" for name, version in versions.items())))
    return "\n".join(f"<dt>{escape(str(term))}</dt><dd>{escape(text)}</dd>" for term, text in told)
