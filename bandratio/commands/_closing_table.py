"""The small table that closes a mapping run: what came out, in a few lines."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

if TYPE_CHECKING:
    from ..files.quantiles import BinCounts

__all__ = ["closing_table"]


def closing_table(maps: xr.Dataset, counts: Mapping[str, BinCounts] | None = None) -> str:
    """Percentiles, typical sigma and share of missing pixels for each parameter.

    `counts` are those of the pass in which the maps were written, so that nothing is computed again; without
    them the maps are counted here. Either way a percentile is within 0.2 % of its value.
    """
    from ..files.quantiles import BinCounts

    rows = [("parameter", "5 %", "50 %", "95 %", "typical sigma", "missing", "unit")]
    for name, variable in maps.data_vars.items():
        if str(name).endswith(("_sigma", "_sigma_random", "_sigma_shared")) or variable.dtype.kind != "f":
            continue
        of_value, of_sigma = (
            counts[key]
            if counts and key in counts
            else BinCounts.of(maps[key].values)
            if key in maps
            else None
            for key in (str(name), f"{name}_sigma")
        )
        assert of_value is not None
        low, middle, high = of_value.percentiles([5, 50, 95])
        typical = float("nan") if of_sigma is None else of_sigma.percentiles([50])[0]
        pixels = of_value.valid + of_value.missing
        rows.append(
            (
                str(name),
                f"{low:.3g}",
                f"{middle:.3g}",
                f"{high:.3g}",
                "not known" if np.isnan(typical) else f"{typical:.2g}",
                f"{of_value.missing / max(pixels, 1):.1%}",
                str(variable.attrs.get("units", "")),
            )
        )
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = [
        "  ".join(
            cell.ljust(width) if i in (0, 6) else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]
    if maps.attrs.get("left_out"):
        lines.append("left out: " + str(maps.attrs["left_out"]))
    return "\n".join(lines)
