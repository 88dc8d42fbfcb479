"""The plane of red and infrared albedo: ice-free hull, ices, and the shots with their flags."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..detection.hull import convex_hull
from .frame import PALETTE, new_axes, style
from .maps import FLAG_COLOURS, flag_meanings

__all__ = ["plot_ice_plane"]

#: Flags drawn as single points, up to so many; the others are drawn as a density.
_SINGLE = ("unexplained", "opaque_like", "ice_candidate")
_POINTS = 20_000
_SAMPLE = 1_000_000
#: Axes of this height have room for a small picture of the whole plane under the key.
_ROOMY_INCHES = 2.8


def plot_ice_plane(
    flags: xr.Dataset,
    red: Any,
    infrared: Any,
    *,
    labels: int = 6,
    ax: Any = None,
) -> Any:
    """Picture of the plane in which ice is told from ground.

    Parameters
    ----------
    flags : Dataset
        Result of `ice_flags`.
    red, infrared : array_like or DataArray, shape of the flags
        The albedos that were flagged.
    labels : int
        How many ices to name, the finest to the coarsest.
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        If the flags are none, or the albedos are not of their shape.

    Notes
    -----
    Filled: what ice-free ground can be. Heavy line: its edges that face ice, beyond which a shot is a candidate.
    Squares: pure ices; a shot with some ice lies between ground and ice. The view is that of the data; where ices
    lie outside, a small picture beside it shows the whole plane (one view shows all on axes lower than 2.8 inches). A flag is an indicator, never proof of ice.
    """
    if not isinstance(flags, xr.Dataset) or "flag" not in flags:
        raise ValueError("flags must be the Dataset that ice_flags gives, with its variable flag")
    across, up = (_albedo(name, values, flags) for name, values in (("red", red), ("infrared", infrared)))
    if ax is not None:
        _draw(ax, flags, across, up, labels)
        return ax
    with style():
        made = new_axes(width=7.0, height=3.8)
        _draw(made, flags, across, up, labels)
    return made


def _albedo(name: str, values: Any, flags: xr.Dataset) -> NDArray[np.float64]:
    array = np.asarray(values, dtype=float)
    if array.shape != flags["flag"].shape:
        raise ValueError(f"{name} must have the shape of the flags, {flags['flag'].shape}, got {array.shape}")
    return array.ravel()


def _draw(ax: Any, flags: xr.Dataset, red: NDArray, infrared: NDArray, labels: int) -> None:
    codes = np.asarray(flags["flag"].values).ravel()
    words = flag_meanings(flags["flag"])
    dropout = np.isnan(infrared) & ~np.isnan(red)
    infrared = np.where(dropout, 0.0, infrared)
    known = np.isfinite(red) & np.isfinite(infrared)
    rng = np.random.default_rng(0)
    rest = known & ~np.isin(codes, [code for code, word in words.items() if word in (*_SINGLE, "no_data")])
    right = _ground(ax, flags)
    extent = _extent(red[known], infrared[known], right)
    if _height_inches(ax) < _ROOMY_INCHES and "ice_red" in flags.attrs:
        # no room for a second picture under the key: one view of all
        most = [1.1 * float(np.max(flags.attrs[f"ice_{name}"])) for name in ("red", "infrared")]
        extent = extent[0], max(extent[1], most[0]), extent[2], max(extent[3], most[1])
    _ices(ax, flags, labels, extent)
    chosen = _thinned(np.flatnonzero(rest), _SAMPLE, rng)
    if chosen.size > 3000:
        ax.hexbin(
            red[chosen], infrared[chosen], gridsize=110, bins="log", cmap="Greys", mincnt=1, linewidths=0.1,
            extent=extent, zorder=2, vmin=0.3,
        )  # fmt: skip
    elif chosen.size:
        ax.plot(red[chosen], infrared[chosen], ".", markersize=2, color="#555555", zorder=2)
    handles = _singles(ax, words, codes, red, infrared, known, dropout, rng)
    typical = np.array([np.median(red[known]), np.median(infrared[known])]) if known.any() else np.zeros(2)
    _error_cross(ax, flags, typical, extent)
    ax.set_xlim(extent[:2])
    ax.set_ylim(extent[2:])
    ax.set_xlabel(f"albedo at {flags.attrs.get('red_nm', 640):g} nm")
    ax.set_ylabel(f"albedo at {flags.attrs.get('infrared_nm', 1535):g} nm")
    _legend(ax, handles, int(rest.sum()), hull="ice_free_hull_red" in flags.attrs)


def _ground(ax: Any, flags: xr.Dataset) -> float:
    """Draw the hull and its facing edges; return how far right it reaches."""
    if "ice_free_hull_red" not in flags.attrs:
        ratio = float(flags.attrs.get("ice_free_ratio", np.nan))
        if np.isfinite(ratio):
            ax.axline((0, 0), slope=1 / ratio, color=PALETTE["vermilion"], linewidth=1.4, zorder=4)
        return 0.0
    corners = np.column_stack([flags.attrs["ice_free_hull_red"], flags.attrs["ice_free_hull_infrared"]])
    ax.fill(*corners.T, facecolor="#F3E9D2", edgecolor="#B39B6B", linewidth=0.6, zorder=1)
    hull = convex_hull(corners)
    facing = np.flatnonzero((hull.normals[:, 0] > 0) & (hull.normals[:, 1] < 0))
    ends = np.roll(hull.vertices, -1, axis=0)
    for edge in facing:
        ax.plot(
            *np.column_stack([hull.vertices[edge], ends[edge]]), color=PALETTE["vermilion"], linewidth=1.6, zorder=4,
            solid_capstyle="round",
        )  # fmt: skip
    return float(corners[:, 0].max())


def _height_inches(ax: Any) -> float:
    return float(ax.get_window_extent().height / ax.get_figure(root=True).dpi)


def _ices(ax: Any, flags: xr.Dataset, labels: int, extent: tuple[float, float, float, float]) -> None:
    """Draw the pure ices and name some of them, in a small picture of the whole plane where they lie outside."""
    if "ice_red" not in flags.attrs:
        return
    from mpl_toolkits.axes_grid1.inset_locator import inset_axes

    ices = np.column_stack([flags.attrs["ice_red"], flags.attrs["ice_infrared"]])
    left, right, bottom, top = extent
    inside = (ices[:, 0] < right) & (ices[:, 1] < top)
    if inside.all():
        _name_ices(ax, flags, ices, labels)
        return
    _name_ices(ax, flags, ices, 0)
    whole = inset_axes(
        ax, 1.65, 1.7, loc="lower left", bbox_to_anchor=(1, 0), bbox_transform=ax.transAxes, borderpad=3.6
    )
    _ground(whole, flags)
    _name_ices(whole, flags, ices, labels)
    whole.plot(
        [left, right, right, left, left], [bottom, bottom, top, top, bottom], color="#555555", linewidth=0.7
    )
    whole.annotate(
        "view at left", (left, top), xytext=(1, 2), textcoords="offset points", fontsize=6, color="#555555"
    )
    widest, tallest = max(right, ices[:, 0].max()), max(top, ices[:, 1].max())
    whole.set_xlim(-0.05 * widest, 1.08 * widest)
    whole.set_ylim(-0.08 * tallest, 1.1 * tallest)
    whole.tick_params(labelsize=6, length=2)
    # a layout leaves room for texts, not for small pictures
    ax.annotate(
        "\u2009", (1, 0), xycoords="axes fraction", xytext=(150, 0), textcoords="offset points", fontsize=1
    )


def _name_ices(ax: Any, flags: xr.Dataset, ices: NDArray, labels: int) -> None:
    ax.plot(
        *ices.T,
        "s",
        color=PALETTE["sky"],
        markeredgecolor="black",
        markeredgewidth=0.5,
        markersize=4.5,
        zorder=6,
    )
    names = str(flags.attrs.get("ice_names", "")).split(", ")
    order = np.argsort(ices[:, 1])
    named = order[np.unique(np.linspace(0, len(order) - 1, min(labels, len(order))).astype(int))]
    for place, index in enumerate(named):
        low = ices[index, 1] < 0.1 * ices[:, 1].max()
        far = ices[index, 0] > 0.8 * ices[:, 0].max()
        # in the lowest row every other name stands higher, and none runs out of the picture
        offset = (6 * far, 11 - 7 * (place % 2)) if low else (-4, 0)
        ax.annotate(
            names[index], ices[index], xytext=offset, textcoords="offset points", fontsize=6,
            ha="center" if low and not far else "right", va="bottom" if low else "center", zorder=7,
        )  # fmt: skip


def _extent(red: NDArray, infrared: NDArray, right: float) -> tuple[float, float, float, float]:
    """Limits of the picture: all that was flagged, and the ground next to it."""
    far = np.percentile(red, 99.99) if red.size else right
    high = np.percentile(infrared, 99.99) if infrared.size else 0.3
    widest = max(far, min(right, 1.5 * far)) * 1.06
    tallest = high * 1.25
    return -0.02 * widest, float(widest), -0.03 * tallest, float(tallest)


def _thinned(index: NDArray, most: int, rng: np.random.Generator) -> NDArray:
    return index if index.size <= most else np.sort(rng.choice(index, most, replace=False))


def _singles(
    ax: Any,
    words: dict[int, str],
    codes: NDArray,
    red: NDArray,
    infrared: NDArray,
    known: NDArray,
    dropout: NDArray,
    rng: np.random.Generator,
) -> list[Any]:
    """Draw the flags that are to be looked at, one point each; a dropout is a triangle at the bottom."""
    handles = []
    for code, word in words.items():
        here = known & (codes == code)
        if word not in _SINGLE or not here.any():
            continue
        for marker, which in (("o", here & ~dropout), ("v", here & dropout)):
            chosen = _thinned(np.flatnonzero(which), _POINTS, rng)
            if not chosen.size:
                continue
            (points,) = ax.plot(
                red[chosen], infrared[chosen], marker, color=FLAG_COLOURS[word], markeredgecolor="#333333",
                markeredgewidth=0.2, markersize=3 if chosen.size < 2000 else 2, zorder=5, linestyle="none",
                clip_on=marker == "o",
            )  # fmt: skip
            told = f"{word.replace('_', ' ')}{', infrared dropout' if marker == 'v' else ''}"
            handles.append((points, f"{told} ({int(which.sum()):,})"))
    return handles


def _error_cross(
    ax: Any, flags: xr.Dataset, typical: NDArray, extent: tuple[float, float, float, float]
) -> None:
    """Draw the typical error of a shot on typical ground: five sigma, or one where five would fill the picture."""
    told = [
        [float(flags.attrs.get(f"typical_{kind}_{name}", np.nan)) for name in ("red", "infrared")]
        for kind in ("sigma", "relative")
    ]
    sigmas = np.hypot(told[0], np.array(told[1]) * typical)
    if not np.isfinite(sigmas).all():
        return
    size = np.array([extent[1] - extent[0], extent[3] - extent[2]])
    times = 5 if (5 * sigmas < 0.12 * size).all() else 1
    drawn = times * sigmas
    place = extent[0] + 0.03 * size[0] + drawn[0], extent[3] - 0.04 * size[1] - drawn[1]
    ax.errorbar(*place, xerr=drawn[0], yerr=drawn[1], color="black", linewidth=0.8, capsize=1.5, zorder=7)
    ax.annotate(
        f"± {times} σ of a typical shot", (place[0] + drawn[0], place[1]), xytext=(4, 0), textcoords="offset points",
        va="center", fontsize=6,
    )  # fmt: skip


def _legend(ax: Any, handles: list[Any], rest: int, *, hull: bool) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    edge = Line2D([], [], color=PALETTE["vermilion"], linewidth=1.6)
    square = Line2D(
        [], [], marker="s", color=PALETTE["sky"], markeredgecolor="black", linestyle="none", markersize=4.5
    )
    whole = [
        (Patch(facecolor="#F3E9D2", edgecolor="#B39B6B"), "what ice-free ground can be"),
        (edge, "its edges that face ice"),
        (square, "pure ices"),
    ]
    shown = [
        *(whole if hull else [(edge, "highest ice-free ratio")]),
        (
            Line2D([], [], marker="h", color="#777777", linestyle="none", markersize=5),
            f"other shots ({rest:,})",
        ),
        *handles,
    ]
    ax.legend(
        [handle for handle, _ in shown],
        [text for _, text in shown],
        loc="upper left",
        bbox_to_anchor=(1.01, 1.0),
        title="A flag is an indicator,\nnever proof of ice.",
        alignment="left",
        fontsize=6.5,
        title_fontsize=6.5,
    )
