"""One self-contained page: question and answer, linked views, regions, and how to make it again."""

from __future__ import annotations

import json
import shlex
import sys
from collections.abc import Sequence
from html import escape
from importlib.metadata import version
from pathlib import Path
from string import Template
from typing import Any

import pandas as pd
import xarray as xr

from ..files.atomic import beside, require_free
from ..noise import Noise
from ..plots.frame import Grid, parameter_names
from ..plots.maps import FLAG_COLOURS
from ..regions import candidate_table
from . import wording
from .pictures import page_data

__all__ = ["write_report"]

_HERE = Path(__file__).parent


def write_report(
    maps: xr.Dataset,
    path: str | Path,
    *,
    flags: xr.Dataset | None = None,
    cube: xr.DataArray | None = None,
    noise: Noise | None = None,
    min_pixels: int = 1,
    title: str = "Spectral parameters",
    command: str | Sequence[str] = "",
    overwrite: bool = False,
) -> Path:
    """Write a page that shows the result, lets it be explored, and says how it was made.

    One file without any reference to the network: linked maps and scatter (pointing at a pixel gives its values with
    their sigmas, selecting in one view highlights in the others), the candidate regions in a sortable table, noise,
    thresholds, sources, versions, cautions. It stays below 15 MB for a scene of any size by averaging the pictures,
    and says so.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters`` over an image; lazy maps are read once for each picture.
    path : str or Path
        Where to write, ending in .html.
    flags : Dataset, optional
        Result of a flagging function on the same grid.
    cube : DataArray, optional
        Reflectance on the same grid, for the means of the candidate regions.
    noise : Noise, optional
        For the sigmas of those means.
    min_pixels : int
        Smaller regions are left out.
    title : str
        Heading.
    command : str or sequence of str
        The command that makes this page again, or its words.
    overwrite : bool
        Replace what is there.

    Returns
    -------
    Path

    Raises
    ------
    TypeError, ValueError, OSError
        If the maps hold no parameter over an image, the flags do not fit them, the ending is not .html or the file is
        there already.
    """
    path = Path(path)
    if path.suffix.lower() not in (".html", ".htm"):
        raise ValueError(f"{path}: a report is a page, so its name must end in .html")
    require_free(path, overwrite=overwrite)
    _check(maps, flags)
    table, labels = None, None
    if flags is not None:
        flags = flags.assign(flag=flags["flag"].compute())
        table, labels = candidate_table(flags, cube, noise, min_pixels=min_pixels)
    page = _page(maps, flags, table, labels, title, command)
    with beside(path, overwrite=overwrite) as unfinished:
        unfinished.write_text(page, encoding="utf-8")
    return path


def _check(maps: Any, flags: Any) -> None:
    if not isinstance(maps, xr.Dataset):
        raise TypeError(f"maps must be a Dataset, as br.parameters makes one, got {type(maps).__name__}")
    images = [name for name in parameter_names(maps) if maps[name].ndim == 2]
    if not images:
        raise ValueError(
            f"the maps hold no parameter over an image ({', '.join(map(str, maps.data_vars)) or 'nothing'}); a report "
            "shows maps of two dimensions"
        )
    if flags is None:
        return
    if not isinstance(flags, xr.Dataset) or "flag" not in flags:
        raise TypeError(f"flags must be the Dataset of a flagging function, got {type(flags).__name__}")
    sizes = dict(maps[images[0]].sizes)
    if dict(flags["flag"].sizes) != sizes:
        raise ValueError(
            f"the flags have {dict(flags['flag'].sizes)} and the maps {sizes}; flag these same maps"
        )


def _page(
    maps: xr.Dataset,
    flags: xr.Dataset | None,
    table: pd.DataFrame | None,
    labels: xr.DataArray | None,
    title: str,
    command: str | Sequence[str],
) -> str:
    from bokeh.embed import components
    from bokeh.resources import Resources

    from .figures import NO_DATA, labels_of, linked_views

    data = page_data(maps, flags, labels)
    views = linked_views(maps, data)
    script, places = components(views)
    described = {
        "left": "Map on the left",
        "right": "Map on the right, moved and zoomed with the left one",
        "scatter": "Scatter of two parameters",
    }
    versions = {"bandratio": _version(), "Python": sys.version.split()[0]}
    versions |= {name: version(name) for name in ("numpy", "xarray", "bokeh")}
    typed = command if isinstance(command, str) else shlex.join(command)
    again = (
        f"<p>To make this page again:</p><pre>{escape(typed)}</pre>"
        if typed
        else "<p>This page was made from Python, with bandratio.write_report.</p>"
    )
    flag_layer = ""
    if flags is not None:
        flag_layer = '<label><input type="checkbox" id="show-flags" checked> candidates</label>'
    return Template((_HERE / "page.html").read_text(encoding="utf-8")).substitute(
        title=escape(title),
        css=(_HERE / "page.css").read_text(encoding="utf-8"),
        js=(_HERE / "page.js").read_text(encoding="utf-8"),
        library=Resources(mode="inline", components=["bokeh"], log_level="error").render(),
        answer="\n".join(f"<p>{line}</p>" for line in wording.answer_lines(data, flags, table)),
        caution=wording.caution_text(flags),
        picture_note=wording.picture_note(data),
        options_first=_options(data.names, data.shown[0]),
        options_second=_options(data.names, data.shown[1]),
        flag_layer=flag_layer,
        legend=wording.legend(data, {**FLAG_COLOURS, "no_data": NO_DATA}),
        views="\n".join(
            f'<div id="view-{name}" role="group" aria-label="{text}">{places[name]}</div>'
            for name, text in described.items()
        ),
        regions=wording.region_section(table, _coordinate_unit(maps)),
        parameters=wording.parameter_table(maps, data),
        provenance=wording.provenance(maps, flags, versions),
        command=again,
        # a name must not end the script that holds it
        names=json.dumps({"names": data.names, "labels": labels_of(maps, data.names)})
        .replace("<", "\\u003c")
        .replace("&", "\\u0026"),
        scripts=script,
    )


def _coordinate_unit(maps: xr.Dataset) -> str:
    """Units of the regions' x and y: those of the maps' coordinates, not of the views' axes."""
    first = next(maps[name] for name in parameter_names(maps) if maps[name].ndim == 2)
    grid = Grid.of(first)
    if grid.unit == "m":
        unit = "m" if grid.metres == 1 else "km" if grid.metres == 1000 else "map unit"
    else:
        unit = {"degree": "°", "pixel": "pixel"}.get(grid.unit, "map unit")
    return unit


def _options(names: list[str], chosen: int) -> str:
    return "".join(
        f'<option value="{place}"{" selected" if place == chosen else ""}>{escape(name)}</option>'
        for place, name in enumerate(names)
    )


def _version() -> str:
    from .. import __version__

    return __version__
