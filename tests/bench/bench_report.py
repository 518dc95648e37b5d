"""What the report of a fitted log takes: first and second call in a process of its own, and the size of the page.

    python tests/bench/bench_report.py --repeats 5

Counts and fits the log of the demo, then writes its report twice into a temporary folder. The first call pays for what
is imported only then. Medians over processes; prints Markdown.
"""

from __future__ import annotations

import argparse
import json
import statistics
import sys
import tempfile
import time
import warnings
from collections.abc import Sequence
from pathlib import Path

from figures import Figures, report
from measure import ROOT, hold_to_two_cpus, machine, run

MOST_SECONDS, MOST_BYTES = 3.0, 1_000_000


def once(folder: Path) -> dict[str, float]:
    """Return wall and CPU seconds of both calls, and the bytes of the page."""
    import journeys as jn

    demo, told = ROOT / "demo_data", {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        fit = jn.JourneyModel().fit(jn.tally(demo / "club_log.parquet", jn.JourneyRules.from_toml(demo / "rules.toml")))
        for name in ("first", "second"):
            # another fit of the same numbers: what the first call has kept with its own is no help
            wall, cpu = time.perf_counter(), time.process_time()
            jn.write_report(fit, folder)
            told[name], told[f"{name} CPU"] = time.perf_counter() - wall, time.process_time() - cpu
            fit = jn.JourneyModel().fit(fit.tally)
    return told | {"bytes": (folder / "summary.html").stat().st_size}


def main(argv: Sequence[str] | None = None) -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--once", action="store_true", help=argparse.SUPPRESS)
    asked = parser.parse_args(argv)
    if asked.once:
        with tempfile.TemporaryDirectory() as folder:
            print(json.dumps(once(Path(folder))))
        return 0
    hold_to_two_cpus()
    about, found = machine(), Figures()
    turns = [json.loads(run([sys.executable, __file__, "--once"]).said) for _ in range(asked.repeats)]
    middle = {name: statistics.median(turn[name] for turn in turns) for name in turns[0]}
    for name in ("first", "second"):
        seconds = middle[name]
        found.rows.append((f"write_report on the demo's log, {name} call of a process", f"≤ {MOST_SECONDS:g} s",
                           f"{seconds:.2f} s ({middle[f'{name} CPU']:.2f} s of processor time)",
                           "yes" if seconds <= MOST_SECONDS else "no"))  # fmt: skip
    size = middle["bytes"]
    found.rows.append(("its page", "≤ 1 MB", f"{size / 1e6:.2f} MB", "yes" if size <= MOST_BYTES else "no"))
    print(report(about, found))
    return 0


if __name__ == "__main__":
    sys.exit(main())
