"""Three parameters as one colour picture, with a key that says which colour means what."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from .frame import COLUMN_INCHES, PICTURE_PIXELS, Grid, finish_map, new_axes, require_plane, style
from .resampling import picture_of, picture_step

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["plot_composite"]


def plot_composite(
    maps: xr.Dataset,
    names: Sequence[str],
    *,
    limits: Sequence[tuple[float, float]] | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Colour composite: three parameters as the red, green and blue of one picture, with a key.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters``.
    names : three str
        The parameters for red, green and blue.
    limits : three pairs of float, optional
        Value that is dark and value that is bright, for each; the 2nd and the 98th percentile unless given. A pair
        that falls turns the scale round.
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    TypeError, ValueError
        If there are not three names, one is not in the maps, or the limits are not three pairs.

    Notes
    -----
    A colour composite cannot be read alike with every kind of colour vision, and hides sigma: use it to find your
    way, and :func:`plot_map` to show a result.
    """
    if isinstance(names, str) or len(names) != 3:
        raise ValueError(f"names must be three parameters, for red, green and blue, got {names!r}")
    planes = [require_plane(maps, name) for name in names]
    for plane in planes[1:]:
        if plane.shape != planes[0].shape:
            raise ValueError(
                f"{plane.name} has the shape {plane.shape} and {planes[0].name} {planes[0].shape}; a composite needs "
                "one grid"
            )
    if limits is not None:
        pairs = np.asarray(limits, dtype=float)
        if pairs.shape != (3, 2) or not np.isfinite(pairs).all() or (pairs[:, 0] == pairs[:, 1]).any():
            raise ValueError(f"limits must be three pairs of unlike finite numbers, got {limits!r}")
        limits = [(float(low), float(high)) for low, high in pairs]
    if ax is not None:
        _draw(ax, planes, limits)
        return ax
    with style():
        rows, columns = planes[0].shape
        height = float(np.clip(COLUMN_INCHES * rows / columns + 0.6, 1.8, 7))
        made: Axes = new_axes(height=height)
        _draw(made, planes, limits)
    return made


def _draw(ax: Axes, planes: list[xr.DataArray], limits: Sequence[tuple[float, float]] | None) -> None:
    step = picture_step(planes[0].shape, PICTURE_PIXELS)
    colour = np.ones((*picture_of(planes[0], step).shape, 3))
    missing = np.zeros(colour.shape[:2], dtype=bool)
    told = []
    for channel, plane in enumerate(planes):
        values = np.asarray(picture_of(plane, step).values, dtype=float)
        finite = values[np.isfinite(values)]
        if limits is not None:
            low, high = limits[channel]
        elif finite.size:
            low, high = (float(edge) for edge in np.percentile(finite, [2, 98]))
            high = high if high > low else low + 1
        else:
            low, high = 0.0, 1.0
        colour[..., channel] = np.clip((values - low) / (high - low), 0, 1)
        missing |= ~np.isfinite(values)
        unit = str(plane.attrs.get("units", ""))
        told.append((str(plane.name).replace("$", r"\$"), low, high, "" if unit == "1" else f" {unit}"))
    colour[missing] = 1.0
    grid = Grid.of(planes[0])
    ax.imshow(colour, extent=grid.covered(planes[0].shape, step), interpolation="nearest")
    finish_map(ax, planes[0], grid)
    _key(ax, told)


#: Size of the key's letters [pt], and the mean width of one of the default font as a share of it.
_LETTERS, _LETTER_WIDTH = 6.0, 0.56


def _key(ax: Axes, told: list[tuple[str, float, float, str]]) -> None:
    """Three bars above the picture, each from dark to its full colour, with name, range and unit.

    Lines of text take their place where the picture is too narrow for what stands on the bars.
    """
    colours = ("red", "green", "blue")
    fitting = _width_pt(ax) / (_LETTERS * _LETTER_WIDTH)
    longest = max(max(len(name), len(f"{low:.3g}  {high:.3g}{unit}")) for name, low, high, unit in told)
    if longest > 0.31 * fitting:
        lines = [
            line
            for colour, (name, low, high, unit) in zip(colours, told, strict=True)
            for line in textwrap.wrap(
                f"{colour}: {name} {low:.3g} to {high:.3g}{unit}",
                max(12, int(fitting)),
                subsequent_indent="  ",
            )
        ]
        ax.set_title("\n".join(lines), fontsize=_LETTERS, loc="left", pad=2)
        return
    one_line = max(len(colour) + len(name) + 2 for colour, (name, *_) in zip(colours, told, strict=True))
    between = " " if one_line <= 0.31 * fitting else "\n"
    for place, (name, low, high, unit) in enumerate(told):
        bar = ax.inset_axes((0.01 + 0.335 * place, 1.015, 0.31, 0.03))
        ramp = np.zeros((1, 64, 3))
        ramp[..., place] = np.linspace(0, 1, 64)
        bar.imshow(ramp, aspect="auto", extent=(0, 1, 0, 1))
        bar.set_yticks([])
        bar.set_xticks([0, 1], [f"{low:.3g}", f"{high:.3g}{unit}"], fontsize=_LETTERS)
        bar.xaxis.tick_top()
        bar.tick_params(length=0, pad=1)
        low_label, high_label = bar.get_xticklabels()
        low_label.set_horizontalalignment("left")
        high_label.set_horizontalalignment("right")
        bar.set_title(f"{colours[place]}:{between}{name}", fontsize=_LETTERS, pad=2)


def _width_pt(ax: Axes) -> float:
    """Width of the axes [pt]; where a layout has still to be made, their share of the figure."""
    figure = ax.get_figure(root=True)
    assert figure is not None
    place = ax.get_subplotspec()
    width = ax.get_window_extent().width
    if figure.get_layout_engine() is not None and place is not None:
        width = max(width, figure.bbox.width / place.get_gridspec().ncols)
    return float(72 * width / figure.dpi)
