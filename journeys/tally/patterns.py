"""A second look at a log, event by event: what a tally cannot tell of when and how they were recorded."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from journeys.intake.normalise import Normaliser
from journeys.intake.people import People
from journeys.intake.read import LogSource
from journeys.intake.rows import Rows
from journeys.kernels.arrays import IntArray
from journeys.tally.accumulate import Accumulator
from journeys.tally.tally import Tally

MINUTE_US = 60_000_000
# An event stamped for so many customers in one minute, and for so many times as many as in a minute on average, was not
# done by them one by one (common practice, no source).
MANY_CUSTOMERS, MANY_TIMES = 100, 20
_MINUTE_BITS = 34  # the years 1 to 9999 hold fewer than 2**34 minutes
_FIRST_MINUTE = -(1 << 33)
# Names that look as if they told who somebody is, and in few words what they look like.
PERSONAL = {
    "an e-mail address": re.compile(r"[^\s@]+@[^\s@]+\.[^\s@]+"),
    "a random id": re.compile(r"\b[0-9a-f]{8}-[0-9a-f]{4}-|\b(?=[0-9a-f]*\d)(?=[0-9a-f]*[a-f])[0-9a-f]{16,}\b", re.I),
    "a telephone number": re.compile(r"(?<!\d)\+?\d(?:[ ./()-]?\d){8,14}(?!\d)"),
    "a long number": re.compile(r"\d{6,}"),
}


class Recorded(NamedTuple):
    """How one state or outcome was recorded.

    `first_us` and `last_us` are the times of its first and last row, `n` its rows, `n_at_once` those in minutes in
    which it was stamped for very many customers, `most` how many in the fullest of them.
    """

    name: str
    n: int
    first_us: int
    last_us: int
    n_at_once: int
    most: int


@dataclass(frozen=True)
class Patterns:
    """What a second look at a log told.

    Attributes
    ----------
    recorded : tuple of Recorded
        States and outcomes in alphabetical order.
    looked_at_minutes : bool
        False for dates without a time.
    """

    recorded: tuple[Recorded, ...]
    looked_at_minutes: bool


def look_again(log: LogSource, tally: Tally, people: People | None = None) -> Patterns:
    """Read a log and tell how its events were recorded.

    Parameters
    ----------
    log : LogSource
        A log that can be read again.
    tally : Tally
        Its counts: their rules and the span.
    people : People, optional
        How ids become customers, as for the tally.

    Returns
    -------
    Patterns

    Notes
    -----
    A customer counts once a minute; memory grows with the number of different minutes in which events were stamped.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.read import open_log
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.tally.count import count_log
    >>> when = pd.to_datetime(["2025-01-01 09:00"] * 300 + ["2025-01-01 10:00", "2025-03-01 11:00"], utc=True)
    >>> frame = pd.DataFrame({"who": range(302), "when": when, "what": ["mailed"] * 300 + ["visit"] * 2})
    >>> rules = JourneyRules("who", "when", "what", silence="30d")
    >>> for one in look_again(open_log(frame, rules.columns), count_log(frame, rules)).recorded:
    ...     print(one.name, one.n_at_once, one.most)
    mailed 300 300
    visit 0 0
    """
    rules, span_us = tally.rules, tally.as_of_us - tally.log_start_us
    normaliser = Normaliser(rules, log_start_us=tally.log_start_us, as_of_us=tally.as_of_us, people=people)
    first, last, n = (np.zeros(0, np.int64) for _ in range(3))
    minutes = Accumulator(("customers", "rows"))
    for batch in log.batches(rules.columns):
        rows = normaliser.rows(batch)
        if not len(rows):
            continue
        n_events = len(normaliser.codes.names)
        more = n_events - len(n)
        first = np.concatenate([first, np.full(more, np.iinfo(np.int64).max)])
        last = np.concatenate([last, np.full(more, np.iinfo(np.int64).min)])
        n = np.concatenate([n, np.zeros(more, np.int64)]) + np.bincount(rows.event, minlength=n_events)
        np.minimum.at(first, rows.event, rows.time)
        np.maximum.at(last, rows.event, rows.time)
        if not normaliser.whole_days:
            minutes.add(*_by_minute(rows))
    per_minute = n / max(span_us / MINUTE_US, 1.0)
    at_once, most = _at_once(minutes, per_minute)
    return Patterns(_gathered(normaliser.targets, n, first, last, at_once, most), not normaliser.whole_days)


def looks_personal(name: str) -> str | None:
    """Return what a name looks like that may tell who somebody is, None where it does not.

    Examples
    --------
    >>> looks_personal("mail to ada@example.org"), looks_personal("order 4711"), looks_personal("invoice 20250117")
    ('an e-mail address', None, 'a long number')
    """
    return next((what for what, pattern in PERSONAL.items() if pattern.search(name)), None)


def _by_minute(rows: Rows) -> tuple[IntArray, dict[str, IntArray]]:
    """Return event and minute as one number, and how many customers and rows it has in these rows."""
    minute = rows.time // MINUTE_US - _FIRST_MINUTE
    key = rows.event.astype(np.int64) << _MINUTE_BITS | minute
    order = np.lexsort((rows.key, key))
    key, who = key[order], rows.key[order]
    new = np.ones(len(key), bool)
    np.not_equal(key[1:], key[:-1], out=new[1:])
    start = np.flatnonzero(new)
    new[1:] |= who[1:] != who[:-1]
    counts = {"customers": np.add.reduceat(new.astype(np.int64), start), "rows": np.diff(start, append=len(key))}
    return key[start], counts


def _at_once(minutes: Accumulator, per_minute: NDArray[np.float64]) -> tuple[IntArray, IntArray]:
    """Return, for each event, its rows in overfull minutes, and the customers of the fullest."""
    found = minutes.result()
    event = found.key >> _MINUTE_BITS
    customers = found.sums["customers"]
    full = customers >= np.maximum(MANY_CUSTOMERS, MANY_TIMES * per_minute[event])
    at_once, most = np.zeros(len(per_minute), np.int64), np.zeros(len(per_minute), np.int64)
    np.add.at(at_once, event[full], found.sums["rows"][full])
    np.maximum.at(most, event[full], customers[full])
    return at_once, most


def _gathered(
    targets: list[str | None], n: IntArray, first: IntArray, last: IntArray, at_once: IntArray, most: IntArray
) -> tuple[Recorded, ...]:
    """Return what was found event by event, those that the rules give one name taken together."""
    found: dict[str, Recorded] = {}
    for code, name in enumerate(targets[: len(n)]):
        if name is None or not n[code]:
            continue
        one = Recorded(name, *(int(part[code]) for part in (n, first, last, at_once, most)))
        other = found.get(name)
        if other is not None:
            one = Recorded(
                name, one.n + other.n, min(one.first_us, other.first_us), max(one.last_us, other.last_us),
                one.n_at_once + other.n_at_once, max(one.most, other.most),
            )  # fmt: skip
        found[name] = one
    return tuple(found[name] for name in sorted(found))
