"""What a camera in orbit sees of the Corvane Basin: a cube of five bands with errors of known size."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import rioxarray  # noqa: F401 (its accessor keeps the map projection)
import xarray as xr
from numpy.typing import NDArray

from ..cube import as_cube
from ..noise import Noise
from ..photometry import Geometry, LunarLambert
from ..photometry.terrain import terrain_geometry
from ..spectra import reference_spectra
from .basin import MATERIALS, PIXEL_M, RADIUS_M, Basin

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = [
    "BANDS_NM",
    "CRS",
    "FWHM_NM",
    "NOISE",
    "SUN_AZIMUTH_DEG",
    "SUN_ELEVATION_DEG",
    "material_spectra",
    "see",
]

BANDS_NM = (480.0, 600.0, 700.0, 750.0, 830.0)
FWHM_NM = (25.0, 25.0, 25.0, 20.0, 30.0)
SUN_AZIMUTH_DEG, SUN_ELEVATION_DEG = 110.0, 28.0
#: What is known about the camera's errors, and what the scene is made with.
NOISE = Noise(random=0.0002, shot=0.0008, band_gain=0.002, band_offset=0.00005, common_gain=0.02)
#: Map projection: an invented sphere.
CRS = f"+proj=eqc +lat_ts=0 +lon_0=0 +R={RADIUS_M:.0f} +units=m +no_defs"
#: Sky-lit floor of a shadow, as a share of the light on level ground: light scattered from the slopes around.
_SHADOW_LIGHT = 0.02


def material_spectra(wavelengths: Sequence[float]) -> NDArray[np.float64]:
    """Reflectance factor at 30/0/30 of each of the scene's materials, shape (material, wavelength)."""
    table = reference_spectra(wavelengths)
    samples = [str(sample) for sample in table["sample"].values]
    return np.array(
        [
            sum(part * table.values[samples.index(sample)] for sample, part in mixture.items())
            for mixture in MATERIALS.values()
        ]
    )


def see(basin: Basin, seed: int = 600, *, noise: Noise = NOISE) -> xr.Dataset:
    """Cube of the basin, its geometry, and the truth behind it.

    Parameters
    ----------
    basin : Basin
        The place.
    seed : int
        Of the errors.
    noise : Noise
        Their sizes, the same in every band.

    Returns
    -------
    Dataset
        ``cube`` (wavelength, y, x): radiance factor with errors; ``incidence``, ``emission``, ``phase`` [deg] and
        ``shadow`` (y, x); ``elevation`` [m]; ``true_cube``: reflectance factor at 30/0/30 without errors. On a
        sphere of the invented body's radius, in metres from the basin's middle.
    """
    dem = xr.DataArray(
        basin.elevation_m, _grid(basin.elevation_m.shape), ("y", "x"), "elevation", {"units": "m"}
    ).rio.write_crs(CRS)
    geometry = terrain_geometry(dem, sun=(SUN_AZIMUTH_DEG, SUN_ELEVATION_DEG))
    true = np.einsum("mb,myx->byx", material_spectra(BANDS_NM), basin.shares)

    laboratory = Geometry(30, 0, 30)
    law = LunarLambert()
    mu0, mu = (np.cos(np.radians(geometry[name].values)) for name in ("incidence", "emission"))
    standard = law.disk(laboratory.mu0, 1.0, 30.0)
    brightness = law.disk(np.maximum(mu0, 0), np.maximum(mu, 0.02), geometry["phase"].values) / standard
    height = np.radians(SUN_ELEVATION_DEG)
    dim = _SHADOW_LIGHT * law.disk(np.sin(height), 1.0, 90.0 - SUN_ELEVATION_DEG) / standard
    brightness = np.where(geometry["shadow"].values, dim, np.maximum(brightness, dim))
    seen = true * laboratory.mu0 * brightness  # radiance factor: I/F = μ0 · REFF

    rng = np.random.default_rng(seed)
    z = rng.standard_normal
    spread = np.sqrt(noise.random**2 + noise.shot**2 * seen)
    seen = seen * (1 + noise.common_gain * z()) * (
        1 + noise.band_gain * z((5, 1, 1))
    ) + noise.band_offset * z((5, 1, 1))
    seen = seen + spread * z(seen.shape)

    scene = geometry.assign(elevation=dem.astype(np.float32))
    dims = ("wavelength", "y", "x")
    scene["cube"] = as_cube(
        xr.DataArray(seen.astype(np.float32), dims=dims), BANDS_NM, FWHM_NM, quantity="radiance_factor"
    )
    scene["true_cube"] = (dims, true.astype(np.float32))
    return scene


def _grid(shape: tuple[int, ...]) -> dict[str, tuple[str, NDArray]]:
    """Pixel centres in metres, north first, the basin's middle at the origin."""
    rows, columns = shape
    return {
        "y": ("y", (rows / 2 - 0.5 - np.arange(rows)) * PIXEL_M),
        "x": ("x", (np.arange(columns) + 0.5 - columns / 2) * PIXEL_M),
    }
