"""Ranking of every four of twenty bands: how long, and against the same judgement written as plain loops.

Prints the time of one ranking, and the ratio to loops over subsets and left-out pairs in numpy, timed in the same run on
a part of the subsets and scaled up.
"""

import time
from itertools import combinations

import numpy as np
from scipy.stats import norm

import bandratio as br

CANDIDATES = [
    415,
    450,
    480,
    520,
    560,
    600,
    640,
    680,
    700,
    720,
    750,
    780,
    800,
    830,
    870,
    900,
    930,
    950,
    970,
    1000,
]
WANTED = ["olivine", "low-calcium pyroxene", "high-calcium pyroxene", "basalt"]
UNWANTED = ["plagioclase", "opaque"]
NOISE = 0.01


def plain(logs, groups, specimens, subsets):
    """Areas by loops: Fisher's contrast without one pair of specimens, tried on that pair."""
    areas = []
    wanted, unwanted = (sorted(set(specimens[groups == g])) for g in (1, 0))
    for subset in subsets:
        right = []
        for i in wanted:
            for j in unwanted:
                means, pooled = [], np.zeros((len(subset), len(subset)))
                for g, left in ((1, i), (0, j)):
                    rows = [
                        logs[(groups == g) & (specimens == s)][:, subset]
                        for s in sorted(set(specimens[groups == g]) - {left})
                    ]
                    centre = np.mean([r.mean(axis=0) for r in rows], axis=0)
                    means.append(centre)
                    pooled += sum((r - centre).T @ (r - centre) / len(r) for r in rows)
                pooled = pooled / (len(wanted) + len(unwanted) - 2) + (NOISE**2 + 1e-4) * np.eye(len(subset))
                solved = np.linalg.solve(
                    pooled, np.stack([means[0] - means[1], np.ones(len(subset))], axis=1)
                )
                w = solved[:, 0] - solved[:, 0].sum() / solved[:, 1].sum() * solved[:, 1]
                a, b = (logs[(groups == g) & (specimens == s)][:, subset] for g, s in ((1, i), (0, j)))
                d = (a[:, None] - b[None]) @ w
                right.append(norm.cdf(d / (NOISE * np.sqrt(2 * w @ w))).mean())
        areas.append(np.mean(right))
    return areas


def main():
    spectra = br.reference_spectra()
    br.rank_bands(CANDIDATES[:5], 2, spectra, WANTED, UNWANTED, noise=br.Noise(relative=NOISE))  # warm
    start = time.perf_counter()
    ranking = br.rank_bands(CANDIDATES, 4, spectra, WANTED, UNWANTED, noise=br.Noise(relative=NOISE))
    seconds = time.perf_counter() - start

    cube = br.reference_spectra(CANDIDATES)
    groups = np.where(cube.group.isin(WANTED), 1, np.where(cube.group.isin(UNWANTED), 0, -1))
    logs, specimens = np.log(cube.values[groups >= 0]), cube.specimen.values[groups >= 0].astype(str)
    subsets = [list(s) for s in combinations(range(len(CANDIDATES)), 4)]
    part = subsets[:: len(subsets) // 10]
    start = time.perf_counter()
    plain(logs, groups[groups >= 0], specimens, part)
    loops = (time.perf_counter() - start) * len(subsets) / len(part)
    print(
        f"{len(ranking.subsets)} subsets of 4 of {len(CANDIDATES)} bands: {seconds:.2f} s (wanted: below 10 s)"
    )
    print(f"plain loops, scaled up from {len(part)} subsets: {loops / seconds:.0f} times as long")


if __name__ == "__main__":
    main()
