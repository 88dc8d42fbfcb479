"""What a lidar of two wavelengths returns from the Corvane Basin: counts along tracks, with their calibration."""

from __future__ import annotations

import numpy as np
import xarray as xr

from ..lidar import LidarCalibration, LidarChannel, as_returns
from ..mixing import reflectance_from_albedo, single_scattering_albedo
from .basin import PIXEL_M, Basin
from .scene import material_spectra

__all__ = ["CALIBRATION", "INFRARED_NM", "RED_NM", "range_counts"]

RED_NM, INFRARED_NM = 640.0, 1535.0
_HEIGHT_M = 50_000.0
#: Counts from a target of albedo 1 at the orbit's height, straight below.
_RED_COUNTS, _INFRARED_COUNTS = 20_000.0, 16_000.0
_TRACKS, _SHOT_SPACING_PIXELS = 150, 1.0


def _channel(counts: float, limit: float) -> LidarChannel:
    return LidarChannel(
        constant=counts * _HEIGHT_M**2,
        constant_sigma=0.01 * counts * _HEIGHT_M**2,
        transmitted=1.0,
        relative=0.01,
        energy_per_count=1.0,
        read_noise=8.0,
        limit=limit,
    )


#: What is known about the lidar. Its true constants differ from it by one standard uncertainty at most.
CALIBRATION = LidarCalibration(
    red=_channel(_RED_COUNTS, 60.0),
    infrared=_channel(_INFRARED_COUNTS, 60.0),
    units="counts",
    source="made with the scene",
)


def range_counts(basin: Basin, seed: int = 1535) -> xr.Dataset:
    """Returns along parallel tracks, with the truth behind each.

    Parameters
    ----------
    basin : Basin
        The place.
    seed : int
        Of the errors.

    Returns
    -------
    Dataset over shot
        As from `as_returns`, with position, range and incidence, and ``true_ice``, the share of frost in the beam.

    Notes
    -----
    Eye safety of any laser follows IEC 60825-1, local rules and a licensed laser safety officer; no figure here is
    a safety assessment.
    """
    rng = np.random.default_rng(seed)
    rows, columns = basin.elevation_m.shape
    tracks = np.linspace(1, columns - 2, min(_TRACKS, columns - 2))
    row = np.tile(np.arange(1.0, rows - 1, _SHOT_SPACING_PIXELS), tracks.size).astype(int)
    column = np.repeat(np.rint(tracks), row.size // tracks.size).astype(int)

    steepness = np.hypot(*np.gradient(basin.elevation_m, PIXEL_M))
    incidence = np.degrees(np.arctan(steepness))[row, column]
    range_m = _HEIGHT_M - basin.elevation_m[row, column]

    # each material as the lidar sees it: same grains, seen along the beam instead of at 30/0
    grains = single_scattering_albedo(material_spectra([RED_NM, INFRARED_NM]))
    shares = basin.shares[:, row, column]
    energies = {}
    for band, (name, counts) in enumerate({"red": _RED_COUNTS, "infrared": _INFRARED_COUNTS}.items()):
        albedo = reflectance_from_albedo(grains[:, band, None], incidence, incidence)
        seen = (shares * albedo).sum(axis=0)
        gain = 1 + 0.01 * np.clip(rng.standard_normal(), -1, 1)
        expected = counts * gain * seen * np.cos(np.radians(incidence)) * (_HEIGHT_M / range_m) ** 2
        expected *= 1 + 0.01 * rng.standard_normal(expected.size)
        energy = rng.poisson(expected) + 8.0 * rng.standard_normal(expected.size)
        energies[name] = np.where(energy < 60.0, 0.0, energy)
    returns = as_returns(
        energies["red"],
        energies["infrared"],
        zero="dropout",
        units="counts",
        x=(column + 0.5 - columns / 2) * PIXEL_M,
        y=(rows / 2 - 0.5 - row) * PIXEL_M,
        range_m=range_m,
        incidence_deg=incidence,
    )
    return returns.assign(true_ice=("shot", basin.share("frost")[row, column], {"units": "1"}))
