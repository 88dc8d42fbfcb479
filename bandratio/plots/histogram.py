"""Histogram of a parameter, with thresholds and their uncertainty on it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from ..detection import Threshold, as_threshold
from .frame import PALETTE, labelled, new_axes, style
from .scatter import _flat

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["plot_histogram"]


def plot_histogram(
    maps: xr.Dataset,
    name: str,
    *,
    thresholds: Threshold | float | Sequence[Threshold | float] | Mapping[str, Threshold | float] = (),
    ax: Axes | None = None,
) -> Axes:
    """Histogram of one parameter, with thresholds.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters``, of any shape.
    name : str
        The parameter.
    thresholds : Threshold, number, several of them, or mapping of str to them
        Drawn as lines, with a band of ± its sigma; a mapping's keys name them.
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    TypeError, ValueError
        If there is no such parameter, it has no value, or a threshold is not one or belongs to another parameter.

    Notes
    -----
    Counts are on a logarithmic scale, since candidates are rare. The bar is the median standard uncertainty of a
    pixel, where the maps have it: a shape narrower than it is noise.
    """
    values = _flat(maps, name)
    values = values[np.isfinite(values)]
    if values.size == 0:
        raise ValueError(f"{name} has no finite value in these maps; check the cube with check_cube")
    named: Mapping[str, Any]
    if isinstance(thresholds, Mapping):
        named = thresholds
    else:
        alone = isinstance(thresholds, Threshold) or np.ndim(thresholds) == 0  # type: ignore[arg-type]
        several: Any = [thresholds] if alone else thresholds
        named = {
            f"threshold {number}" if number else "threshold": each for number, each in enumerate(several)
        }
    limits = {str(key): as_threshold(each, name) for key, each in named.items()}
    for limit in limits.values():
        limit.check_alike(name, quantity=limit.quantity, shoulder=limit.shoulder)
    sigma = None
    if f"{name}_sigma" in maps:
        sigmas = _flat(maps, f"{name}_sigma")
        sigma = float(np.nanmedian(sigmas)) if np.isfinite(sigmas).any() else None
    if ax is not None:
        _draw(ax, maps[name], values, limits, sigma)
        return ax
    with style():
        made: Axes = new_axes(height=2.7)
        _draw(made, maps[name], values, limits, sigma)
    return made


def _draw(
    ax: Axes, of: xr.DataArray, values: np.ndarray, limits: dict[str, Threshold], sigma: float | None
) -> None:
    low, high = (float(edge) for edge in np.percentile(values, [0.01, 99.99]))
    margin = 0.05 * (high - low) or abs(low) * 0.05 or 0.5
    at = [limit.value for limit in limits.values()]
    low, high = min([low, *at]) - margin, max([high, *at]) + margin
    ax.hist(
        values,
        bins=min(200, max(20, int(values.size**0.5))),
        range=(low, high),
        color="#777777",
        histtype="stepfilled",
    )
    ax.set_yscale("log")
    colours = [PALETTE[key] for key in ("vermilion", "blue", "green", "purple", "orange")]
    for place, (key, limit) in enumerate(limits.items()):
        colour = colours[place % len(colours)]
        text = f"{key}: {limit.value:.4g}" + (f" ± {limit.sigma:.2g}" if limit.sigma else "")
        ax.axvline(limit.value, color=colour, linewidth=1.2, label=text.replace("$", r"\$"))
        if limit.sigma:
            ax.axvspan(
                limit.value - limit.sigma, limit.value + limit.sigma, color=colour, alpha=0.25, linewidth=0
            )
    if sigma:
        ax.errorbar(
            low + 0.06 * (high - low) + sigma,
            0.9,
            xerr=sigma,
            color="black",
            capsize=2,
            linewidth=1,
            transform=ax.get_xaxis_transform(),
            label="median ± σ of a pixel",
        )
    ax.set_xlim(low, high)
    ax.set_xlabel(labelled(of))
    ax.set_ylabel("pixels")
    if limits or sigma:
        ax.legend(loc="lower left", bbox_to_anchor=(0, 1), borderaxespad=0.2)
