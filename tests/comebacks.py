"""A simulator of people who come and go, whose true shares of coming back follow from its stated parameters.

Everybody comes once, at a time spread evenly over the first half of the log. A journey is a single visit, with
a conversion two hours later for a third of them. After a conversion .6 come back, after 25 days in the mean
(exponential); after a visit alone .7 do, after the silence and 40 days more in the mean (exponential). Every
return is a journey of the same kind, until the log ends.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

import journeys as jn

SILENCE = 30.0
CONVERTING = 1 / 3
# Of what comes after: the shortest absence, the share that comes back, and the mean days beyond the shortest.
ABSENCES = {"lapsed": (SILENCE, 0.7, 40.0), "joined": (0.0, 0.6, 25.0)}
START = pd.Timestamp("2024-01-01T00:00:00Z")


def back_within(after: str, days: float) -> float:
    """Return the true share that is back within some days of the last event."""
    least, share, mean = ABSENCES[after]
    return share * float(-np.expm1(-max(days - least, 0.0) / mean))


def median_days(after: str) -> float:
    """Return by when half are back in truth."""
    least, share, mean = ABSENCES[after]
    return least - mean * float(np.log1p(-0.5 / share))


def log(n_customers: int, days: float, rng: np.random.Generator, *, whole_days: bool = False) -> pd.DataFrame:
    """Return a log of some length, in no order."""
    who, now = np.arange(n_customers), rng.uniform(0.0, days / 2, n_customers)
    rows: list[pd.DataFrame] = []
    while len(who):
        rows.append(_rows(who, now, "visit"))
        joins = rng.random(len(who)) < CONVERTING
        rows.append(_rows(who[joins], now[joins] + 2 / 24, "joined"))
        kinds = zip(ABSENCES["joined"], ABSENCES["lapsed"], strict=True)
        least, share, mean = (np.where(joins, joined, lapsed) for joined, lapsed in kinds)
        back = rng.random(len(who)) < share
        away = least + rng.exponential(mean)
        now = now + away + np.where(joins, 2 / 24, 0.0)
        stays = back & (now <= days)
        who, now = who[stays], now[stays]
    whole = pd.concat(rows, ignore_index=True)
    whole = whole[whole.days <= days]
    when = START + pd.to_timedelta((whole.days * 86_400e6).round().astype("int64"), unit="us")
    if whole_days:
        when = when.dt.date
    return pd.DataFrame({"who": whole.who, "when": when, "what": whole.what})


def tally(n_customers: int, days: float, rng: np.random.Generator) -> jn.Tally:
    """Return the counts of such a log."""
    rules = jn.JourneyRules(
        "who", "when", "what", converted="joined", silence=f"{SILENCE:g}d", complete_history=True,
        log_start=START.isoformat(), as_of=(START + pd.Timedelta(days=days)).isoformat(),
    )  # fmt: skip
    return jn.tally(log(n_customers, days, rng), rules)


def _rows(who: NDArray[np.int64], days: NDArray[np.float64], what: str) -> pd.DataFrame:
    return pd.DataFrame({"who": who, "days": days, "what": what})
