"""Sums over ended journeys the slow, obvious way: whole days, and each journey's weight by its definition."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa

import journeys as jn
from journeys.intake import identity

SILENCE = 30
START = pd.Timestamp("2025-01-01")
OPEN, LAPSED = "open", "lapsed"

Answer = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Told:
    """One journey, the only one of its customer: what it visited while the log ran, its end, its worth."""

    customer: int
    path: str
    outcome: str
    elapsed: int
    worth: float


def told_log(n: int, rng: np.random.Generator, days: int = 120) -> tuple[pd.DataFrame, list[Told]]:
    """Return a log of single letters by day, and the journeys in it; some are cut off by its end.

    Journeys through "C" take longer to join than others, so that what is still open matters.
    """
    rows: list[tuple[int, int, str, float]] = []
    journeys = []
    for who in range(1, n + 1):
        path = "".join(rng.choice(list("ABC"), rng.integers(1, 5)))
        events = [(letter, 0.0) for letter in path]
        kind = rng.choice(["joined", "declined", ""], p=[0.4, 0.2, 0.4])
        if kind:
            paid = float(rng.integers(10, 100)) - (40.0 if "B" in path else 0.0) if kind == "joined" else -3.25
            events.append((kind, paid))
        gaps = rng.integers(1, 25 if "C" in path else 6, len(events))
        at = int(rng.integers(0, days)) + np.cumsum(gaps) - gaps[0]
        seen = [(who, int(day), *event) for day, event in zip(at, events, strict=True) if day <= days]
        rows += seen
        if seen:
            journeys.append(_told(who, seen, days))
    frame = pd.DataFrame(rows, columns=["who", "day", "what", "paid"])
    frame["when"] = (START + pd.to_timedelta(frame["day"], unit="D")).dt.date
    return frame.drop(columns="day"), journeys


def _told(who: int, seen: list[tuple[int, int, str, float]], days: int) -> Told:
    first, (_, last, what, _) = seen[0][1], seen[-1]
    path = "".join(event for _, _, event, _ in seen if len(event) == 1)
    worth = sum(paid for *_, paid in seen)
    if len(what) > 1:
        return Told(who, path, what, last - first, worth)
    if days - last >= SILENCE:
        return Told(who, path, LAPSED, last + SILENCE - first, worth)
    return Told(who, path, OPEN, days - first, worth)


def rules(days: int = 120, **more: Any) -> jn.JourneyRules:
    """Return rules for such a log."""
    settings = {
        "log_start": "2025-01-01", "as_of": str((START + pd.Timedelta(days=days)).date()), "complete_history": True,
        "touchpoints": ["A", "B", "C"], "value": "paid",
    } | more  # fmt: skip
    settings = {"converted": "joined", "churned": "declined"} | settings
    return jn.JourneyRules("who", "when", "what", silence="30d", **settings)


def jumps(journeys: list[Told], times: np.ndarray) -> np.ndarray:
    """Return what each journey that ended stands for: survival before its day, over those at risk on it.

    `times` says how often each journey is there.
    """
    elapsed = np.array([one.elapsed for one in journeys])
    over = np.array([one.outcome != OPEN for one in journeys])
    survival, weight = 1.0, np.zeros(len(journeys))
    for day in np.unique(elapsed):
        at_risk = times[elapsed >= day].sum()
        ending = (elapsed == day) & over
        weight[ending] = survival * times[ending] / at_risk
        survival *= 1 - times[ending].sum() / at_risk
    return weight


def std_errors(journeys: list[Told], answer: Answer) -> np.ndarray:
    """Return standard errors of an answer by how often each journey is there, bucket by bucket, from differences."""
    keys, _ = identity.customer_keys(pa.array([one.customer for one in journeys]))
    bucket = identity.bucket_of(keys)
    step, found = 1e-5, []
    for one in np.unique(bucket):
        more = np.where(bucket == one, step, 0.0)
        found.append((answer(1 + more) - answer(1 - more)) / (2 * step))
    g = len(found)
    return np.sqrt(g / (g - 1) * (np.array(found) ** 2).sum(axis=0))
