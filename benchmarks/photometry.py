"""What normalisation to one geometry adds to mapping nine megapixels, and what each law costs.

Prints ratios within one run: the jobs that are compared take turns, and the best time of each counts. Wanted: at most 1.6
for the default law in the same pass.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import dask
import numpy as np
import xarray as xr

import bandratio as br
from bandratio.photometry import Hapke

SIDE = 3000
REPEATS = 9
BANDS = [480, 600, 700, 830]
NOISE = br.Noise(random=0.001, relative=0.005, band_gain=0.01, common_gain=0.03)


def scene(side: int) -> tuple:
    """Four bands of radiance factors, and the angles of rolling ground under a low sun, all float32."""
    rng = np.random.default_rng(0)
    image = rng.uniform(0.03, 0.2, (4, side, side)).astype(np.float32)
    emission = rng.uniform(0, 20, (side, side)).astype(np.float32)
    phase = np.full((side, side), 55, np.float32)
    incidence = phase + emission * rng.uniform(-0.95, 0.95, (side, side)).astype(np.float32)
    cube = br.as_cube(image, BANDS, quantity="radiance_factor")
    return cube, {"incidence": incidence, "emission": emission, "phase": phase}


def alternating(*jobs: Callable[[], object]) -> list[float]:
    """Best time of each job [s]; they take turns, so that a busy machine is busy for all."""
    times: list[list[float]] = [[] for _ in jobs]
    for _ in range(REPEATS):
        for job, own in zip(jobs, times, strict=True):
            start = time.perf_counter()
            job()
            own.append(time.perf_counter() - start)
    return [min(own) for own in times]


def report(what: str, plain: float, both: float) -> None:
    print(f"{what}: ratio {both / plain:.2f} (maps {plain:.3f} s, normalised maps {both:.3f} s)")


def main() -> None:
    small, its_angles = scene(300)
    br.parameters(br.normalise(small, **its_angles, slope_sigma=1.5), NOISE)
    br.parameters(small, NOISE, geometry={**its_angles, "slope_sigma": 1.5})
    br.parameters(small, NOISE)
    cube, angles = scene(SIDE)
    options = {**angles, "slope_sigma": 1.5}

    known = {**angles, "spread": None}
    plain, same_pass, without_sigma, two_passes = alternating(
        lambda: br.parameters(cube, NOISE),
        lambda: br.parameters(cube, NOISE, geometry=options),
        lambda: br.parameters(cube, NOISE, geometry=known),
        lambda: br.parameters(br.normalise(cube, **options), NOISE),
    )
    report("in the same pass, slope error and spread between laws in the sigma", plain, same_pass)
    report("in the same pass, geometry and law taken as true", plain, without_sigma)
    report("one after the other, the normalised cube held whole", plain, two_passes)

    blocks = {"y": 160, "x": SIDE}
    lazy = cube.chunk(blocks)
    planes = {name: xr.DataArray(plane, dims=("y", "x")).chunk(blocks) for name, plane in angles.items()}
    with dask.config.set(scheduler="threads"):
        plain, both = alternating(
            lambda: br.parameters(lazy, NOISE).compute(),
            lambda: br.parameters(lazy, NOISE, geometry={**planes, "slope_sigma": 1.5}).compute(),
        )
    report("lazy, block by block", plain, both)

    laws = ["lunar_lambert", "minnaert", "akimov"]
    names = [*laws, "lunar_lambert with a phase function per band"]
    per_band = br.ExponentialPhase({nm: (-0.02 - 0.001 * k, 1e-4) for k, nm in enumerate(BANDS)})
    jobs = [lambda law=law: br.normalise(cube, **options, law=law) for law in laws]
    jobs.append(lambda: br.normalise(cube, **options, phase_function=per_band))
    times = alternating(*jobs)
    for name, seconds in zip(names, times, strict=True):
        print(f"normalise, {name}: {SIDE**2 / seconds / 1e6:.0f} megapixels a second")
    part = {name: plane[:20] for name, plane in options.items() if name != "slope_sigma"}
    (seconds,) = alternating(lambda: br.normalise(cube[:, :20], **part, law=Hapke(b=0.3, c=0.4)))
    print(f"normalise, hapke (w found for every value): {0.06 / seconds:.2f} megapixels a second")


if __name__ == "__main__":
    main()
