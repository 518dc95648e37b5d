"""How often intervals hold the truth: coverage, width and flagged answers over many simulated logs.

Logs of two kinds of customers who come back (`tests/simulated.py`) are cut off at 2, 1.5 and 3 silences, so that stays
are open at the end, and each is asked for conversion, steps, days, curves, single moves and what the log says by
itself. The truth is the limit of the pooled estimator. Cut off logs of mixed customers have none in closed form, so it
is the estimate on one log of many more customers; its own error is that of the answers times the root of the sizes'
ratio, .06 standard errors for 300,000 customers beside 1,000.

Run from the repository: ``python tests/bench/study_coverage.py --logs 2000 --customers 1000 --jobs 2``.
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

import simulated  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.errors import JourneysWarning  # noqa: E402
from journeys.questions.first_passage import from_entry  # noqa: E402
from journeys.results import Estimates  # noqa: E402

LEVELS = (0.95, 0.90)
DAYS = (1.0, 3.0, 10.0, 30.0)
LENGTHS = (2.0, 1.5, 3.0)
TRUTH_SEED = 7  # no log of the study has it
# What is asked of the moves of a passage from entry, and what it is called in the table.
STEPS = {"probability": "conversion", "mean": "mean steps", "sd": "sd of steps"}
TIME = {"mean": "mean days", "sd": "sd of days", "median": "median days", "q90": "q90 days"}
MOVE = "move "


@dataclass(frozen=True)
class Asked:
    """Answers to one log: names in rows, numbers in arrays of shape (n,) or, for bounds, (n, n_levels)."""

    names: tuple[tuple[str, str], ...]
    value: np.ndarray
    low: np.ndarray
    high: np.ndarray
    flagged: np.ndarray


@dataclass(frozen=True)
class Task:
    """One log of the study."""

    seed: int
    silences: float
    number: int
    customers: int
    bootstrap: bool


def tally_of(customers: int, silences: float, rng: np.random.Generator) -> jn.Tally:
    """Return the tally of a new log of mixed customers."""
    log = simulated.simulate(customers, silences, rng, two_classes=True)
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=simulated.CONVERTED, silence=f"{simulated.SILENCE_DAYS:g}d",
        complete_history=True, log_start=simulated.LOG_START, as_of=simulated.log_end(silences),
        horizons=["10d", "40d"],
    )
    return jn.tally(log, rules)


def ask(tally: jn.Tally, *, bootstrap: bool) -> Asked:
    """Return all answers of one log, linearised, and those of a passage by bootstrap too."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        fit = jn.JourneyModel().fit(tally)
    parts: list[tuple[list[tuple[str, str]], Estimates, np.ndarray]] = []
    for clock, wanted in (("steps", STEPS), ("time", TIME)):
        parts.append(_rows(from_entry(fit, None, clock, quantiles=clock == "time"), wanted, "linearised"))
        if bootstrap:
            drawn = {name: told for name, told in wanted.items() if name not in ("median", "q90")}
            parts.append(_rows(jn.first_passage(fit, None, clock), drawn, "bootstrap"))
    curve = jn.passage_curve(fit)
    for told, one in (("F({:g} d)", curve), ("F({:g} d) of those who convert", curve.given_reached())):
        names = [("linearised", told.format(day)) for day in DAYS]
        parts.append((names, *one.estimates(DAYS)))
    moves = fit.moves()
    pairs = moves.keys[["state", "next_state"]].itertuples(index=False)
    parts.append(([("linearised", f"{MOVE}{state} to {after}") for state, after in pairs], moves.estimates, moves.flag))
    within = jn.time_to_convert(fit)
    mine = ((within.keys["horizon"] == "10d") & (within.keys["basis"] == "log")).to_numpy()
    parts.append(([("linearised", "within 10 d, by the log")], within.estimates.take(mine), within.flag[mine]))
    back = jn.comeback(tally, horizons=["40d"])
    mine = (back.keys["measure"] == "returned").to_numpy()
    told_back = [("linearised", f"back, {horizon}") for horizon in back.keys["horizon"][mine]]
    parts.append((told_back, back.estimates.take(mine), back.flag[mine]))
    names = tuple(name for part in parts for name in part[0])
    bounds = [[part[1].bounds(level) for part in parts] for level in LEVELS]
    low, high = (np.stack([np.concatenate([one[i] for one in at]) for at in bounds], axis=1) for i in (0, 1))
    flagged = np.concatenate([part[2] for part in parts]) != ""
    return Asked(names, np.concatenate([part[1].value for part in parts]), low, high, flagged)


def _rows(
    result: jn.FirstPassageResult, wanted: dict[str, str], method: str
) -> tuple[list[tuple[str, str]], Estimates, np.ndarray]:
    """Return the wanted rows that start at entry."""
    keys = result.keys
    at = [int(np.flatnonzero((keys["start_state"] == "entry") & (keys["measure"] == name))[0]) for name in wanted]
    return [(method, told) for told in wanted.values()], result.estimates.take(np.array(at)), result.flag[at]


def of_task(task: Task) -> Asked:
    """Simulate one log, with luck of its own, and ask."""
    rng = np.random.default_rng([task.seed, round(10 * task.silences), task.number])
    return ask(tally_of(task.customers, task.silences, rng), bootstrap=task.bootstrap)


def limits(silences: float, customers: int) -> dict[str, float]:
    """Return the answers of one long log, by name."""
    rng = np.random.default_rng([TRUTH_SEED, round(10 * silences)])
    found = ask(tally_of(customers, silences, rng), bootstrap=False)
    return {name: value for (_, name), value in zip(found.names, found.value.tolist(), strict=True)}


def studied(tasks: Sequence[Task], jobs: int) -> Iterator[Asked]:
    """Yield the answers of many logs, from processes of their own where there are several jobs."""
    if jobs == 1:
        yield from map(of_task, tasks)
        return
    os.environ["OMP_NUM_THREADS"] = os.environ["OPENBLAS_NUM_THREADS"] = "1"  # one log, one core
    with multiprocessing.get_context("spawn").Pool(jobs) as pool:
        yield from pool.imap(of_task, tasks, chunksize=10)


def answers(asked: Sequence[Asked], truth: dict[str, float]) -> pd.DataFrame:
    """Return one row per log, answer and level: whether it was flagged, its width, and whether it holds the truth.

    Moves that nobody makes are left out.
    """
    parts = []
    for number, one in enumerate(asked):
        aim = np.array([truth.get(name, 0.0) for _, name in one.names])
        for i, level in enumerate(LEVELS):
            parts.append(
                pd.DataFrame(
                    {
                        "log": number,
                        "method": [method for method, _ in one.names],
                        "answer": [name for _, name in one.names],
                        "level": level,
                        "shown": ~np.isnan(one.low[:, i]),
                        "flagged": one.flagged | np.isnan(one.low[:, i]),
                        "width": one.high[:, i] - one.low[:, i],
                        "held": (one.low[:, i] <= aim) & (aim <= one.high[:, i]),
                        "error": one.value - aim,
                    }
                )
            )
    found = pd.concat(parts, ignore_index=True)
    return found[found["answer"].map(truth).fillna(0.0) > 0]


def coverage(found: pd.DataFrame) -> pd.DataFrame:
    """Return coverage, its Monte Carlo error, mean width and the flagged share, of each answer and of all moves.

    Flagged answers are left out of all but the flagged share and `all %`, the coverage of all that have an interval,
    flagged or not. The bias is in standard deviations of
    the answer; where many are flagged, those that are not are a choice of the larger ones.
    """
    moves = found[found["answer"].str.startswith(MOVE)].assign(answer="all moves together")
    rows = []
    for key, group in pd.concat([found, moves]).groupby(["method", "answer", "level"], sort=False):
        kept = group[~group["flagged"]]
        # cells of one log are not independent: the error is that of the logs' own shares
        by_log = kept.groupby("log")["held"].agg(["sum", "size"])
        share = kept["held"].mean()
        n = len(by_log)
        spread = np.sqrt(((by_log["sum"] - share * by_log["size"]) ** 2).sum()) / max(len(kept), 1) if n else np.nan
        sd = kept["error"].std()
        rows.append(
            (*key, n, 100 * group["flagged"].mean(), 100 * share, 100 * spread, kept["width"].mean(),
             kept["error"].mean() / sd if sd > 0 else np.nan, 100 * group.loc[group["shown"], "held"].mean())
        )  # fmt: skip
    columns = ["method", "answer", "level", "logs", "flagged %", "coverage %", "MC error", "mean width", "bias in sd"]
    columns.append("all %")
    return pd.DataFrame(rows, columns=columns)


def told(table: pd.DataFrame) -> str:
    """Return the table with the levels side by side."""
    wide = table.pivot_table(
        index=["method", "answer"], columns="level", values=["coverage %", "MC error", "mean width"], sort=False
    )
    at = [(name, level) for level in LEVELS for name in ("coverage %", "MC error", "mean width")]
    wide = wide.reindex(columns=pd.MultiIndex.from_tuples(at))
    wide.columns = [f"{name} at {100 * level:g} %" for name, level in at]
    first = table[table["level"] == LEVELS[0]].set_index(["method", "answer"])
    first = first[["logs", "flagged %", "bias in sd", "all %"]]
    return first.join(wide).reset_index().to_string(index=False, float_format="{:.4g}".format)


def in_short(silences: float, table: pd.DataFrame) -> str:
    """Return the range of the coverage of linearised answers of which at most half are flagged, and of single moves."""
    mine = table[(table["level"] == LEVELS[0]) & (table["method"] == "linearised") & (table["flagged %"] <= 50)]
    is_move = mine["answer"].str.startswith((MOVE, "all moves"))
    lines = []
    for name, some in (("answers", mine[~is_move]), ("single moves", mine[is_move])):
        if len(some):
            low, high = some["coverage %"].min(), some["coverage %"].max()
            held = f"{low:.1f}–{high:.1f} %"
            lines.append(f"{silences:g} silences: at 95 % {name} that are not flagged are held in {held}")
    return "\n".join(lines)


def study(silences: float, asked: argparse.Namespace) -> pd.DataFrame:
    """Return the table of one length of log."""
    tasks = [
        Task(asked.seed, silences, number, asked.customers, number < asked.bootstrap) for number in range(asked.logs)
    ]
    truth = limits(silences, asked.truth_customers)
    return coverage(answers(list(studied(tasks, asked.jobs)), truth))


def main(argv: Sequence[str] | None = None) -> int:
    """Print a table for each length of log."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--logs", type=int, default=2_000)
    parser.add_argument("--customers", type=int, default=1_000)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--bootstrap", type=int, default=1_000, help="of so many of the logs resamples are drawn too")
    parser.add_argument("--truth-customers", type=int, default=300_000)
    parser.add_argument("--lengths", type=float, nargs="+", default=list(LENGTHS), help="in silences")
    parser.add_argument("--seed", type=int, default=20250101)
    asked = parser.parse_args(argv)
    for silences in asked.lengths:
        began = time.perf_counter()
        table = study(silences, asked)
        print(
            f"\n{asked.logs:,} logs of {asked.customers:,} customers, {silences:g} silences long; truth: one log of "
            f"{asked.truth_customers:,}; {time.perf_counter() - began:.0f} s\n{told(table)}\n"
            f"{in_short(silences, table)}",
            flush=True,
        )
    return 0


if __name__ == "__main__":
    sys.exit(main())
