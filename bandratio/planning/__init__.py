"""Planning: which bands and lasers tell which materials apart."""

from .bands import BandRanking, FilterComparison, compare_filter_sets, rank_bands

__all__ = ["BandRanking", "FilterComparison", "compare_filter_sets", "rank_bands"]
