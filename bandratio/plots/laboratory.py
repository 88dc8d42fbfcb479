"""Pictures of the laboratory: what the parameters say about materials, spectra under bands, and a threshold's basis."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from .._checks import suggestion
from .frame import PALETTE, labelled, new_axes, parameter_names, style

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes

    from ..detection import Threshold

__all__ = ["group_colours", "plot_materials", "plot_separation", "plot_spectra"]

#: Okabe & Ito's colours without the yellow, which lines on white do not show, and olive and wine of Paul Tol's "muted".
_COLOURS = (
    *(PALETTE[name] for name in ("vermilion", "green", "purple", "sky")),
    "#999933",
    *(PALETTE[name] for name in ("orange", "blue", "grey", "black")),
    "#882255",
)
#: Once the colours are used up they come again with the next of these.
_LINES = ("-", "--", ":", "-.")
_ROW_INCHES = 0.155


def group_colours(spectra: xr.DataArray | xr.Dataset) -> dict[str, str]:
    """A colour for each group of samples, in the order in which the groups appear."""
    groups = (
        [str(group) for group in spectra["group"].values] if "group" in spectra.coords else ["laboratory"]
    )
    return {group: _COLOURS[i % len(_COLOURS)] for i, group in enumerate(dict.fromkeys(groups))}


def _groups_of(spectra: xr.DataArray | xr.Dataset) -> list[str]:
    if "group" in spectra.coords:
        return [str(group) for group in spectra["group"].values]
    return ["laboratory"] * spectra.sizes["sample"]


def plot_materials(
    table: xr.Dataset,
    names: Sequence[str] | str | None = None,
    *,
    thresholds: dict[str, Threshold] | None = None,
    axes: Sequence[Axes] | None = None,
) -> list[Axes]:
    """Every material's value of some parameters, one column a parameter and one row a material.

    A material without a value of any of these parameters has no row.

    Parameters
    ----------
    table : Dataset over `sample`
        Result of :func:`bandratio.material_table`.
    names : str or list of str, optional
        Parameters to show; None shows the first four.
    thresholds : dict of str to Threshold, optional
        Drawn as a line with a band of one sigma.
    axes : list of Axes, optional
        Where to draw, one for each parameter; None makes a figure of publication size.

    Returns
    -------
    list of Axes

    Raises
    ------
    ValueError
        If a parameter is not in the table, or `axes` are not as many as the parameters.
    """
    if not isinstance(table, xr.Dataset) or "sample" not in table.dims:
        raise TypeError(
            f"table must be a Dataset over sample, as material_table makes one, got {type(table).__name__}"
        )
    known = parameter_names(table)
    chosen = known[:4] if names is None else [names] if isinstance(names, str) else list(names)
    for name in chosen:
        if name not in known:
            raise ValueError(f"the table holds no {name!r}{suggestion(str(name), known)}")
    if axes is not None:
        if len(axes) != len(chosen):
            raise ValueError(f"there are {len(chosen)} parameters and {len(axes)} axes; give one for each")
        _draw_materials(list(axes), table, chosen, thresholds or {})
        return list(axes)
    with style():
        rows = int(_with_values(table, chosen).sum())
        width = 2.0 + 1.4 / len(chosen)
        made: Any = new_axes(len(chosen), width=width, height=0.9 + _ROW_INCHES * rows)
        columns = list(made) if len(chosen) > 1 else [made]
        _draw_materials(columns, table, chosen, thresholds or {})
    return columns


def _with_values(table: xr.Dataset, names: Sequence[str]) -> np.ndarray:
    """Which samples have a value of any of these parameters; all of them where none has."""
    known = np.any([np.isfinite(np.asarray(table[name].values, dtype=float)) for name in names], axis=0)
    return known if known.any() else np.ones_like(known)


def _draw_materials(
    axes: list[Axes], table: xr.Dataset, names: list[str], thresholds: dict[str, Threshold]
) -> None:
    groups = _groups_of(table)
    colours = group_colours(table)
    known = _with_values(table, names)
    order = [row for group in colours for row in np.flatnonzero(known).tolist() if groups[row] == group]
    at = np.arange(len(order))[::-1]
    starts = [i for i in range(1, len(order)) if groups[order[i]] != groups[order[i - 1]]]
    for column, (ax, name) in enumerate(zip(axes, names, strict=True)):
        values = np.asarray(table[name].values, dtype=float)[order]
        sigma = (
            np.asarray(table[f"{name}_sigma"].values, dtype=float)[order]
            if f"{name}_sigma" in table
            else None
        )
        for group, colour in colours.items():
            rows = np.array([groups[row] == group for row in order])
            ax.errorbar(
                values[rows],
                at[rows],
                xerr=None if sigma is None else sigma[rows],
                fmt="o",
                markersize=3.2,
                color=colour,
                markeredgecolor="black",
                markeredgewidth=0.3,
                ecolor="black",
                elinewidth=0.7,
                capsize=0,
                zorder=3,
            )
        for start in starts:
            ax.axhline(at[start] + 0.5, color="#bbbbbb", linewidth=0.5, zorder=1)
        if name in thresholds:
            _draw_threshold(ax, thresholds[name])
        ax.set_xlabel(_two_lines(table[name]))
        ax.set_ylim(-0.6, len(order) - 0.4)
        ax.grid(axis="x", color="#e4e4e4", linewidth=0.5, zorder=0)
        ax.set_axisbelow(True)
        ax.tick_params(axis="y", length=0)
        ax.set_yticks(at)
        ax.set_yticklabels([_plain(table["sample"].values[row]) for row in order] if column == 0 else [])
    for label, row in zip(axes[0].get_yticklabels(), order, strict=True):
        label.set_fontsize(6.5)
        label.set_color(_readable(colours[groups[row]]))
    _name_groups(axes[-1], groups, order, at)


def _name_groups(ax: Axes, groups: list[str], order: list[int], at: np.ndarray) -> None:
    """Names of the groups on the right edge of the last column."""
    for group in dict.fromkeys(groups[row] for row in order):
        rows = at[[groups[row] == group for row in order]]
        ax.annotate(
            _plain(group).replace(" ", "\n", 1) if len(group) > 12 and rows.size > 1 else _plain(group),
            (1.02, float(rows.mean())),
            xycoords=("axes fraction", "data"),
            va="center",
            fontsize=6.5,
            annotation_clip=False,
        )


def _draw_threshold(ax: Axes, threshold: Threshold) -> None:
    ax.axvline(threshold.value, color="black", linewidth=0.9, linestyle="--", zorder=2)
    sigma = f" ± {threshold.sigma:.2g}" if threshold.sigma else ""
    ax.set_title(f"threshold {threshold.value:.3g}{sigma}", fontsize=6.5, pad=3)
    if threshold.sigma:
        low, high = threshold.value - threshold.sigma, threshold.value + threshold.sigma
        ax.axvspan(low, high, color="#cccccc", alpha=0.6, linewidth=0, zorder=1)


def _two_lines(values: xr.DataArray) -> str:
    units = str(values.attrs.get("units", ""))
    name = _plain(values.name)
    return f"{name}\n[{units}]" if units not in ("", "1") else f"{name}\n"


def _plain(text: Any) -> str:
    return str(text).replace("$", r"\$")


def _readable(colour: str) -> str:
    """A darker tone of a colour, for text on white."""
    red, green, blue = (int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5))
    luminance = 0.2126 * red + 0.7152 * green + 0.0722 * blue
    factor = min(1.0, 0.38 / luminance) if luminance > 0 else 1.0
    return "#" + "".join(f"{round(255 * part * factor):02x}" for part in (red, green, blue))


def plot_spectra(
    spectra: xr.DataArray, *, wavelengths: Sequence[float] = (), fwhm: Any = None, ax: Axes | None = None
) -> Axes:
    """Laboratory spectra, coloured by group, with bands marked under them.

    Parameters
    ----------
    spectra : DataArray, dimensions sample and wavelength [nm]
        Each is drawn at its own channels, so that a gap in one stays a gap of its own.
    wavelengths : list of float
        Band centres to mark [nm].
    fwhm : float or list of float, optional
        Their widths [nm].
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    TypeError
        If `spectra` is no DataArray over sample and wavelength.
    """
    if not isinstance(spectra, xr.DataArray) or set(spectra.dims) != {"sample", "wavelength"}:
        raise TypeError(
            "spectra must be a DataArray over sample and wavelength, as open_library gives one, got "
            f"{getattr(spectra, 'dims', type(spectra).__name__)}"
        )
    if ax is not None:
        _draw_spectra(ax, spectra, wavelengths, fwhm)
        return ax
    with style():
        made: Axes = new_axes(width=5.0, height=3.2)
        _draw_spectra(made, spectra, wavelengths, fwhm)
    return made


def _draw_spectra(ax: Axes, spectra: xr.DataArray, wavelengths: Sequence[float], fwhm: Any) -> None:
    colours = group_colours(spectra)
    lines = {group: _LINES[i // len(_COLOURS) % len(_LINES)] for i, group in enumerate(colours)}
    seen: set[str] = set()
    for row, group in enumerate(_groups_of(spectra)):
        own = spectra.isel(sample=row).dropna("wavelength")
        if own.sizes["wavelength"] == 0:
            continue
        label = None if group in seen else _plain(group)
        seen.add(group)
        marker = "." if own.sizes["wavelength"] < 20 else None
        ax.plot(
            own["wavelength"].values, own.values, color=colours[group], linewidth=0.9, linestyle=lines[group],
            marker=marker, markersize=3, alpha=0.85, label=label,
        )  # fmt: skip
    widths = np.broadcast_to(np.nan if fwhm is None else np.asarray(fwhm, dtype=float), np.shape(wavelengths))
    for centre, width in zip(wavelengths, widths, strict=True):
        if np.isfinite(width):
            ax.axvspan(centre - width / 2, centre + width / 2, color="#dddddd", linewidth=0, zorder=0)
        else:
            ax.axvline(centre, color="#bbbbbb", linewidth=0.8, zorder=0)
    ax.set_xlabel("wavelength [nm]")
    ax.set_ylabel(labelled(spectra.rename(spectra.name or "reflectance")))
    ax.set_ylim(bottom=0)
    ax.margins(x=0.01)
    ax.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), borderaxespad=0.2, handlelength=2.2)


def plot_separation(thresholds: dict[str, Threshold], *, ax: Axes | None = None) -> Axes:
    """ROC curves of thresholds from labelled spectra, with the point that was chosen.

    Parameters
    ----------
    thresholds : dict of str to Threshold
        Result of :func:`bandratio.thresholds`.
    ax : Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    Axes

    Raises
    ------
    ValueError
        If none of them comes from labelled spectra.
    """
    known = {name: each.separation for name, each in thresholds.items() if each.separation is not None}
    if not known:
        raise ValueError(
            "none of these thresholds comes from labelled spectra; br.thresholds makes such ones"
        )
    if ax is None:
        with style():
            ax = new_axes(width=3.3, height=3.0)
            return plot_separation(thresholds, ax=ax)
    for i, (name, separation) in enumerate(known.items()):
        colour = PALETTE[("blue", "vermilion", "green", "purple")[i % 4]]
        low, high = separation.area_interval
        ax.plot(
            *separation.curve,
            color=colour,
            linewidth=1.3,
            label=f"{_plain(name)}: area {separation.area:.3f} [{low:.2f}, {high:.2f}]",
        )
        ax.plot(separation.false_alarm_rate, separation.detection_rate, "o", color=colour, markersize=4)
    ax.plot([0, 1], [0, 1], color="#999999", linewidth=0.7, linestyle=":")
    ax.set_xlim(-0.02, 1.02)
    ax.set_ylim(-0.02, 1.02)
    ax.set_xlabel("false alarm rate (share of the unwanted)")
    ax.set_ylabel("detection rate (share of the wanted)")
    ax.legend(loc="lower right")
    return ax
