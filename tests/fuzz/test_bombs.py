"""Files of a few kilobytes that unpack to gigabytes: read within a stated memory, or refused in one clear error."""

from __future__ import annotations

import gzip
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="only Linux limits the address space and tells it")

ROOT = Path(__file__).resolve().parents[2]
# What refusing a CSV log may take beyond the imports: some blocks of 16 MiB that were read ahead.
CSV_MIB = 600
# The same for what Parquet is let unpack: at most 256 MiB a column, and a copy of it.
PARQUET_MIB = 800
LIMITED = """
import resource, sys, time
import journeys as jn, journeys.tally.count, journeys.intake.read_csv, pyarrow.csv, pyarrow.parquet, pandas
peak = next(int(line.split()[1]) for line in open("/proc/self/status") if line.startswith("VmPeak"))
limit = (peak << 10) + (int(sys.argv[2]) << 20)
resource.setrlimit(resource.RLIMIT_AS, (limit, limit))
journeys.intake.read_csv.BLOCK_BYTES = int(sys.argv[3]) << 20
rules = jn.JourneyRules("who", "when", "what", silence="2d")
try:
    print(jn.tally(sys.argv[1], rules, n_workers=1).n_rows)
except jn.errors.LogError as fault:
    print("refused:", fault)
"""


def within(path: Path, mib: int, block: int = 16) -> str:
    """Tally a file with so many MiB of address space beyond the imports, blocks of CSV of so many; what is printed."""
    env = os.environ | {"PYTHONPATH": str(ROOT), "ARROW_DEFAULT_MEMORY_POOL": "system", "MALLOC_ARENA_MAX": "2",
                        "ARROW_IO_THREADS": "2", "OMP_NUM_THREADS": "2", "OPENBLAS_NUM_THREADS": "1"}  # fmt: skip
    command = [sys.executable, "-c", LIMITED, str(path), str(mib), str(block)]
    done = subprocess.run(command, env=env, capture_output=True, text=True, timeout=60)
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def zipped(path: Path, pieces: Iterator[bytes]) -> Path:
    """Write pieces into a .csv.gz."""
    with gzip.open(path, "wb", compresslevel=1) as file:
        for piece in pieces:
            file.write(piece)
    assert path.stat().st_size < 8 << 20
    return path


HEAD = b"who,when,what\n1,2025-01-01T00:00:00Z,visit\n"


def test_a_line_without_end(tmp_path: Path) -> None:
    path = zipped(tmp_path / "log.csv.gz", (HEAD if i == 0 else b"a" * (16 << 20) for i in range(35)))
    assert "a row is longer than 16 MiB" in within(path, CSV_MIB)


def test_a_quote_that_is_never_closed(tmp_path: Path) -> None:
    path = zipped(tmp_path / "log.csv.gz", (HEAD + b'"' if i == 0 else b"1,2,3\n" * (2 << 20) for i in range(20)))
    assert "look for a quote that is never closed" in within(path, CSV_MIB)


def test_a_line_of_names_without_end(tmp_path: Path) -> None:
    path = zipped(tmp_path / "log.csv.gz", (b"who,when,what," + b"," * (16 << 20) for _ in range(4)))
    assert "the line of column names is longer than" in within(path, CSV_MIB)
    path = zipped(tmp_path / "log.csv.gz", iter([b"who,when,what" + b"," * 20_000 + b"\n"]))
    assert "20,003 columns; wanted at most 10,000" in within(path, CSV_MIB)


def test_empty_lines_stream_by(tmp_path: Path) -> None:
    # Arrow reads ahead by up to 32 blocks, of 2 MiB here; all the lines are twice what the process may take.
    path = zipped(tmp_path / "log.csv.gz", (HEAD if i == 0 else b"\n" * (16 << 20) for i in range(31)))
    assert within(path, 240, block=2) == "1"


def parquet_with(path: Path, text: bytes, n_rows: int = 1) -> Path:
    """Write a log whose events hold a text as long as wanted, packed."""
    what = pa.array([text] * n_rows, pa.large_binary()).cast(pa.large_string())
    when = pa.array([0] * n_rows, pa.timestamp("us", "UTC"))
    table = pa.table({"who": [1] * n_rows, "when": when, "what": what})
    pq.write_table(table, path, compression="zstd", use_dictionary=False, write_statistics=False)
    assert path.stat().st_size < 4 << 20
    return path


def test_one_gigantic_text_in_parquet(tmp_path: Path) -> None:
    told = within(parquet_with(tmp_path / "log.parquet", b"a" * (300 << 20)), PARQUET_MIB)
    assert "column 'what' unpacks to 314,57" in told
    assert "wanted at most 268,435,712" in told


def test_what_parquet_does_not_say_before_it_unpacks(tmp_path: Path) -> None:
    # Just below what is let through, and more than the process has: the fault is told all the same.
    told = within(parquet_with(tmp_path / "log.parquet", b"a" * (250 << 20)), 200)
    assert "a piece of it takes more memory than there is" in told


def test_a_compressed_arrow_batch_beyond_memory(tmp_path: Path) -> None:
    path = tmp_path / "log.arrow"
    what = pa.array([b"a" * (450 << 20)], pa.large_binary()).cast(pa.large_string())
    table = pa.table({"who": [1], "when": pa.array([0], pa.timestamp("us", "UTC")), "what": what})
    with pa.ipc.new_file(path, table.schema, options=pa.ipc.IpcWriteOptions(compression="zstd")) as writer:
        writer.write_table(table)
    assert path.stat().st_size < 4 << 20
    assert "a piece of it takes more memory than there is" in within(path, 300)
