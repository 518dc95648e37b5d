"""How far off conversion and days to convert are, by how journeys still undecided are treated.

Logs of 1.5, 2, 3 and 6 silences are simulated from a stated truth (`tests/simulated.py`) and read three ways: by
the fit, by the fit with open moves ignored, and by plain shares of closed journeys. A second table simulates
logs that begin in the middle of things, and takes each customer's first event for an entry, or only sure ones.

Run from the repository: ``python tests/bench/study_censoring.py --replications 200 --customers 2000``.
"""

from __future__ import annotations

import argparse
import sys
import warnings
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import simulated  # noqa: E402

import journeys as jn  # noqa: E402
from journeys.errors import JourneysWarning  # noqa: E402

FIT, IGNORED, CLOSED = "fit", "open moves ignored", "closed journeys"
SURE, FIRST = "sure entries", "first event = entry"
MEASURES = ("conversion", "days")


def tally_of(log: pd.DataFrame, silences: float, *, complete_history: bool) -> jn.Tally:
    """Return the tally of a simulated log over its whole span."""
    rules = jn.JourneyRules(
        "customer", "time", "event", converted=simulated.CONVERTED, silence=f"{simulated.SILENCE_DAYS:g}d",
        complete_history=complete_history, log_start=simulated.LOG_START, as_of=simulated.log_end(silences),
    )
    return jn.tally(log, rules)


def chance(seed: int, silences: float, replication: int) -> np.random.Generator:
    """Return a generator of its own for every log, so that lengths do not share their luck."""
    return np.random.default_rng([seed, round(10 * silences), replication])


def by_fit(tally: jn.Tally, open_moves: str = "censored") -> tuple[float, float]:
    """Return conversion from entry and mean days to convert of a fit."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        fit = jn.JourneyModel(open_moves=open_moves).fit(tally)
    frame = jn.first_passage(fit, clock="time").to_frame()
    entry = frame[frame["start_state"] == "entry"].set_index("measure")["estimate"]
    return float(entry["probability"]), float(entry["mean"])


def by_closed_journeys(tally: jn.Tally) -> tuple[float, float]:
    """Return converted of closed journeys, and the mean days of the conversions seen."""
    closed = tally.table("journeys").query("outcome != 'open'")
    won = closed[closed["outcome"] == simulated.CONVERTED]
    days = float(won["elapsed"].sum()) / won["n"].sum() / simulated.DAY_US
    return float(won["n"].sum() / closed["n"].sum()), days


def undecided(n_customers: int, silences: float, replications: int, seed: int) -> dict[str, np.ndarray]:
    """Return estimates by way of reading, each of shape (replications, 2), of logs that start with the shop."""
    found: dict[str, list[tuple[float, float]]] = {FIT: [], IGNORED: [], CLOSED: []}
    for replication in range(replications):
        log = simulated.simulate(n_customers, silences, chance(seed, silences, replication))
        tally = tally_of(log, silences, complete_history=True)
        found[FIT].append(by_fit(tally))
        found[IGNORED].append(by_fit(tally, "ignored"))
        found[CLOSED].append(by_closed_journeys(tally))
    return {name: np.array(values) for name, values in found.items()}


def left_edge(n_customers: int, silences: float, replications: int, seed: int) -> dict[str, np.ndarray]:
    """Return estimates by what counts as an entry, of logs cut out of a shop that has long been open."""
    found: dict[str, list[tuple[float, float]]] = {SURE: [], FIRST: []}
    for replication in range(replications):
        log = simulated.simulate(
            n_customers, silences, chance(seed, silences, replication), first_arrivals="steady state from -8W"
        )
        for name, complete in ((SURE, False), (FIRST, True)):
            found[name].append(by_fit(tally_of(log, silences, complete_history=complete)))
    return {name: np.array(values) for name, values in found.items()}


def errors(found: dict[str, np.ndarray]) -> pd.DataFrame:
    """Return bias, SD, RMSE and the Monte Carlo error of the bias, by way of reading and measure."""
    truth = simulated.truth()
    aims = np.array([truth.conversion, truth.mean_days_to_convert])
    rows = []
    for name, values in found.items():
        bias, sd = values.mean(axis=0) - aims, values.std(axis=0, ddof=1)
        rmse = np.sqrt(((values - aims) ** 2).mean(axis=0))
        rows += [
            (name, measure, bias[i], sd[i], rmse[i], sd[i] / np.sqrt(len(values)))
            for i, measure in enumerate(MEASURES)
        ]
    return pd.DataFrame(rows, columns=["way", "measure", "bias", "sd", "rmse", "bias_se"])


def main(argv: Sequence[str] | None = None) -> int:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replications", type=int, default=200)
    parser.add_argument("--customers", type=int, default=2_000)
    parser.add_argument("--seed", type=int, default=20240101)
    asked = parser.parse_args(argv)
    truth = simulated.truth()
    print(f"truth: conversion {truth.conversion:.4f}, days to convert {truth.mean_days_to_convert:.4f}; "
          f"{asked.replications} logs of {asked.customers} customers each")
    for title, study, lengths in (
        ("undecided journeys", undecided, (1.5, 2.0, 3.0, 6.0)),
        ("left edge", left_edge, (2.0, 3.0, 6.0)),
    ):
        tables = [
            errors(study(asked.customers, silences, asked.replications, asked.seed)).assign(silences=silences)
            for silences in lengths
        ]
        whole = pd.concat(tables)[["silences", "way", "measure", "bias", "sd", "rmse", "bias_se"]]
        print(f"\n{title}\n{whole.to_string(index=False, float_format='{:.4f}'.format)}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
