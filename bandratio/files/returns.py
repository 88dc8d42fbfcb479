"""Lidar returns from files: columns named by the user, units checked, two lasers paired."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed, positive, suggestion
from ..lidar.calibration import CHANNELS
from ..lidar.pairing import pair_shots
from ..lidar.returns import QUALITY, SHOT_UNITS, as_returns
from .shot_tables import ShotTable, shot_table
from .shot_units import conversion, one_energy_unit

__all__ = ["open_returns"]

_IN_MEMORY = 5_000_000  # shots; more are lazy unless told otherwise
_BLOCK = 1_000_000
#: Columns of LAS that are what they say.
_KNOWN = {"time": "gps_time"}


def open_returns(
    path: str | Path | Sequence[str | Path],
    *,
    red: str | Mapping[str, Any],
    infrared: str | Mapping[str, Any],
    crs: Any = None,
    zero: str | Mapping[str, str] | None = None,
    saturated: float | str | Mapping[str, Any] | None = None,
    pair_radius: float | None = None,
    columns: Mapping[str, str] | None = None,
    units: Mapping[str, str] | None = None,
    chunks: int | str | None = "auto",
) -> xr.Dataset:
    r"""Lidar returns of two lasers as a Dataset over `shot`.

    Parameters
    ----------
    path : str or Path, or two of them
        LAS, LAZ, CSV, Parquet, netCDF (``.nc``, ``.h5``) or Zarr; two files, red first, where each laser has its own.
    red, infrared : str or mapping
        Column of the return energy, e.g. ``"intensity"``. Where the two lasers are told apart by another column,
        ``"intensity where scanner_channel=0"``, which is short for ``{"column": "intensity", "where":
        {"scanner_channel": 0}}``; where a variable has a second dimension,
        ``{"column": "energy", "index": 0}``.
    crs : any, optional
        Map projection of the positions, where the file does not say it.
    zero : {"dropout", "missing"} or mapping, optional
        What a stored zero means: ``dropout``, the return lay below the receiver's limit, or ``missing``, none was
        recorded; ``{"red": …, "infrared": …}`` for each. It is never guessed: an error where there are zeros and it
        is not given.
    saturated : float, str or mapping, optional
        Energy from which on a value is saturated [unit of the file], or a column that marks it; ``{"red": …,
        "infrared": …}`` for each.
    pair_radius : float, optional
        Largest distance within a pair of shots that are not the same pulses [m]. Pairs are one to one, nearest
        first. What stays unpaired is kept, with the other channel missing.
    columns : mapping, optional
        Columns of what else is known, by its name here: ``{"range_m": "range", "incidence_deg": "slope", …}`` (see
        `as_returns`). A column that has the name already is taken without it.
    units : mapping, optional
        Units of the file's values, by the name here, where the file does not say them: ``{"range_m": "km"}``.
        Lengths, angles and energies are converted to m, degree and J; what is in none stays as it is.
    chunks : int, "auto" or None
        Shots in a block of a lazy result; None: in memory; auto: lazy above five million shots. Pairing and
        ``where`` need the shots in memory.

    Returns
    -------
    Dataset
        As from `as_returns`. Paired returns hold ``pair_distance`` [m], and the attributes ``n_paired``,
        ``n_unpaired_red``, ``n_unpaired_infrared``.

    Raises
    ------
    FileNotFoundError, ValueError, TypeError
        If a file or column is not there, a unit is not one of its kind, zeros are not explained, or two lasers are
        neither the same pulses nor told how far apart a pair may be.

    Examples
    --------
    >>> folder = getfixture("tmp_path")
    >>> _ = (folder / "shots.csv").write_text("x,y,range [km],red,infrared\n1,2,30,160,269\n3,4,30,158,0\n")
    >>> returns = open_returns(
    ...     folder / "shots.csv", red="red", infrared="infrared", zero="dropout", columns={"range_m": "range"})
    >>> returns["range_m"].values.tolist(), returns["infrared_quality"].values.tolist()
    ([30000.0, 30000.0], [0, 1])
    """
    paths = [path] if isinstance(path, str | Path) else list(path)
    if len(paths) not in (1, 2):
        raise ValueError(f"returns come from one file, or from two (red first), got {len(paths)} paths")
    if pair_radius is not None:
        positive("pair_radius", pair_radius, "m")
    for name in (*(columns or {}), *(units or {})):
        if name not in SHOT_UNITS and name not in CHANNELS:
            raise ValueError(f"returns have no {name!r}{suggestion(name, (*CHANNELS, *SHOT_UNITS))}")
    specs = {"red": _spec("red", red), "infrared": _spec("infrared", infrared)}
    tables = [shot_table(entry) for entry in paths]
    known_crs = crs if crs is not None else tables[0].crs
    if crs is None:
        _refuse_two_projections(tables)
    apart = len(tables) == 2 or any(spec.get("where") for spec in specs.values())
    if not apart and pair_radius is not None:
        raise ValueError(
            "pair_radius is for two lasers with shots of their own; here both columns are of the same shots: leave "
            "it out, or say what tells them apart with {'column': …, 'where': {…}}"
        )
    block = _block_length(chunks, tables, apart)
    if not apart:
        return _one(tables[0], specs, columns or {}, units or {}, zero, saturated, known_crs, block)
    sides = {
        channel: _one(
            tables[-1 if channel == "infrared" else 0],
            {channel: specs[channel]},
            columns or {},
            units or {},
            zero,
            saturated,
            None,
            None,
        )
        for channel in CHANNELS
    }
    joined = _joined(sides, pair_radius, known_crs)
    one_energy_unit(*(joined[channel].attrs["units"] for channel in CHANNELS))
    return joined


def _one(
    table: ShotTable,
    specs: Mapping[str, Mapping[str, Any]],
    columns: Mapping[str, str],
    units: Mapping[str, str],
    zero: Any,
    saturated: Any,
    crs: Any,
    block: int | None,
) -> xr.Dataset:
    """Returns of one table; where it has one channel only, the other is missing."""
    here = {name: table.require(str(spec["column"])) for name, spec in specs.items()}
    for name in SHOT_UNITS:
        channel = name.rpartition("_")[2]
        if channel in CHANNELS and channel not in specs:
            continue
        if name in columns:
            here[name] = table.require(columns[name])
        elif name in table.names or _KNOWN.get(name) in table.names:
            here[name] = name if name in table.names else _KNOWN[name]
    marks = _marks(saturated, specs, table)
    wheres = {name: dict(spec.get("where") or {}) for name, spec in specs.items()}
    conditions = [table.require(str(key)) for where in wheres.values() for key in where]
    wanted = list(
        dict.fromkeys([*here.values(), *(m for m in marks.values() if isinstance(m, str)), *conditions])
    )
    data = table.read(wanted, block)
    keep = _kept(wheres, data, table)
    values: dict[str, Any] = {}
    final: dict[str, str] = {}
    for name, column in here.items():
        array = _numeric(table, name, column, data[column] if keep is None else data[column][keep])
        array = _indexed(table, specs[name], array) if name in specs else array
        kind = "energy" if name in CHANNELS else SHOT_UNITS[name]
        stated = units.get(name, table.units.get(column, ""))
        if kind == "":
            values[name] = array
            continue
        factor, final[name] = conversion(f"{table.path}: {column}", stated, kind)
        values[name] = array if factor == 1 else array * factor
    if "incidence_deg" in here and here["incidence_deg"].startswith("scan_angle"):
        values["incidence_deg"] = abs(values["incidence_deg"])
    energies = one_energy_unit(*(final[name] for name in final if SHOT_UNITS.get(name, "energy") == "energy"))
    limits: dict[str, Any] = {}
    for name, mark in marks.items():
        if isinstance(mark, str):
            limits[name] = data[mark].astype(bool) if keep is None else data[mark][keep].astype(bool)
        elif mark is not None:
            stated = units.get(name, table.units.get(here[name], ""))
            limits[name] = mark * conversion(f"{table.path}: {here[name]}", stated, "energy")[0]
    for name in CHANNELS:
        if name not in values:
            (other,) = specs
            values[name] = np.full(values[other].shape, np.nan)
    try:
        return as_returns(**values, zero=zero, saturated=limits or None, units=energies, crs=crs)
    except ValueError as error:
        raise ValueError(f"{table.path}: {error}") from None


def _spec(channel: str, given: Any) -> Mapping[str, Any]:
    if isinstance(given, str):
        column, told_apart, condition = given.partition(" where ")
        if not told_apart:
            return {"column": given}
        name, _, value = (part.strip() for part in condition.partition("="))
        if not name or not value:
            raise ValueError(f"{channel} wants COLUMN where COLUMN=VALUE, got {given!r}")
        return {"column": column.strip(), "where": {name: _value(value)}}
    if not isinstance(given, Mapping) or "column" not in given:
        raise TypeError(
            f"{channel} must be a column's name or {{'column': …, 'where': {{…}}}}, got {given!r}"
        )
    for key in given:
        if key not in ("column", "where", "index"):
            raise ValueError(
                f"{channel} has an unknown entry {key!r}{suggestion(str(key), ('column', 'where', 'index'))}"
            )
    if given.get("where") is not None and not isinstance(given["where"], Mapping):
        raise TypeError(f"where of {channel} must be {{column: value}}, got {given['where']!r}")
    return given


def _refuse_two_projections(tables: list[ShotTable]) -> None:
    told = [table.crs for table in tables if table.crs]
    if len(told) < 2 or told[0] == told[1]:
        return
    from rasterio.crs import CRS

    first, second = (CRS.from_wkt(text) for text in told)
    if first != second:
        raise ValueError(
            f"{tables[0].path} and {tables[1].path} are in different map projections; transform one of them first, or "
            "give crs=… where what a file says is wrong"
        )


def _value(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text


def _block_length(chunks: Any, tables: list[ShotTable], apart: bool) -> int | None:
    if chunks is None or apart:
        return None
    if chunks == "auto":
        return _BLOCK if tables[0].length > _IN_MEMORY else None
    if isinstance(chunks, bool) or not isinstance(chunks, int) or chunks < 1:
        raise ValueError(f"chunks must be a number of shots, 'auto' or None, got {chunks!r}")
    return chunks


def _marks(saturated: Any, specs: Mapping[str, Any], table: ShotTable) -> dict[str, float | str | None]:
    marks: dict[str, float | str | None] = {}
    for name in specs:
        mark = saturated.get(name) if isinstance(saturated, Mapping) else saturated
        if isinstance(mark, str):
            marks[name] = table.require(mark)
        elif mark is None or (isinstance(mark, int | float) and not isinstance(mark, bool)):
            marks[name] = None if mark is None else positive(f"saturated of {name}", mark)
        else:
            raise TypeError(f"saturated of {name} must be an energy or a column's name, got {mark!r}")
    if isinstance(saturated, Mapping):
        for name in saturated:
            if name not in CHANNELS:
                raise ValueError(f"saturated names an unknown channel {name!r}; there are {listed(CHANNELS)}")
    return marks


def _kept(
    wheres: Mapping[str, Mapping[str, Any]], data: Mapping[str, Any], table: ShotTable
) -> NDArray | None:
    keep: NDArray | None = None
    for name, where in wheres.items():
        for column, value in where.items():
            same = np.asarray(data[column] == value)
            keep = same if keep is None else keep & same
            if not keep.any():
                there = np.unique(np.asarray(data[column]))[:10].tolist()
                raise ValueError(
                    f"{table.path}: no {name} shot where {column} is {value!r}; it holds {listed(there)}"
                )
    return keep


def _numeric(table: ShotTable, name: str, column: str, array: Any) -> Any:
    if name == "time":
        return array
    if array.dtype.kind not in "fiu":
        raise ValueError(f"{table.path}: column {column!r} must hold numbers for {name}, got {array.dtype}")
    return array.astype(float)


def _indexed(table: ShotTable, spec: Mapping[str, Any], array: Any) -> Any:
    if array.ndim == 1 and "index" not in spec:
        return array
    if array.ndim != 2 or "index" not in spec:
        raise ValueError(
            f"{table.path}: {spec['column']} has the shape {tuple(array.shape)}; name the channel's place in it with "
            "{'column': …, 'index': 0}, which is for variables of two dimensions"
        )
    place = spec["index"]
    if not isinstance(place, int) or not 0 <= place < array.shape[1]:
        raise ValueError(
            f"{table.path}: index of {spec['column']} must be 0 … {array.shape[1] - 1}, got {place!r}"
        )
    return array[:, place]


def _joined(sides: Mapping[str, xr.Dataset], radius: float | None, crs: Any) -> xr.Dataset:
    """Red and infrared shots as one Dataset: row by row where they are the same pulses, else in pairs."""
    red, infrared = sides["red"], sides["infrared"]
    for channel, side in sides.items():
        absent = [name for name in ("x", "y") if name not in side.coords]
        if absent:
            raise ValueError(
                f"two lasers are told to be the same pulses, or are paired, by position, and the {channel} shots have no "
                f"{listed(absent)}; name the columns with columns={{'x': …, 'y': …}}"
            )
    if radius is None:
        same = red.sizes == infrared.sizes and all(np.array_equal(red[k], infrared[k]) for k in ("x", "y"))
        if not same:
            raise ValueError(
                f"{red.sizes['shot']} red and {infrared.sizes['shot']} infrared shots are not at the same positions; "
                "give pair_radius=… [m], how far apart the two of a pair may lie"
            )
        index_red = index_infrared = np.arange(red.sizes["shot"])
        distance = np.zeros(index_red.size)
    else:
        index_red, index_infrared, distance = pair_shots(
            _positions(red, crs), _positions(infrared, crs), radius
        )
        if not index_red.size:
            raise ValueError(
                f"no red and infrared shot lie within {radius:g} m of each other; check the positions, their map "
                "projection, or give a larger pair_radius"
            )
    alone_red = np.delete(np.arange(red.sizes["shot"]), index_red)
    alone_infrared = np.delete(np.arange(infrared.sizes["shot"]), index_infrared)
    pairs = red.isel(shot=index_red)
    partners = infrared.isel(shot=index_infrared)
    for name, values in partners.variables.items():
        text = str(name)
        if text.endswith("infrared") or text == "infrared_quality":
            pairs[text] = values
        elif text in ("range_m", "incidence_deg") and radius is not None:
            pairs[f"{text}_infrared"] = values  # the infrared pulse has its own path
    pairs["pair_distance"] = (
        "shot",
        distance,
        {"long_name": "distance of the two shots of a pair", "units": "m"},
    )
    parts = [pairs, red.isel(shot=alone_red), infrared.isel(shot=alone_infrared)]
    joined = xr.concat(
        [part for part in parts if part.sizes["shot"]],
        dim="shot",
        join="outer",
        data_vars="all",
        coords="different",
        compat="equals",
        combine_attrs="override",
    )
    for channel in CHANNELS:
        flags = joined[f"{channel}_quality"]
        joined[f"{channel}_quality"] = (
            flags.fillna(QUALITY["missing"]).astype(np.int8).assign_attrs(flags.attrs)
        )
    joined.attrs |= {
        "n_paired": int(index_red.size),
        "n_unpaired_red": int(alone_red.size),
        "n_unpaired_infrared": int(alone_infrared.size),
    }
    if crs is None:
        return joined
    return as_returns([1.0], [1.0], crs=crs)[["spatial_ref"]].merge(joined).assign_attrs(joined.attrs)


def _positions(side: xr.Dataset, crs: Any) -> NDArray:
    """Positions [m]: as they are, or on the sphere of the body where they are longitudes and latitudes."""
    x, y = side["x"].values.astype(float), side["y"].values.astype(float)
    if crs is None:
        return np.column_stack([x, y])
    from pyproj import CRS

    known: Any = CRS.from_user_input(crs)
    if not known.is_geographic:
        return np.asarray(np.column_stack([x, y]) * float(known.axis_info[0].unit_conversion_factor))
    longitude, latitude = np.radians(x), np.radians(y)
    radius = float(known.ellipsoid.semi_major_metre)
    across = np.cos(latitude)
    return np.column_stack(
        [radius * across * np.cos(longitude), radius * across * np.sin(longitude), radius * np.sin(latitude)]
    )
