"""How far the bands of a cube are shifted against each other, by phase correlation. Arrays only."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["band_shifts", "misregistration_sigma", "pair_shift"]

#: Side of a tile [pixel], and how many are looked at, spread over the picture.
_TILE = 512
_TILES_PER_SIDE = 3
_SMALLEST = 16
#: Spatial frequencies above this are mostly noise and aliasing in a resampled picture [cycles per pixel].
_HIGHEST_FREQUENCY = 0.35
#: Above this a picture of natural ground holds hardly anything but noise [cycles per pixel].
_NOISE_FREQUENCY = 0.45
#: Two bands of one ground agree better than this (independent pictures reach 0.8 at most in trials), and a shift must
#: be known better than this [pixel] to be told.
_LEAST_COHERENCE, _MOST_SIGMA = 0.85, 0.03


def band_shifts(stack: ArrayLike, reference: int | None = None) -> NDArray[np.float64]:
    """Shift of every band against one of them, in pixels.

    Parameters
    ----------
    stack : array_like, shape (band, row, column)
        Reflectance; missing is NaN.
    reference : int, optional
        Index of the band that the others are compared with; the middle one unless given.

    Returns
    -------
    ndarray, shape (band, 2)
        Along rows and columns [pixel]: +0.3 says that a feature lies 0.3 pixels further on in this band. NaN where
        it cannot be told to 0.03 pixels, for want of structure or of values.

    Raises
    ------
    ValueError
        If the stack is not three-dimensional, is smaller than 16 pixels, or there is no such band.

    Notes
    -----
    The phase of the cross-power spectrum of two shifted pictures is a plane through zero whose slope is the shift
    (Kuglin & Hines 1975, from memory; Foroosh et al. 2002, IEEE Trans. Image Process. 11, 188,
    doi:10.1109/83.988953). The peak of the phase correlation gives whole pixels; the plane, fitted with the
    cross-power as weights over the frequencies below 0.35 cycles per pixel, gives the rest. The median over up to
    nine tiles is returned.

    Examples
    --------
    >>> from scipy.ndimage import gaussian_filter
    >>> ground = gaussian_filter(np.random.default_rng(0).normal(size=(96, 96)), 2)
    >>> band_shifts([ground[1:, 2:], ground[:-1, :-2]], reference=0).round(1).tolist()[1]
    [1.0, 2.0]
    """
    bands = np.asarray(stack)
    if bands.ndim != 3:
        raise ValueError(
            f"stack must have the shape (band, row, column), got {bands.shape}; shifts are seen in images only"
        )
    if min(bands.shape[1:]) < _SMALLEST:
        raise ValueError(
            f"shifts need an image of {_SMALLEST} × {_SMALLEST} pixels or more, got {bands.shape[1:]}"
        )
    count = bands.shape[0]
    index = count // 2 if reference is None else reference
    if not -count <= index < count:
        raise ValueError(f"reference must be the index of one of {count} bands, got {reference}")
    index %= count
    shifts = np.zeros((count, 2))
    for band in range(count):
        if band == index:
            continue
        found = [pair_shift(bands[index][tile], bands[band][tile]) for tile in _tiles(bands.shape[1:])]
        told = np.array([each for each in found if np.isfinite(each).all()])
        shifts[band] = np.median(told, axis=0) if told.size else np.nan
    return shifts


def _tiles(shape: tuple[int, ...]) -> list[tuple[slice, slice]]:
    starts = []
    for size in shape:
        count = min(_TILES_PER_SIDE, -(-size // _TILE))
        starts.append(np.unique(np.linspace(0, max(size - _TILE, 0), count).astype(int)))
    return [
        (slice(row, row + _TILE), slice(column, column + _TILE)) for row in starts[0] for column in starts[1]
    ]


def pair_shift(first: NDArray, second: NDArray) -> NDArray[np.float64]:
    """Shift of the second picture against the first, along rows and columns [pixel]; NaN where it cannot be told."""
    nothing = np.full(2, np.nan)
    pictures = [np.array(picture, dtype=float) for picture in (first, second)]
    whole = np.isfinite(pictures[0]) & np.isfinite(pictures[1])
    if whole.mean() < 0.5:
        return nothing
    shift: NDArray[np.float64] = np.zeros(2)
    # the first round finds whole pixels; the next ones compare the overlap, which has the same features in it
    for _ in range(3):
        step = np.rint(shift).astype(int)
        if (np.abs(step) > np.array(whole.shape) // 3).any():
            return nothing
        a, b, both = _overlap(pictures[0], pictures[1], whole, step)
        rest = _phase_shift(a, b, both)
        if rest is None:
            return nothing
        if (np.rint(step + rest) == step).all():
            shift = step + rest
            break
        shift = step + rest
    return shift


def _overlap(a: NDArray, b: NDArray, whole: NDArray, step: NDArray) -> tuple[NDArray, NDArray, NDArray]:
    """Both pictures where they show the same ground, if the second is shifted by `step` whole pixels."""
    here = tuple(slice(max(-s, 0), size - max(s, 0)) for s, size in zip(step.tolist(), a.shape, strict=True))
    there = tuple(slice(max(s, 0), size + min(s, 0)) for s, size in zip(step.tolist(), a.shape, strict=True))
    return a[here], b[there], whole[here] & whole[there]


def _phase_shift(a: NDArray, b: NDArray, whole: NDArray) -> NDArray | None:
    window = np.outer(_taper(a.shape[0]), _taper(a.shape[1])) * whole
    spectra = []
    for picture in (a, b):
        centred = np.where(whole, picture, 0.0)
        centred = (centred - (centred * window).sum() / window.sum()) * window
        power = (centred**2).sum()
        if not power > 1e-20 * max(1.0, np.abs(np.where(whole, picture, 0)).max() ** 2):
            return None
        spectra.append(np.fft.fft2(centred / np.sqrt(power)))
    cross = np.conj(spectra[0]) * spectra[1]
    u, v = np.meshgrid(*(np.fft.fftfreq(size) for size in a.shape), indexing="ij")
    low = (np.hypot(u, v) <= _HIGHEST_FREQUENCY) & ((u != 0) | (v != 0))
    weight = np.abs(cross) * low * _signal_share(np.abs(cross), np.hypot(u, v))
    if not weight.any():
        return None
    phase = np.where(low, cross / np.maximum(np.abs(cross), 1e-300), 0)
    correlation = np.real(np.fft.ifft2(phase * np.sqrt(weight)))
    peak = np.array(np.unravel_index(np.argmax(correlation), correlation.shape), dtype=float)
    shift: NDArray[np.float64] = (peak + np.array(a.shape) // 2) % np.array(a.shape) - np.array(a.shape) // 2
    # Newton's steps to the plane that maximises Σ weight·cos(phase + 2π(u·dy + v·dx)), in which noise averages out
    for _ in range(12):
        angle = np.angle(phase) + 2 * np.pi * (u * shift[0] + v * shift[1])
        residual, held = weight * np.sin(angle), weight * np.maximum(np.cos(angle), 0)
        normal = np.array(
            [[(held * u * u).sum(), (held * u * v).sum()], [(held * u * v).sum(), (held * v * v).sum()]]
        )
        right = np.array([(u * residual).sum(), (v * residual).sum()])
        if np.linalg.det(normal) <= 1e-12 * np.trace(normal) ** 2:
            return None
        change: NDArray[np.float64] = -np.linalg.solve(normal, right) / (2 * np.pi)
        shift = shift + change
        if np.abs(change).max() < 1e-4:
            break
    coherence = float((weight * np.cos(angle)).sum() / weight.sum())
    # standard error from the phases' own scatter; every frequency stands there twice, as k and −k
    scatter = np.stack([u * residual, v * residual]).reshape(2, -1)
    inverse = np.linalg.inv(normal)
    sigma = np.sqrt(2 * np.diag(inverse @ (scatter @ scatter.T) @ inverse)) / (2 * np.pi)
    return shift if coherence > _LEAST_COHERENCE and sigma.max() < _MOST_SIGMA else None


def _signal_share(power: NDArray, frequency: NDArray) -> NDArray[np.float64]:
    """Share of signal in the cross-power, alike all round: what exceeds the level of the highest frequencies."""
    ring = np.minimum((frequency * 100).astype(int), 50)
    level = np.bincount(ring.ravel(), power.ravel()) / np.maximum(np.bincount(ring.ravel()), 1)
    floor = power[frequency > _NOISE_FREQUENCY].mean()
    share = np.maximum(1 - 1.5 * floor / np.maximum(level, 1e-300), 0)
    return np.asarray(share[ring])


def _taper(size: int) -> NDArray[np.float64]:
    """Window that is one in the middle and falls to zero over an eighth of the picture at both ends."""
    place = np.minimum(np.arange(size) + 0.5, size - np.arange(size) - 0.5)
    return np.asarray(np.sin(np.pi / 2 * np.minimum(place / (size / 8), 1)) ** 2)


def misregistration_sigma(stack: ArrayLike, shifts: ArrayLike) -> NDArray[np.float64]:
    """Uncertainty that a shift between bands puts on every pixel: the shift times the local slope of reflectance.

    Parameters
    ----------
    stack : array_like, shape (band, row, column)
        Reflectance.
    shifts : array_like, shape (band, 2)
        Along rows and columns [pixel], as from `band_shifts`.

    Returns
    -------
    ndarray, shape (band, row, column)
        In the unit of the reflectances: ``√((∂R/∂y·dy)² + (∂R/∂x·dx)²)``, from the largest one-sided difference, since
        the other side of an edge may be what the shift brings in.

    Raises
    ------
    ValueError
        If the shapes do not fit or a shift is not finite.
    """
    bands, moved = np.asarray(stack, dtype=float), np.asarray(shifts, dtype=float)
    if bands.ndim != 3 or moved.shape != (bands.shape[0], 2):
        raise ValueError(
            f"wanted a stack (band, row, column) and shifts (band, 2), got {bands.shape} and {moved.shape}"
        )
    if not np.isfinite(moved).all():
        raise ValueError("a shift is not finite; leave out the band, or give the shift that you know")
    squared = np.zeros(bands.shape)
    for axis in (1, 2):
        step = np.abs(np.diff(bands, axis=axis))
        before = [(0, 0)] * 3
        after = [(0, 0)] * 3
        before[axis], after[axis] = (1, 0), (0, 1)
        largest = np.fmax(
            np.pad(step, before, constant_values=np.nan), np.pad(step, after, constant_values=np.nan)
        )
        squared += (np.nan_to_num(largest) * moved[:, axis - 1, None, None]) ** 2
    return np.where(np.isfinite(bands), np.sqrt(squared), np.nan)
