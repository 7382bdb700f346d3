"""Baseline for the benchmark: what a plain streaming polars script needs for five trivial columns.

`python baseline_polars.py IN.parquet OUT.parquet [--threads N]`: three absolute magnitudes by inverted parallax and two
colours, all columns of the catalogue passed through, zstd level 1. No error, no posterior, no verdict: a floor of what a
user would write by hand. Columns read: parallax (mas), g_mag, b_mag, r_mag. Prints one line, times without the import.
"""

import argparse
import os
import resource
import time
from pathlib import Path


def main():
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("catalogue", type=Path)
    options.add_argument("output", type=Path)
    options.add_argument("--threads", type=int, default=os.cpu_count())
    given = options.parse_args()
    os.environ["POLARS_MAX_THREADS"] = str(given.threads)  # read once, when polars is imported

    import polars as pl

    assert pl.thread_pool_size() == given.threads
    start = time.perf_counter()
    parallax = pl.col("parallax")
    modulus = pl.when(parallax > 0).then(10 - 5 * parallax.log10())
    columns = [(pl.col(f"{band}_mag") - modulus).cast(pl.Float32).alias(f"absmag_{band}") for band in "gbr"]
    columns += [(pl.col("b_mag") - pl.col(f"{band}_mag")).cast(pl.Float32).alias(f"colour_b_{band}") for band in "rg"]
    frame = pl.scan_parquet(given.catalogue).with_columns(columns)
    frame.sink_parquet(given.output, compression="zstd", compression_level=1)
    seconds = time.perf_counter() - start

    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024  # Linux counts in KiB
    size = given.output.stat().st_size / 2**20
    print(
        f"polars {pl.__version__} threads {given.threads} wall_s {seconds:.3f} peak_rss_mib {peak:.0f} output_mib {size:.0f}"
    )


if __name__ == "__main__":
    main()
