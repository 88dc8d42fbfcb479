"""Particulate scattering after Hapke, areal and intimate mixtures. Arrays only; nothing heavy is imported."""

from .hapke import (
    chandrasekhar_h,
    grain_albedo,
    reflectance_from_albedo,
    single_scattering_albedo,
    white_reflectance,
)
from .mixtures import areal_mixture, intimate_mixture, mass_weights
from .optical_constants import ICE_DENSITY, ice_albedo, ice_constants, ice_reflectance

__all__ = [
    "ICE_DENSITY",
    "areal_mixture",
    "chandrasekhar_h",
    "grain_albedo",
    "ice_albedo",
    "ice_constants",
    "ice_reflectance",
    "intimate_mixture",
    "mass_weights",
    "reflectance_from_albedo",
    "single_scattering_albedo",
    "white_reflectance",
]
