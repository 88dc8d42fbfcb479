"""A hundred million lidar returns from a file to flags and a list of spots: peak memory and time.

    python benchmarks/hundred_million_returns.py [NUMBER]

The returns are made and stored in one process, and read and flagged in another, whose peak memory is told.
"""

import os
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

N = 100_000_000
BLOCK = 1_000_000
LIMIT_GIB = 1.5
COUNTS_AT_WHITE = 4000.0  # counts of a white target at normal incidence and 30 km
LEAST = 6  # counts that the receiver records
ICY_SHARE = 0.002


def make(path: Path, n: int) -> None:
    """Counts of soil with up to half ilmenite, mixed areally; a few shots hold 10 to 60 % of coarse ice."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    rng = np.random.default_rng(1)
    soil, ilmenite, ice = np.array([0.15981, 0.26907]), np.array([0.0553, 0.0599]), np.array([0.58, 0.0065])
    types = {
        "red": pa.uint16(),
        "infrared": pa.uint16(),
        "range_m": pa.float32(),
        "incidence_deg": pa.float32(),
    }
    schema = pa.schema(list(types.items()))
    with pq.ParquetWriter(path, schema, compression="lz4") as writer:
        for start in range(0, n, BLOCK):
            count = min(BLOCK, n - start)
            t = rng.uniform(0, 0.5, (count, 1))
            f = np.where(rng.random((count, 1)) < ICY_SHARE, rng.uniform(0.1, 0.6, (count, 1)), 0)
            albedo = (1 - f) * ((1 - t) * soil + t * ilmenite) + f * ice
            distance, tilt = rng.uniform(28e3, 32e3, count), rng.uniform(0, 10, count)
            mean = COUNTS_AT_WHITE * albedo * (np.cos(np.radians(tilt)) * (30e3 / distance) ** 2)[:, None]
            counts = rng.poisson(mean * (1 + 0.02 * rng.normal(size=mean.shape)))
            counts[counts < LEAST] = 0
            columns = [counts[:, 0], counts[:, 1], distance, tilt]
            writer.write_table(
                pa.table(
                    [pa.array(c).cast(k, safe=False) for c, k in zip(columns, types.values(), strict=True)],
                    schema=schema,
                )
            )


def flag(path: Path) -> None:
    import dask
    import xarray as xr

    import bandratio as br

    start = time.perf_counter()
    channel = br.LidarChannel(
        constant=1.0, transmitted=COUNTS_AT_WHITE * 30e3**2, energy_per_count=1, relative=0.02, limit=LEAST
    )
    calibration = br.LidarCalibration(red=channel, infrared=channel, units="count")
    with dask.config.set(scheduler="threads", num_workers=len(os.sched_getaffinity(0))):
        returns = br.open_returns(
            path,
            red="red",
            infrared="infrared",
            zero="dropout",
            units={"red": "count", "infrared": "count"},
            chunks=BLOCK,
        )
        albedos = br.albedo_from_returns(returns, calibration)
        flags = br.ice_flags(**br.flag_arguments(albedos), ice_free=["Soil 62231", "Ilmenite HS231.3B"])
        cut_found = time.perf_counter()
        flags.drop_vars("quantity").to_zarr(path.with_suffix(".zarr"), consolidated=False)
        written = time.perf_counter()
        stored = xr.open_zarr(path.with_suffix(".zarr"), consolidated=False)
        words = flags["flag"].attrs["flag_meanings"].split()
        counts = np.zeros(len(words), dtype=np.int64)
        for block in stored["flag"].data.blocks:
            counts += np.bincount(block.compute(), minlength=len(words))
        best = br.rank_candidates(stored, n=3)
    end = time.perf_counter()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    print(f"{returns.sizes['shot']:,} returns; cut at p = {flags.attrs['p_value_cut']:.3g}")
    print("; ".join(f"{word} {count:,}" for word, count in zip(words, counts, strict=True)))
    print(best[["shot", "outside_sigma", "p_value", "q_value", "fraction_lower"]].to_string())
    print(
        f"cut {cut_found - start:.0f} s, flags written {written - cut_found:.0f} s, list {end - written:.0f} s; "
        f"peak memory {peak:.2f} GiB (wanted: at most {LIMIT_GIB} GiB)"
    )
    if peak > LIMIT_GIB:
        raise SystemExit("more memory than wanted")


def main() -> None:
    if len(sys.argv) == 3 and sys.argv[1] == "--flag":
        flag(Path(sys.argv[2]))
        return
    n = int(sys.argv[1]) if len(sys.argv) > 1 else N
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "returns.parquet"
        start = time.perf_counter()
        make(path, n)
        print(f"made {path.stat().st_size / 1e9:.2f} GB in {time.perf_counter() - start:.0f} s", flush=True)
        subprocess.run([sys.executable, __file__, "--flag", str(path)], check=True)


if __name__ == "__main__":
    main()
