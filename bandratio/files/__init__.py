"""Open and write cubes and maps: any raster that GDAL reads, Zarr, netCDF; all or nothing, at any size."""

import lazy_loader as _lazy

# numba, which counts the values of a map, is loaded only where maps are written
__getattr__, __dir__, __all__ = _lazy.attach(
    __name__,
    submod_attrs={
        "atomic": ["beside"],
        "cubes": ["open_cube"],
        "geometry": ["open_elevation", "open_geometry"],
        "maps": ["open_maps", "write_and_count", "write_maps"],
        "region_files": ["write_regions"],
        "returns": ["open_returns"],
    },
)
