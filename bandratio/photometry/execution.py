"""Running a correction over a whole cube: in memory with threads, or lazily block by block."""

from __future__ import annotations

import math
import threading
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .correction import SLACK_DEG, Correction
from .hapke import Hapke
from .laws import MCEWEN_1996, Lambert, Law, LunarLambert

__all__ = ["at_once", "hand_over", "lazily"]

#: Pixels at a time for laws that are computed plane by plane: the planes stay in the processor's cache.
_BLOCK_PIXELS = 32_768
#: Below this many pixels a second thread costs more than it brings.
_THREAD_PIXELS = 65_536
#: Pixels at a time where the next step follows at once: bands, sigma and factors of a stretch stay in the second-level cache.
_CACHED_PIXELS = 49_152


def at_once(
    cube: xr.DataArray, planes: Mapping[str, xr.DataArray], correction: Correction
) -> tuple[NDArray, NDArray, NDArray, NDArray]:
    """Normalised values, flags, relative sigma and brightness factor of a cube in memory, on every core.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectances.
    planes : mapping of str to DataArray
        ``incidence``, ``emission``, ``phase`` [deg], and where there are any ``shadow`` and ``slope_sigma`` [deg]; scalar
        or with the cube's other dimensions.
    correction : Correction
        What to do.
    """
    from ..kernel import cores

    return _run(cube.values, {name: plane.values for name, plane in planes.items()}, correction, cores())


def lazily(
    cube: xr.DataArray, planes: Mapping[str, xr.DataArray], correction: Correction
) -> tuple[Any, Any, Any, Any]:
    """The same as dask arrays; the geometry may be lazy too."""
    import dask.array as da

    data = cube.chunk({} if cube.chunks is None else {"wavelength": -1}).data.rechunk({0: -1})
    shape, chunks = data.shape[1:], data.chunks[1:]
    spread_out = []
    for plane in planes.values():
        whole = plane.data if hasattr(plane.data, "dask") else da.from_array(plane.values, chunks=-1)
        spread_out.append(
            da.broadcast_to(whole, shape, chunks=chunks) if whole.ndim == 0 else whole.rechunk(chunks)
        )
    pixel = "abcdefg"[: len(shape)]
    pairs = [item for plane in spread_out for item in (plane, pixel)]
    common: dict[str, Any] = {"correction": correction, "names": tuple(planes), "concatenate": True}

    # one task a block makes all that the maps need; it is taken apart afterwards
    bands, per_band = data.shape[0], 1 if correction.bands_alike else data.shape[0]
    index = "z" + pixel
    stack = da.blockwise(
        _stacked,
        index,
        data,
        index,
        *pairs,
        per_band=per_band,
        dtype=data.dtype,
        adjust_chunks={"z": bands + 1 + per_band},
        **common,
    )
    gain = stack[bands].astype(np.float32) if correction.has_sigma else None
    factor = stack[bands + 1] if correction.bands_alike else stack[bands + 1 :]
    return stack[:bands], _lazy_flags(correction, data, planes, pixel, pairs), gain, factor.astype(np.float32)


def _lazy_flags(
    correction: Correction, data: Any, planes: Mapping[str, xr.DataArray], pixel: str, pairs: list[Any]
) -> Any:
    import dask.array as da

    common: dict[str, Any] = {"correction": correction, "names": tuple(planes), "dtype": np.int8}
    # values are needed for the flags only where the law itself can refuse them
    if isinstance(correction.laws[0], Hapke):
        return da.blockwise(_flags, pixel, data, "z" + pixel, *pairs, concatenate=True, **common)
    return da.blockwise(_flags_of_geometry, pixel, *pairs, kind=data.dtype, **common)


def _stacked(
    values: NDArray, *planes: NDArray, correction: Correction, names: tuple[str, ...], per_band: int
) -> NDArray:
    """Normalised values, relative sigma and brightness factors, one upon the other."""
    bands = values.shape[0]
    stack = np.empty((bands + 1 + per_band, *values.shape[1:]), dtype=values.dtype)
    _run(values, dict(zip(names, planes, strict=True)), correction, stack=stack)
    return stack


def _flags(values: NDArray, *planes: NDArray, correction: Correction, names: tuple[str, ...]) -> NDArray:
    return _run(values, dict(zip(names, planes, strict=True)), correction, sigma=False, brightness=False)[1]


def _flags_of_geometry(
    *planes: NDArray, correction: Correction, names: tuple[str, ...], kind: Any
) -> NDArray:
    none = np.empty((0, *planes[0].shape), dtype=kind)
    return _run(none, dict(zip(names, planes, strict=True)), correction, sigma=False, brightness=False)[1]


def _run(
    values: NDArray,
    planes: Mapping[str, NDArray],
    correction: Correction,
    threads: int = 1,
    *,
    sigma: bool = True,
    brightness: bool = True,
    stack: NDArray | None = None,
) -> tuple[NDArray, NDArray, NDArray, NDArray]:
    """Arrays of a cube or of one block of it; no bands in `values`: what the geometry alone tells.

    With `stack`, shape (band + 1 + factors, …), values, sigma and factors are written into it.
    """
    shape = values.shape[1:]
    bands, pixels = values.shape[0], math.prod(shape)
    flat = np.ascontiguousarray(values).reshape(bands, pixels)
    whole = {name: np.broadcast_to(plane, shape).reshape(-1) for name, plane in planes.items()}
    flag = np.empty(pixels, dtype=np.int8)
    sigma = sigma and correction.has_sigma
    alike = correction.bands_alike
    if stack is None:
        out = np.empty((bands, pixels), dtype=values.dtype)
        gain = np.empty(pixels if sigma else 0, dtype=np.float32)
        factor = np.empty((brightness * (1 if alike else bands), pixels), dtype=np.float32)
    else:
        whole_stack = stack.reshape(-1, pixels)
        out, gain = whole_stack[:bands], whole_stack[bands] if sigma else np.empty(0, stack.dtype)
        factor = whole_stack[bands + 1 :]
    do = _compiled if correction.mixed_only else _plane_by_plane
    threads = max(1, min(threads, pixels // _THREAD_PIXELS))
    stretch = _BLOCK_PIXELS if do is _plane_by_plane else -(-pixels // (1 if threads == 1 else 8 * threads))

    def one(here: slice) -> None:
        do(correction, flat, _cut(whole, here), out, flag, gain, factor, here, here.start)

    _in_stretches(one, pixels, stretch, threads)
    factor = factor.reshape(shape if alike and brightness else (factor.shape[0], *shape))
    return out.reshape(values.shape), flag.reshape(shape), gain.reshape(shape if sigma else (0,)), factor


def hand_over(
    values: NDArray,
    planes: Mapping[str, NDArray],
    correction: Correction,
    threads: int,
    use: Callable[[NDArray, NDArray | None, NDArray, int], None],
) -> NDArray[np.int8]:
    """Normalise an array in memory and hand it over stretch by stretch, while each is still in the processor's cache.

    Parameters
    ----------
    values : ndarray, shape (band, …)
        Reflectances.
    planes : mapping of str to ndarray
        As for `at_once`.
    correction : Correction
        What to do.
    threads : int
        How many threads share the pixels.
    use : callable
        Called with normalised values (band, pixel), relative sigma (pixel,) or None, brightness factors (1 or band,
        pixel), and the number of the first pixel; what it is given is overwritten afterwards.

    Returns
    -------
    ndarray of int8, shape (…)
        The flags.
    """
    shape = values.shape[1:]
    bands, pixels = values.shape[0], math.prod(shape)
    flat = np.ascontiguousarray(values).reshape(bands, pixels)
    whole = {name: np.broadcast_to(plane, shape).reshape(-1) for name, plane in planes.items()}
    flag = np.empty(pixels, dtype=np.int8)
    do = _compiled if correction.mixed_only else _plane_by_plane
    factors = 1 if correction.bands_alike else bands
    scratch = threading.local()

    def one(here: slice) -> None:
        if not hasattr(scratch, "stack"):
            scratch.stack = np.empty((bands + 1 + factors) * _CACHED_PIXELS, dtype=values.dtype)
            scratch.flag = np.empty(_CACHED_PIXELS, dtype=np.int8)
        m = here.stop - here.start
        stack = scratch.stack[: (bands + 1 + factors) * m].reshape(-1, m)
        out, gain, factor, marks = stack[:bands], stack[bands], stack[bands + 1 :], scratch.flag[:m]
        do(correction, flat, _cut(whole, here), out, marks, gain[: m * correction.has_sigma], factor, here, 0)
        flag[here] = marks
        use(out, gain if correction.has_sigma else None, factor, here.start)

    _in_stretches(one, pixels, _CACHED_PIXELS, max(1, min(threads, pixels // _THREAD_PIXELS)))
    return flag.reshape(shape)


def _cut(planes: Mapping[str, NDArray], here: slice) -> dict[str, NDArray]:
    return {name: np.ascontiguousarray(plane[here]) for name, plane in planes.items()}


def _in_stretches(one: Callable[[slice], None], pixels: int, stretch: int, threads: int) -> None:
    stretches = [slice(start, min(start + stretch, pixels)) for start in range(0, pixels, max(1, stretch))]
    if threads == 1:
        for each in stretches:
            one(each)
    else:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(one, stretches))


def _plane_by_plane(
    correction: Correction,
    values: NDArray,
    planes: dict[str, NDArray],
    out: NDArray,
    flag: NDArray,
    gain: NDArray,
    factor: NDArray,
    here: slice,
    to: int,
) -> None:
    there = slice(to, to + here.stop - here.start)
    angles = (planes["incidence"], planes["emission"], planes["phase"])
    marked = correction.flags(*angles, planes.get("shadow"))
    if gain.size:
        # before the values are looked at, so that the sigma depends on the geometry alone
        gain[there] = correction.sigma(*angles, marked, planes.get("slope_sigma"))
    correction.apply(values[:, here], *angles, marked, out[:, there], factor[:, there])
    flag[there] = marked


def _compiled(
    correction: Correction,
    values: NDArray,
    planes: dict[str, NDArray],
    out: NDArray,
    flag: NDArray,
    gain: NDArray,
    factor: NDArray,
    here: slice,
    to: int,
) -> None:
    from .disk_loop import mixed_law_loop

    angles = [planes[name].astype(values.dtype, copy=False) for name in ("incidence", "emission", "phase")]
    tables = _tables(correction)
    slope_deg = planes.get("slope_sigma")
    slope = tables.slope if slope_deg is None else np.deg2rad(slope_deg.astype(float))
    mixed_law_loop(
        values,
        *angles,
        planes.get("shadow", np.empty(0)).astype(np.uint8, copy=False),
        tables.L,
        tables.at_target,
        tables.spread,
        tables.spread_at_target,
        slope,
        np.append(tables.numbers, float(gain.size > 0)),
        out,
        gain,
        factor,
        flag,
        here.start,
        to,
    )


class _Tables(NamedTuple):
    """What the compiled loop needs of a correction."""

    L: NDArray
    at_target: NDArray
    spread: NDArray
    spread_at_target: NDArray
    slope: NDArray
    numbers: NDArray


@lru_cache(maxsize=64)
def _tables(correction: Correction) -> _Tables:
    laws, spread, target = correction.laws, correction.spread, correction.target
    largest = [math.degrees(math.acos(least)) for least in (correction.least_mu0, correction.least_mu)]
    return _Tables(
        np.array([_coefficients(law) for law in laws]),
        np.array([law.at(target) for law in laws]),
        np.array([_coefficients(law) for law in spread], dtype=float).reshape(-1, 4),
        np.array([law.at(target) for law in spread], dtype=float),
        np.deg2rad([correction.slope_sigma_deg]),
        np.array([1 / correction.target.mu0 if correction.per_mu0 else 0.0, *largest, SLACK_DEG]),
    )


def _coefficients(law: Law) -> tuple[float, float, float, float]:
    """L(g) as a cubic."""
    if isinstance(law, LunarLambert):
        return MCEWEN_1996 if law.L is None else (float(law.L), 0.0, 0.0, 0.0)
    return (0.0, 0.0, 0.0, 0.0) if isinstance(law, Lambert) else (1.0, 0.0, 0.0, 0.0)
