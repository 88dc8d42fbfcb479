"""Noise from the picture itself: random noise per band, and what misregistration adds."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .cube import is_lazy, require_cube
from .noise import Noise, brightness_factor_of
from .registration import band_shifts, misregistration_sigma

__all__ = ["add_misregistration", "estimate_noise"]

#: Side of the squares that are read [pixel], and how many of a large cube, spread over it.
_SQUARE = 512
_SQUARES = 16
#: Fewer whole 3 × 3 neighbourhoods than this say too little: 1000 give sigma to about 4 %.
_LEAST = 1000
#: σ of a Gaussian over its median absolute deviation.
_SIGMA_PER_MAD = 1.482602218505602


def estimate_noise(cube: xr.DataArray) -> Noise:
    """Random noise of each band, estimated from the picture where nobody knows it.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, y, x)
        Reflectance; a large or lazy cube is read in 16 squares of 512 × 512 pixels spread over it.

    Returns
    -------
    Noise
        With `random` per band [reflectance], for the cube as it came: what is seen in a normalised or converted one is
        divided by its `brightness_factor`. Errors that all pixels share cannot be seen in one picture: add
        ``band_gain``, ``band_offset`` and ``common_gain`` from the calibration report.

    Raises
    ------
    ValueError
        If the cube is no image, or a band has fewer than 1000 pixels with whole neighbourhoods.

    Notes
    -----
    Each pixel is compared with its eight neighbours by the mask ``1 −2 1 / −2 4 −2 / 1 −2 1``, which is blind to
    planes and to straight edges along rows and columns; for noise alone its response has 6 times the noise's sigma
    (Immerkær 1996). The median absolute deviation takes the place of his mean, so that up to half the pixels may be
    edges and texture. Two things mislead it: texture of pixel size everywhere (the estimate is then too large), and
    images that were resampled, whose noise is alike in neighbours (too small).

    References
    ----------
    Immerkær 1996, Comput. Vis. Image Underst. 64, 300, doi:10.1006/cviu.1996.0060.

    Examples
    --------
    >>> import bandratio as br
    >>> picture = 0.2 + np.random.default_rng(0).normal(scale=0.002, size=(1, 128, 128))
    >>> noise = br.estimate_noise(br.as_cube(picture, [600]))
    >>> print(f"{noise.random[600]:.4f}")
    0.0020
    """
    cube = _image(cube, "noise is estimated from images")
    responses: list[list[NDArray]] = [[] for _ in range(cube.sizes["wavelength"])]
    for square in _squares(cube):
        values = np.asarray(square.values, dtype=float)
        factor = (
            (xr.ones_like(square, dtype=float) * brightness_factor_of(square)).transpose(*square.dims).values
        )
        for band, picture in enumerate(values):
            second = picture[:, :-2] - 2 * picture[:, 1:-1] + picture[:, 2:]
            response = (second[:-2] - 2 * second[1:-1] + second[2:]) / factor[band, 1:-1, 1:-1]
            responses[band].append(response[np.isfinite(response)] / 6)
    random = {}
    for wavelength, parts in zip(cube["wavelength"].values.tolist(), responses, strict=True):
        found = np.concatenate(parts) if parts else np.empty(0)
        if found.size < _LEAST:
            raise ValueError(
                f"band {wavelength:g} nm has {found.size} pixels with whole neighbourhoods, and noise is estimated from "
                f"{_LEAST} or more; give noise=… by hand"
            )
        random[wavelength] = float(np.median(np.abs(found - np.median(found))) * _SIGMA_PER_MAD)
    return Noise(random=random)


def add_misregistration(noise: Noise, cube: xr.DataArray, shifts: ArrayLike | None = None) -> Noise:
    """Noise whose random part also covers what shifts between bands do at every edge.

    A shift of a third of a pixel makes slopes out of edges. Registering the bands is the cure; this is for maps
    that must be made without it.

    Parameters
    ----------
    noise : Noise
        What is known without the shifts.
    cube : DataArray, dimensions (wavelength, y, x)
        Reflectance, in memory: the local slope of every pixel is needed.
    shifts : array_like, shape (band, 2), optional
        Along rows and columns [pixel]; as `registration.band_shifts` finds them unless given. One number may be given
        for an uncertainty of registration that is alike in every band and direction.

    Returns
    -------
    Noise
        `random` is a map (wavelength, y, x): ``√(random² + (slope·shift)²)``. As the shift is the same everywhere,
        these errors do not average away over a region whose edges face one way: keep such regions out of means.

    Raises
    ------
    ValueError
        If the cube is lazy or no image, or the shifts cannot be told or do not fit.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube(np.where(np.arange(20) < 10, 0.1, 0.2) * np.ones((2, 16, 1)), [600, 700])
    >>> wider = add_misregistration(br.Noise(random=0.001), cube, 0.3)
    >>> wider.random.sel(wavelength=600, y=3).values[[3, 10]].round(3).tolist()
    [0.001, 0.03]
    """
    cube = _image(cube, "misregistration is seen in images")
    if not isinstance(noise, Noise):
        raise TypeError(f"noise must be a br.Noise, got {type(noise).__name__}")
    if is_lazy(cube):
        raise ValueError(
            "the cube is lazy, and the slope of every pixel is needed; give cube.compute(), or a part of it"
        )
    values = np.asarray(cube.values, dtype=float)
    bands = values.shape[0]
    if shifts is None:
        moved = band_shifts(values)
        if not np.isfinite(moved).all():
            raise ValueError("the shifts between these bands cannot be told from the picture; give shifts=…")
    else:
        moved = np.asarray(shifts, dtype=float)
        moved = np.full((bands, 2), float(moved)) if moved.ndim == 0 else moved
    added = xr.DataArray(
        misregistration_sigma(values, moved), {"wavelength": cube["wavelength"].values}, cube.dims
    )
    # noise is stated for the cube as it came, and these slopes are those of the cube as it is
    added = added / brightness_factor_of(cube)
    before = noise.for_cube(cube.drop_vars("brightness_factor", errors="ignore")).random
    random = ((before**2 + added**2) ** 0.5).transpose(*cube.dims).fillna(0.0)
    return replace(noise, random=random)


def _image(cube: xr.DataArray, why: str) -> xr.DataArray:
    cube = require_cube(cube)
    if cube.ndim != 3:
        raise ValueError(f"{why}, and this cube has dimensions {cube.dims}; wanted (wavelength, y, x)")
    return cube


def _squares(cube: xr.DataArray) -> Iterator[xr.DataArray]:
    rows, columns = cube.shape[1:]
    if not is_lazy(cube) and rows * columns <= _SQUARES * _SQUARE**2:
        yield cube
        return
    side = round(_SQUARES**0.5)
    for row in np.unique(np.linspace(0, max(rows - _SQUARE, 0), side).astype(int)):
        for column in np.unique(np.linspace(0, max(columns - _SQUARE, 0), side).astype(int)):
            yield cube[:, row : row + _SQUARE, column : column + _SQUARE]
