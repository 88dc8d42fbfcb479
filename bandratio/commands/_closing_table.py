"""The small table that closes a mapping run: what came out, in a few lines."""

from __future__ import annotations

import numpy as np
import xarray as xr

__all__ = ["closing_table"]


def closing_table(maps: xr.Dataset) -> str:
    """Percentiles, typical sigma and share of missing pixels for each parameter of maps in memory."""
    rows = [("parameter", "5 %", "50 %", "95 %", "typical sigma", "missing", "unit")]
    for name, variable in maps.data_vars.items():
        if str(name).endswith(("_sigma", "_sigma_random", "_sigma_shared")):
            continue
        values = np.asarray(variable.values, dtype=float)
        good = values[np.isfinite(values)]
        low, middle, high = np.percentile(good, [5, 50, 95]) if good.size else (np.nan,) * 3
        sigma = maps.get(f"{name}_sigma")
        typical = np.nan if sigma is None or not good.size else float(np.nanmedian(sigma.values))
        rows.append(
            (
                str(name),
                f"{low:.4g}",
                f"{middle:.4g}",
                f"{high:.4g}",
                "not known" if np.isnan(typical) else f"{typical:.2g}",
                f"{1 - good.size / max(values.size, 1):.1%}",
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
