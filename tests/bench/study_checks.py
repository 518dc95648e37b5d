"""How often the checks of a fit say "differs": false alarms where the chain is right, and power where it is not.

Logs of customers who obey a law of one step of memory, or break it in a stated way (`tests/processes.py`), are fitted
and checked. The table has, for each process, the share of logs in which each test by itself falls below 5 %, of those
in which it could be run (the share of these in brackets, where it is not all), then the order test without its
correction for customers, how often Bayes' criterion prefers two steps, and in how many logs any check says "differs"
after Holm's correction.

Run from the repository: ``python tests/bench/study_checks.py --logs 500 --customers 1000 5000 --jobs 2``.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import sys
import time
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import processes  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.errors import JourneysWarning  # noqa: E402
from journeys.kernels.order_tests import chi_square_p  # noqa: E402

ALPHA = 0.05
TESTS = ("days to convert", "steps to convert", "curve of conversion", "touchpoints of conversions", "memory")
BY_GROUP = ("between groups", "earlier and later")
PLAIN, ANY, BIC, ALIKE = "memory, uncorrected", "any differs", "BIC: two steps", "journeys of one customer"


@dataclass(frozen=True)
class Task:
    """One log of the study."""

    seed: int
    process: str
    silences: float
    number: int
    customers: int
    running: bool
    groups: bool = False
    coming: float = 1.0


def of_task(task: Task) -> dict[str, float]:
    """Simulate one log, with luck of its own, and return p-values by test, NaN where it was not run."""
    at = processes.PROCESSES.index(task.process)
    rng = np.random.default_rng([task.seed, at, round(10 * task.silences), task.customers, task.number])
    log = processes.simulate(task.process, task.customers, task.silences, rng, running=task.running, coming=task.coming)
    settings: dict[str, object] = {"complete_history": not task.running}
    if task.groups:
        side = rng.integers(0, 2, int(log["customer"].max()) + 1)
        log["side"] = side[log["customer"].to_numpy()]
        settings |= {"by": "side", "cohort": "week"}
    tally = jn.tally(log, processes.rules_of(task.silences, **settings))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        result = jn.check(jn.JourneyModel().fit(tally))
    rows = result.to_frame().set_index("check_name")
    found = {name: float(rows.loc[name, "p_value"]) for name in (*TESTS, *(BY_GROUP if task.groups else ()))}
    found[ALIKE] = 0.0 if str(rows.loc[ALIKE, "verdict"]).startswith("note") else 1.0
    order = jn.memory_check(tally).to_frame()
    order = order[(order["check_name"] == "order 1 or 2") & (order["state"] == "")].iloc[0]
    found[PLAIN] = float(chi_square_p(order["statistic"], order["df"]))
    found[BIC] = 0.0 if order["bic_higher"] < order["bic_lower"] else 1.0
    found[ANY] = 0.0 if len(result.differing) else 1.0
    return found


def studied(tasks: Sequence[Task], jobs: int) -> Iterator[dict[str, float]]:
    """Yield the p-values of many logs, from processes of their own where there are several jobs."""
    if jobs == 1:
        yield from map(of_task, tasks)
        return
    os.environ["OMP_NUM_THREADS"] = os.environ["OPENBLAS_NUM_THREADS"] = "1"  # one log, one core
    with multiprocessing.get_context("spawn").Pool(jobs) as pool:
        yield from pool.imap(of_task, tasks, chunksize=5)


def rejected(found: Sequence[dict[str, float]]) -> dict[str, tuple[float, float]]:
    """Return, by test, the share of the logs with a p-value in which it is below the limit, and the share with one."""
    frame = pd.DataFrame(found)
    ran = frame.notna()
    return {name: (float((frame[name][ran[name]] < ALPHA).mean()), float(ran[name].mean())) for name in frame.columns}


def told(rows: dict[str, dict[str, tuple[float, float]]]) -> str:
    """Return one line per process."""
    cells = {
        process: {name: _cell(share, ran) for name, (share, ran) in tests.items()} for process, tests in rows.items()
    }
    return pd.DataFrame(cells).T.to_string()


def _cell(share: float, ran: float) -> str:
    if ran == 0:
        return "not run"
    return f"{100 * share:.1f}" + (f" ({100 * ran:.0f} %)" if ran < 1 else "")


def main(argv: Sequence[str] | None = None) -> int:
    """Print a table for each number of customers and length of log."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--logs", type=int, default=500)
    parser.add_argument("--customers", type=int, nargs="+", default=[1_000, 5_000])
    parser.add_argument("--lengths", type=float, nargs="+", default=[1.5, 2.0, 3.0, 6.0], help="in silences")
    parser.add_argument("--process", nargs="+", default=list(processes.PROCESSES), choices=processes.PROCESSES)
    parser.add_argument(
        "--running", action="store_true", help="customers came before the log; their past is cut off"
    )
    parser.add_argument(
        "--coming", type=float, default=1.0, help="first share of the log in which customers come"
    )
    parser.add_argument("--groups", action="store_true", help="customers are of two sides that do not differ")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--seed", type=int, default=20250201)
    asked = parser.parse_args(argv)
    for customers in asked.customers:
        for silences in asked.lengths:
            began, rows = time.perf_counter(), {}
            for process in asked.process:
                tasks = [
                    Task(asked.seed, process, silences, number, customers, asked.running, asked.groups, asked.coming)
                    for number in range(asked.logs)
                ]
                rows[process] = rejected(list(studied(tasks, asked.jobs)))
            before = ", running before" if asked.running else ""
            coming = f", customers coming in the first {asked.coming:.0%}" if asked.coming < 1 else ""
            print(
                f"\n{asked.logs:,} logs of {customers:,} customers, {silences:g} silences long{before}{coming}: "
                f"% below {100 * ALPHA:g} %; {time.perf_counter() - began:.0f} s\n{told(rows)}",
                flush=True,
            )
    return 0


if __name__ == "__main__":
    sys.exit(main())
