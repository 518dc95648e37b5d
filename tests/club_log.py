"""The bicycle club's log of `demo_data`, counted and fitted once for all tests, and a way to make small logs."""

from __future__ import annotations

import warnings
from functools import cache
from pathlib import Path

import pandas as pd

import journeys as jn
from journeys.errors import JourneysWarning
from journeys.questions.overview import Overview

FOLDER = Path(__file__).resolve().parent.parent / "demo_data"
LOG = FOLDER / "club_log.parquet"
RULES = FOLDER / "rules.toml"


@cache
def club_tally() -> jn.Tally:
    """Return the counts of the demo log."""
    return jn.tally(LOG, jn.JourneyRules.from_toml(RULES))


@cache
def club_fit() -> jn.JourneyFit:
    """Return the fit to the demo log."""
    return jn.JourneyModel().fit(club_tally())


def club_states() -> tuple[str, ...]:
    """Return all states of the demo log, more than its rules name as touchpoints."""
    return tuple(club_tally().states)


@cache
def club_overview() -> Overview:
    """Return the summary of the demo log."""
    return jn.summarise(club_fit())


def small_log(n: int = 60, visit: str = "visit", won: str = "joined", lost: str = "declined") -> pd.DataFrame:
    """Return a log of 200 days in which a third of `n` people convert, a third decline, a third fall silent."""
    rows = []
    for who in range(n):
        start = pd.Timestamp("2025-01-01T08:00:00Z") + pd.Timedelta(days=(who * 7) % 160, minutes=who)
        rows.append((who, start, visit))
        rows.append((who, start + pd.Timedelta(days=1), "look"))
        if who % 3 < 2:
            rows.append((who, start + pd.Timedelta(days=2), (won, lost)[who % 3]))
    rows.append((n, pd.Timestamp("2025-07-20T08:00:00Z"), visit))
    return pd.DataFrame(rows, columns=["who", "when", "what"]).sort_values("when", kind="stable", ignore_index=True)


def overview_of(frame: pd.DataFrame, min_customers: int = 0, **settings: object) -> Overview:
    """Return the summary of such a log, by rules as given; by default nothing in it is left out."""
    given = {"converted": ["joined"], "churned": ["declined"], "silence": "30d", "complete_history": True, **settings}
    rules = jn.JourneyRules("who", "when", "what", **given)  # type: ignore[arg-type]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        return jn.summarise(jn.JourneyModel().fit(jn.tally(frame, rules)), min_customers=min_customers)
