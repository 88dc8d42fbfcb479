"""Planning: which bands and lasers tell which materials apart."""

from .bands import BandRanking, FilterComparison, compare_filter_sets, rank_bands
from .laser_plan import LaserPlan, plan_lasers
from .lasers import LASER_CAUTION, least_ice

__all__ = [
    "LASER_CAUTION",
    "BandRanking",
    "FilterComparison",
    "LaserPlan",
    "compare_filter_sets",
    "least_ice",
    "plan_lasers",
    "rank_bands",
]
