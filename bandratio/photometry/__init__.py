"""Reflectance quantities, and photometric normalisation to one geometry."""

from .angles import Geometry
from .fit import PhotometricFit, fit_photometry
from .hapke import Hapke
from .laws import Akimov, Lambert, Law, LommelSeeliger, LunarLambert, Minnaert
from .normalise import masked_pixels, normalise
from .phase import ExponentialPhase, PhaseFunction, TabulatedPhase
from .quantities import convert_quantity, require_quantity
from .summary import geometry_summary
from .terrain import slope_sigma_from_height, terrain_geometry

__all__ = [
    "Akimov",
    "ExponentialPhase",
    "Geometry",
    "Hapke",
    "Lambert",
    "Law",
    "LommelSeeliger",
    "LunarLambert",
    "Minnaert",
    "PhaseFunction",
    "PhotometricFit",
    "TabulatedPhase",
    "convert_quantity",
    "fit_photometry",
    "geometry_summary",
    "masked_pixels",
    "normalise",
    "require_quantity",
    "slope_sigma_from_height",
    "terrain_geometry",
]
