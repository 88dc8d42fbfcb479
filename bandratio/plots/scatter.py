"""Scatter of two parameters, with candidates and laboratory materials on it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .frame import COLUMN_INCHES, PALETTE, labelled, new_axes, style
from .maps import FLAG_COLOURS, flag_meanings

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["plot_scatter"]

#: More points than this are drawn as a density: single ones would cover each other.
_POINTS = 3000
#: Pixels that are looked at of a larger map, evenly spread over it.
_SAMPLE = 1_000_000
_MARKERS = "os^Dv<>PXhp*"


def plot_scatter(
    maps: xr.Dataset,
    x: str,
    y: str,
    *,
    laboratory: xr.Dataset | None = None,
    flags: xr.Dataset | xr.DataArray | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Scatter of one parameter against another.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters``, of any shape.
    x, y : str
        The two parameters.
    laboratory : Dataset, optional
        The same parameters of laboratory spectra, over ``sample``: ``parameters(spectra)``. One marker a group.
    flags : Dataset or DataArray, optional
        Result of a flagging function on the same grid: its candidates are drawn on top, in their colours.
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    TypeError, ValueError
        If a parameter is missing, or `flags` or `laboratory` does not fit the maps.

    Notes
    -----
    Beyond 3,000 pixels the scene is drawn as a density on a logarithmic scale, from at most a million pixels spread
    evenly over it. The cross is the median standard uncertainty of a pixel, where the maps have it.
    """
    across, up = (_flat(maps, name) for name in (x, y))
    if maps[x].shape != maps[y].shape:
        raise ValueError(
            f"{x} and {y} are on different grids: {dict(maps[x].sizes)} and {dict(maps[y].sizes)}"
        )
    words = None if flags is None else _candidates(flags, maps[x])
    named = None if laboratory is None else _materials(laboratory, x, y)
    if ax is not None:
        _draw(ax, maps, (x, y), (across, up), words, named)
        return ax
    with style():
        made: Axes = new_axes(width=COLUMN_INCHES if words is None and named is None else 4.8, height=3.2)
        _draw(made, maps, (x, y), (across, up), words, named)
    return made


def _flat(maps: xr.Dataset, name: str) -> NDArray[np.float64]:
    from .._checks import suggestion

    if not isinstance(maps, xr.Dataset):
        raise TypeError(f"maps must be a Dataset, as br.parameters makes one, got {type(maps).__name__}")
    if name not in maps.data_vars:
        raise ValueError(
            f"the maps hold no {name!r}{suggestion(str(name), [str(key) for key in maps.data_vars])}"
        )
    return np.asarray(_thinned(maps[name]).values, dtype=float).ravel()


def _thinned(values: xr.DataArray) -> xr.DataArray:
    step = int(np.ceil(max(1.0, values.size / _SAMPLE) ** (1 / max(values.ndim, 1))))
    return values[(slice(None, None, step),) * values.ndim]


def _candidates(
    flags: xr.Dataset | xr.DataArray, like: xr.DataArray
) -> tuple[NDArray[np.integer], dict[int, str]]:
    flag = flags["flag"] if isinstance(flags, xr.Dataset) and "flag" in flags else flags
    if not isinstance(flag, xr.DataArray) or "flag_values" not in flag.attrs:
        raise TypeError(
            f"flags must be the result of a flagging function with CF flag_values, got {type(flags).__name__}"
        )
    if flag.shape != like.shape:
        raise ValueError(
            f"the flags have the shape {flag.shape} and the maps {like.shape}; flag these same maps"
        )
    wanted = {code: word for code, word in flag_meanings(flag).items() if word.endswith("candidate")}
    return np.asarray(_thinned(flag).values).ravel(), wanted


def _materials(laboratory: xr.Dataset, x: str, y: str) -> dict[str, tuple[NDArray, NDArray]]:
    if (
        not isinstance(laboratory, xr.Dataset)
        or x not in laboratory
        or y not in laboratory
        or laboratory[x].ndim != 1
    ):
        raise TypeError(
            f"laboratory must be a Dataset of {x} and {y} over sample, as br.parameters(spectra) makes one; got "
            f"{laboratory if isinstance(laboratory, str) else type(laboratory).__name__}"
        )
    across, up = (np.asarray(laboratory[name].values, dtype=float) for name in (x, y))
    groups = (
        laboratory["group"].values if "group" in laboratory.coords else np.array(["laboratory"] * across.size)
    )
    return {
        str(group): (across[groups == group], up[groups == group]) for group in dict.fromkeys(groups.tolist())
    }


def _draw(
    ax: Axes,
    maps: xr.Dataset,
    names: tuple[str, str],
    points: tuple[NDArray, NDArray],
    words: tuple[NDArray, dict[int, str]] | None,
    named: dict[str, tuple[NDArray, NDArray]] | None,
) -> None:
    across, up = points
    whole = np.isfinite(across) & np.isfinite(up)
    span = [_span(values[whole]) for values in points]
    if whole.sum() > _POINTS:
        ax.hexbin(
            across[whole], up[whole], gridsize=70, bins="log", cmap="Greys", mincnt=1, linewidths=0,
            extent=(*span[0], *span[1]),
        )  # fmt: skip
    else:
        ax.plot(across[whole], up[whole], ".", color="#666666", markersize=2, label="_scene", zorder=1)
    drawn = False
    if words is not None:
        codes, meanings = words
        for code, word in meanings.items():
            chosen = whole & (codes == code)
            if chosen.any():
                colour = FLAG_COLOURS.get(word, PALETTE["vermilion"])
                label = f"{word.replace('_', ' ')} ({int(chosen.sum()):,})"
                ax.plot(
                    across[chosen], up[chosen], "o", color=colour, markersize=2.5, alpha=0.8, markeredgewidth=0,
                    label=label, zorder=3, rasterized=True,
                )  # fmt: skip
                drawn = True
    if named is not None:
        colours = [
            PALETTE[key] for key in ("vermilion", "green", "purple", "sky", "yellow", "orange", "blue")
        ]
        for place, (group, (gx, gy)) in enumerate(named.items()):
            ax.plot(
                gx, gy, _MARKERS[place % len(_MARKERS)], color=colours[place % len(colours)], markersize=4,
                markeredgecolor="black", markeredgewidth=0.4, label=group.replace("$", r"\$"), zorder=4,
            )  # fmt: skip
            drawn = True
    _sigma_cross(ax, maps, names)
    ax.set_xlabel(labelled(maps[names[0]]))
    ax.set_ylabel(labelled(maps[names[1]]))
    if drawn:
        ax.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), handletextpad=0.3, borderaxespad=0.2)


def _span(values: NDArray) -> tuple[float, float]:
    if values.size == 0:
        return 0.0, 1.0
    low, high = (float(edge) for edge in np.percentile(values, [0.05, 99.95]))
    margin = 0.15 * (high - low) or 0.5
    return low - margin, high + margin


def _sigma_cross(ax: Axes, maps: xr.Dataset, names: tuple[str, str]) -> None:
    """Median sigma of a pixel as a cross in the lower left corner."""
    if any(f"{name}_sigma" not in maps for name in names):
        return
    sigmas = []
    for name in names:
        each = np.asarray(_thinned(maps[f"{name}_sigma"]).values, dtype=float)
        if not np.isfinite(each).any():
            return
        sigmas.append(float(np.nanmedian(each)))
    (left, right), (bottom, top) = ax.get_xlim(), ax.get_ylim()
    at = left + 0.06 * (right - left) + sigmas[0], bottom + 0.06 * (top - bottom) + sigmas[1]
    ax.errorbar(
        *at,
        xerr=sigmas[0],
        yerr=sigmas[1],
        color="black",
        linewidth=0.9,
        capsize=1.5,
        label="median ± σ of a pixel",
    )
