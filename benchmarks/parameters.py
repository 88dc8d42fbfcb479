"""How fast `parameters` is, as ratios of times taken in one run. No arguments.

A 3000 × 3000 cube of 4 and of 5 bands, float32, in memory; every parameter of the catalogue that the bands allow,
with sigma under random noise, a gain for each band and a common gain. Beside it, in the same run:

- what a good user would write in numpy, and the same in xarray;
- the bound: allocate and fill the same output planes, and read the input once;
- what people do today for the sigma of each pixel, on a tile small enough to finish: object arrays of numbers with
  uncertainties, and sampled distributions;
- start-up: a new process that maps a small cube, and one that only imports numpy, xarray and numba.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import time
from collections.abc import Callable

import numpy as np
import xarray as xr

import bandratio as br

RANDOM, BAND_GAIN, COMMON_GAIN = 0.001, 0.01, 0.05
NOISE = br.Noise(random=RANDOM, band_gain=BAND_GAIN, common_gain=COMMON_GAIN)
BANDS = {4: [480.0, 600.0, 700.0, 830.0], 5: [480.0, 600.0, 700.0, 750.0, 830.0]}


def timed(function: Callable[[], object], repeats: int = 7) -> float:
    """Median wall time [s], the first run left out (compile, page cache)."""
    function()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        result = function()
        times.append(time.perf_counter() - start)
        del result
    return statistics.median(times)


def slope(R1, R2, V1, V2, width):
    """Normalised gradient with sigma, as one writes it down: works on numpy and xarray alike."""
    total = R1 + R2
    value = 2e4 / width * (R2 - R1) / total
    factor = 4e4 / width / total**2
    return value, factor * np.sqrt(R2 * R2 * V1 + R1 * R1 * V2)


def depth(R_shoulder, R_flank, V_shoulder, V_flank):
    """Band depth with sigma."""
    ratio = R_flank / R_shoulder
    return 1 - ratio, np.sqrt(V_flank + ratio * ratio * V_shoulder) / R_shoulder


def continuum_depth(R1, R2, R3, V1, V2, V3, k):
    """Depth below an extrapolated continuum with sigma."""
    line = (1 + k) * R2 - k * R1
    ratio = R3 / line
    return 1 - ratio, np.sqrt(V3 + ratio * ratio * ((1 + k) ** 2 * V2 + k * k * V1)) / line


def by_hand(cube):
    """All parameters of 4 or 5 bands with sigmas, sharing what can be shared."""
    R = [cube[i] for i in range(cube.shape[0])]
    V = [np.float32(RANDOM**2) + np.float32(BAND_GAIN**2) * r * r for r in R]
    out = [slope(R[0], R[1], V[0], V[1], 120), slope(R[1], R[2], V[1], V[2], 100)]
    out.append((R[2], np.sqrt(V[2] + np.float32(COMMON_GAIN**2) * R[2] * R[2])))
    if len(R) == 4:
        out.append(depth(R[2], R[3], V[2], V[3]))
    else:
        out.append(depth(R[3], R[4], V[3], V[4]))
        out.append(continuum_depth(R[1], R[3], R[4], V[1], V[3], V[4], 80 / 150))
    return out


def bound(values, planes):
    """Allocate and fill the output planes, and read the input once."""
    out = np.empty((planes, *values.shape[1:]), dtype=np.float32)
    out.fill(1.0)
    return out, values.max()


def reddish(bands: int, side: int) -> np.ndarray:
    """Reflectances that rise toward the red as soils do, with noise: no denominator is near zero."""
    rng = np.random.default_rng(0)
    level = np.linspace(0.12, 0.19, bands, dtype=np.float32)[:, None, None]
    return level * rng.uniform(0.8, 1.2, (bands, side, side)).astype(np.float32)


def large_cube(wavelengths: list[float]) -> None:
    """Ratios on 9 megapixels."""
    values = reddish(len(wavelengths), 3000)
    cube = br.as_cube(values, wavelengths)
    maps = br.parameters(cube, NOISE)
    names = [name for name in maps if not name.endswith("_sigma")]
    for name, pair in zip(names, by_hand(values), strict=True):
        for mine, theirs in zip((maps[name], maps[f"{name}_sigma"]), pair, strict=True):
            np.testing.assert_allclose(mine[::50, ::50], theirs[::50, ::50], rtol=2e-4, atol=2e-5)
    planes = len(maps)
    del maps
    ours = timed(lambda: br.parameters(cube, NOISE))
    print(f"{len(values)} bands, {planes // 2} parameters with sigma, 9 megapixels: {ours:.3f} s")
    numpy_time = timed(lambda: by_hand(values), 3)
    xarray_time = timed(lambda: by_hand(cube.drop_vars("wavelength")), 3)
    print(f"  numpy, by hand: {numpy_time / ours:.1f} × the time of parameters()")
    print(f"  xarray, by hand: {xarray_time / ours:.1f} × the time of parameters()")
    fill = timed(lambda: bound(values, planes))
    print(
        f"  parameters() takes {ours / fill:.2f} × the time of filling its planes and reading the input once"
    )


def per_pixel_habits() -> None:
    """What people do today for the sigma of each pixel, on small tiles; red slope and depth only."""
    from astropy import uncertainty
    from uncertainties import unumpy

    side = 60
    values = reddish(4, side).astype(float)
    cube = br.as_cube(values.astype(np.float32), BANDS[4])
    sigma = np.sqrt(RANDOM**2 + (BAND_GAIN * values) ** 2)
    names = ["red_slope", "mafic_depth"]

    def objects():
        R = unumpy.uarray(values, sigma)
        one, two = 200 * (R[2] - R[1]) / (R[2] + R[1]), 1 - R[3] / R[2]
        return unumpy.std_devs(one), unumpy.std_devs(two)

    def samples():
        R = [uncertainty.normal(v, std=s, n_samples=1000) for v, s in zip(values, sigma, strict=True)]
        return (200 * (R[2] - R[1]) / (R[2] + R[1])).pdf_std(), (1 - R[3] / R[2]).pdf_std()

    # ours is timed on a large cube, where its fixed start does not count, and scaled to the tile's pixels
    big = br.as_cube(np.tile(values, (1, 30, 30)).astype(np.float32), BANDS[4])
    ours = timed(lambda: br.parameters(big, NOISE, names)) / 900
    small = timed(lambda: br.parameters(cube, NOISE, names))
    for name, habit in {"object arrays": objects, "sampled distributions (1000)": samples}.items():
        seconds = timed(habit, 2)
        print(
            f"{name}, two parameters, {side}×{side} pixels: {seconds / ours:,.0f} × the time per pixel of "
            f"parameters() on a large cube, {seconds / small:,.0f} × on this tile, start included"
        )


def start_up() -> None:
    """New processes, compile cache warm; medians of five, taken in turn."""
    codes = {
        "map": "import numpy as np, bandratio as br; "
        "br.parameters(br.as_cube(np.full((4, 50, 50), 0.2, 'f4'), [480, 600, 700, 830]), br.Noise(random=0.001))",
        "libraries": "import numpy, xarray, numba",
        "import": "import bandratio",
        "xarray": "import xarray",
    }
    times: dict[str, list[float]] = {name: [] for name in codes}
    for _ in range(6):
        for name, code in codes.items():
            start = time.perf_counter()
            subprocess.run([sys.executable, "-c", code], check=True)
            times[name].append(time.perf_counter() - start)
    middle = {name: statistics.median(values[1:]) for name, values in times.items()}
    print(
        f"mapping a small cube in a new process: {middle['map'] / middle['libraries']:.2f} × importing the libraries"
    )
    print(f"import bandratio: {middle['import'] / middle['xarray']:.2f} × importing xarray")


if __name__ == "__main__":
    xr.set_options(keep_attrs=True)
    for centres in BANDS.values():
        large_cube(centres)
    per_pixel_habits()
    start_up()
