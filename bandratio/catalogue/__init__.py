"""The named parameters, each with its published source."""

from .definitions import defines, gradient_ratio, shoulder_of
from .lookup import available, named_ratio, names, resolve
from .values import mafic_depth, red_slope, reflectance_700, uv_vis_slope

__all__ = [
    "available",
    "defines",
    "gradient_ratio",
    "mafic_depth",
    "named_ratio",
    "names",
    "red_slope",
    "reflectance_700",
    "resolve",
    "shoulder_of",
    "uv_vis_slope",
]
