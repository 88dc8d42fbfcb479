"""From shots to a map: the returns of each cell are summed, then the cell is judged."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed
from .calibration import CHANNELS
from .returns import QUALITY

__all__ = ["grid_returns"]

_SUMS = (
    "n", "dropouts", "incidence",
    "red", "red_additive", "red_counting", "red_common", "red_scaling", "red_shared",
    "infrared", "infrared_additive", "infrared_counting", "infrared_common", "infrared_scaling", "infrared_shared", "covariance",
)  # fmt: skip
_BLOCK = 1_000_000


def grid_returns(albedos: xr.Dataset, like: xr.DataArray | xr.Dataset, *, pool: int = 1) -> xr.Dataset:
    """Albedos of a grid's cells from shots: sums over the shots of a cell, so that its ratio is a ratio of sums.

    Bin first, then flag: noise that is new in each shot falls with the number of shots, errors that all shots share
    (calibration) do not.

    Parameters
    ----------
    albedos : Dataset over `shot`
        As from `albedo_from_returns`, with positions ``x``, ``y``; lazy ones are streamed.
    like : DataArray or Dataset
        A cube or map with regular 1-D coordinates ``x`` and ``y``, whose grid is taken. Positions in another map
        projection are transformed to its own; those of unknown projection are taken to be in it.
    pool : int
        Side of the window of cells whose shots are taken together, odd; 1: each cell by itself. Windows overlap, so
        neighbouring cells are no longer independent: their p-values depend positively on each other, under which the
        false discovery rate still holds. What is found is then ice somewhere in the window.

    Returns
    -------
    Dataset over (y, x)
        What `albedo_from_returns` gives for shots, for cells: ``red``, ``infrared`` and the parts of their sigmas, and
        ``covariance``, ``incidence_deg`` (mean), ``n_shots``, ``n_dropouts``. A shot whose infrared is a dropout enters
        at its limit; a cell that holds one has no ``infrared`` but an ``infrared_limit``, which its mean cannot
        exceed. Shots with no red albedo, or with no infrared one and no limit, are left out and counted in the
        attribute ``n_left_out``. Feed it to `ice_flags` by `flag_arguments`.

    Raises
    ------
    ValueError, TypeError
        If the shots have no positions, the grid is not regular, no shot lies in it, or `pool` is not odd.

    Notes
    -----
    Where a red return is a dropout its shot is left out, which favours the brighter ones; with many of them, as on very
    dark ground, the cells' red is too high, and no sigma here says so.

    Examples
    --------
    >>> import bandratio as br
    >>> returns = br.as_returns([100.0, 110.0, 90.0], [50.0, 55.0, 45.0], x=[0.1, 0.2, 1.1], y=[0.0, 0.0, 0.0],
    ...                         range_m=[1e3] * 3, incidence_deg=[0.0] * 3)
    >>> channel = br.LidarChannel(constant=1.0, transmitted=1e9, relative=0.1)
    >>> albedos = br.albedo_from_returns(returns, br.LidarCalibration(red=channel, infrared=channel))
    >>> like = xr.DataArray(np.zeros((2, 2)), dims=("y", "x"), coords={"y": [0.0, 1.0], "x": [0.0, 1.0]})
    >>> grid = br.grid_returns(albedos, like)
    >>> grid["n_shots"].values.tolist(), grid["red"].values.round(3).tolist()
    ([[2, 1], [0, 0]], [[0.105, 0.09], [nan, nan]])
    """
    wanted = ["covariance", *(f"{c}{part}" for c in CHANNELS for part in _NEEDED)]
    absent = [name for name in wanted if name not in albedos]
    if absent or "shot" not in albedos.dims:
        raise ValueError(
            f"wanted albedos over shot as from albedo_from_returns, got {dict(albedos.sizes)} without {listed(absent)}"
        )
    if [name for name in ("x", "y") if name not in albedos.coords]:
        raise ValueError(
            "the shots have no positions; give x and y to as_returns, or columns={'x': …, 'y': …}"
        )
    if isinstance(pool, bool) or not isinstance(pool, int | np.integer) or pool < 1 or pool % 2 == 0:
        raise ValueError(f"pool must be an odd number of cells (1, 3, 5, …), got {pool!r}")
    columns, rows = _axis(like, "x"), _axis(like, "y")
    size = len(rows) * len(columns)
    sums = np.zeros((len(_SUMS), size))
    transform = _to_grid(albedos, like)
    outside = left_out = 0
    for block in _blocks(albedos):
        x, y = transform(block["x"], block["y"])
        cell, inside = _cells(x, y, columns, rows)
        used = _used(block)
        outside += int((~inside).sum())
        left_out += int((inside & ~used).sum())
        _add(sums, {name: values[inside & used] for name, values in block.items()}, cell[inside & used])
    if not sums[0].any():
        raise ValueError(
            f"none of the {albedos.sizes['shot']} shots lies in the grid with both albedos known ({outside} outside, "
            f"{left_out} with one missing); check the map projections and what a stored zero means"
        )
    if pool > 1:
        sums = _pooled(sums.reshape(-1, len(rows), len(columns)), pool).reshape(len(_SUMS), size)
    cells = _means(dict(zip(_SUMS, sums, strict=True)), "incidence_deg" in albedos)
    grid = xr.Dataset(
        {name: (("y", "x"), values.reshape(len(rows), len(columns))) for name, values in cells.items()},
        # bare axes: what else the cube's coordinates say (quantity, angles) does not hold for the lidar
        coords={"y": like["y"].variable, "x": like["x"].variable, "quantity": "zero_phase_albedo"},
        attrs={**albedos.attrs, "pool": int(pool), "n_outside": outside, "n_left_out": left_out},
    )
    shared = grid["red_sigma_shared"] * grid["infrared_sigma_shared"]
    grid["covariance_shared"] = shared * albedos.attrs.get("gain_correlation", 0.0)
    if "spatial_ref" in like.coords:
        grid = grid.assign_coords(spatial_ref=like["spatial_ref"].variable)
    return _described(grid, albedos)


_NEEDED = (
    "",
    "_sigma_additive",
    "_sigma_common",
    "_per_count",
    "_relative",
    "_sigma_shared",
    "_limit",
    "_quality",
)


def _axis(like: xr.DataArray | xr.Dataset, name: str) -> NDArray:
    if not isinstance(like, xr.DataArray | xr.Dataset):
        raise TypeError(f"like must be a cube or map with coordinates x and y, got {type(like).__name__}")
    if name not in like.coords or like[name].ndim != 1 or like[name].size < 2:
        raise ValueError(
            f"the grid has no 1-D coordinate {name} of two cells or more; give a cube with a map projection"
        )
    values = like[name].values.astype(float)
    steps = np.diff(values)
    if not np.allclose(steps, steps[0], rtol=1e-3, atol=0) or steps[0] == 0:
        raise ValueError(
            f"the grid's {name} is not regular, its steps go from {steps.min():g} to {steps.max():g}"
        )
    return values


def _to_grid(albedos: xr.Dataset, like: xr.DataArray | xr.Dataset) -> Any:
    """Function from the shots' positions to positions in the grid's map projection."""
    theirs, ours = (
        data.coords["spatial_ref"].attrs.get("crs_wkt") if "spatial_ref" in data.coords else None
        for data in (albedos, like)
    )
    if theirs is None or ours is None:
        return lambda x, y: (x, y)
    from rasterio.crs import CRS
    from rasterio.warp import transform

    source, target = CRS.from_wkt(theirs), CRS.from_wkt(ours)
    if source == target:
        return lambda x, y: (x, y)
    return lambda x, y: tuple(np.asarray(part) for part in transform(source, target, x, y))


def _blocks(albedos: xr.Dataset) -> Iterator[dict[str, NDArray]]:
    """The needed variables, a block of shots at a time."""
    names = ["x", "y", "covariance", *(f"{c}{part}" for c in CHANNELS for part in _NEEDED)]
    if "incidence_deg" in albedos:
        names.append("incidence_deg")
    needed = albedos.reset_coords(["x", "y"])[names]
    lengths = albedos.chunksizes.get("shot")
    lengths = lengths or (_BLOCK,) * -(-albedos.sizes["shot"] // _BLOCK)
    start = 0
    for length in lengths:
        block = needed.isel(shot=slice(start, start + length)).compute()
        yield {name: block[name].values for name in names}
        start += length


def _cells(
    x: NDArray, y: NDArray, columns: NDArray, rows: NDArray
) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    with np.errstate(invalid="ignore"):
        column = np.floor((x - columns[0]) / (columns[1] - columns[0]) + 0.5)
        row = np.floor((y - rows[0]) / (rows[1] - rows[0]) + 0.5)
        inside = (column >= 0) & (column < columns.size) & (row >= 0) & (row < rows.size)
        cell = np.where(inside, row * columns.size + column, 0).astype(np.intp)
    return cell, inside


def _used(block: dict[str, NDArray]) -> NDArray[np.bool_]:
    dropout = block["infrared_quality"] == QUALITY["dropout"]
    known = np.where(dropout, block["infrared_limit"], block["infrared"])
    used: NDArray[np.bool_] = np.isfinite(block["red"]) & np.isfinite(known)
    return used


def _add(sums: NDArray, block: dict[str, NDArray], cell: NDArray[np.intp]) -> None:
    dropout = block["infrared_quality"] == QUALITY["dropout"]
    infrared = np.where(dropout, block["infrared_limit"], block["infrared"])
    for name, values in {
        "n": 1.0,
        "dropouts": dropout,
        "incidence": block.get("incidence_deg", np.zeros(cell.size)),
        "red": block["red"],
        "red_additive": block["red_sigma_additive"] ** 2,
        "red_counting": block["red_sigma_additive"] ** 2 * block["red_per_count"],
        "red_common": block["red_sigma_common"] ** 2,
        "red_scaling": (block["red_relative"] * block["red"]) ** 2,
        "red_shared": block["red_sigma_shared"],
        "infrared": infrared,
        "infrared_additive": block["infrared_sigma_additive"] ** 2,
        "infrared_counting": block["infrared_sigma_additive"] ** 2 * block["infrared_per_count"],
        "infrared_common": block["infrared_sigma_common"] ** 2,
        "infrared_scaling": (block["infrared_relative"] * infrared) ** 2,
        "infrared_shared": block["infrared_sigma_shared"],
        "covariance": np.nan_to_num(block["covariance"]),
    }.items():
        np.add.at(sums[_SUMS.index(name)], cell, values)


def _pooled(sums: NDArray, pool: int) -> NDArray:
    from scipy.ndimage import convolve1d

    window = np.ones(pool)
    across = convolve1d(sums, window, axis=2, mode="constant")
    return np.asarray(convolve1d(across, window, axis=1, mode="constant"))


def _means(total: dict[str, NDArray], incidence_known: bool) -> dict[str, NDArray]:
    n = np.where(total["n"] > 0, total["n"], np.nan)
    cells: dict[str, NDArray] = {}
    for channel in CHANNELS:
        level = total[channel] / n
        additive = np.sqrt(total[f"{channel}_additive"]) / n
        scaling = np.sqrt(total[f"{channel}_scaling"]) / n
        shared = total[f"{channel}_shared"] / n  # one error for all shots: it does not average away
        common = np.sqrt(total[f"{channel}_common"]) / n
        random = np.sqrt(additive**2 + common**2 + scaling**2)
        cells |= {
            channel: level,
            f"{channel}_sigma": np.hypot(random, shared),
            f"{channel}_sigma_random": random,
            f"{channel}_sigma_shared": shared,
            f"{channel}_sigma_additive": additive,
            f"{channel}_sigma_common": common,
            # of the cell's mean, weighted by what each shot adds to its variance
            f"{channel}_per_count": _quotient(total[f"{channel}_counting"], total[f"{channel}_additive"]) / n,
            f"{channel}_relative": _quotient(scaling, np.abs(level)),
        }
    holds_dropout = total["dropouts"] > 0
    cells["infrared_limit"] = np.where(holds_dropout, cells["infrared"], np.nan)
    cells["infrared"] = np.where(holds_dropout, np.nan, cells["infrared"])
    cells["covariance"] = total["covariance"] / n**2
    if incidence_known:
        cells["incidence_deg"] = total["incidence"] / n
    cells["n_shots"] = total["n"].astype(np.int64)
    cells["n_dropouts"] = total["dropouts"].astype(np.int64)
    return cells


def _quotient(a: NDArray, b: NDArray) -> NDArray[np.float64]:
    """a/b, 0 where a is not above 0."""
    return np.asarray(np.divide(a, b, out=np.zeros_like(a), where=a > 0))


def _described(grid: xr.Dataset, albedos: xr.Dataset) -> xr.Dataset:
    own = {
        "infrared_limit": "mean infrared albedo with each dropout at its limit",
        "incidence_deg": "mean incidence",
        "n_shots": "shots summed",
        "n_dropouts": "shots whose infrared is a dropout",
    }
    for name in grid.data_vars:
        attrs = dict(albedos[name].attrs) if name in albedos else {"units": "1"}
        attrs["long_name"] = own.get(str(name), attrs.get("long_name", "")).replace("each shot", "each cell")
        grid[name].attrs = attrs
    for channel in CHANNELS:
        parts = [str(name) for name in grid.data_vars if str(name).startswith(f"{channel}_")]
        grid[channel].attrs["ancillary_variables"] = " ".join(parts)
    return grid
