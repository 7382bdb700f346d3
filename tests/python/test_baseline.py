"""The benchmark's baseline does what it says: five columns, right, beside all of the catalogue's."""

import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq


def test_baseline_computes_its_five_columns(tmp_path):
    random = np.random.default_rng(1)
    n = 5_000
    catalogue = {"source": np.arange(n), "parallax": random.normal(2, 2, n)}
    catalogue |= {f"{band}_mag": random.uniform(10, 20, n).astype(np.float32) for band in "gbr"}
    pq.write_table(pa.table(catalogue), tmp_path / "in.parquet")
    script = Path(__file__).parent / "baseline_polars.py"
    command = [sys.executable, script, tmp_path / "in.parquet", tmp_path / "out.parquet", "--threads", "2"]
    said = subprocess.run(command, capture_output=True, text=True, timeout=60, check=True).stdout
    figures = r"polars \S+ threads 2 wall_s \d+\.\d+ peak_rss_mib \d+ output_mib \d+\n"
    assert re.fullmatch(figures, said), said
    made = pq.read_table(tmp_path / "out.parquet")
    assert made.num_rows == n
    parallax = catalogue["parallax"]
    for band in "gbr":
        with np.errstate(invalid="ignore"):
            expected = catalogue[f"{band}_mag"] + 5 * np.log10(np.where(parallax > 0, parallax, np.nan)) - 10
        got = made[f"absmag_{band}"].to_numpy(zero_copy_only=False)
        np.testing.assert_allclose(got, expected, atol=2e-6, equal_nan=True)
    np.testing.assert_array_equal(made["colour_b_r"].to_numpy(), catalogue["b_mag"] - catalogue["r_mag"])
    np.testing.assert_array_equal(made["colour_b_g"].to_numpy(), catalogue["b_mag"] - catalogue["g_mag"])
    for name, values in catalogue.items():
        np.testing.assert_array_equal(made[name].to_numpy(), values)
