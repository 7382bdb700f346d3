"""Shared by the checks: no network beyond the package index, reference tables, the Hipparcos release built once."""

import csv
import shutil
from pathlib import Path

import pytest
from astropy.utils import data, iers

import hipparcos
import program

HERE = Path(__file__).parent
REFERENCE = HERE.parent / "reference"

# astropy fetches tables of the Earth's rotation when it can; nothing here needs them and CI has no network for it.
iers.conf.auto_download = False
data.conf.allow_internet = False


def reference_rows(name: str) -> list[dict[str, str]]:
    """A table of tests/reference; lines that begin with # say source and status."""
    with open(REFERENCE / name, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


@pytest.fixture(scope="session")
def hipparcos_folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("hipparcos")
    hipparcos.write(folder / "hipparcos.parquet")
    shutil.copy(HERE / "hipparcos.toml", folder)
    return folder


@pytest.fixture(scope="session")
def hipparcos_release(hipparcos_folder):
    return program.build(hipparcos_folder / "hipparcos.toml", hipparcos_folder / "release")
