"""How time and memory grow with the scene: 10, 100 megapixels, a gigapixel and more, mapped by the command itself.

The scene is a mosaic (a virtual raster) that repeats one compressed, tiled GeoTIFF, so that every block is really
read and decoded, but the disk holds few input bytes. The largest has 21.7 GB of input. Each size is a process of
its own; its processor time and its peak resident memory are those that the system reports at its end. On a
machine that others use too, processor time is the figure to read: it is free of waiting for them.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import matplotlib as mpl

mpl.use("Agg")
import matplotlib.pyplot as plt
import numpy as np
import rasterio
from scenes import CENTRES, NOISE, WAVELENGTHS, tiled_geotiff

TILE = 2048
#: Rows and columns, in tiles of 2048: 4.2, 16.8, 104.9, 419.4 and 1358.9 megapixels.
SIZES = ((1, 1), (2, 2), (5, 5), (10, 10), (18, 18))
NAMES = "red_slope,mafic_depth"
RESULT = Path(__file__).with_name("files_growth.json")


def mosaic(path: Path, tile: Path, down: int, across: int) -> Path:
    """A virtual raster that repeats one tile."""
    with rasterio.open(tile) as file:
        wkt = file.crs.to_wkt().replace("&", "&amp;").replace("<", "&lt;")
    bands = ""
    for band in range(1, len(CENTRES) + 1):
        sources = "".join(
            f'<SimpleSource><SourceFilename relativeToVRT="0">{tile}</SourceFilename><SourceBand>{band}</SourceBand>'
            f'<SrcRect xOff="0" yOff="0" xSize="{TILE}" ySize="{TILE}"/>'
            f'<DstRect xOff="{x * TILE}" yOff="{y * TILE}" xSize="{TILE}" ySize="{TILE}"/></SimpleSource>'
            for y in range(down)
            for x in range(across)
        )
        bands += f'<VRTRasterBand dataType="Float32" band="{band}" blockXSize="512" blockYSize="512">{sources}</VRTRasterBand>'
    path.write_text(
        f'<VRTDataset rasterXSize="{across * TILE}" rasterYSize="{down * TILE}"><SRS>{wkt}</SRS>'
        f"<GeoTransform>0, 60, 0, 0, 0, -60</GeoTransform>{bands}</VRTDataset>"
    )
    return path


def run(scene: Path, output: Path) -> dict[str, float]:
    """Map a scene in a process of its own; its times [s] and peak memory [MiB]."""
    code = (
        "import json, resource, sys\nfrom bandratio.__main__ import main\ntry:\n    main(sys.argv[1:])\nfinally:\n"
        "    used = resource.getrusage(resource.RUSAGE_SELF)\n"
        "    print(json.dumps([used.ru_utime + used.ru_stime, used.ru_maxrss / 1024]), file=sys.stderr)\n"
    )
    start = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", code, "map", str(scene), "-o", str(output), "--wavelengths", WAVELENGTHS, *NOISE,
         "--names", NAMES, "--workers", "2", "--overwrite"],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    if done.returncode:
        raise SystemExit(done.stderr)
    cpu, memory = json.loads(done.stderr.splitlines()[-1])
    return {"elapsed_s": time.perf_counter() - start, "processor_s": cpu, "peak_mib": memory}


def main() -> None:
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        work = Path(folder)
        tile = tiled_geotiff(work / "tile.tif", TILE, TILE)
        for down, across in SIZES:
            scene = mosaic(work / "scene.vrt", tile, down, across)
            pixels = down * across * TILE**2
            repeats = 3 if pixels < 50e6 else 1
            best = min(
                (run(scene, work / "out.zarr") for _ in range(repeats)), key=lambda row: row["processor_s"]
            )
            rows.append({"megapixels": pixels / 1e6, "input_gb": 16 * pixels / 1e9, **best})
            print(rows[-1], flush=True)
    RESULT.write_text(json.dumps(rows, indent=1) + "\n")
    report(rows)


def report(rows: list[dict[str, float]]) -> None:
    def marginal(a: int, b: int, key: str) -> float:
        return 1000 * (rows[b][key] - rows[a][key]) / (rows[b]["megapixels"] - rows[a]["megapixels"])

    for key in ("processor_s", "elapsed_s"):
        small, large = marginal(1, 2, key), marginal(2, 4, key)
        print(
            f"{key}: {small:.1f} ns/pixel from 17 to 105 megapixels, {large:.1f} from 105 to 1359: {large / small:.2f}"
        )
    print(f"peak memory: {max(row['peak_mib'] for row in rows):.0f} MiB at most; megabytes for each: "
          + ", ".join(f"{row['peak_mib']:.0f}" for row in rows))  # fmt: skip
    draw(rows)


def draw(rows: list[dict[str, float]]) -> None:
    """Time per pixel and peak memory against size."""
    size = [row["megapixels"] for row in rows]
    figure, (left, right) = plt.subplots(1, 2, figsize=(9, 3.6), constrained_layout=True)
    for key, label, marker in (("processor_s", "processor", "o"), ("elapsed_s", "elapsed", "s")):
        left.loglog(size, [row[key] for row in rows], marker=marker, label=label, linewidth=1.6)
    per_pixel, start = np.polyfit(size, [row["processor_s"] for row in rows], 1, w=1 / np.sqrt(size))
    fine = np.geomspace(size[0], size[-1], 100)
    label = f"{start:.1f} s + {1000 * per_pixel:.0f} ns a pixel"
    left.loglog(fine, start + per_pixel * fine, color="0.4", linestyle=":", label=label, zorder=0)
    left.set(
        xlabel="size of the scene [megapixel]",
        ylabel="time [s]",
        title="A fixed start, then a constant per pixel",
    )
    left.legend(frameon=False)
    right.semilogx(size, [row["peak_mib"] for row in rows], marker="o", color="C2", linewidth=1.6)
    right.axhline(1536, color="C3", linestyle="--", linewidth=1.2)
    right.text(size[0], 1536, " bound: 1.5 GiB", color="C3", va="bottom")
    right.set(xlabel="size of the scene [megapixel]", ylabel="peak resident memory [MiB]", ylim=(0, 1750),
              title="Memory stays far below its bound")  # fmt: skip
    for axes in (left, right):
        axes.spines[["top", "right"]].set_visible(False)
        axes.grid(visible=True, alpha=0.25)
    figure.savefig(RESULT.with_suffix(".png"), dpi=150)


if __name__ == "__main__":
    report(json.loads(RESULT.read_text())) if "--draw" in sys.argv else main()
