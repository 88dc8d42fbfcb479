"""Tables of lidar shots by the kind of file: what columns there are, and their values, in memory or lazily."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from .._checks import listed, suggestion

__all__ = ["ShotTable", "shot_table"]

_KINDS = ".las, .laz, .csv, .parquet, .nc, .zarr"


@dataclass(frozen=True)
class ShotTable:
    """One file of shots.

    Parameters
    ----------
    path : Path
        The file.
    names : tuple of str
        Its columns.
    length : int
        Number of shots.
    read : callable
        From names of columns and the length of a block (None: in memory) to arrays, one for each name.
    units : mapping of str to str
        Units of the columns, where the file says them.
    crs : str, optional
        Map projection, where the file says it, as WKT.
    """

    path: Path
    names: tuple[str, ...]
    length: int
    read: Callable[[list[str], int | None], dict[str, Any]]
    units: Mapping[str, str] = field(default_factory=dict)
    crs: str | None = None

    def require(self, name: str) -> str:
        """Return `name` where the file has such a column, else raise with the nearest ones."""
        if name not in self.names:
            raise ValueError(f"{self.path}: no column {name!r}{suggestion(name, self.names)}")
        return name


def shot_table(path: str | Path) -> ShotTable:
    """Open a file of shots by its ending.

    Raises
    ------
    FileNotFoundError, ValueError
        If there is no such file, its kind is unknown, or it is not what its ending says.
    """
    path = Path(path)
    if not path.exists():
        raise FileNotFoundError(f"{path}: no such file")
    kinds = {
        ".las": _las, ".laz": _las, ".csv": _csv, ".parquet": _parquet, ".nc": _netcdf, ".nc4": _netcdf,
        ".h5": _netcdf, ".zarr": _zarr,
    }  # fmt: skip
    kind = kinds.get(path.suffix.lower())
    if kind is None:
        raise ValueError(f"{path}: lidar returns are read from {_KINDS}, got {path.suffix or 'no ending'!r}")
    table = kind(path)
    if table.length == 0:
        raise ValueError(f"{path}: holds no shots")
    return table


def _csv(path: Path) -> ShotTable:
    import pandas as pd

    try:
        frame = pd.read_csv(path, comment="#", skipinitialspace=True)
    except (pd.errors.ParserError, pd.errors.EmptyDataError, UnicodeDecodeError) as error:
        raise ValueError(f"{path}: cannot be read as a table: {error}") from None
    units = {}
    names = []
    for column in frame.columns:  # range [km], or range (km)
        match = re.fullmatch(r"(.*?)\s*[\[(]([^\])]*)[\])]", str(column))
        names.append(match[1] if match else str(column).strip())
        if match:
            units[names[-1]] = match[2].strip()
    if len(set(names)) != len(names):
        raise ValueError(f"{path}: two columns have the same name; there are {listed(names)}")
    frame.columns = pd.Index(names)

    def read(wanted: list[str], block: int | None) -> dict[str, Any]:
        made = {name: frame[name].to_numpy() for name in wanted}
        return {name: _lazily(values, block) for name, values in made.items()}

    return ShotTable(path, tuple(names), len(frame), read, units)


def _parquet(path: Path) -> ShotTable:
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        file = pq.ParquetFile(path)
    except (pa.ArrowInvalid, OSError) as error:
        raise ValueError(f"{path}: is no Parquet file: {error}") from None
    schema = file.schema_arrow
    units = {
        entry.name: entry.metadata[b"units"].decode()
        for entry in schema
        if entry.metadata and b"units" in entry.metadata
    }
    rows = [file.metadata.row_group(i).num_rows for i in range(file.metadata.num_row_groups)]

    def group(number: int, wanted: list[str]) -> dict[str, Any]:
        table = pq.ParquetFile(path).read_row_group(number, columns=wanted)
        return {name: table.column(name).to_numpy() for name in wanted}

    def read(wanted: list[str], block: int | None) -> dict[str, Any]:
        if block is None:
            table = file.read(columns=wanted)
            return {name: table.column(name).to_numpy() for name in wanted}
        kinds = {name: schema.field(name).type.to_pandas_dtype() for name in wanted}
        return _delayed_columns(lambda i: group(i, wanted), rows, kinds)

    return ShotTable(path, tuple(schema.names), file.metadata.num_rows, read, units)


def _las(path: Path) -> ShotTable:
    import laspy

    try:
        with laspy.open(path) as reader:
            header = reader.header
            projection = header.parse_crs()
    except (laspy.errors.LaspyException, ValueError, OSError, EOFError) as error:
        raise ValueError(f"{path}: is no LAS or LAZ file: {error}") from None
    names = (
        "x",
        "y",
        "z",
        *(name for name in header.point_format.dimension_names if name not in ("X", "Y", "Z")),
    )
    length = int(header.point_count)

    def column(points: Any, name: str) -> Any:
        values = np.array(points[name])
        # LAS 1.4 R15, table 13: from point format 6 on the scan angle is in steps of 0.006 degrees
        return values * 0.006 if name == "scan_angle" else values

    def some(start: int, count: int, wanted: list[str]) -> dict[str, Any]:
        with laspy.open(path) as reader:
            reader.seek(start)
            points = reader.read_points(count)
            record = laspy.ScaleAwarePointRecord(
                points.array, points.point_format, scales=header.scales, offsets=header.offsets
            )
            return {name: column(record, name) for name in wanted}

    def read(wanted: list[str], block: int | None) -> dict[str, Any]:
        if block is None:
            return some(0, length, wanted)
        starts = list(range(0, length, block))
        rows = [min(block, length - start) for start in starts]
        kinds = {name: values.dtype for name, values in some(0, 1, wanted).items()}
        return _delayed_columns(lambda i: some(starts[i], rows[i], wanted), rows, kinds)

    return ShotTable(
        path,
        names,
        length,
        read,
        {"x": "", "y": "", "z": "m", "gps_time": "s", "scan_angle": "degree", "scan_angle_rank": "degree"},
        projection.to_wkt() if projection is not None else None,
    )


def _netcdf(path: Path) -> ShotTable:
    import xarray as xr

    try:
        return _labelled(path, xr.open_dataset(path, engine="h5netcdf", chunks={}))
    except (OSError, ValueError) as error:
        raise ValueError(f"{path}: cannot be read as netCDF shots: {error}") from None


def _zarr(path: Path) -> ShotTable:
    import xarray as xr

    try:
        return _labelled(path, xr.open_zarr(path, consolidated=False))
    except (OSError, ValueError, KeyError) as error:
        raise ValueError(f"{path}: cannot be read as Zarr shots: {error}") from None


def _labelled(path: Path, data: Any) -> ShotTable:
    """Shots of an xarray Dataset: every variable along its shot dimension."""
    dims = [str(dim) for dim in data.dims]
    shot = "shot" if "shot" in dims else max(dims, key=lambda dim: data.sizes[dim], default="")
    columns = {str(name): values for name, values in data.variables.items() if shot in values.dims}
    units = {name: str(values.attrs["units"]) for name, values in columns.items() if "units" in values.attrs}
    crs = data["spatial_ref"].attrs.get("crs_wkt") if "spatial_ref" in data.variables else None

    def read(wanted: list[str], block: int | None) -> dict[str, Any]:
        made = {name: columns[name].transpose(shot, ...) for name in wanted}
        if block is None:
            return {name: np.asarray(values.values) for name, values in made.items()}
        return {name: _lazily(values.chunk({shot: block}).data, None) for name, values in made.items()}

    return ShotTable(path, tuple(columns), int(data.sizes.get(shot, 0)), read, units, crs)


def _lazily(values: Any, block: int | None) -> Any:
    if block is None:
        return values
    import dask.array as da

    return da.from_array(values, chunks=(block, *values.shape[1:]))


def _delayed_columns(
    part: Callable[[int], dict[str, Any]], rows: list[int], kinds: Mapping[str, Any]
) -> dict[str, Any]:
    """Lazy columns of a table that is read part by part; one part is read once for all its columns."""
    import dask
    import dask.array as da

    parts = [dask.delayed(part, pure=False)(i) for i in range(len(rows))]  # type: ignore[attr-defined]
    return {
        name: da.concatenate(
            [
                da.from_delayed(made[name], (count,), dtype=kind)
                for made, count in zip(parts, rows, strict=True)
            ]
        )
        for name, kind in kinds.items()
    }
