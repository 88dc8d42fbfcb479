"""Files of regions: tables, and polygons with the body's own projection."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from .atomic import beside

__all__ = ["write_regions"]

_TABLES = (".csv", ".parquet")
_POLYGONS = (".gpkg",)


def write_regions(regions: pd.DataFrame, path: str | Path, *, overwrite: bool = False) -> Path:
    """Write regions: a table as .csv or .parquet, polygons with the body's own projection as .gpkg.

    Parameters
    ----------
    regions : GeoDataFrame or DataFrame
        Result of ``candidate_regions``; .csv and .parquet hold it without outlines.
    path : str or Path
        Ending says which: .csv, .parquet or .gpkg.
    overwrite : bool
        Replace what is there.

    Returns
    -------
    Path

    Raises
    ------
    ValueError, TypeError, OSError
        If the ending is unknown, there are no outlines for polygons, or the file is there already.
    """
    path = Path(path)
    ending = path.suffix.lower()
    if not isinstance(regions, pd.DataFrame):
        raise TypeError(f"regions must be the table of candidate_regions, got {type(regions).__name__}")
    if ending not in _TABLES + _POLYGONS:
        raise ValueError(f"{path}: regions are written as .csv, .parquet or .gpkg, got {path.suffix!r}")
    has_outlines = hasattr(regions, "geometry") and hasattr(regions, "to_file")
    if ending in _POLYGONS and not has_outlines:
        raise TypeError(f"{path}: polygons need outlines, as candidate_regions makes them; a table has none")
    with beside(path, overwrite=overwrite) as made:
        if ending in _POLYGONS:
            regions.to_file(made, layer="regions", driver="GPKG", engine="pyogrio")  # type: ignore[operator]
        else:
            table = pd.DataFrame(regions.drop(columns="geometry") if has_outlines else regions)
            if ending == ".csv":
                table.to_csv(made, index=False)
            else:
                table.attrs = {}
                table.to_parquet(made, index=False)
    return path
