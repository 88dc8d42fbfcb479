"""A map of one parameter or of flags, with colour bar, unit, scale bar or grid."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .frame import (
    COLUMN_INCHES,
    PALETTE,
    PICTURE_PIXELS,
    Grid,
    finish_map,
    labelled,
    new_axes,
    require_plane,
    style,
)  # fmt: skip
from .resampling import picture_of, picture_step

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.colors import Colormap, Normalize

__all__ = ["FLAG_COLOURS", "flag_meanings", "plot_map", "value_scale"]

#: Colour of each flag word: what is to be followed up stands out, what is not is pale.
FLAG_COLOURS = {
    "no_data": "#FFFFFF",
    "background": "#D9D9D9",
    "ice_free": "#D9D9D9",
    "undecided": "#A6A6A6",
    "opaque_like": PALETTE["purple"],
    "unexplained": PALETTE["yellow"],
    "bright_candidate": PALETTE["orange"],
    "dark_candidate": PALETTE["blue"],
    "ice_candidate": PALETTE["blue"],
}


def plot_map(maps: xr.Dataset, name: str, *, sigma: bool = False, ax: Any = None) -> Any:
    """Picture of one parameter, or of flags.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters`` or of a flagging function; lazy maps are averaged down while they are read.
    name : str
        The map to draw: a parameter, one of its sigmas, or ``flag``.
    sigma : bool
        Draw its standard uncertainty beside it.
    ax : Axes, or two of them with `sigma`, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes, or ndarray of two Axes with `sigma`

    Raises
    ------
    TypeError, ValueError
        If there is no such map, it is not two-dimensional, it has no sigma, or `ax` does not fit.

    Notes
    -----
    Colours reach from the 1st to the 99th percentile; arrows on the colour bar say where values lie beyond. The scale
    is viridis, where values of both signs matter purple to orange through white at zero, for sigmas cividis: all are
    read alike with every common kind of colour vision. Where a map was averaged for the picture, its title says so.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube(np.full((2, 4, 5), 0.2) + np.arange(5) / 100, [600, 700])
    >>> ax = br.plot_map(br.parameters(cube, br.Noise(random=0.001)), "reflectance_700")
    >>> ax.get_title()
    ''
    """
    values = require_plane(maps, name)
    names = [name]
    if sigma:
        if f"{name}_sigma" not in maps:
            raise ValueError(
                f"the maps hold no {name}_sigma; map with noise=… for one, or draw with sigma=False"
            )
        names.append(f"{name}_sigma")
    if ax is not None:
        axes = np.ravel(np.array(ax, dtype=object))
        if axes.size != len(names) or not all(hasattr(each, "imshow") for each in axes):
            raise TypeError(
                f"ax must be {'two axes, for the value and its sigma' if sigma else 'one matplotlib axes'}, got {ax!r}"
            )
        for each, one in zip(axes, names, strict=True):
            _draw(each, require_plane(maps, one))
        return axes if sigma else axes[0]
    with style():
        rows, columns = values.shape
        height = float(np.clip((COLUMN_INCHES - 0.8) * rows / columns + 0.4, 1.6, 7))
        made = new_axes(len(names), height=height)
        for each, one in zip(np.ravel(np.array(made, dtype=object)), names, strict=True):
            _draw(each, require_plane(maps, one))
    return made


def _draw(ax: Axes, values: xr.DataArray) -> None:
    step = picture_step(values.shape, PICTURE_PIXELS)
    grid = Grid.of(values)
    picture = picture_of(values, step)
    if "flag_values" in values.attrs:
        _draw_flags(ax, picture, grid.covered(values.shape, step))
    else:
        _draw_values(ax, picture, grid.covered(values.shape, step))
    finish_map(ax, values, grid)
    if step > 1:
        ax.set_title(f"averaged over {step} × {step} pixels", fontsize="x-small")


def _draw_values(ax: Axes, picture: xr.DataArray, extent: tuple[float, float, float, float]) -> None:
    numbers = np.asarray(picture.values, dtype=float)
    colours, norm, extend = value_scale(numbers, is_sigma="_sigma" in str(picture.name))
    image = ax.imshow(
        np.ma.masked_invalid(numbers), cmap=colours, norm=norm, extent=extent, interpolation="nearest"
    )
    bar = ax.figure.colorbar(image, ax=ax, extend=extend, fraction=0.05, pad=0.02)
    bar.set_label(_wrapped(labelled(picture)))
    bar.outline.set_linewidth(0.6)


def _wrapped(text: str, width: int = 34) -> str:
    """Lines short enough for a colour bar; a unit in brackets stays whole."""
    import textwrap

    name, bracket, unit = text.partition(" [")
    lines = textwrap.wrap(name, width)
    if not bracket:
        return "\n".join(lines)
    if lines and len(lines[-1]) + len(unit) + 2 <= width:
        lines[-1] += f" [{unit}"
    else:
        lines.append(f"[{unit}")
    return "\n".join(lines)


def value_scale(numbers: NDArray, *, is_sigma: bool = False) -> tuple[Colormap, Normalize, str]:
    """Colour map, range and which ends of the colour bar have arrows, for the values of one map."""
    import matplotlib as mpl
    from matplotlib.colors import Normalize

    finite = numbers[np.isfinite(numbers)]
    if finite.size == 0:
        low, high = 0.0, 1.0
    else:
        low, high = (float(edge) for edge in np.percentile(finite, [1, 99]))
    if low == high:
        margin = abs(low) * 0.05 or 0.5
        low, high = low - margin, high + margin
    name = "cividis" if is_sigma else "viridis"
    if low < 0 < high and min(-low, high) > 0.2 * max(-low, high):
        high = max(-low, high)
        low, name = -high, "PuOr_r"
    below, above = bool((finite < low).any()), bool((finite > high).any())
    extend = {(True, True): "both", (True, False): "min", (False, True): "max"}.get((below, above), "neither")
    return mpl.colormaps[name].with_extremes(bad="#BFBFBF"), Normalize(low, high), extend


def flag_meanings(flags: xr.DataArray) -> dict[int, str]:
    """Word of each flag value, from the CF attributes."""
    codes = np.ravel(flags.attrs["flag_values"]).tolist()
    words = str(flags.attrs.get("flag_meanings", "")).split()
    if len(codes) != len(words):
        raise ValueError(
            f"{flags.name} has {len(codes)} flag_values and {len(words)} flag_meanings; there must be a word for each"
        )
    return dict(zip(codes, words, strict=True))


def _draw_flags(ax: Axes, picture: xr.DataArray, extent: tuple[float, float, float, float]) -> None:
    from matplotlib.colors import ListedColormap
    from matplotlib.patches import Patch

    meanings = flag_meanings(picture)
    spare = iter([PALETTE["green"], PALETTE["sky"], PALETTE["vermilion"], PALETTE["black"]] * len(meanings))
    colours = {code: FLAG_COLOURS.get(word) or next(spare) for code, word in meanings.items()}
    index = np.full(picture.shape, np.nan)
    for place, code in enumerate(meanings):
        index[picture.values == code] = place
    ax.imshow(
        np.ma.masked_invalid(index),
        cmap=ListedColormap(list(colours.values())),
        vmin=-0.5,
        vmax=len(colours) - 0.5,
        extent=extent,
        interpolation="nearest",
    )
    patches = []
    for code, word in meanings.items():
        count = int((picture.values == code).sum())
        label = f"{word.replace('_', ' ')} ({count:,})"
        patches.append(Patch(facecolor=colours[code], edgecolor="#666666", linewidth=0.4, label=label))
    ax.legend(
        handles=patches, loc="center left", bbox_to_anchor=(1.02, 0.5), title="pixels", alignment="left"
    )
