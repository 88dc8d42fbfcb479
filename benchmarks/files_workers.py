"""Two workers against one, on a compressed, tiled scene: threads of one process, and processes of a local cluster.

Each pair is measured in turn in the same run; the ratio is the median over the repeats.
"""

from __future__ import annotations

import shutil
import statistics
import sys
import tempfile
import time
from pathlib import Path

import dask
from distributed import Client, LocalCluster
from files_throughput import map_to
from scenes import tiled_geotiff

REPEATS = 5


def seconds(scene: Path, output: Path) -> float:
    start = time.perf_counter()
    map_to(scene, output)
    took = time.perf_counter() - start
    shutil.rmtree(output)
    return took


def with_threads(scene: Path, output: Path) -> list[tuple[float, float]]:
    pairs = []
    for _ in range(REPEATS):
        pair = []
        for workers in (1, 2):
            with dask.config.set(scheduler="threads", num_workers=workers):
                pair.append(seconds(scene, output))
        pairs.append((pair[0], pair[1]))
    return pairs


def with_processes(scene: Path, output: Path) -> list[tuple[float, float]]:
    pairs = []
    options = {"threads_per_worker": 1, "dashboard_address": None, "silence_logs": 50}
    with LocalCluster(n_workers=1, **options) as one, LocalCluster(n_workers=2, **options) as two:
        for cluster in (one, two):
            with Client(cluster):
                seconds(scene, output)  # imports and compiled code are loaded
        for _ in range(REPEATS):
            pair = []
            for cluster in (one, two):
                with Client(cluster):
                    pair.append(seconds(scene, output))
            pairs.append((pair[0], pair[1]))
    return pairs


def main() -> None:
    side = int(sys.argv[1]) if len(sys.argv) > 1 else 8192
    with tempfile.TemporaryDirectory() as folder:
        work = Path(folder)
        scene = tiled_geotiff(work / "scene.tif", side, side)
        map_to(tiled_geotiff(work / "warm.tif", 512, 512), work / "warm.zarr")
        for name, measure in (("threads", with_threads), ("processes", with_processes)):
            pairs = measure(scene, work / "out.zarr")
            for one, two in pairs:
                print(f"  {name}: one {one:.2f} s, two {two:.2f} s")
            gain = statistics.median(one / two for one, two in pairs)
            print(
                f"{name}: two workers are {gain:.2f} times as fast as one (median of {REPEATS})\n", flush=True
            )


if __name__ == "__main__":
    main()
