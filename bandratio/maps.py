"""Cube and parameters and noise to maps: a Dataset of values, each with its standard uncertainty, at any size."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ._checks import listed, require_noise
from .bands import TOLERANCE_NM
from .catalogue import resolve
from .cube import is_lazy, require_cube
from .noise import BandNoise, Noise
from .ratio import BandRatio

if TYPE_CHECKING:
    from .kernel import NoiseTable, RatioTable
    from .photometry.plan import Plan

__all__ = ["PARTS", "map_attributes", "parameters"]

#: What is appended to a parameter's name for each plane that the kernel makes, with its readable name.
PARTS = {
    "": "",
    "_sigma": "standard uncertainty of ",
    "_sigma_random": "random part of the standard uncertainty of ",
    "_sigma_shared": "shared part of the standard uncertainty of ",
}


def parameters(
    cube: xr.DataArray,
    noise: Noise | None = None,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | str | BandRatio | None = None,
    *,
    geometry: Mapping[str, Any] | xr.Dataset | None = None,
    tolerance: float = TOLERANCE_NM,
    parts: bool = False,
) -> xr.Dataset:
    """Maps of spectral parameters, each with its standard uncertainty.

    Parameters
    ----------
    cube : DataArray of float, dimensions (wavelength, …)
        Reflectance as a fraction, band centres [nm]. Missing is NaN. A lazy (dask) cube gives lazy maps.
    noise : Noise, optional
        What is known about the errors; without it there are values only.
    names : sequence of str and BandRatio, or mapping of str to BandRatio, optional
        Which parameters; None gives every parameter of the catalogue that the bands allow and says in the
        attribute `left_out` which it left out and why. In a list, a missing band is an error.
    geometry : mapping or Dataset, optional
        Arguments of `normalise`, as ``{"incidence": …, "emission": …, "phase": …, "law": …}`` or what `terrain_geometry`
        gives: the maps are those of the normalised cube, made in the same pass over memory.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].
    parts : bool
        Also give the random and the shared part of each sigma, since a region's mean averages one and not
        the other.

    Returns
    -------
    Dataset, dimensions of `cube` without `wavelength`
        ``<name>``, with noise ``<name>_sigma``, with parts also ``<name>_sigma_random`` and
        ``<name>_sigma_shared``, in the dtype of the cube. NaN where a band is missing or the denominator is
        not positive.

    Raises
    ------
    ValueError, TypeError
        If the cube is none, a name is unknown, a band is missing, two names clash, or the noise does not fit.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.12562, 0.15204, 0.17002, 0.18566], [480, 600, 700, 830])
    >>> maps = br.parameters(soil, br.Noise(random=0.001), ["red_slope", br.BandRatio({600: 1}, {480: 1})])
    >>> print(f"{float(maps.red_slope):.2f} ± {float(maps.red_slope_sigma):.2f} {maps.red_slope.units}")
    11.17 ± 0.88 % per 100 nm
    """
    cube = require_cube(cube)
    require_noise(noise)
    made = None if geometry is None else _plan(cube, geometry)
    if made is not None and (made.lazy or not made.linear or not _known_per_band(cube, noise)):
        from .photometry import normalise

        # lazy blocks are normalised and mapped one after the other anyway; the rest does not fit the single pass
        cube, made = normalise(cube, **_arguments(geometry)), None
    if parts and noise is None:
        raise ValueError("parts=True splits the sigmas, for which noise=… is needed")
    centres = np.asarray(cube["wavelength"].values, dtype=float)
    ratios, left_out = resolve(names, centres, tolerance=tolerance)
    if not ratios:
        raise ValueError(
            f"the bands {listed(centres.tolist(), 'nm')} allow no parameter of the catalogue; give names=… with "
            "BandRatio objects"
        )
    suffixes = list(PARTS)[: 1 if noise is None else 4 if parts else 2]
    for name in (name + suffix for name in ratios for suffix in suffixes):
        if name in cube.dims or name in cube.coords:
            raise ValueError(
                f"{name!r} is the name of one of the cube's coordinates; give the ratio another name, or rename the "
                "coordinate"
            )

    if made is None:
        planes = _planes(cube, noise, list(ratios.values()), centres, tolerance, parts)
    else:
        planes, cube = _in_one_pass(made, noise, list(ratios.values()), centres, tolerance, parts)
    dims = tuple(dim for dim in cube.dims if dim != "wavelength")
    # what each pixel was multiplied by and how well that is known has entered the sigmas, and is of no more use
    used_up = ("pixel_gain", "brightness_factor")
    coords = {
        name: c for name, c in cube.coords.items() if "wavelength" not in c.dims and name not in used_up
    }
    # where the map projection stands under another name than spatial_ref, every map must say so
    mapping = {key: cube.encoding[key] for key in ("grid_mapping",) if key in cube.encoding}
    variables = {}
    for k, (name, ratio) in enumerate(ratios.items()):
        for part, suffix in enumerate(suffixes):
            variables[name + suffix] = xr.Variable(
                dims,
                planes[k, part],
                map_attributes(ratio, suffix, suffixes, centres, tolerance),
                mapping,
            )
    attributes: dict[str, Any] = {"Conventions": "CF-1.11", "bandratio_version": _version()}
    attributes["wavelengths"] = ", ".join(f"{centre:g}" for centre in centres) + " nm"
    attributes["noise"] = noise.describe() if noise is not None else "none given"
    carried = [name for name in ("pixel_gain", "brightness_factor") if name in cube.coords]
    if made is not None:
        carried = ["pixel_gain"] * made.correction.has_sigma + ["brightness_factor"]
    if noise is not None and carried:
        attributes["noise_of_the_cube"] = f"{' and '.join(carried)} of the cube enter the sigmas"
    attributes["left_out"] = "; ".join(f"{name}: {reason}" for name, reason in left_out.items())
    if "normalisation" in cube.attrs:
        attributes["normalisation"] = cube.attrs["normalisation"]
    return xr.Dataset(variables, coords, attributes)


def map_attributes(
    ratio: BandRatio, suffix: str, suffixes: Sequence[str], centres: NDArray, tolerance: float
) -> dict[str, Any]:
    """Attributes of one variable of the maps."""
    if suffix:
        return {"long_name": PARTS[suffix] + ratio.readable, "units": ratio.units}
    attributes: dict[str, Any] = dict(ratio.describe(centres, tolerance))
    if len(suffixes) > 1:
        attributes["ancillary_variables"] = " ".join(ratio.name + other for other in suffixes[1:])
    return attributes


def _version() -> str:
    from . import __version__

    return __version__


def _arguments(geometry: Any) -> dict[str, Any]:
    if not isinstance(geometry, Mapping):
        raise TypeError(
            "geometry is a mapping of normalise's arguments, {'incidence': …, 'emission': …, 'phase': …}, or what "
            f"terrain_geometry gives, got {type(geometry).__name__}"
        )
    missing = [name for name in ("incidence", "emission", "phase") if name not in geometry]
    if missing:
        raise ValueError(f"geometry has no {listed(missing)}; it holds {listed(geometry)}")
    return {str(name): value for name, value in geometry.items()}


def _plan(cube: xr.DataArray, geometry: Any) -> Plan:
    from .photometry.plan import plan_normalisation

    return plan_normalisation(cube, **_arguments(geometry))


def _known_per_band(cube: xr.DataArray, noise: Noise | None) -> bool:
    """True where nothing that enters the sigmas differs from pixel to pixel before the normalisation."""
    carried = "pixel_gain" in cube.coords or "brightness_factor" in cube.coords
    return cube.ndim > 1 and not carried and (noise is None or not noise.random_is_map)


def _in_one_pass(
    made: Plan,
    noise: Noise | None,
    ratios: list[BandRatio],
    centres: NDArray,
    tolerance: float,
    parts: bool,
) -> tuple[NDArray, xr.DataArray]:
    """The kernel's planes of the normalised cube, which is never held whole, and the cube with its new labels."""
    from .kernel import NoiseTable, RatioTable, cores, evaluate
    from .photometry.execution import hand_over

    cube = made.cube
    table = RatioTable.build(ratios, centres, tolerance)
    noises = None if noise is None else _noise_table(noise.for_cube(cube, tolerance), NoiseTable)
    shape = cube.shape[1:]
    planes = np.empty(
        (len(ratios), 1 if noise is None else 4 if parts else 2, cube[0].size), dtype=cube.dtype
    )
    # a fraction of the value stays that fraction: the factor matters to the other parts alone
    scaled = noises is not None and bool(noises.random[:, :2].any() or noises.shared[:, 0].any())

    def use(values: NDArray, gain: NDArray | None, factor: NDArray, first: int) -> None:
        evaluate(
            values,
            table,
            noises,
            pixel_gain=None if noises is None else gain,
            brightness_factor=factor if scaled else None,
            parts=parts,
            out=planes,
            offset=first,
        )

    in_memory = {name: plane.values for name, plane in made.planes.items()}
    flag = hand_over(cube.values, in_memory, made.correction, cores(), use)
    return planes.reshape(*planes.shape[:2], *shape), made.labelled(cube.values, flag.reshape(shape))


def _planes(
    cube: xr.DataArray,
    noise: Noise | None,
    ratios: list[BandRatio],
    centres: NDArray,
    tolerance: float,
    parts: bool,
) -> Any:
    """The kernel's planes, shape (ratio, plane, …): numpy for a cube in memory, dask for a lazy one."""
    from .kernel import NoiseTable, RatioTable, cores

    table = RatioTable.build(ratios, centres, tolerance)
    noises, per_pixel = None, {}
    if noise is not None:
        used = np.zeros(centres.size, dtype=bool)
        used[table.band] = True
        band = noise.for_cube(cube, tolerance, used=used)
        noises = _noise_table(band, NoiseTable)
        if noise.random_is_map:
            per_pixel["random_map"] = _like_the_cube(band.random, cube)
        for name in ("pixel_gain", "brightness_factor"):
            plane = getattr(band, name)
            if isinstance(plane, xr.DataArray):
                per_pixel[name] = _like_the_cube(plane, cube)
    if is_lazy(cube) or any(is_lazy(plane) for plane in per_pixel.values()):
        return _lazy_planes(cube, table, noises, per_pixel, parts)
    in_memory = [plane.values for plane in per_pixel.values()]
    return _block(
        cube.values,
        *in_memory,
        names=tuple(per_pixel),
        table=table,
        noises=noises,
        parts=parts,
        threads=cores(),
    )


def _like_the_cube(plane: xr.DataArray, cube: xr.DataArray) -> xr.DataArray:
    """A plane with the cube's dimensions in their order; `wavelength` has length 1 where it had none."""
    sizes = {dim: cube.sizes[dim] for dim in cube.dims if dim not in plane.dims}
    return plane.expand_dims({**sizes, "wavelength": 1} if "wavelength" in sizes else sizes).transpose(
        *cube.dims
    )


def _noise_table(band: BandNoise, build: type[NoiseTable]) -> NoiseTable:
    random = band.random.values if band.random.dims == ("wavelength",) else np.zeros(band.shot.size)
    return build.build(
        random,
        band.shot.values,
        band.relative.values,
        band.band_gain.values,
        band.band_offset.values,
        band.common_gain,
    )


def _lazy_planes(
    cube: xr.DataArray,
    table: RatioTable,
    noises: NoiseTable | None,
    per_pixel: Mapping[str, xr.DataArray],
    parts: bool,
) -> Any:
    import dask.array as da
    from dask.base import tokenize

    bands = cube.chunk({"wavelength": -1}).data
    planes = 1 if noises is None else 4 if parts else 2
    inputs = [bands]
    spatial = dict(zip(cube.dims[1:], bands.chunks[1:], strict=True))
    inputs += [plane.chunk({"wavelength": -1, **spatial}).data for plane in per_pixel.values()]
    # one task a block makes all planes; they are taken apart afterwards
    return da.map_blocks(
        _block,
        *inputs,
        names=tuple(per_pixel),
        table=table,
        noises=noises,
        parts=parts,
        dtype=cube.dtype,
        chunks=((table.scale.size,), (planes,), *bands.chunks[1:]),
        new_axis=1,
        meta=np.empty((0,) * (bands.ndim + 1), cube.dtype),
        name="parameters-" + tokenize(bands.name, table, noises, parts, *(a.name for a in inputs[1:])),
    )


def _block(
    reflectance: NDArray,
    *per_pixel: NDArray,
    names: tuple[str, ...] = (),
    table: RatioTable,
    noises: NoiseTable | None,
    parts: bool,
    threads: int = 1,
) -> NDArray:
    from .kernel import evaluate

    bands, shape = reflectance.shape[0], reflectance.shape[1:]
    flat = {
        name: np.broadcast_to(plane, (plane.shape[0], *shape)).reshape(plane.shape[0], -1)
        for name, plane in zip(names, per_pixel, strict=True)
    }
    gain = flat.get("pixel_gain")
    planes = evaluate(
        reflectance.reshape(bands, -1),
        table,
        noises,
        random_map=flat.get("random_map"),
        pixel_gain=None if gain is None else gain[0],
        brightness_factor=flat.get("brightness_factor"),
        parts=parts,
        threads=threads,
    )
    return planes.reshape(*planes.shape[:2], *shape)
