"""Open and write cubes and maps: any raster that GDAL reads, Zarr, netCDF; all or nothing, at any size."""

from .atomic import beside
from .cubes import open_cube

__all__ = ["beside", "open_cube"]
