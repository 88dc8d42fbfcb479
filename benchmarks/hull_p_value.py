"""Time of the p-values of ten million points against a hull of 64 facing edges: the compiled loop, and numpy.

numpy once as one writes it, an array operation over all points for each edge, and once at its best, in blocks that stay
in the caches and on as many threads. All give the same distances and p-values, NaN where a value is missing. Processor
time counts on one thread, so that other work on the machine does not; wall time on several.
"""

import os
import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from scipy.special import erfc

from bandratio.detection.hull import HullsByIncidence, materials_as_albedo, mixture_hull
from bandratio.detection.outside import Points, hull_p_values

POINTS = 10_000_000
BLOCK = 1 << 15


def by_numpy(hull, points, threads, block):
    """The same distances and p-values in numpy, edge by edge over blocks of points."""
    slopes, intercepts, knots = hull.slopes, hull.intercepts, hull.knots
    outside, p = np.empty(len(points)), np.empty(len(points))

    def work(first):
        here = slice(first, first + block)
        a, b, vc = points.red[here], points.infrared[here], points.covariance[here]
        edge = np.searchsorted(knots, a)
        null = slopes[edge] * a + intercepts[edge]
        va = points.var_red[here] + points.scaled_red[here] * a * a
        vb = points.var_infrared[here] + points.scaled_infrared[here] * null * null
        greatest = np.zeros_like(a)
        for slope, intercept in zip(slopes, intercepts, strict=True):
            beyond = np.maximum(slope * a + intercept - b, 0.0)
            np.maximum(greatest, beyond * beyond / (slope * slope * va - 2 * slope * vc + vb), out=greatest)
        low, high = slopes[0], slopes[-1]
        fan = np.arctan2(np.sqrt(va * vb - vc * vc) * (high - low), low * high * va - (low + high) * vc + vb)
        d = np.sqrt(greatest)
        outside[here] = d
        inner = 0.5 * erfc(d / np.sqrt(2)) + fan / (2 * np.pi) * np.exp(-greatest / 2)
        p[here] = np.where(d > 0, inner, np.where(np.isnan(d), np.nan, 1.0))

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(work, range(0, len(points), block)))
    return outside, p


def best(work, clock, times):
    """Shortest of several runs [s]."""
    taken = []
    for _ in range(times):
        started = clock()
        work()
        taken.append(clock() - started)
    return min(taken)


def main():
    cores = len(os.sched_getaffinity(0))
    hull = mixture_hull(materials_as_albedo([(0.15981, 0.26907), (0.0553, 0.0599)]), intervals=63)
    print(f"{POINTS:,} points, {len(hull.slopes)} facing edges, {cores} cores")
    rng = np.random.default_rng(0)
    share = rng.uniform(0, 1, (POINTS, 1))
    red, infrared = (share * (0.15981, 0.26907) + (1 - share) * (0.0553, 0.0599)).T
    red = red * (1 + 0.03 * rng.standard_normal(POINTS))
    infrared = infrared * (1 + 0.03 * rng.standard_normal(POINTS))
    points = Points.of(red, infrared, 0.002, 0.002, relative_red=0.03, relative_infrared=0.03)
    hulls = HullsByIncidence((hull,), by_incidence=False)
    hull_p_values(hulls, points.part(0, 1000))  # compiled before the clock starts
    few = points.part(0, 100_000)
    for got, wanted in zip(hull_p_values(hulls, few), by_numpy(hull, few, 1, BLOCK), strict=True):
        assert np.allclose(got, wanted, rtol=1e-6, atol=1e-300)
    print(f"{np.mean(hull_p_values(hulls, few)[0] > 0):.0%} of the points lie outside and take the whole way")
    for threads, clock, kind in ((1, time.process_time, "processor"), (cores, time.perf_counter, "wall")):
        compiled = best(lambda threads=threads: hull_p_values(hulls, points, threads=threads), clock, 5)
        print(
            f"{threads} thread(s): compiled {compiled:.2f} s of {kind} time, {compiled / POINTS * 1e9:.0f} ns a point"
        )
        for name, block, runs in (("as one writes it", POINTS, 1), ("in blocks", BLOCK, 2)):
            plain = best(
                lambda threads=threads, block=block: by_numpy(hull, points, threads, block), clock, runs
            )
            print(f"    numpy {name}: {plain:.1f} s, {plain / compiled:.0f} times as long")


if __name__ == "__main__":
    main()
