"""The page's linked views: two maps and a scatter over one set of selectable pixels."""

from __future__ import annotations

import textwrap
from html import escape
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..plots.maps import FLAG_COLOURS, value_scale
from .pictures import PageData

__all__ = ["NO_DATA", "labels_of", "linked_views"]

#: Colour of what is selected, and of a pixel without a flag.
_SELECTED, _PLAIN = "#D55E00", "#4D4D4D"
#: Where a map has no value.
NO_DATA = "#BFBFBF"
#: Width of a view [px], and what of it and of its height is not picture; the page's script has the same numbers.
_MAP_WIDTH, _BESIDE, _ABOVE = 450, 150, 120
#: Characters of a line of a view's title or axis.
_LINE = 46
#: Outlines that would cover more of a picture than this are left away.
_MOST_OUTLINE = 0.25
_NUMBER = "return Number.isFinite(value) ? Number(value).toPrecision(4) : 'no data'"


def labels_of(maps: xr.Dataset, names: list[str]) -> list[str]:
    """Long name of each parameter with its unit, in lines short enough for a view."""
    labels = []
    for name in names:
        unit = str(maps[name].attrs.get("units", "1"))
        words = str(maps[name].attrs.get("long_name", "")) or name
        lines = textwrap.wrap(words, _LINE, break_on_hyphens=False) or [name]
        bracket = f" [{unit}]" if unit not in ("", "1") else ""
        if len(lines[-1]) + len(bracket) > _LINE:
            lines.append("")
        labels.append("\n".join([*lines[:-1], (lines[-1] + bracket).strip()]))
    return labels


def linked_views(maps: xr.Dataset, data: PageData) -> dict[str, Any]:
    """Bokeh figures ``left``, ``right`` and ``scatter``, whose models the page's script finds by name.

    Names of the models: ``image-left-0`` is the picture of parameter 0 on the left map, ``bar-left-0`` its colour
    bar, ``flags-left`` the layer of flags, ``points-left`` the selectable pixels.
    """
    from bokeh.models import ColumnDataSource, CustomJSHover

    images = ColumnDataSource(
        {
            "x": [min(data.covered[:2])],
            "y": [min(data.covered[2:])],
            "dw": [abs(data.covered[1] - data.covered[0])],
            "dh": [abs(data.covered[3] - data.covered[2])],
            **_image_columns(data),
        }
    )
    table = {str(name): values.to_numpy() for name, values in data.points.items()}
    table["colour"] = np.array([_colour(data.words.get(code, "")) for code in data.points["flag"].tolist()])
    points = ColumnDataSource(table, name="points")
    words = {code: word.replace("_", " ") for code, word in data.words.items()}
    hovers = {
        "number": CustomJSHover(code=_NUMBER),
        "word": CustomJSHover(
            args={"words": [words.get(code, "") for code in range(max([0, *words]) + 1)]},
            code="return words[value] ?? 'no flag'",
        ),
    }
    left = _map(maps, data, "left", images, points, hovers, shown=data.shown[0])
    right = _map(maps, data, "right", images, points, hovers, shown=data.shown[1])
    right.x_range, right.y_range = left.x_range, left.y_range
    return {"left": left, "right": right, "scatter": _scatter(maps, data, points, hovers)}


def _image_columns(data: PageData) -> dict[str, list[NDArray]]:
    columns = {}
    for place, name in enumerate(data.names):
        columns[f"v{place}"] = [data.planes[name]]
        if f"{name}_sigma" in data.planes:
            columns[f"s{place}"] = [data.planes[f"{name}_sigma"]]
    if data.flag is not None:
        columns["flag"] = [data.flag.astype(np.uint8)]
        columns["colours"] = [_flag_colours(data)]
    return columns


def _colour(word: str) -> str:
    return FLAG_COLOURS.get(word, _PLAIN) if word.endswith("candidate") else _PLAIN


def _flag_colours(data: PageData) -> NDArray[np.uint32]:
    """Candidates in their colours, everything else clear: the layer over a map."""
    assert data.flag is not None
    colours = np.zeros(data.flag.shape, dtype=np.uint32)
    for code, word in data.words.items():
        if word.endswith("candidate"):
            red, green, blue = (int(_colour(word)[i : i + 2], 16) for i in (1, 3, 5))
            colours[data.flag == code] = np.uint32(red | green << 8 | blue << 16 | 255 << 24)
    return _outlined(colours)


def _outlined(colours: NDArray[np.uint32]) -> NDArray[np.uint32]:
    """White and then black around what is coloured, so that it stands out from any colour scale."""
    from scipy.ndimage import binary_closing, binary_dilation, binary_fill_holes

    marked = colours != 0
    # gaps between neighbouring candidates stay clear: the outline goes round the whole group
    group = binary_fill_holes(binary_closing(marked, np.ones((3, 3)), iterations=2) | marked)
    inner = binary_dilation(group, np.ones((3, 3)))
    outer = binary_dilation(inner, np.ones((3, 3)))
    if (outer & ~group).mean() > _MOST_OUTLINE:
        return colours
    outlined = colours.copy()
    outlined[outer & ~inner] = 0xFF000000
    outlined[inner & ~group] = 0xFFFFFFFF
    return outlined


def _tooltips(
    data: PageData, hovers: dict[str, Any], place_of: tuple[str, str]
) -> tuple[str, dict[str, Any]]:
    """What pointing at a pixel shows, and how its numbers are written; `place_of` are the fields of x and y."""
    lines = [(axis, f"{field}{{0.00}}") for axis, field in zip(data.axes, place_of, strict=True)]
    formatters = {}
    for place, name in enumerate(data.names):
        text = f"@v{place}{{custom}}"
        formatters[f"@v{place}"] = hovers["number"]
        if f"{name}_sigma" in data.planes:
            text += f" ± @s{place}{{custom}}"
            formatters[f"@s{place}"] = hovers["number"]
        lines.append((name, text))
    if data.flag is not None:
        lines.append(("flag", "@flag{custom}"))
        formatters["@flag"] = hovers["word"]
    rows = "".join(f"<div><span>{_literal(label)}: </span><b>{text}</b></div>" for label, text in lines)
    return f'<div style="color: #1a1a1a; font-size: 13px">{rows}</div>', formatters


def _literal(name: str) -> str:
    """A name as the text of a tooltip: no tag in it, and no sign that asks for a value."""
    return escape(name).replace("@", "&#64;").replace("$", "&#36;")


def _figure(title: str, axes: tuple[str, str], width: int, height: int, **options: Any) -> Any:
    from bokeh.models import (
        BoxSelectTool,
        LassoSelectTool,
        PanTool,
        ResetTool,
        SaveTool,
        TapTool,
        WheelZoomTool,
    )
    from bokeh.models.text import PlainText
    from bokeh.plotting import figure

    plot = figure(
        width=width,
        height=height,
        tools=[],
        toolbar_location="above",
        toolbar_sticky=False,  # the toolbar has a line of its own, the title the whole width
        output_backend="canvas",
        **options,
    )
    wheel, box = WheelZoomTool(), BoxSelectTool()
    plot.add_tools(PanTool(), wheel, box, LassoSelectTool(), TapTool(), ResetTool(), SaveTool())
    plot.toolbar.logo = None
    plot.toolbar.active_scroll = wheel
    plot.toolbar.active_drag = box
    # PlainText: a name from a file with dollars in it is no formula
    plot.title.text = PlainText(title)
    plot.xaxis.axis_label, plot.yaxis.axis_label = PlainText(axes[0]), PlainText(axes[1])
    for axis in (plot.xaxis, plot.yaxis):
        axis.axis_label_text_font_style = "normal"
        axis.axis_label_text_color = axis.major_label_text_color = "#222222"
    plot.title.text_font_size = "13px"
    plot.grid.visible = False
    return plot


def _map(
    maps: xr.Dataset,
    data: PageData,
    side: str,
    images: Any,
    points: Any,
    hovers: dict[str, Any],
    *,
    shown: int,
) -> Any:
    from bokeh.models import ColorBar, HoverTool, LinearColorMapper, Range1d
    from matplotlib.colors import to_hex

    rows, columns = (abs(data.extent[3] - data.extent[2]), abs(data.extent[1] - data.extent[0]))
    height = int(np.clip((_MAP_WIDTH - _BESIDE) * rows / columns, 220, 620)) + _ABOVE
    plot = _figure(
        labels_of(maps, data.names)[shown],
        data.axes,
        _MAP_WIDTH,
        height,
        x_range=Range1d(*data.extent[:2]),
        y_range=Range1d(*data.extent[2:]),
        match_aspect=True,
    )
    plot.name = f"map-{side}"
    plot.background_fill_color = NO_DATA
    drawn = []
    for place, name in enumerate(data.names):
        scale, norm, _ = value_scale(data.planes[name].astype(float))
        palette = [to_hex(scale(i)) for i in range(256)]
        mapper = LinearColorMapper(palette=palette, low=norm.vmin, high=norm.vmax, nan_color=NO_DATA)
        image = plot.image(
            f"v{place}",
            x="x",
            y="y",
            dw="dw",
            dh="dh",
            source=images,
            color_mapper=mapper,
            name=f"image-{side}-{place}",
        )
        bar = ColorBar(color_mapper=mapper, width=12, name=f"bar-{side}-{place}")
        plot.add_layout(bar, "right")
        image.visible = bar.visible = place == shown
        drawn.append(image)
    if data.flag is not None:
        plot.image_rgba("colours", x="x", y="y", dw="dw", dh="dh", source=images, name=f"flags-{side}")
    chosen = plot.scatter(
        "x", "y", source=points, marker="square", size=5, fill_alpha=0, line_alpha=0, name=f"points-{side}",
        selection_fill_alpha=0.9, selection_fill_color=_SELECTED, selection_line_color=_SELECTED,
        selection_line_alpha=0.9, nonselection_fill_alpha=0, nonselection_line_alpha=0,
    )  # fmt: skip
    chosen.level = "overlay"
    tips, formatters = _tooltips(data, hovers, ("$x", "$y"))
    plot.add_tools(HoverTool(renderers=drawn, tooltips=tips, formatters=formatters))
    return plot


def _scatter(maps: xr.Dataset, data: PageData, points: Any, hovers: dict[str, Any]) -> Any:
    from bokeh.models import HoverTool

    first, second = data.shown
    labels = labels_of(maps, data.names)
    plot = _figure("", (labels[first], labels[second]), _MAP_WIDTH, 430)
    plot.name = "scatter"
    drawn = plot.scatter(
        f"v{first}", f"v{second}", source=points, size=4, fill_color="colour", line_color=None, fill_alpha=0.5,
        selection_fill_color=_SELECTED, selection_fill_alpha=1, selection_line_color=_SELECTED,
        nonselection_fill_alpha=0.15, name="points-scatter",
    )  # fmt: skip
    tips, formatters = _tooltips(data, hovers, ("@x", "@y"))
    plot.add_tools(HoverTool(renderers=[drawn], tooltips=tips, formatters=formatters))
    plot.grid.visible = True
    return plot
