"""Return energy to albedo, and two wavelengths to a ratio with an interval that holds at any signal."""

from .albedo import albedo_from_returns, flag_arguments
from .calibration import LidarCalibration, LidarChannel
from .grid import grid_returns
from .ratio import lidar_ratio
from .returns import as_returns
from .target import calibrate_lidar

__all__ = [
    "LidarCalibration",
    "LidarChannel",
    "albedo_from_returns",
    "as_returns",
    "calibrate_lidar",
    "flag_arguments",
    "grid_returns",
    "lidar_ratio",
]
