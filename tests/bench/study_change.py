"""How well a change of known date and size is found: bias and coverage by the length of the log, and false alarms.

    python tests/bench/study_change.py --logs 200 --customers 4000

Joining becomes 1.5 times as likely half-way through the log: at every visit begun then (in flight, compared by
period), or in journeys begun then (in cohorts, compared by the share that joins within ten days). A last block
counts how often any of twenty groups that do not differ is called different from the rest.
"""

from __future__ import annotations

import argparse
import sys
import warnings
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).parents[1]))

import simulated

import journeys as jn
from journeys.errors import JourneysWarning

FACTOR = 1.5
WITHIN_DAYS = 10.0


class Found(NamedTuple):
    """One difference as found in one log."""

    estimate: float
    low: float
    high: float
    p_corrected: float


def rules(length: float, **more: object) -> jn.JourneyRules:
    """Return the rules by which a simulated log is read."""
    return jn.JourneyRules(
        "customer", "time", "event", converted=[simulated.CONVERTED], silence=f"{simulated.SILENCE_DAYS:g}d",
        log_start=simulated.LOG_START, as_of=simulated.log_end(length), **more,  # type: ignore[arg-type]
    )  # fmt: skip


def changed_truth() -> tuple[float, float]:
    """Return conversion from entry before and after the change."""
    shares = []
    for factor in (1.0, FACTOR):
        probability, days = simulated.kernel(simulated.CustomerClass(1.0, factor, 1.0))
        shares.append(simulated.passage(probability, days)[0])
    return shares[0], shares[1]


def in_flight(n_customers: int, length: float, rng: np.random.Generator) -> Found:
    """Return the difference in conversion between the periods before and after the change."""
    day = length * simulated.SILENCE_DAYS / 2
    change = simulated.Change(day, FACTOR, in_flight=True)
    log = simulated.simulate(n_customers, length, rng, change=change)
    cut = simulated.LOG_START + pd.Timedelta(days=day)
    tally = jn.tally(log, rules(length, split_at=[cut]))
    fits = [jn.JourneyModel().fit(part) for part in tally.split("period").values()]
    return _row(jn.compare(*fits), "reached")


def in_cohorts(n_customers: int, length: float, rng: np.random.Generator) -> Found:
    """Return the difference in the share that joins in time between journeys begun before and after the change."""
    day = length * simulated.SILENCE_DAYS / 2
    log = simulated.simulate(n_customers, length, rng, change=simulated.Change(day, FACTOR, in_flight=False))
    tally = jn.tally(log, rules(length, cohort="day", horizons=[f"{WITHIN_DAYS:g}d"], complete_history=True))
    cut = (simulated.LOG_START + pd.Timedelta(days=day)).date().isoformat()
    last = (simulated.log_end(length) - pd.Timedelta(days=WITHIN_DAYS + 1)).date().isoformat()
    before = (simulated.LOG_START + pd.Timedelta(days=day - 1)).date().isoformat()
    sides = [tally.where(cohort=(None, before)), tally.where(cohort=(cut, last))]
    # Too young for a fit: tallies are compared.
    return _row(jn.compare(*sides, within=f"{WITHIN_DAYS:g}d"), f"reached within {WITHIN_DAYS:g}d")


def cohort_truth(rng: np.random.Generator, n: int = 400_000) -> float:
    """Return the true difference in the share that joins in time, by simulation of complete journeys."""
    shares = []
    for factor in (1.0, FACTOR):
        change = simulated.Change(-1.0, factor, in_flight=False)
        log = simulated.simulate(n, 2.0, rng, returning=0.0, change=change)
        first = log.groupby("customer")["time"].min()
        early = first[first <= simulated.log_end(2.0) - pd.Timedelta(days=WITHIN_DAYS)]
        joined = log[log["event"] == simulated.CONVERTED].groupby("customer")["time"].min()
        took = (joined - first).reindex(early.index)
        shares.append(float((took <= pd.Timedelta(days=WITHIN_DAYS)).mean()))
    return shares[1] - shares[0]


def false_alarm(n_customers: int, rng: np.random.Generator, n_groups: int = 20) -> bool:
    """Tell whether any of the groups, which do not differ, is called different in conversion."""
    log = simulated.simulate(n_customers, 3.0, rng)
    log["team"] = log["customer"] % n_groups
    fit = jn.JourneyModel().fit(jn.tally(log, rules(3.0, by="team")))
    frame = jn.compare(fit, by="team").to_frame()
    return bool((frame["p_value_corrected"] < 0.05).any())


def _row(result: object, measure: str) -> Found:
    frame = result.to_frame().set_index("measure").loc[measure]  # type: ignore[attr-defined]
    return Found(*(float(frame[name]) for name in ("estimate", "low", "high", "p_value_corrected")))


def study(n_logs: int, n_customers: int, seed: int = 7) -> pd.DataFrame:
    """Return one row per kind of change and length of log."""
    rng = np.random.default_rng(seed)
    before, after = changed_truth()
    truths = {"in flight": after - before, "in cohorts": cohort_truth(rng)}
    rows = []
    for name, find, lengths in (("in flight", in_flight, (3.0, 4.0, 6.0)), ("in cohorts", in_cohorts, (1.5, 2.0, 3.0))):
        for length in lengths:
            found = np.array([find(n_customers, length, rng) for _ in range(n_logs)])
            truth = truths[name]
            covered = (found[:, 1] <= truth) & (truth <= found[:, 2])
            rows.append({
                "change": name, "silences": length, "truth": truth, "bias": found[:, 0].mean() - truth,
                "sd": found[:, 0].std(ddof=1), "covered": covered.mean(), "found": (found[:, 3] < 0.05).mean(),
            })  # fmt: skip
    return pd.DataFrame(rows)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--logs", type=int, default=200)
    parser.add_argument("--customers", type=int, default=4_000)
    parser.add_argument("--seed", type=int, default=7)
    options = parser.parse_args()
    warnings.simplefilter("ignore", JourneysWarning)
    print(study(options.logs, options.customers, options.seed).round(4).to_string(index=False))
    rng = np.random.default_rng([options.seed, 1])
    alarms = np.mean([false_alarm(options.customers, rng) for _ in range(options.logs)])
    print(f"any of 20 equal groups called different at 5 %: {100 * alarms:.1f} % of {options.logs} logs")


if __name__ == "__main__":
    main()
