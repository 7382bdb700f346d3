"""The program under test: runs it, reads what it made. Its path comes from run.sh through TENPARSEC_BINARY."""

import os
import subprocess
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq

BUILD_SECONDS = 100


def binary() -> Path:
    path = os.environ.get("TENPARSEC_BINARY")
    if not path:
        raise RuntimeError("no program to test: start these checks with `tests/python/run.sh PATH_TO_BINARY`")
    if not os.access(path, os.X_OK):
        raise RuntimeError(f"{path} is not an executable file: build the program first, `cargo build --release`")
    return Path(path).resolve()


def run(*arguments, cwd=None) -> subprocess.CompletedProcess:
    """Runs the program and returns what it said; kills it after BUILD_SECONDS."""
    command = [str(binary()), *map(str, arguments)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=BUILD_SECONDS, check=False)


def told(done: subprocess.CompletedProcess) -> str:
    return f"exit code {done.returncode} of {' '.join(done.args)}\n--- stdout\n{done.stdout}\n--- stderr\n{done.stderr}"


def build(plan: Path, output: Path) -> "Release":
    """Builds `plan` into `output`; any exit code but 0 fails the test with all that the program said."""
    done = run("build", plan, "--output", output, "--threads", 2)
    assert done.returncode == 0, told(done)
    return Release(output)


class Release:
    """A release folder as a reader sees it."""

    def __init__(self, folder: Path):
        self.folder = Path(folder)
        self.parts = sorted((self.folder / "catalogue").glob("*.parquet"))
        assert self.parts, f"{folder}/catalogue holds no part: {sorted(self.folder.rglob('*'))}"

    def catalogue(self) -> pa.Table:
        """All rows, parts in the order of their names."""
        return pa.concat_tables([pq.read_table(part) for part in self.parts])

    def schema(self) -> pa.Schema:
        return pq.read_schema(self.parts[0])

    def footer(self) -> dict[str, str]:
        pairs = pq.read_metadata(self.parts[0]).metadata or {}
        return {key.decode(): value.decode() for key, value in pairs.items()}

    def table(self, name: str) -> pa.Table:
        path = self.folder / "tables" / f"{name}.parquet"
        assert path.exists(), f"no {path.name} among {sorted(p.name for p in path.parent.glob('*'))}"
        return pq.read_table(path)


def metadata(field: pa.Field) -> dict[str, str]:
    """Field metadata as text."""
    return {key.decode(): value.decode() for key, value in (field.metadata or {}).items()}
