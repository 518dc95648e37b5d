"""What the fits of many groups cost beside one fit of the same log, outcomes with intervals included.

An invented log is counted once without groups and once by a column of 200 values. In one process, A B A B: fit and
outcomes of the first tally, fit and outcomes of the second as a whole, and outcomes of all its groups, which fits
them. Processor time is shown beside wall time, as the machine may have other work.

Run from the repository: ``python tests/bench/bench_groups.py``.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
import warnings
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import simulated  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.errors import JourneysWarning  # noqa: E402

LENGTH = 3.0


def tallies(n_customers: int, n_groups: int) -> tuple[jn.Tally, jn.Tally]:
    """Return the tally of a log without groups, and by group."""
    log = simulated.simulate(n_customers, LENGTH, np.random.default_rng(1))
    log["campaign"] = log["customer"].to_numpy() * 2654435761 % 2**32 % n_groups
    rules = [
        jn.JourneyRules("customer", "time", "event", converted=["joined"], silence="30d", by=by,
                        log_start=simulated.LOG_START, as_of=simulated.log_end(LENGTH))
        for by in ((), "campaign")
    ]  # fmt: skip
    print(f"{len(log):,} rows, {n_groups} groups")
    one, many = (jn.tally(log, each) for each in rules)
    return one, many


def seconds(job: Callable[[], object]) -> tuple[float, float]:
    """Return wall and processor time of a call."""
    wall, processor = time.perf_counter(), time.process_time()
    job()
    return time.perf_counter() - wall, time.process_time() - processor


def main(argv: Sequence[str] | None = None) -> int:
    """Print the figures."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--customers", type=int, default=200_000)
    parser.add_argument("--groups", type=int, default=200)
    parser.add_argument("--repeats", type=int, default=9)
    asked = parser.parse_args(argv)
    warnings.simplefilter("ignore", JourneysWarning)
    one, many = tallies(asked.customers, asked.groups)
    fit = jn.JourneyModel().fit(many)
    jobs = (
        lambda: jn.outcomes(jn.JourneyModel().fit(one)),
        lambda: jn.outcomes(jn.JourneyModel().fit(many)),
        lambda: jn.outcomes(fit, by="campaign"),
    )
    turns = [[seconds(job) for job in jobs] for _ in range(asked.repeats)]
    for i, kind in enumerate(("wall", "processor")):
        plain, whole, groups = (statistics.median(turn[j][i] for turn in turns) for j in range(3))
        ratios = [statistics.median(turn[2][i] / turn[j][i] for turn in turns) for j in (1, 0)]
        print(
            f"{kind} time: one fit {1000 * plain:.0f} ms without groups, {1000 * whole:.0f} ms of the tally by group; "
            f"all groups {1000 * groups:.0f} ms, ratio {ratios[0]:.1f} to the same tally (wanted below 5), "
            f"{ratios[1]:.1f} to the one without groups"
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
