"""Decisions: thresholds, p-values, false discovery rates."""

from .scene import scene_threshold
from .separation import Separation
from .threshold import Threshold, as_threshold
from .thresholds import thresholds

__all__ = ["Separation", "Threshold", "as_threshold", "scene_threshold", "thresholds"]
