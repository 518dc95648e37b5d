"""Whole processes measured: wall seconds, CPU seconds and peak memory, with the machine they ran on.

Nothing large is imported here: until it becomes another program, a child counts as large as its parent, and Linux
keeps that as the child's peak.
"""

from __future__ import annotations

import importlib.metadata
import os
import platform
import statistics
import subprocess
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
PROGRAMS = ("journeys", "numpy", "pandas", "pyarrow", "scipy", "duckdb", "polars")
MOST_CPUS = 2


@dataclass(frozen=True)
class Cost:
    """What one process cost, and what it printed."""

    seconds: float
    cpu_seconds: float
    peak_mib: float
    said: str = ""


class ProcessError(Exception):
    """A process that did not end well."""


def run(words: Sequence[str]) -> Cost:
    """Run one command from the repository and measure it."""
    env = os.environ | {"PYTHONPATH": str(ROOT), "PYTHONHASHSEED": "0"}
    # What is installed has its bytecode; ours, run from the repository, would be compiled anew in every process.
    env.pop("PYTHONDONTWRITEBYTECODE", None)
    with tempfile.TemporaryFile() as said, tempfile.TemporaryFile() as complaints:
        began = time.perf_counter()
        process = subprocess.Popen(words, stdout=said, stderr=complaints, cwd=ROOT, env=env)
        _, status, used = os.wait4(process.pid, 0)
        seconds = time.perf_counter() - began
        process.returncode = os.waitstatus_to_exitcode(status)
        if process.returncode:
            complaints.seek(0)
            last = complaints.read().decode(errors="replace").strip().splitlines()[-1:]
            msg = f"{' '.join(words)} ended with {process.returncode}: {' '.join(last)}"
            raise ProcessError(msg)
        said.seek(0)
        text = said.read().decode()
    return Cost(seconds, used.ru_utime + used.ru_stime, used.ru_maxrss / 1024, text)


def in_turns(first: Sequence[str], second: Sequence[str], times: int) -> list[tuple[Cost, Cost]]:
    """Run two commands A B A B …, so that what else the machine does falls on both."""
    return [(run(first), run(second)) for _ in range(times)]


def median_cost(costs: Sequence[Cost]) -> Cost:
    """Return the median of each figure."""
    middle = statistics.median
    return Cost(
        middle(cost.seconds for cost in costs),
        middle(cost.cpu_seconds for cost in costs),
        middle(cost.peak_mib for cost in costs),
    )


def median_ratio(pairs: Sequence[tuple[Cost, Cost]], what: Callable[[Cost], float]) -> float:
    """Return the median over pairs of the first's figure to the second's."""
    return statistics.median(what(first) / what(second) for first, second in pairs)


def seconds(cost: Cost) -> float:
    """Return the wall time."""
    return cost.seconds


def peak(cost: Cost) -> float:
    """Return the peak memory."""
    return cost.peak_mib


def hold_to_two_cpus() -> int:
    """Keep this process and its children on two processors, and return how many it has."""
    mine = sorted(os.sched_getaffinity(0))[:MOST_CPUS]
    os.sched_setaffinity(0, mine)
    return len(mine)


def machine() -> dict[str, str]:
    """Describe the machine and the versions."""
    about = {
        "processor": _line("/proc/cpuinfo", "model name") or platform.processor(),
        "processors": f"{os.cpu_count()}, of which {len(os.sched_getaffinity(0))} are used",
        "memory": f"{int((_line('/proc/meminfo', 'MemTotal') or '0').split()[0]) / 2**20:.1f} GiB",
        "load before": f"{os.getloadavg()[0]:.1f}",
        "system": f"{platform.system()} {platform.release()}",
        "python": platform.python_version(),
    }
    for name in PROGRAMS:
        try:
            about[name] = importlib.metadata.version(name)
        except importlib.metadata.PackageNotFoundError:
            about[name] = "not installed"
    # Looked for by name: asking the package would import it.
    built = [path for path in (ROOT / "journeys" / "kernels").glob("_walk.*") if path.suffix != ".c"]
    return about | {"compiled loop": "built" if built else "not built"}


def _line(path: str, name: str) -> str:
    """Return what a file of `name: value` lines says of a name."""
    if not Path(path).exists():
        return ""
    for line in Path(path).read_text(encoding="utf-8").splitlines():
        key, _, value = line.partition(":")
        if key.strip() == name:
            return value.strip()
    return ""
