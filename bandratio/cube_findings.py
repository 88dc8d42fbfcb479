"""What really goes wrong with cubes, found before it reaches a map."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ._checks import listed
from .cube import is_lazy
from .registration import band_shifts

__all__ = ["Findings", "check_cube"]

#: A lazy cube of more values than this is sampled (2 GiB of float32 would take a while to read).
_SAMPLED_ABOVE = 1 << 26
_SAMPLE_BLOCKS = 16
#: A shift between bands is looked for in the middle of the picture [pixel], where there are few enough bands to have
#: been taken one after another, and told where it is larger than this [pixel], three times what it is known to.
_MIDDLE, _LEAST_SIDE, _MOST_BANDS, _SHIFT_TOLD = 1024, 64, 32, 0.1


class Findings(list[str]):
    """Plain sentences, none where nothing is wrong; `coverage` says how much of the cube was read."""

    def __init__(self, sentences: list[str], coverage: str) -> None:
        super().__init__(sentences)
        self.coverage = coverage


def check_cube(cube: xr.DataArray, *, full: bool | None = None) -> Findings:
    """Look for what commonly goes wrong with a reflectance cube.

    Percent instead of fraction, scaled integers never unscaled, negative and above-one values, infinite
    values, constant or empty bands, saturation at one value, bands with different missing masks, and
    wavelengths in micrometres, out of order or given twice, bands shifted against each other.

    Parameters
    ----------
    cube : DataArray
        With a `wavelength` dimension, in any state; it need not be a valid cube.
    full : bool, optional
        True reads every pixel; None samples lazy cubes of more than 67 million values, and says so.

    Returns
    -------
    Findings
        A list of sentences, each with how many pixels in which band and what to do; empty where nothing is
        wrong. Its attribute `coverage` says how much was read.

    Raises
    ------
    TypeError, ValueError
        If it is no DataArray with a `wavelength` dimension of real numbers.

    Examples
    --------
    >>> import bandratio as br
    >>> br.check_cube(br.as_cube([[12.5, 25.0], [14.0, 31.0]], [480, 600]))
    ['the values look like percent (100% of them are above 1, the largest is 31); divide by 100']
    """
    if not isinstance(cube, xr.DataArray):
        raise TypeError(f"wanted a DataArray of reflectance, got {type(cube).__name__}; br.as_cube makes one")
    if "wavelength" not in cube.dims:
        raise ValueError(
            f"wanted a dimension wavelength, got {cube.dims}; br.as_cube(array, wavelengths) puts it on"
        )
    if cube.dtype.kind not in "fiu":
        raise TypeError(f"wanted real numbers, got {cube.dtype}")
    cube = cube.transpose("wavelength", ...)
    sentences = list(_of_wavelengths(cube))
    bands = cube.sizes["wavelength"]
    total = cube.size // bands if bands else 0
    if total == 0:
        return Findings([*sentences, "the cube holds no pixel"], "there was nothing to read")
    sampled = is_lazy(cube) and not full and (full is False or cube.size > _SAMPLED_ABOVE)
    tally = _Tally(bands)
    for block in _blocks(cube, sampled):
        tally.add(block.reshape(bands, -1))
    of_values = list(_of_values(tally, _band_names(cube)))
    coverage = f"all {total:,} pixels were read"
    if sampled:
        coverage = f"a sample of {tally.pixels:,} of {total:,} pixels was read; full=True reads all"
        of_values = [f"{sentence} (counted in a sample of {tally.pixels:,} pixels)" for sentence in of_values]
    return Findings([*sentences, *of_values, *_of_shifts(cube, _band_names(cube))], coverage)


def _of_shifts(cube: xr.DataArray, names: list[str]) -> Iterator[str]:
    """Bands that do not lie on each other, seen in the middle of the picture."""
    if (
        cube.ndim != 3
        or cube.shape[0] < 2
        or min(cube.shape[1:]) < _LEAST_SIDE
        or cube.shape[0] > _MOST_BANDS
    ):
        return
    middle = tuple(
        slice(max((size - _MIDDLE) // 2, 0), max((size - _MIDDLE) // 2, 0) + _MIDDLE)
        for size in cube.shape[1:]
    )
    values = np.asarray(cube[(slice(None), *middle)].values, dtype=float)
    reference = values.shape[0] // 2
    for name, (down, across) in zip(names, band_shifts(values, reference).tolist(), strict=True):
        if max(abs(down), abs(across)) > _SHIFT_TOLD:
            yield (
                f"band {name} is shifted by {down:+.2f} pixels along rows and {across:+.2f} along columns against "
                f"band {names[reference]}, which makes slopes out of edges; register the bands, or take the shift into "
                "sigma with br.add_misregistration"
            )


def _band_names(cube: xr.DataArray) -> list[str]:
    if "wavelength" not in cube.coords:
        return [f"number {i + 1}" for i in range(cube.sizes["wavelength"])]
    centres = np.asarray(cube["wavelength"].values, dtype=float)
    return [f"{centre:g} {'µm' if (centres < 30).all() else 'nm'}" for centre in centres]


def _blocks(cube: xr.DataArray, sampled: bool) -> Iterator[NDArray]:
    if not is_lazy(cube):
        yield np.asarray(cube.values)
        return
    edges = [np.cumsum([0, *sizes]) for sizes in cube.chunks[1:]]  # type: ignore[index]
    ranges = [list(itertools.pairwise(e.tolist())) for e in edges]
    places = list(itertools.product(*ranges))
    if sampled:
        chosen = np.unique(np.linspace(0, len(places) - 1, _SAMPLE_BLOCKS).astype(int))
        places = [places[i] for i in chosen]
    largest = 1 << 24
    for place in places:
        index = tuple(slice(*pair) for pair in place)
        block = cube[(slice(None), *index)]
        if sampled and block.size > largest:  # one huge chunk: read a part of it
            rows = max(1, largest * block.shape[1] // block.size)
            block = block[:, :rows]
        yield np.asarray(block.values)


@dataclass
class _Tally:
    bands: int
    pixels: int = 0
    part_missing: int = 0
    all_zero: int = 0
    all_whole: bool = True
    missing: NDArray = field(init=False)
    infinite: NDArray = field(init=False)
    negative: NDArray = field(init=False)
    above_one: NDArray = field(init=False)
    at_most: NDArray = field(init=False)
    least: NDArray = field(init=False)
    most: NDArray = field(init=False)

    def __post_init__(self) -> None:
        for name in ("missing", "infinite", "negative", "above_one", "at_most"):
            setattr(self, name, np.zeros(self.bands, dtype=np.int64))
        self.least = np.full(self.bands, np.inf)
        self.most = np.full(self.bands, -np.inf)

    def add(self, values: NDArray) -> None:
        self.pixels += values.shape[1]
        finite = np.isfinite(values)
        absent = np.isnan(values) if values.dtype.kind == "f" else np.zeros(values.shape, bool)
        self.missing += absent.sum(axis=1)
        some = absent.any(axis=0)
        self.part_missing += int((some & ~absent.all(axis=0)).sum())
        self.infinite += (~finite & ~absent).sum(axis=1)
        self.all_zero += int((values == 0).all(axis=0).sum())
        for j, row in enumerate(values):
            good = row[finite[j]]
            if good.size == 0:
                continue
            self.negative[j] += int((good < 0).sum())
            self.above_one[j] += int((good > 1).sum())
            top = good.max()
            if top > self.most[j]:
                self.most[j], self.at_most[j] = top, 0
            if top == self.most[j]:
                self.at_most[j] += int((good == top).sum())
            self.least[j] = min(self.least[j], good.min())
            self.all_whole = self.all_whole and bool((good == np.rint(good)).all())


def _of_wavelengths(cube: xr.DataArray) -> Iterator[str]:
    if "wavelength" not in cube.coords:
        yield "the bands have no wavelengths; br.as_cube(cube, wavelengths) puts them on"
        return
    centres = np.asarray(cube["wavelength"].values, dtype=float)
    told = listed(centres.tolist(), "nm")
    if not np.isfinite(centres).all() or (centres <= 0).any():
        yield f"the wavelengths must be positive and finite, they are {told}; give the band centres in nm"
        return
    if (centres < 30).all():
        yield f"the wavelengths {told} look like micrometres; multiply by 1000"
    if np.unique(centres).size < centres.size:
        values, counts = np.unique(centres, return_counts=True)
        yield (
            f"{listed(values[counts > 1].tolist(), 'nm')} is given to more than one band, and only the first of them "
            "would be used; drop or average the others"
        )
    elif (np.diff(centres) < 0).any():
        yield f"the bands are not in ascending order of wavelength ({told}); check that none is mislabelled, then sort"


def _of_values(tally: _Tally, names: list[str]) -> Iterator[str]:
    filled = tally.pixels - tally.missing - tally.infinite
    everything = int(filled.sum())
    if everything == 0:
        yield "every value is missing; check the nodata value and the path"
        return
    highest = float(tally.most.max())
    unscaled = tally.above_one.sum() > everything / 2
    if unscaled and tally.all_whole:
        yield (
            f"the values look like scaled integers that were never unscaled (whole numbers up to {highest:g}); give "
            "scale=…, for example scale=0.0001"
        )
    elif unscaled:
        share = f"{tally.above_one.sum() / everything:.0%} of them are above 1, the largest is {highest:g}"
        yield (
            f"the values look like percent ({share}); divide by 100"
            if highest <= 200
            else f"the values are no fractions ({share}); check the scale, and give scale=…"
        )
    if tally.all_zero >= max(2, 1e-4 * tally.pixels):
        yield (
            f"{_pixels(tally.all_zero)} are exactly zero in every band, as fill around an image is; give nodata=0, or "
            "make them NaN"
        )
    for j, name in enumerate(names):
        if filled[j] == 0:
            yield f"band {name} is empty ({tally.pixels:,} missing pixels); leave it out"
            continue
        if tally.infinite[j]:
            yield f"band {name} has {_pixels(tally.infinite[j])} with an infinite value; make them NaN"
        if filled[j] > 1 and tally.least[j] == tally.most[j]:
            yield f"band {name} is constant at {tally.most[j]:g} in {_pixels(filled[j])}; check that it was read right"
            continue
        if tally.negative[j]:
            yield (
                f"band {name} has {_pixels(tally.negative[j])} with a negative value, the lowest {tally.least[j]:g}; "
                "check dark subtraction and the nodata value, or make them NaN"
            )
        if tally.above_one[j] and not unscaled:
            yield (
                f"band {name} has {_pixels(tally.above_one[j])} above 1, the highest {tally.most[j]:g}; reflectance is "
                "a fraction, so check glint, noise and the scale"
            )
        if tally.at_most[j] >= max(10, 1e-4 * filled[j]) and tally.most[j] > 0:
            yield (
                f"band {name} has {_pixels(tally.at_most[j])} at its highest value, {tally.most[j]:g}: saturation? make "
                "them NaN"
            )
    if tally.part_missing:
        told = listed(f"{name}: {count:,}" for name, count in zip(names, tally.missing, strict=True))
        yield (
            f"{_pixels(tally.part_missing)} miss some bands and not others (missing by band: {told}); parameters that "
            "need a missing band are NaN there"
        )


def _pixels(count: int | np.integer) -> str:
    return f"{int(count):,} pixel{'' if count == 1 else 's'}"
