"""The least ice that two lasers find: over noise, infrared wavelength and grain size."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .frame import PALETTE, new_axes, style

if TYPE_CHECKING:
    from ..planning import LaserPlan

__all__ = ["plot_laser_plan"]

_LINES = {
    "areal": ("side by side [share of area]", PALETTE["blue"], "o"),
    "intimate": ("grain by grain [share of weight]", PALETTE["orange"], "s"),
}


def plot_laser_plan(plan: LaserPlan, *, axes: Any = None) -> Any:
    """Three curves of the least ice that is found, with what was held and the laser caution below.

    Parameters
    ----------
    plan : LaserPlan
        As from `plan_lasers`.
    axes : sequence of three Axes, optional
        Where to draw; None makes a figure of publication size.

    Returns
    -------
    ndarray of Axes

    Raises
    ------
    TypeError, ValueError
        If `plan` is none, or there are not three axes.
    """
    from ..planning import LaserPlan

    if not isinstance(plan, LaserPlan):
        raise TypeError(f"plan must be a LaserPlan, as plan_lasers makes one, got {type(plan).__name__}")
    if axes is not None:
        if np.size(axes) != 3:
            raise ValueError(f"a laser plan is three pictures, and needs three axes, got {np.size(axes)}")
        _draw(plan, np.ravel(axes))
        return axes
    with style():
        made = new_axes(3, width=2.6, height=3.5)
        _draw(plan, made)
        figure = made[0].figure
        figure.get_layout_engine().set(rect=(0, 0.2, 1, 0.8))
        text = "\n".join((plan.sentence, *plan.findings, plan.caution))
        figure.text(0.012, 0.185, _wrapped(text, 195), fontsize=5.5, va="top", ha="left", color="#333333")
    return made


def _draw(plan: LaserPlan, axes: Any) -> None:
    held = plan.settings
    panels = (
        (
            plan.noise,
            "noise of each shot [% of the albedo]",
            100.0,
            True,
            100 * float(np.mean(held["relative"])),
        ),
        (plan.wavelength, "infrared wavelength [nm]", 1.0, False, held["infrared_nm"]),
        (plan.grain_size, "grain size of the ice [µm]", 1.0, True, held["grain_um"]),
    )
    values = np.concatenate([table.to_numpy(dtype=float).ravel() for table, *_ in panels])
    low, high = (
        (100 * part for part in (np.nanmin(values), np.nanmax(values)))
        if np.isfinite(values).any()
        else (1, 100)
    )
    for ax, (table, name, factor, logarithmic, at) in zip(axes, panels, strict=True):
        across = table.index.to_numpy(dtype=float) * factor
        for kind, (label, colour, marker) in _LINES.items():
            ax.plot(
                across,
                100 * table[kind],
                marker,
                linestyle="-",
                color=colour,
                label=label,
                markersize=3,
                linewidth=1.2,
            )
        ax.axvline(
            at,
            color=PALETTE["grey"],
            linewidth=0.8,
            linestyle=":",
            zorder=0,
            label="held in the other pictures",
        )
        if logarithmic:
            _plain_log(ax.xaxis, across)
        _plain_log(ax.yaxis, np.array([low / 1.25, min(high * 1.25, 110)]))
        ax.set_ylim(low / 1.25, min(high * 1.25, 110))
        ax.set_xlabel(name)
        ax.grid(color="#DDDDDD", linewidth=0.5)
        ax.set_axisbelow(True)
        for side in ("top", "right"):
            ax.spines[side].set_visible(False)
    axes[0].set_ylabel(f"least ice found, probability {held['probability']:g} [%]")
    axes[1].legend(
        loc="best", handlelength=1.5, frameon=True, framealpha=0.9, edgecolor="none", borderpad=0.2
    )


def _plain_log(axis: Any, values: Any) -> None:
    """Logarithmic axis with 1, 2, 5 × 10ⁿ written as plain numbers."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter

    axis.axes.set(**{f"{axis.axis_name}scale": "log"})
    steps = np.outer(10.0 ** np.arange(-4, 6), [1, 2, 5]).ravel()
    axis.set_major_locator(
        FixedLocator([s for s in steps if values.min() * 0.99 <= s <= values.max() * 1.01])
    )
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())


def _wrapped(text: str, width: int) -> str:
    import textwrap

    return "\n".join("\n".join(textwrap.wrap(line, width)) for line in text.splitlines())
