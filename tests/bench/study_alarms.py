"""How often change alarms trip where nothing has changed, and how soon they find conversion that was halved.

    python tests/bench/study_alarms.py --logs 200 --jobs 2

Invented logs with a known law (`tests/simulated.py`), customers coming and going since long before, are counted into a
ledger whose alarms look at each week once it was followed for two weeks. Steady logs: in how many of the weeks, and of
the logs, any share of customers trips, all customers alike or in ten groups that do not differ, however small the
difference may be, and where it must be a point; beside it events said to be new, gone or halved. Changed logs: joining
becomes half as likely at a date; how many logs trip for conversion in the first week after it, and within four.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import sys
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

HERE = Path(__file__).resolve().parent
sys.path[:0] = [str(HERE.parent), str(HERE.parents[1])]

import simulated  # noqa: E402
from cut_off import without_summaries  # noqa: E402
from ledgers import make_job, quick_folder, write_night  # noqa: E402

from journeys.nightly.alarms import LEVEL  # noqa: E402
from journeys.nightly.ledger import opened  # noqa: E402
from journeys.nightly.night import run_night  # noqa: E402
from journeys.questions.week_changes import CONVERTED  # noqa: E402

RULES = {"customer": "customer", "time": "time", "event": "event", "converted": [simulated.CONVERTED], "churned": [],
         "silence": f"{simulated.SILENCE_DAYS:g}d"}  # fmt: skip
WEEK_DAYS = 7.0
# Two weeks are looked at together at the earliest: the first one whose span before holds that many.
FIRST_WEEK = 2
CHANGE_WEEK = 10
FACTOR = 0.5
SOON = 4


@dataclass(frozen=True)
class Task:
    """One log of the study."""

    seed: int
    number: int
    customers: int
    silences: float
    groups: int
    changed: bool = False


@dataclass(frozen=True)
class Found:
    """What tripped in one log: pairs of week and size of the largest difference, and weeks of events."""

    n_weeks: int
    shares: dict[int, float]
    events: set[int]
    conversion: set[int]


def log_of(task: Task) -> pd.DataFrame:
    """Return the log of a task: its luck is the same with and without groups, and with and without a change."""
    rng = np.random.default_rng([task.seed, task.customers, task.number])
    change = simulated.Change(CHANGE_WEEK * WEEK_DAYS, FACTOR, in_flight=True) if task.changed else None
    log = simulated.simulate(
        task.customers, task.silences, rng, first_arrivals="steady state from -8W", change=change
    )
    return log.assign(team=log["customer"] % max(task.groups, 1))


def of_task(task: Task, begins: Sequence[int] = (0, 1)) -> Found:
    """Count one log into a ledger, in nights that begin with some weeks, and return what tripped.

    A night looks at every week that is due: the first week's rows and then all others give what more nights give, in
    less time.
    """
    log = log_of(task)
    week = ((log["time"] - simulated.LOG_START) // pd.Timedelta(days=WEEK_DAYS)).to_numpy()
    rules = {**RULES, **({"by": ["team"]} if task.groups > 1 else {})}
    alarms = []
    with quick_folder() as root, without_summaries():
        job = make_job(root, rules, lateness="none", alarms={"within": "14d", "at_least": "0.001 points", "weeks": 8})
        for number in range(len(begins)):
            write_night(job, number, log[np.searchsorted(begins, week, side="right") == number + 1])
            alarms += run_night(job).alarms
        manifest = opened(job.ledger).manifest
    if manifest is None or manifest.watched is None:
        msg = "the ledger has looked at no week"
        raise AssertionError(msg)
    starts = [(pd.Timestamp(one["week"], tz="UTC") - simulated.LOG_START).days // 7 for one in alarms]
    shares: dict[int, float] = {}
    for at, one in zip(starts, alarms, strict=True):
        if not one["measure"].startswith("event"):
            shares[at] = max(shares.get(at, 0.0), abs(one["difference"]))
    return Found(
        n_weeks=manifest.watched.shares + 1 - FIRST_WEEK,
        shares=shares,
        events={at for at, one in zip(starts, alarms, strict=True) if one["measure"].startswith("event")},
        conversion={at for at, one in zip(starts, alarms, strict=True) if one["measure"] == CONVERTED},
    )


def studied(tasks: Sequence[Task], jobs: int) -> Iterator[Found]:
    """Yield what was found, from processes of their own where there are several jobs."""
    if jobs == 1:
        yield from map(of_task, tasks)
        return
    os.environ["OMP_NUM_THREADS"] = os.environ["OPENBLAS_NUM_THREADS"] = "1"  # one log, one core
    with multiprocessing.get_context("spawn").Pool(jobs) as pool:
        yield from pool.imap(of_task, tasks, chunksize=2)


def steady(found: Sequence[Found]) -> dict[str, str]:
    """Return in how many weeks and logs anything tripped."""
    n = sum(one.n_weeks for one in found)
    by_week = [size for one in found for size in one.shares.values()]
    told = {
        "weeks looked at": f"{n:,}",
        "weeks in which a share trips": _share(len(by_week), n),
        "the same, by a point or more": _share(sum(size >= 0.01 for size in by_week), n),
        "logs in which a share trips": _share(sum(bool(one.shares) for one in found), len(found)),
    }
    return told | {"weeks in which an event does": _share(sum(len(one.events) for one in found), n)}


def changed(found: Sequence[Found]) -> dict[str, str]:
    """Return in how many logs the change was found."""
    first, soon = {CHANGE_WEEK}, set(range(CHANGE_WEEK, CHANGE_WEEK + SOON))
    n = len(found)
    return {
        "conversion trips in the first week": _share(sum(bool(one.conversion & first) for one in found), n),
        f"within {SOON} weeks": _share(sum(bool(one.conversion & soon) for one in found), n),
        f"any share within {SOON} weeks": _share(sum(bool(one.shares.keys() & soon) for one in found), n),
    }


def _share(n: int, of: int) -> str:
    share = n / of
    return f"{n:,} of {of:,}, {100 * share:.2f} ± {100 * np.sqrt(share * (1 - share) / of):.2f} %"


def main(argv: Sequence[str] | None = None) -> int:
    """Read the options, and print a block for each kind of log."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--logs", type=int, default=200)
    parser.add_argument("--customers", type=int, default=20_000)
    parser.add_argument("--silences", type=float, default=4.0, help="how long the logs are")
    parser.add_argument("--groups", type=int, nargs="+", default=[1, 10])
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--seed", type=int, default=20250601)
    asked = parser.parse_args(argv)
    for groups in asked.groups:
        for name, told, is_changed in (("steady", steady, False), ("joining halved", changed, True)):
            tasks = [
                Task(asked.seed, number, asked.customers, asked.silences, groups, is_changed)
                for number in range(asked.logs)
            ]
            lines = told(list(studied(tasks, asked.jobs)))
            print(f"\n{asked.logs:,} logs, {name}, {groups} groups; nominal {100 * LEVEL:g} % of the weeks", flush=True)
            for what, value in lines.items():
                print(f"  {what:<36} {value}", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
