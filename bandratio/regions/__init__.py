"""Regions: means over labels and polygons with their covariance, and candidates merged into regions."""

from .candidates import candidate_regions, candidate_table
from .means import region_means

__all__ = ["candidate_regions", "candidate_table", "region_means"]
