"""Generated scenes of any size for the benchmarks: no data of anyone, the same at every run."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import rasterio
from rasterio.windows import Window

CENTRES = [480, 600, 700, 830]
WAVELENGTHS = ",".join(map(str, CENTRES))
#: Mean reflectance of the four bands: a mature soil (Pieters 1999, RELAB soil 62231).
SOIL = np.array([0.12562, 0.15204, 0.17002, 0.18566], np.float32)
#: What the map command is told about the noise.
NOISE = ["--random", "0.001", "--band-gain", "0.01"]


def block(rng: np.random.Generator, rows: int, columns: int, bands: int = 4) -> np.ndarray:
    """Reflectances with shading that all bands share and noise of each pixel and band, float32."""
    shade = 1 + 0.1 * np.sin(np.arange(rows) / 37)[:, None] * np.cos(np.arange(columns) / 53)[None, :]
    level = np.resize(SOIL, bands)[:, None, None]
    noise = rng.standard_normal((bands, rows, columns), dtype=np.float32)
    return (level * shade.astype(np.float32) + np.float32(0.001) * noise).astype(np.float32)


def tiled_geotiff(path: Path, rows: int, columns: int, *, compress: str = "DEFLATE", tile: int = 512) -> Path:
    """A compressed GeoTIFF in tiles, each written with fresh noise."""
    rng = np.random.default_rng(11)
    with rasterio.open(
        path, "w", driver="GTiff", width=columns, height=rows, count=len(CENTRES), dtype="float32",
        crs="+proj=eqc +R=1737400", transform=rasterio.Affine(60, 0, 0, 0, -60, 0), tiled=True, blockxsize=tile,
        blockysize=tile, compress=compress, predictor=3, bigtiff="IF_SAFER", num_threads="ALL_CPUS", zlevel=1,
    ) as file:  # fmt: skip
        for top in range(0, rows, 1024):
            for left in range(0, columns, 1024):
                size = (min(1024, rows - top), min(1024, columns - left))
                file.write(block(rng, *size), window=Window(left, top, size[1], size[0]))
    return path


def raw_raster(path: Path, rows: int, columns: int, *, interleave: str = "bil", filled: bool = True) -> Path:
    """A raw raster with its text header; unless filled, an empty (sparse) file of the right size."""
    with path.open("wb") as file:
        if filled:
            rng = np.random.default_rng(12)
            order = {"bsq": None, "bil": (1, 0, 2), "bip": (1, 2, 0)}[interleave]
            if order is None:
                raise ValueError("a filled scene is written row by row: bil or bip")
            high = max(1, (4 << 20) // columns)
            # the same stretch of rows again and again: noise costs more to make than to map
            stretch = np.ascontiguousarray(block(rng, high, columns).transpose(order))
            for top in range(0, rows, high):
                file.write(stretch[: min(high, rows - top)].tobytes())
        else:
            file.truncate(4 * rows * columns * len(CENTRES))
    header = {
        "samples": columns, "lines": rows, "bands": len(CENTRES), "header offset": 0, "data type": 4,
        "interleave": interleave, "byte order": 0, "wavelength units": "Nanometers", "wavelength": "{" + WAVELENGTHS + "}",
    }  # fmt: skip
    # the first word is what readers of such headers look for
    path.with_suffix(".hdr").write_text(
        "ENVI\n" + "".join(f"{key} = {value}\n" for key, value in header.items())
    )
    return path
