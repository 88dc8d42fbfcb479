"""Fifty times: a run is killed at a random moment and resumed; the output must be that of an undisturbed run.

Every run is a process of its own, parted from one that has everything imported, so that the moments, which are drawn
over the whole life of an undisturbed run, fall into the work: the laying out, the blocks, the
finishing, the moving. Half of the kills wait for a number of finished blocks instead. Half of the runs write Zarr, half a GeoTIFF.
"""

from __future__ import annotations

import os
import random
import signal
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import dask.array
import numpy as np
import rasterio
import rioxarray
import zarr
from scenes import NOISE, WAVELENGTHS, tiled_geotiff

import bandratio as br
import bandratio.files.block_shape
import bandratio.files.geotiff
import bandratio.files.maps
import bandratio.files.raster_cubes
import bandratio.kernel
import bandratio.maps
from bandratio.__main__ import main as bandratio_main
from bandratio.files.atomic import remove

LOADED = (dask.array, rasterio, rioxarray, zarr)
KILLS = 50
#: Smaller blocks than usual, so that a small scene has several: 12.
BLOCK_PIXELS = 1 << 18


def start(work: Callable[[], object]) -> int:
    """Do some work in a child process; its id. No thread may run in this one, or it would be lost in the child."""
    process = os.fork()
    if process:
        return process
    code = 1
    try:
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
        code = 0 if work() in (None, True) else 3
    except SystemExit as ended:
        code = ended.code if isinstance(ended.code, int) else 0
    finally:
        os._exit(code)


def ended_well(process: int) -> bool:
    return os.waitstatus_to_exitcode(os.waitpid(process, 0)[1]) == 0


def mapped(scene: Path, output: Path, *more: str) -> Callable[[], object]:
    arguments = ["map", str(scene), "-o", str(output), "--wavelengths", WAVELENGTHS, *NOISE, *more]
    return lambda: bandratio_main(arguments)


def finished_blocks(folder: Path) -> int:
    try:
        return sum(marker.suffix == ".npy" for marker in folder.iterdir())
    except FileNotFoundError:
        return 0


def same(one: Path, other: Path) -> bool:
    def compare() -> bool:
        first, second = br.open_maps(one), br.open_maps(other)
        return set(first) == set(second) and all(
            np.array_equal(first[name].values.view(np.uint32), second[name].values.view(np.uint32))
            for name in first
        )

    return ended_well(start(compare))


def main() -> None:
    kills = int(sys.argv[1]) if len(sys.argv) > 1 else KILLS
    bandratio.files.block_shape._PIXELS = BLOCK_PIXELS
    draw = random.Random(5)
    outcomes: Counter[str] = Counter()
    with tempfile.TemporaryDirectory() as folder:
        work = Path(folder)
        scene = work / "scene.tif"
        # in a child too: the threads with which GDAL compresses would be missing in every later one
        if not ended_well(start(lambda: bool(tiled_geotiff(scene, 2048, 1536)))):
            raise SystemExit("the scene was not made")
        lives = {}
        for ending in (".zarr", ".tif"):
            for _ in range(2):  # the first may compile
                began = time.perf_counter()
                if not ended_well(start(mapped(scene, work / f"undisturbed{ending}", "--overwrite"))):
                    raise SystemExit("the undisturbed run failed")
                lives[ending] = time.perf_counter() - began
        k = 0
        while k < kills:
            ending = (".zarr", ".tif")[k % 2]
            output = work / f"maps{ending}"
            unfinished = output.with_name(f".{output.name}.unfinished")
            process = start(mapped(scene, output))
            done = unfinished / "done"
            # every other pair is killed some time after a number of blocks, so that enough kills fall among them
            wanted, began = draw.randint(1, 12) if k // 2 % 2 else 0, time.perf_counter()
            while finished_blocks(done) < wanted and time.perf_counter() - began < 2 * lives[ending]:
                time.sleep(0.002)
            time.sleep(draw.uniform(0, 0.1) if wanted else draw.uniform(0.02, 1) * lives[ending])
            os.kill(process, signal.SIGKILL)
            if ended_well(process):
                # it was quicker than the undisturbed run: no kill, so it does not count
                lives[ending] *= 1 if wanted else 0.9
                remove(output)
                continue
            blocks = finished_blocks(done)
            moment = (
                "while it tidied up" if output.exists()
                else "before its first block" if not blocks
                else "after some of its blocks" if blocks < 12
                else "after its last block"
            )  # fmt: skip
            if output.exists() and not same(output, work / f"undisturbed{ending}"):
                raise SystemExit(f"kill {k + 1}: something half done was under the final name")
            # nothing is left to do where the output is in place and nothing lies beside it
            if (unfinished.exists() or not output.exists()) and not ended_well(
                start(mapped(scene, output, "--resume"))
            ):
                raise SystemExit(f"kill {k + 1} ({moment}): not resumed")
            if unfinished.exists() or not same(output, work / f"undisturbed{ending}"):
                raise SystemExit(f"kill {k + 1} ({moment}): the output differs, or something was left")
            k += 1
            outcomes[moment] += 1
            print(f"  {k}: {ending} killed {moment}, same result", flush=True)
            remove(output)
    print(f"{kills} kills, {kills} outputs equal to the undisturbed ones: {dict(outcomes)}")


if __name__ == "__main__":
    main()
