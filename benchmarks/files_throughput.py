"""How near the map command comes to moving bytes: its rate against a plain chunked copy, in one run.

Processor time is given beside elapsed time, since it is the fairer figure where others use the machine too.

The copy reads the same blocks of the same input with the same reader, and writes as many planes (each band twice,
for four values and four sigmas) with the same dask, zarr, chunks and compression. For a GeoTIFF it is staged in
Zarr and finalised once by GDAL's own driver for cloud-optimised GeoTIFFs, overviews included.
"""

from __future__ import annotations

import shutil
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import dask
import numpy as np
import xarray as xr
from numcodecs import Blosc
from scenes import CENTRES, raw_raster, tiled_geotiff

import bandratio as br

REPEATS = 5
NOISE = br.Noise(random=0.001, band_gain=0.01)


def planes_of(cube: xr.DataArray) -> xr.Dataset:
    """Each band twice: as many planes as four parameters with sigma, and bytes that compress as the input does."""
    return xr.Dataset(
        {f"plane_{k}": cube.isel(wavelength=k % 4, drop=True) for k in range(8)},
        attrs={"input": cube.attrs["input"]},
    )


def copy_to_zarr(scene: Path, output: Path) -> None:
    planes = planes_of(br.open_cube(scene, CENTRES))
    chunks = tuple(sizes[0] for sizes in planes.plane_0.chunks)
    codec = {"chunks": chunks, "compressors": (Blosc("zstd", 1, 1),), "_FillValue": np.nan}
    planes.to_zarr(output, zarr_format=2, encoding={name: dict(codec) for name in planes}, consolidated=False)


def copy_to_geotiff(scene: Path, output: Path) -> None:
    import rasterio
    from rasterio.shutil import copy

    staged = output.with_suffix(".staged.zarr")
    copy_to_zarr(scene, staged)
    with rasterio.open(f'ZARR:"{staged}":/plane_0') as first:
        rows, columns = first.shape
    bands = "".join(
        f'<VRTRasterBand dataType="Float32" band="{k + 1}" blockXSize="512" blockYSize="512"><SimpleSource>'
        f'<SourceFilename relativeToVRT="0">ZARR:"{staged}":/plane_{k}</SourceFilename><SourceBand>1</SourceBand>'
        "</SimpleSource></VRTRasterBand>"
        for k in range(8)
    )
    virtual = output.with_suffix(".vrt")
    virtual.write_text(f'<VRTDataset rasterXSize="{columns}" rasterYSize="{rows}">{bands}</VRTDataset>')
    with rasterio.Env(GDAL_CACHEMAX=256 << 20, GDAL_NUM_THREADS="ALL_CPUS"):
        copy(
            str(virtual), str(output), driver="COG", COMPRESS="DEFLATE", LEVEL=1, PREDICTOR="FLOATING_POINT",
            BLOCKSIZE=512, BIGTIFF="IF_SAFER", NUM_THREADS="ALL_CPUS", RESAMPLING="AVERAGE",
        )  # fmt: skip


def map_to(scene: Path, output: Path) -> None:
    cube = br.open_cube(scene, CENTRES)
    br.write_maps(
        br.parameters(cube, NOISE, ["uv_vis_slope", "red_slope", "reflectance_700", "mafic_depth"]), output
    )


def size_of(path: Path) -> int:
    return (
        sum(f.stat().st_size for f in path.rglob("*") if f.is_file())
        if path.is_dir()
        else path.stat().st_size
    )


def timed(work: Callable[[Path, Path], None], scene: Path, output: Path) -> tuple[float, float, int]:
    """Elapsed and processor seconds, and bytes written."""
    start, busy = time.perf_counter(), time.process_time()
    work(scene, output)
    took, busy = time.perf_counter() - start, time.process_time() - busy
    size = size_of(output)
    for left in output.parent.glob(f"{output.stem}*"):
        shutil.rmtree(left) if left.is_dir() else left.unlink()
    return took, busy, size


def compare(name: str, scene: Path, output: Path, copy: Callable[[Path, Path], None]) -> None:
    ratios = []
    for _ in range(REPEATS):
        copied, mapped = timed(copy, scene, output), timed(map_to, scene, output)
        ratios.append((copied[0] / mapped[0], copied[1] / mapped[1]))
        for what, (took, busy, size) in (("copy", copied), ("map", mapped)):
            print(f"  {name}, {what}: {took:.2f} s, processor {busy:.2f} s, {size >> 20} MiB written")
    elapsed, busy = (statistics.median(column) for column in zip(*ratios, strict=True))
    print(
        f"{name}: {elapsed:.2f} of the copy's rate, {busy:.2f} by processor time (medians of {REPEATS})\n",
        flush=True,
    )


def main() -> None:
    side = int(sys.argv[1]) if len(sys.argv) > 1 else 6144
    with tempfile.TemporaryDirectory() as folder, dask.config.set(scheduler="threads", num_workers=2):
        work = Path(folder)
        small = tiled_geotiff(work / "warm.tif", 1024, 1024)
        for output in (work / "warm_out.zarr", work / "warm_out.tif"):
            map_to(small, output)
        tiled = tiled_geotiff(work / "scene.tif", side, side)
        raw = raw_raster(work / "scene.img", side, side)
        compare("GeoTIFF in tiles, DEFLATE → Zarr", tiled, work / "out.zarr", copy_to_zarr)
        compare("raw raster, interleaved by line → Zarr", raw, work / "out.zarr", copy_to_zarr)
        compare("GeoTIFF in tiles, DEFLATE → GeoTIFF", tiled, work / "out.tif", copy_to_geotiff)


if __name__ == "__main__":
    main()
