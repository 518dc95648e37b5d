"""The tally of a long log under a limit on the address space: memory goes with the customers, not with the rows.

What a process may take is the address space of its imports, measured here, and BEYOND_IMPORTS. Measured, 240 to
330 MiB are taken, by how the threads happen to run: nearly all for a few batches of half a million rows on their way
from the file to the tables and what the compiled loop writes of a chunk, and some 100 bytes for each of 200,000
customers (20 MiB); a quarter as much again is to spare. The rules know two states, so
that the table of moves is soon full, and what could still grow is the log. Four times the rows must do with the same;
that log, kept in memory as well (some 330 MiB), must not.
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from journeys import Tally

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="only Linux limits the address space and tells it")

ROOT = Path(__file__).resolve().parents[2]
MAKE_LOG = ROOT / "tests" / "bench" / "make_log.py"
MIB = 1 << 20
BEYOND_IMPORTS = 420 * MIB
CUSTOMERS, ROWS, MORE_ROWS = 200_000, 3_000_000, 12_000_000
RULES = """
customer = "customer"
time = "time"
event = "event"
converted = ["joined"]
churned = ["declined"]
silence = "30d"
unmapped = "looked"

[states]
state_00 = "started"
"""
# Allocators and thread pools reserve address space that they never touch; a limit on it must not be about them.
FRUGAL = {
    "ARROW_DEFAULT_MEMORY_POOL": "system",
    "ARROW_IO_THREADS": "2",
    "MALLOC_ARENA_MAX": "2",
    "OMP_NUM_THREADS": "2",
    "OPENBLAS_NUM_THREADS": "1",
}
IMPORTS = """
import journeys, journeys.command.main, journeys.tally.count, journeys.tally.store
print(next(line.split()[1] for line in open("/proc/self/status") if line.startswith("VmPeak")))
"""
KEPT = """
import sys
import pyarrow.parquet as pq
from journeys.command.main import main
kept = pq.read_table(sys.argv[1])
sys.exit(main(["tally", *sys.argv[1:]]))
"""


def python(*words: object, limit: int | None = None) -> subprocess.CompletedProcess[str]:
    """Run Python from the repository, with at most `limit` bytes of address space."""
    command = [sys.executable, *map(str, words)]
    if limit is not None:
        command = ["sh", "-c", 'ulimit -v "$0" && exec "$@"', str(limit // 1024), *command]
    env = os.environ | FRUGAL | {"PYTHONPATH": str(ROOT)}
    return subprocess.run(command, cwd=ROOT, env=env, capture_output=True, text=True, timeout=120)


@pytest.fixture(scope="module")
def limit() -> int:
    done = python("-c", IMPORTS)
    assert done.returncode == 0, done.stderr
    return int(done.stdout) * 1024 + BEYOND_IMPORTS


@pytest.fixture(scope="module")
def words(tmp_path_factory: pytest.TempPathFactory) -> Callable[[int, str], list[str]]:
    """Give the words after `tally` for a log of so many rows."""
    folder = tmp_path_factory.mktemp("logs")
    rules = folder / "rules.toml"
    rules.write_text(RULES, encoding="utf-8")

    def tally(rows: int, out: str) -> list[str]:
        log = folder / f"{rows}.parquet"
        if not log.exists():
            made = python(MAKE_LOG, "--rows", rows, "--customers", CUSTOMERS, "--out", log)
            assert made.returncode == 0, made.stderr
        return [str(log), "--rules", str(rules), "--out", str(folder / out)]

    return tally


def counted(done: subprocess.CompletedProcess[str], words: list[str]) -> Tally:
    assert done.returncode == 0, done.stdout + done.stderr
    return Tally.load(words[-1])


def test_a_limit_changes_nothing(limit: int, words: Callable[[int, str], list[str]]):
    plain, limited = words(ROWS, "plain.parquet"), words(ROWS, "limited.parquet")
    tally = counted(python("-m", "journeys", "tally", *plain), plain)
    under = counted(python("-m", "journeys", "tally", *limited, limit=limit), limited)
    assert (tally.n_rows, tally.n_people) == (ROWS, CUSTOMERS)
    assert under.checksum == tally.checksum


def test_four_times_the_rows_need_no_more(limit: int, words: Callable[[int, str], list[str]]):
    many = words(MORE_ROWS, "many.parquet")
    tally = counted(python("-m", "journeys", "tally", *many, limit=limit), many)
    assert (tally.n_rows, tally.n_people) == (MORE_ROWS, CUSTOMERS)


def test_a_log_kept_in_memory_does_not_fit(limit: int, words: Callable[[int, str], list[str]]):
    done = python("-c", KEPT, *words(MORE_ROWS, "kept.parquet"), limit=limit)
    assert done.returncode != 0
    assert "memory" in done.stderr.lower() or "alloc" in done.stderr.lower()
