"""Decisions: thresholds, p-values, false discovery rates."""

from .scene import scene_threshold
from .separation import Separation
from .threshold import Threshold, as_threshold
from .threshold_files import read_thresholds, write_thresholds
from .thresholds import thresholds

__all__ = [
    "Separation",
    "Threshold",
    "as_threshold",
    "read_thresholds",
    "scene_threshold",
    "thresholds",
    "write_thresholds",
]
