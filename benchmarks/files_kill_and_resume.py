"""Fifty times: a run is killed at a random moment and resumed; the output must be that of an undisturbed run.

Moments are drawn over the whole life of the process, from its start to after its end, so that kills also fall
into the laying out, the finishing and the moving. Half of the runs write Zarr, half a GeoTIFF.
"""

from __future__ import annotations

import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

import numpy as np
from scenes import NOISE, WAVELENGTHS, tiled_geotiff

import bandratio as br

KILLS = 50


def command(scene: Path, output: Path, *more: str) -> list[str]:
    return [sys.executable, "-m", "bandratio", "map", str(scene), "-o", str(output), "--wavelengths", WAVELENGTHS,
            *NOISE, *more]  # fmt: skip


def same(one: Path, other: Path) -> bool:
    first, second = br.open_maps(one), br.open_maps(other)
    return set(first) == set(second) and all(
        np.array_equal(first[name].values.view(np.uint32), second[name].values.view(np.uint32))
        for name in first
    )


def main() -> None:
    kills = int(sys.argv[1]) if len(sys.argv) > 1 else KILLS
    draw = random.Random(5)
    outcomes: Counter[str] = Counter()
    with tempfile.TemporaryDirectory() as folder:
        work = Path(folder)
        scene = tiled_geotiff(work / "scene.tif", 4096, 3072)
        lives = {}
        for ending in (".zarr", ".tif"):
            start = time.perf_counter()
            subprocess.run(command(scene, work / f"undisturbed{ending}"), check=True, capture_output=True)
            lives[ending] = time.perf_counter() - start
        for k in range(kills):
            ending = (".zarr", ".tif")[k % 2]
            output = work / f"maps{ending}"
            unfinished = output.with_name(f".{output.name}.unfinished")
            process = subprocess.Popen(
                command(scene, output), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
            )
            time.sleep(draw.uniform(0.1, 1.05) * lives[ending])
            process.send_signal(signal.SIGKILL)
            ended = process.wait() == 0
            blocks = len(list((unfinished / "done").glob("*.npy"))) if (unfinished / "done").is_dir() else 0
            moment = (
                "after its end" if ended
                else "while it tidied up" if output.exists()
                else "before its first block" if not blocks
                else "after some of its blocks" if blocks < 12
                else "after its last block"
            )  # fmt: skip
            if not ended:
                if output.exists() and not same(output, work / f"undisturbed{ending}"):
                    raise SystemExit(f"kill {k + 1}: something half done was under the final name")
                if not (output.exists() and not unfinished.exists()):
                    done = subprocess.run(
                        command(scene, output, "--resume"), capture_output=True, text=True, check=False
                    )
                    if done.returncode:
                        raise SystemExit(f"kill {k + 1} ({moment}): not resumed: {done.stderr}")
            if not same(output, work / f"undisturbed{ending}") or unfinished.exists():
                raise SystemExit(f"kill {k + 1} ({moment}): the output differs, or something was left")
            outcomes[moment] += 1
            print(f"  {k + 1}: {ending} killed {moment}, same result", flush=True)
            shutil.rmtree(output) if output.is_dir() else output.unlink()
    print(f"{kills} kills, {kills} outputs equal to the undisturbed ones: {dict(outcomes)}")


if __name__ == "__main__":
    main()
