"""A night of the ledger beside the full pass over the same log, each as a whole process, in turns.

    python tests/bench/bench_ledger.py --rows 100000000 --customers 5000000 --night 1000000 --repeats 3

Makes a log and one more day of it, counts the log into a ledger, then measures the night that adds the day against
`journeys summary` and `journeys tally` over all of it, and checks that the tallies are the same. `--nights 60` also
runs that many nights of a small log, one process each, and compares the memory of the last with that of the first.
Prints Markdown; a tally that differs ends it with exit code 1.
"""

from __future__ import annotations

import argparse
import json
import shutil
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
from figures import Figures, millions, report
from make_log import DAY_US, OUTCOMES, batch, write_log
from measure import ROOT, Cost, hold_to_two_cpus, machine, median_ratio, peak, run, seconds

JOURNEYS = [sys.executable, "-m", "journeys"]
DAYS = 240
START_US = int(np.datetime64("2025-01-01", "us").astype(np.int64))
RULES = f"""customer = "customer"
time = "time"
event = "event"
converted = ["{OUTCOMES[0]}"]
churned = ["{OUTCOMES[1]}"]
silence = "30d"
"""
JOB = """log = "events"
rules = "rules.toml"
ledger = "ledger"
out = "out"
id_key = "none"
"""
KEPT = ("ledger", "out")
# What DESIGN asks of a night of a hundredth of the log.
MOST_OF_THE_PASS = 1 / 8


@dataclass(frozen=True)
class Bench:
    """A job's folder."""

    folder: Path
    found: Figures

    def prepare(self, rows: int, customers: int, night: int) -> None:
        """Write the log but for its last day, count it, and put the last day beside it."""
        (self.folder / "events").mkdir(parents=True)
        (self.folder / "rules.toml").write_text(RULES)
        (self.folder / "job.toml").write_text(JOB)
        tell("making the log")
        write_log(self.folder / "events" / "before.parquet", rows, customers, "integer", days=DAYS)
        tell("counting it into a ledger")
        first = self.night()
        self.found.costs.append((f"first night, {millions(rows)} rows", "journeys nightly", rows, first))
        rng = np.random.default_rng(9)
        begin = START_US + DAYS * DAY_US
        more = batch(rng, night, begin, begin + DAY_US, (0, customers), "integer")
        pq.write_table(more, self.folder / "events" / "night.parquet")
        for name in KEPT:
            shutil.copytree(self.folder / name, self.folder / "spare" / name, symlinks=True)

    def night(self) -> Cost:
        """Run a night."""
        return run([*JOURNEYS, "nightly", str(self.folder / "job.toml")])

    def again(self) -> None:
        """Put the ledger back to before the night, and what it had published: else it would be published anew."""
        for name in KEPT:
            shutil.rmtree(self.folder / name)
            shutil.copytree(self.folder / "spare" / name, self.folder / name, symlinks=True)

    def whole(self, command: str, as_of: str) -> Cost:
        """Run the full pass."""
        rules = self.folder / "whole.toml"
        rules.write_text(RULES + f'as_of = "{as_of}"\n')
        out = self.folder / f"whole_{command}"
        words = [command, str(self.folder / "events"), "--rules", str(rules), "--out", str(out)]
        return run([*JOURNEYS, *words])

    def compare(self, rows: int, night: int, repeats: int) -> bool:
        """Measure in turns, and tell whether the tallies are the same."""
        costs: dict[str, list[Cost]] = {"nightly": [], "summary": [], "tally": []}
        for turn in range(repeats):
            tell(f"turn {turn + 1} of {repeats}")
            self.again()
            costs["nightly"].append(self.night())
            as_of = json.loads((self.folder / "out" / "latest" / "run.json").read_text())["as_of"]
            for command in ("summary", "tally"):
                costs[command].append(self.whole(command, as_of))
        for name, some in costs.items():
            self.found.cost(f"{millions(rows)} rows and a night of {millions(night)}", f"journeys {name}", rows, some)
        for name in ("summary", "tally"):
            pairs = list(zip(costs["nightly"], costs[name], strict=True))
            wanted = MOST_OF_THE_PASS if name == "summary" else None
            self.found.compare(f"time of a night against the full {name}", median_ratio(pairs, seconds), wanted)
            self.found.compare(f"memory of a night against the full {name}", median_ratio(pairs, peak))
        same = self.is_same()
        self.found.answers.append(("tally of the ledger and of one pass", same))
        return same

    def is_same(self) -> bool:
        """Tell whether the ledger's counts are those of one pass, rules aside."""
        from dataclasses import replace

        # The package that was measured, which need not be the one installed.
        sys.path.insert(0, str(ROOT))
        from journeys.nightly.then_and_now import tally_of_ledger
        from journeys.tally.store import load

        ours, whole = tally_of_ledger(self.folder / "ledger"), load(self.folder / "whole_tally")
        return ours == replace(whole, rules=ours.rules)


def many_nights(folder: Path, n_nights: int, a_night: int, customers: int, found: Figures) -> None:
    """Run nights one after another, and compare the memory of the last ten with that of the ten before half-way.

    The silence is short, so that the nights before half-way have a summary to publish, as the last ones do.
    """
    (folder / "events").mkdir(parents=True)
    (folder / "rules.toml").write_text(RULES.replace('"30d"', '"5d"'))
    (folder / "job.toml").write_text(JOB)
    rng = np.random.default_rng(10)
    costs = []
    for night in range(n_nights):
        begin = START_US + night * DAY_US
        rows = batch(rng, a_night, begin, begin + DAY_US, (0, customers), "integer")
        pq.write_table(rows, folder / "events" / f"{night:04d}.parquet")
        costs.append(run([*JOURNEYS, "nightly", str(folder / "job.toml")]))
        tell(f"night {night + 1}: {costs[-1].peak_mib:.0f} MiB, {costs[-1].cpu_seconds:.1f} CPU s")
    half = costs[max(n_nights // 2 - 10, 0) : max(n_nights // 2, 1)]
    last = costs[-10:]
    for name, some in (("half-way", half), ("last", last)):
        found.cost(f"{n_nights} nights of {a_night:,} rows", f"ten nights, {name}", a_night, some)
    ratio = float(np.median([cost.peak_mib for cost in last]) / np.median([cost.peak_mib for cost in half]))
    found.compare("memory of the last nights against those before half-way", ratio, 1.1)


def tell(text: str) -> None:
    """Say what is being done."""
    sys.stderr.write(f"{text}\n")


def main() -> int:
    """Read the options, measure, and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rows", type=int, default=10_000_000)
    parser.add_argument("--customers", type=int, default=500_000)
    parser.add_argument("--night", type=int, default=100_000)
    parser.add_argument("--nights", type=int, default=0, help="nights of a small log, to watch the memory")
    parser.add_argument("--repeats", type=int, default=3)
    options = parser.parse_args()
    hold_to_two_cpus()
    about, found, same = machine(), Figures(), True
    with tempfile.TemporaryDirectory(prefix="journeys-bench-") as folder:
        if options.rows:
            bench = Bench(Path(folder) / "one", found)
            bench.prepare(options.rows, options.customers, options.night)
            same = bench.compare(options.rows, options.night, options.repeats)
        if options.nights:
            many_nights(Path(folder) / "many", options.nights, options.night // 10, options.customers // 10, found)
    sys.stdout.write(report(about, found) + "\n")
    return 0 if same else 1


if __name__ == "__main__":
    sys.exit(main())
