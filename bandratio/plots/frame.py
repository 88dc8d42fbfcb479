"""What every map picture shares: figure at publication size, extent, axis labels, scale bar or grid."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from .._checks import suggestion

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "COLUMN_INCHES", "PALETTE", "PICTURE_PIXELS", "Grid", "finish_map", "labelled", "new_axes", "parameter_names",
    "require_plane", "style",
]  # fmt: skip

#: Width of one column of a journal page [inch]; common practice, no source.
COLUMN_INCHES = 3.5
#: More pixels than this are averaged for a picture: at 300 dots an inch a page shows no more.
PICTURE_PIXELS = 4_000_000
#: Colours told apart with every common kind of colour vision: Okabe & Ito 2008, Color Universal Design.
PALETTE = {
    "orange": "#E69F00",
    "sky": "#56B4E9",
    "green": "#009E73",
    "yellow": "#F0E442",
    "blue": "#0072B2",
    "vermilion": "#D55E00",
    "purple": "#CC79A7",
    "black": "#000000",
    "grey": "#999999",
}


@contextmanager
def style() -> Iterator[None]:
    """Settings of a figure at publication size, for a ``with`` block."""
    import matplotlib as mpl

    interactive = mpl.is_interactive()
    try:
        with mpl.rc_context(
            {
                "font.size": 8,
                "axes.titlesize": 8,
                "axes.linewidth": 0.6,
                "xtick.major.width": 0.6,
                "ytick.major.width": 0.6,
                "legend.fontsize": 7,
                "legend.frameon": False,
                "figure.dpi": 150,
                "savefig.dpi": 300,
            }
        ):
            yield
            # a notebook's way to show figures switches this on with the first one; it must outlast the block
            interactive = mpl.is_interactive()
    finally:
        mpl.interactive(interactive)


def new_axes(count: int = 1, *, width: float = COLUMN_INCHES, height: float = 3.0) -> Any:
    """One axes, or an array of several side by side, in a new figure that is `width` inches for each."""
    from matplotlib.figure import Figure

    try:
        import matplotlib.pyplot as plt

        figure: Figure = plt.figure(figsize=(width * count, height), layout="constrained")
    except ImportError:  # no display library at all: a figure that can still be saved
        figure = Figure(figsize=(width * count, height), layout="constrained")
    axes = figure.subplots(1, count, squeeze=False)[0]
    return axes[0] if count == 1 else axes


def parameter_names(maps: xr.Dataset) -> list[str]:
    """Names of the parameters in maps, without their sigmas and without flags."""
    return [
        str(name)
        for name, values in maps.data_vars.items()
        if not str(name).endswith(("_sigma", "_sigma_random", "_sigma_shared"))
        and "flag_values" not in values.attrs
    ]


def require_plane(maps: xr.Dataset, name: str) -> xr.DataArray:
    """One two-dimensional map of a Dataset, else an error that says what there is.

    Raises
    ------
    TypeError, ValueError
        If `maps` is no Dataset, holds no such map, or the map is not two-dimensional.
    """
    if not isinstance(maps, xr.Dataset):
        raise TypeError(
            f"maps must be a Dataset, as br.parameters makes one, got {type(maps).__name__}; for a DataArray give "
            "array.to_dataset(name=…)"
        )
    if name not in maps.data_vars:
        raise ValueError(
            f"the maps hold no {name!r}{suggestion(str(name), [str(key) for key in maps.data_vars])}"
        )
    values = maps[name]
    if values.ndim != 2:
        raise ValueError(
            f"{name} has dimensions {values.dims}, and a picture of a map needs two; pick the others with "
            "maps.isel(…)"
        )
    if 0 in values.shape:
        raise ValueError(f"{name} is empty: its shape is {values.shape}")
    return values


def labelled(values: xr.DataArray, *, short: bool = False) -> str:
    """Readable name with its unit in brackets, e.g. ``spectral slope 600 to 700 nm [% per 100 nm]``."""
    name = str(values.name) if short else str(values.attrs.get("long_name", values.name))
    units = str(values.attrs.get("units", ""))
    text = name if units in ("", "1") else f"{name} [{units}]"
    return text.replace("$", r"\$")  # a dollar from a file must not start a formula


@dataclass(frozen=True)
class Grid:
    """Where a map lies: extent for ``imshow`` and the unit of its coordinates.

    Parameters
    ----------
    extent : tuple of float
        Left, right, bottom, top of the picture.
    unit : {"pixel", "degree", "m", "map"}
        ``m``: projected, in metres after multiplication with `metres`; ``map``: coordinates of unknown unit.
    metres : float
        Length of one map unit [m].
    """

    extent: tuple[float, float, float, float]
    unit: str
    metres: float = 1.0

    def covered(self, shape: tuple[int, ...], step: int) -> tuple[float, float, float, float]:
        """Extent of a picture of squares of `step` pixels, which may reach beyond the last row and column."""
        left, right, bottom, top = self.extent
        rows, columns = (-(-size // step) * step / size for size in shape)
        return left, left + (right - left) * columns, top + (bottom - top) * rows, top

    @classmethod
    def of(cls, values: xr.DataArray) -> Grid:
        """Read the grid off a two-dimensional map."""
        y, x = values.dims
        if x not in values.coords or y not in values.coords:
            rows, columns = values.shape
            return cls((-0.5, columns - 0.5, rows - 0.5, -0.5), "pixel")
        left, right = _edges(values[x].values)
        top, bottom = _edges(values[y].values)
        unit, metres = _unit(values)
        return cls((left, right, bottom, top), unit, metres)


def _edges(centres: np.ndarray) -> tuple[float, float]:
    centres = np.asarray(centres, dtype=float)
    half = (centres[-1] - centres[0]) / (centres.size - 1) / 2 if centres.size > 1 else 0.5
    return float(centres[0] - half), float(centres[-1] + half)


def _unit(values: xr.DataArray) -> tuple[str, float]:
    import rioxarray  # noqa: F401 (it adds .rio)

    crs = values.rio.crs
    if crs is not None and crs.is_projected:
        return "m", float(crs.linear_units_factor[1])
    told = str(values[values.dims[-1]].attrs.get("units", "")).lower()
    if (crs is not None and crs.is_geographic) or told.startswith("degree"):
        return "degree", 1.0
    lengths = {"m": 1.0, "metre": 1.0, "meter": 1.0, "metres": 1.0, "meters": 1.0, "km": 1000.0}
    return ("m", lengths[told]) if told in lengths else ("map", 1.0)


def finish_map(ax: Axes, values: xr.DataArray, grid: Grid) -> None:
    """Put a scale bar on a projected map, a grid on one in degrees, plain axes on the others."""
    ax.set_xlim(grid.extent[:2])
    ax.set_ylim(grid.extent[2:])
    if grid.unit == "m":
        ax.set_xticks([])
        ax.set_yticks([])
        _scale_bar(ax, grid)
        return
    named = {
        "pixel": ("column", "row"),
        "degree": ("longitude [°]", "latitude [°]"),
        "map": (str(values.dims[1]), str(values.dims[0])),
    }
    ax.set_xlabel(named[grid.unit][0])
    ax.set_ylabel(named[grid.unit][1])
    if grid.unit == "degree":
        ax.grid(color="white", linewidth=0.4, alpha=0.6)


def round_length(metres: float) -> float:
    """Largest of 1, 2, 5 × 10ⁿ that is not longer than a length.

    Examples
    --------
    >>> round_length(7300)
    5000.0
    """
    power = 10.0 ** np.floor(np.log10(metres))
    return float(max(step * power for step in (1, 2, 5) if step * power <= metres * (1 + 1e-9)))


def _scale_bar(ax: Axes, grid: Grid) -> None:
    from mpl_toolkits.axes_grid1.anchored_artists import AnchoredSizeBar

    left, right, bottom, top = grid.extent
    metres = round_length(abs(right - left) * grid.metres / 4)
    text = f"{metres / 1000:g} km" if metres >= 1000 else f"{metres:g} m"
    # below the map, where it hides nothing
    bar = AnchoredSizeBar(
        ax.transData,
        metres / grid.metres,
        text,
        loc="upper left",
        bbox_to_anchor=(0, 0),
        bbox_transform=ax.transAxes,
        pad=0.1,
        borderpad=0.3,
        sep=2,
        frameon=False,
        size_vertical=abs(top - bottom) * 0.008,
        color="black",
        label_top=False,
    )
    ax.add_artist(bar)
