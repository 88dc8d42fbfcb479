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
    Squares: pure ices; a shot with some ice lies between ground and ice. A flag is an indicator, never proof of ice.
    """
    if not isinstance(flags, xr.Dataset) or "flag" not in flags:
        raise ValueError("flags must be the Dataset that ice_flags gives, with its variable flag")
    across, up = (_albedo(name, values, flags) for name, values in (("red", red), ("infrared", infrared)))
    if ax is not None:
        _draw(ax, flags, across, up, labels)
        return ax
    with style():
        made = new_axes(width=6.2, height=3.8)
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
    ices = _ices(ax, flags, labels)
    extent = _extent(red[known], infrared[known], right, ices)
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


def _ices(ax: Any, flags: xr.Dataset, labels: int) -> NDArray[np.float64]:
    """Draw the pure ices and name some of them."""
    if "ice_red" not in flags.attrs:
        return np.empty((0, 2))
    ices = np.column_stack([flags.attrs["ice_red"], flags.attrs["ice_infrared"]])
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
    for index in named:
        low = ices[index, 1] < 0.1 * ices[:, 1].max()
        ax.annotate(
            names[index], ices[index], xytext=(0, 5) if low else (-5, 0), textcoords="offset points", fontsize=6,
            ha="center" if low else "right", va="bottom" if low else "center", zorder=7,
        )  # fmt: skip
    return ices


def _extent(
    red: NDArray, infrared: NDArray, right: float, ices: NDArray
) -> tuple[float, float, float, float]:
    """Limits of the picture: all that was flagged, and the ices."""
    far = np.percentile(red, 99.99) if red.size else right
    high = np.percentile(infrared, 99.99) if infrared.size else 0.3
    widest = max(far, min(right, 1.5 * far), ices[:, 0].max(initial=0.0)) * 1.06
    tallest = max(high, ices[:, 1].max(initial=0.0)) * 1.1
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
    """Draw the typical one-sigma error of a shot on typical ground."""
    told = [
        [float(flags.attrs.get(f"typical_{kind}_{name}", np.nan)) for name in ("red", "infrared")]
        for kind in ("sigma", "relative")
    ]
    sigmas = np.hypot(told[0], np.array(told[1]) * typical)
    if not np.isfinite(sigmas).all():
        return
    place = extent[0] + 0.08 * (extent[1] - extent[0]), extent[2] + 0.93 * (extent[3] - extent[2])
    ax.errorbar(*place, xerr=sigmas[0], yerr=sigmas[1], color="black", linewidth=0.8, capsize=1.5, zorder=7)
    ax.annotate(
        "1 σ of a typical shot", place, xytext=(9, 0), textcoords="offset points", va="center", fontsize=6
    )


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
        loc="center left",
        bbox_to_anchor=(1.01, 0.5),
        title="A flag is an indicator,\nnever proof of ice.",
        alignment="left",
        fontsize=6.5,
        title_fontsize=6.5,
    )
