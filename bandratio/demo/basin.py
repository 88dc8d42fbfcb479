"""The Corvane Basin: an invented place on an invented airless body, as relief and as shares of materials.

A mare plain, a highland ridge, an opaque-rich flow, vents with bright and dark mantles, and a shadowed crater floor
with frost. Everything is made from one seed, so that it is the same on every machine.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["MATERIALS", "PIXEL_M", "RADIUS_M", "Basin", "make_basin"]

#: Size of a pixel [m] and radius of the invented body [m].
PIXEL_M = 100.0
RADIUS_M = 1_100_000.0

#: The materials of the scene, in the order of the shares; each a mixture of samples of the reference table.
#: The mantles are invented: the table holds no volcanic glass.
MATERIALS = {
    "mare": {"Basalt weathered BR93-43": 0.55, "Soil 62231": 0.45},
    "highland": {"Soil 62231": 0.85, "Bytownite HS105.3B": 0.15},
    "outcrop": {"Soil 62231": 0.45, "Bronzite HS9.3B": 0.35, "Olivine KI3054 Fo66 <60 µm": 0.20},
    "opaque flow": {"Basalt fresh BR93-46B": 0.55, "Ilmenite HS231.3B": 0.45},
    "bright mantle": {"Bytownite HS105.3B": 0.55, "Soil 62231": 0.45},
    "dark mantle": {"Magnetite HS195.3B": 0.75, "Basalt fresh BR93-46B": 0.25},
    "frost": {"Snow mSnw05": 1.0},
}


@dataclass(frozen=True)
class Basin:
    """The place itself, before anything looks at it.

    Parameters
    ----------
    elevation_m : ndarray, shape (y, x)
        Height [m]; the first row is the northernmost.
    shares : ndarray, shape (material, y, x)
        Share of the area of each of `MATERIALS` [1], summing to one.
    """

    elevation_m: NDArray[np.float64]
    shares: NDArray[np.float64]

    def share(self, material: str) -> NDArray[np.float64]:
        """Share of one material, shape (y, x)."""
        found: NDArray[np.float64] = self.shares[list(MATERIALS).index(material)]
        return found


def make_basin(side: int = 640, seed: int = 480) -> Basin:
    """Make the Corvane Basin.

    Parameters
    ----------
    side : int
        Pixels along each side.
    seed : int
        Of everything random in it.
    """
    if side < 64:
        raise ValueError(f"side must be 64 pixels or more for the basin to have its parts, got {side}")
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[0:side, 0:side] / side
    rough = _fractal(rng, side, 3.4)
    patchy = _fractal(rng, side, 2.4)
    smooth = _fractal(rng, side, 4.5)
    scale = side / 640  # heights follow the side, so that slopes do not depend on it

    ridge = _band(y - (0.24 + 0.16 * (x - 0.3) + 0.03 * rough), 0.075)
    highland = np.clip(_step(0.24 + 0.16 * (x - 0.3) - y + 0.02 * rough, 0.02) + 0.9 * ridge, 0, 1)
    basin = _step(y - 0.42 + 0.05 * rough, 0.06)
    meters = 20.0 * scale * rough * (1 + 1.2 * highland)
    meters += 950.0 * scale * ridge * (1 + 0.10 * smooth) - 260.0 * scale * basin

    floor = (0.115, 0.80, 0.072)
    meters += _crater(y, x, *floor, depth_m=2300.0 * scale)
    for _ in range(38):
        radius = 0.006 * rng.pareto(1.9) + 0.006
        radius = min(radius, 0.05)
        cy, cx = rng.random(2)
        if np.hypot(cy - floor[0], cx - floor[1]) > radius + floor[2] * 1.3:
            meters += _crater(y, x, cy, cx, radius, depth_m=0.2 * 2 * radius * side * PIXEL_M * 0.55)

    flow_line = 0.66 + 0.12 * np.sin(5.2 * x + 0.6) + 0.030 * patchy
    flow = _band(y - flow_line, 0.055) * _step(x - 0.05, 0.02) * _step(0.62 - x + 0.03 * patchy, 0.02)
    meters += 45.0 * flow

    shares = {name: np.zeros((side, side)) for name in MATERIALS}
    shares["mare"] += 1.0
    _cover(shares, "highland", np.clip(highland + 0.10 * patchy * (1 - highland), 0.02, 0.97))
    outcrop = 0.7 * _step(0.5 * patchy + 0.5 * smooth - 0.9, 0.15) * ridge
    for cy, cx in ((0.57, 0.17), (0.88, 0.46), (0.50, 0.93)):
        outcrop = np.maximum(outcrop, 0.75 * _spot(y, x, cy, cx, 0.018, patchy))
    _cover(shares, "outcrop", outcrop)
    _cover(shares, "opaque flow", 0.85 * np.clip(flow + 0.05 * patchy * flow, 0, 1))
    for cy, cx, size, strength in (
        (0.53, 0.72, 0.042, 0.95),
        (0.83, 0.80, 0.030, 0.85),
        (0.74, 0.90, 0.018, 0.8),
    ):
        meters += _vent(y, x, cy, cx, size * 0.3, side)
        _cover(shares, "bright mantle", strength * _spot(y, x, cy, cx, size, patchy))
    for cy, cx, size, strength in ((0.90, 0.16, 0.036, 0.95), (0.58, 0.40, 0.022, 0.9)):
        meters += _vent(y, x, cy, cx, size * 0.3, side)
        _cover(shares, "dark mantle", strength * _spot(y, x, cy, cx, size, patchy))
    _cover(shares, "frost", 0.35 * _spot(y, x, floor[0] + 0.006, floor[1] + 0.020, 0.030, patchy))
    return Basin(meters, np.stack(list(shares.values())))


def _fractal(rng: np.random.Generator, side: int, slope: float) -> NDArray[np.float64]:
    """A field of unit variance whose power falls with frequency to the given power."""
    frequency = np.hypot(np.fft.fftfreq(side)[:, None], np.fft.rfftfreq(side)[None, :])
    frequency[0, 0] = np.inf
    field = np.fft.irfft2(
        np.fft.rfft2(rng.standard_normal((side, side))) * frequency ** (-slope / 2), s=(side, side)
    )
    unit: NDArray[np.float64] = (field - field.mean()) / field.std()
    return unit


def _step(t: NDArray, width: float) -> NDArray[np.float64]:
    """From 0 to 1 around t = 0."""
    smooth: NDArray[np.float64] = 0.5 + 0.5 * np.tanh(t / width)
    return smooth


def _band(t: NDArray, width: float) -> NDArray[np.float64]:
    bell: NDArray[np.float64] = np.exp(-((t / width) ** 2))
    return bell


def _spot(y: NDArray, x: NDArray, cy: float, cx: float, size: float, patchy: NDArray) -> NDArray[np.float64]:
    """A mantle around a vent: full near it, thinning outward, with a ragged edge."""
    distance = np.hypot(y - cy, x - cx) / (size * (1 + 0.10 * patchy))
    return _step(1.0 - distance, 0.28)


def _crater(
    y: NDArray, x: NDArray, cy: float, cx: float, radius: float, depth_m: float
) -> NDArray[np.float64]:
    """A bowl with a raised rim that fades over a radius outward."""
    r = np.hypot(y - cy, x - cx) / radius
    bowl = -depth_m * np.clip(1 - r**2, 0, None)
    rim: NDArray[np.float64] = 0.2 * depth_m * np.exp(-(((r - 1) / 0.28) ** 2))
    return bowl + rim


def _vent(y: NDArray, x: NDArray, cy: float, cx: float, radius: float, side: int) -> NDArray[np.float64]:
    return _crater(y, x, cy, cx, radius, depth_m=0.35 * radius * side * PIXEL_M)


def _cover(shares: dict[str, NDArray], material: str, share: NDArray) -> None:
    """Lay a material over what is there, which keeps what the cover leaves."""
    for other in shares:
        shares[other] *= 1 - share
    shares[material] += share
